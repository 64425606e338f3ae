"""Kernels: plain arrays in, plain arrays and a status per point out; they never raise and import nothing above.

numba keeps compiled kernels beside the source or in the user's cache folder. Where neither can be written it
refuses to import at all, so the folder is chosen before the first kernel is decorated.
"""

import os
import tempfile
from pathlib import Path


def _choose_cache_folder() -> None:
    if "NUMBA_CACHE_DIR" in os.environ or os.access(Path(__file__).parent, os.W_OK):
        return
    home = Path(os.environ.get("XDG_CACHE_HOME", Path.home() / ".cache"))
    try:
        (home / "numba").mkdir(parents=True, exist_ok=True)
        if os.access(home / "numba", os.W_OK):
            return
    except OSError:
        pass
    os.environ["NUMBA_CACHE_DIR"] = tempfile.mkdtemp(prefix="explorer-kernels-")


_choose_cache_folder()
