"""`python -m tests.benchmarks [section ...]`: names of sections in, the machine and their tables printed.

Run it from the repository's root; all sections take less than a minute.

OPENBLAS_CORETYPE and OPENBLAS_L2_SIZE make OpenBLAS use kernels and block sizes that may not suit the
machine; a NumPy slowed down by them would flatter the program. Nor may BLAS start threads beside the one that
is timed. These variables are read when NumPy is loaded, so a second process measures, with the former two
unset and one BLAS thread; it amounts to `env -u OPENBLAS_CORETYPE -u OPENBLAS_L2_SIZE OPENBLAS_NUM_THREADS=1
OMP_NUM_THREADS=1 MKL_NUM_THREADS=1 python -m tests.benchmarks`.
"""

from __future__ import annotations

import os
import subprocess
import sys
from importlib import import_module

SECTIONS = ("roots", "sweep")  # each a module beside this one with a function table()
UNSET = ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE")
ONE_THREAD = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


def main(chosen: list[str]) -> int:
    """Exit status: 0 done, 2 an unknown section; a section that fails raises."""
    unknown = [name for name in chosen if name not in SECTIONS]
    if unknown:
        print(f"unknown section {', '.join(unknown)}; sections: {', '.join(SECTIONS)}", file=sys.stderr)
        return 2
    clean = {name: value for name, value in os.environ.items() if name not in UNSET}
    clean |= dict.fromkeys(ONE_THREAD, "1")
    if clean != dict(os.environ):
        return subprocess.run(
            [sys.executable, "-m", "tests.benchmarks", *chosen], env=clean, check=False
        ).returncode
    from .table import machine  # NumPy reads the variables above when it is first loaded

    described = machine()  # before the sections, for the load they find
    tables = [import_module(f".{name}", __package__).table() for name in chosen or SECTIONS]
    print(described, *(table.text() for table in tables), sep="\n\n")
    return 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
