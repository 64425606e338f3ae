"""A probed design's pictures on disk: a probe in, three pictures in a folder out, for the command `probe`."""

from __future__ import annotations

from pathlib import Path

import xarray as xr

from explorer.errors import OptionError, RunError
from explorer.views.loop_gain import loop_gain
from explorer.views.responses import responses
from explorer.views.style import save
from explorer.views.z_plane import z_plane

Z_PLANE_FILE, RESPONSES_FILE, LOOP_GAIN_FILE = "z-plane.png", "responses.png", "loop-gain.png"


def probe_folder(study: Path, out: str | None) -> Path:
    """Where the pictures of a probe go: `out`, by default outputs/<stem of the study>-probe."""
    if out == "":  # from an unset variable; it would mean the folder one stands in
        raise OptionError("--out: found nothing; allowed: a folder")
    return Path("outputs") / f"{study.stem}-probe" if out is None else Path(out)


def write_pictures(folder: Path, dataset: xr.Dataset) -> list[Path]:
    """Draw poles, responses and loop gain into the folder, made if need be; returns their paths.

    Raises RunError when the folder or a file cannot be written.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise RunError(f"{folder} cannot be made: {error.strerror or error}") from error
    drawn = {Z_PLANE_FILE: z_plane, RESPONSES_FILE: responses, LOOP_GAIN_FILE: loop_gain}
    return [save(draw(dataset), folder / name) for name, draw in drawn.items()]
