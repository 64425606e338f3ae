"""Asking: a study file or text in, a Study whose requirements name measures of the catalogue out."""

from __future__ import annotations

from pathlib import Path

from explorer.measures.catalogue import CATALOGUE
from explorer.study.model import Study
from explorer.study.reading import read_study_file, read_study_text


def read_study(path: str | Path | None = None, *, text: str | None = None) -> Study:
    """Read a study from a file or from a text.

    Raises StudyError with every fault found, each with its line, and TypeError unless exactly one is given.
    """
    if (path is None) == (text is None):
        raise TypeError("read_study takes a path or text=..., one of them")
    if text is not None:
        return read_study_text(text, "study", CATALOGUE)
    assert path is not None
    return read_study_file(path, CATALOGUE)
