"""Compiling: plain functions in, compiled ones for the other kernels out, all with the same settings."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numba


def compiled(cache: bool = True) -> Callable[[Any], Any]:
    """Decorator: compiled without the interpreter's lock, division by zero giving infinity as in NumPy.

    cache : keep the machine code on disk, where `explorer.kernels` chose.
    """
    decorator: Callable[[Any], Any] = numba.njit(cache=cache, nogil=True, error_model="numpy")
    return decorator
