"""Store: tile results to files and back, and whole Datasets to netCDF, so that a stopped run can go on.

Every file is written under another name, flushed to the disk and renamed into place: a reader sees a whole file
or none. Tiles live in a folder named after the study's hash and the program's version, so old ones never mix in.
"""

from __future__ import annotations

import contextlib
import fcntl
import io
import os
import shutil
import zipfile
from collections.abc import Iterator
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np
import xarray

from explorer.errors import IncompleteError, RunError
from explorer.sweeping.reduction import TileResult

SWEEP_FILE, VERDICT_FILE, DECISION_FILE = "sweep.nc", "verdict.nc", "decision.json"


@contextlib.contextmanager
def owned(folder: Path) -> Iterator[None]:
    """Hold a run's folder for one writer; a second one is refused."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        handle = (folder / ".lock").open("w")
    except OSError as error:
        raise RunError(
            f"{folder}: cannot be written: {error.strerror}. Choose another folder with --out."
        ) from None
    with handle:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise RunError(
                f"{folder}: another run is writing here. Wait for it, or choose another folder with --out."
            ) from None
        yield


class TileStore:
    """The finished tiles of one run."""

    def __init__(self, folder: Path, key: str) -> None:
        self.folder = folder / f"tiles-{key}"

    def put(self, number: int, result: TileResult) -> None:
        """Write one tile."""
        buffer = io.BytesIO()
        np.savez(buffer, **{field.name: getattr(result, field.name) for field in fields(TileResult)})
        write_whole(self._file(number), buffer.getvalue())

    def get(self, number: int) -> TileResult | None:
        """Read one tile; None when it is missing or damaged, so that it is computed again."""
        try:
            with zipfile.ZipFile(self._file(number)) as archive:
                if archive.testzip():  # numpy reads by the lengths in the headers, and past the checksums
                    return None
            with np.load(self._file(number)) as stored:
                return TileResult(**{field.name: stored[field.name] for field in fields(TileResult)})
        except (OSError, ValueError, KeyError, EOFError, RuntimeError, zipfile.BadZipFile):
            return None

    def refuse_others(self) -> None:
        """RunError where tiles of another study, seed or version lie in the folder: they would be lost, never mixed."""
        others = [tile for tile in self.folder.parent.glob("tiles-*/tile-*.npz") if tile.parent != self.folder]
        if others:
            raise RunError(
                f"{self.folder.parent}: holds {len(others)} finished tiles of a run that was stopped, of another "
                "study, seed or version of explorer. --fresh throws them away; --out keeps them and writes elsewhere."
            )

    def clear(self) -> None:
        """Remove the tiles of this run."""
        shutil.rmtree(self.folder, ignore_errors=True)

    def clear_all(self) -> None:
        """Remove the tiles of other studies and versions too."""
        for folder in self.folder.parent.glob("tiles-*"):
            shutil.rmtree(folder, ignore_errors=True)

    def _file(self, number: int) -> Path:
        return self.folder / f"tile-{number:06d}.npz"


def write_whole(path: Path, content: bytes | memoryview) -> None:
    """Write a file so that it is there whole or not at all; IncompleteError when the disk refuses."""
    part = path.with_name(path.name + ".part")
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with part.open("wb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(part, path)
    except OSError as error:
        with contextlib.suppress(OSError):
            part.unlink()
        raise IncompleteError(
            f"{path}: cannot be written: {error.strerror}; what was finished before stays"
        ) from None


def write_dataset(dataset: xarray.Dataset, path: Path) -> None:
    """Write a Dataset as netCDF-4, compressed, whole or not at all; IncompleteError when the disk refuses.

    Made in memory first: the HDF5 library brings the process down when the disk is full.
    """
    encoding = {
        name: {"zlib": True, "complevel": 1}
        for name, array in dataset.data_vars.items()
        if array.dtype.kind in "fiub"
    }
    write_whole(path, dataset.to_netcdf(engine="h5netcdf", encoding=encoding))


def read_dataset(path: Path) -> xarray.Dataset:
    """Read a stored Dataset into memory; RunError says what to do when it is not there or is damaged."""
    if not path.exists():
        raise RunError(f"{path}: not found. A run's folder is made by `explorer sweep STUDY`.")
    try:
        with xarray.open_dataset(path, engine="h5netcdf") as stored:
            return stored.load()
    except Exception as error:  # the readers below raise many kinds for a damaged file
        raise RunError(
            f"{path}: not a readable netCDF file ({_first_line(error)}). Run the sweep again."
        ) from None


def _first_line(error: Exception) -> Any:
    return (str(error).splitlines() or [type(error).__name__])[0]
