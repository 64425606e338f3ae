"""Entries: a checksum of the kernels' sources in every cached kernel, for the kernels that span several files.

numba's cache knows a kernel by its own file and by what it closes over, not by the files of what it calls. So only
entries are cached, each a closure over `sources()`; everything inside them is compiled with cache=False.
"""

from __future__ import annotations

import functools
import zlib
from pathlib import Path


@functools.cache
def sources() -> int:
    """A checksum of this folder's sources, never 0."""
    texts = [path.read_bytes() for path in sorted(Path(__file__).parent.glob("*.py"))]
    return zlib.crc32(b"".join(texts)) + 1
