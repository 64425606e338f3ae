"""`python -m tests.benchmarks [--full] [section ...]`: names of sections in, the machine and their tables printed.

Run it from the repository's root, on a machine with nothing else to do. All sections take some minutes, most of them
for "memory" and "estimates", which start the program many times; --full adds a billion loops to "memory".

OPENBLAS_CORETYPE and OPENBLAS_L2_SIZE make OpenBLAS use kernels and block sizes that may not suit the
machine; a NumPy slowed down by them would flatter the program. Nor may BLAS start threads beside the one that
is timed. These variables are read when NumPy is loaded, so this process starts over, with the former two
unset and one BLAS thread; it amounts to `env -u OPENBLAS_CORETYPE -u OPENBLAS_L2_SIZE OPENBLAS_NUM_THREADS=1
OMP_NUM_THREADS=1 MKL_NUM_THREADS=1 python -m tests.benchmarks`.
"""

from __future__ import annotations

import os
import sys
from importlib import import_module
from importlib.util import find_spec

# Each a module beside this one with a function table()
SECTIONS = ("roots", "hold", "sweep", "growth", "memory", "estimates", "frequency", "response")
FULL = "--full"
UNSET = ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE")
ONE_THREAD = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


def main(words: list[str]) -> int:
    """Exit status: 0 done, 2 an unknown section or one without its module; a section that fails raises."""
    named = [word for word in words if word != FULL]
    if wrong := _refusal(named or list(SECTIONS)):
        print(wrong, file=sys.stderr)
        return 2
    clean = {name: value for name, value in os.environ.items() if name not in UNSET}
    clean |= dict.fromkeys(ONE_THREAD, "1")
    if clean != dict(os.environ):
        os.execve(sys.executable, [sys.executable, "-m", "tests.benchmarks", *words], clean)
    from .table import machine  # NumPy reads the variables above when it is first loaded

    print(machine(), flush=True)  # before the sections, for the load they find
    for name in named or SECTIONS:
        module = import_module(f".{name}", __package__)
        grids = {"grids": module.WITH_LARGEST} if name == "memory" and FULL in words else {}
        print(f"\n{module.table(**grids).text()}", flush=True)
    return 0


def _refusal(chosen: list[str]) -> str:
    """Why these sections cannot be measured; empty if they can. Asked first: minutes later is too late."""
    unknown = [name for name in chosen if name not in SECTIONS]
    if unknown:
        return f"unknown section {', '.join(unknown)}; sections: {', '.join(SECTIONS)}"
    missing = [name for name in chosen if find_spec(f".{name}", __package__) is None]
    return "".join(f"section {name}: tests/benchmarks/{name}.py is not there\n" for name in missing).rstrip()


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
