"""Entries: a checksum of the kernels' sources in every cached kernel, for the kernels that span several files.

numba's cache knows a kernel by its own file and by what it closes over, not by the files of what it calls. So only
entries are cached, each a closure over `sources()`; everything inside them is compiled with cache=False.
"""

from __future__ import annotations

import functools
import zlib
from pathlib import Path


@functools.cache
def sources(*names: str) -> int:
    """A checksum of the files of that name in this folder, of all without names; never 0."""
    paths = sorted(Path(__file__).parent.glob("*.py"))
    texts = [path.read_bytes() for path in paths if path.stem in names or not names]
    return zlib.crc32(b"".join(texts)) + 1
