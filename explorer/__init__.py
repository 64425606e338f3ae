"""Feasibility maps for control loops closed through a processor: gain, sample period and tolerances at once.

The names below are the whole Python interface; each is loaded when first used, so importing costs little.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "read_study": "explorer.measures.asking",
    "sweep": "explorer.sweeping.running",
    "judge": "explorer.verdict.slack",
    "probe": "explorer.sweeping.probing",
    "decide": "explorer.verdict.decisions",
}

__all__ = ["__version__", "decide", "judge", "probe", "read_study", "sweep"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'explorer' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
