"""Apart: a mark inside a compiled function that keeps LLVM from copying it into its callers, for quick compiling."""

from __future__ import annotations

from typing import Any

from numba.core import types
from numba.extending import intrinsic


def _mark(typingctx: Any) -> Any:
    """Called first in a compiled function: it stays a function of its own, optimised once."""

    def codegen(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
        """Mark the function that is being built."""
        builder.function.attributes.add("noinline")
        return context.get_dummy_value()

    return types.void(), codegen


apart: Any = intrinsic(_mark)
