"""Places: a study's text and a key path in, the line where that key stands out, for reading's faults.

No TOML reader tells positions. A key's place is found by trial: rename one candidate, parse again, and see
whether the value at the path went away.
"""

from __future__ import annotations

import re
import tomllib
from typing import Any

Path = tuple[str | int, ...]

_MISSING = object()
_MOST_TRIALS = 60


def line_of(text: str, path: Path) -> int | None:
    """Line (from 1) of the key at `path`, or of its nearest existing parent; None when nothing is found."""
    data = tomllib.loads(text)
    while path:
        if _value(data, path) is not _MISSING:
            line = _existing(text, data, path)
            if line is not None:
                return line
        path = path[:-1]
    return None


def _existing(text: str, data: Any, path: Path) -> int | None:
    keys = [index for index, part in enumerate(path) if isinstance(part, str)]
    key = str(path[keys[-1]])
    pattern = re.compile(rf"(?<![\w-]){re.escape(key)}(?![\w-])")
    for match in list(pattern.finditer(text))[:_MOST_TRIALS]:
        renamed = f"{text[: match.start()]}{key}-renamed{text[match.end() :]}"
        try:
            changed = tomllib.loads(renamed)
        except tomllib.TOMLDecodeError:
            continue
        if _gone(data, changed, path, keys[-1]):
            return text.count("\n", 0, match.start()) + 1
    return None


def _gone(data: Any, changed: Any, path: Path, key_index: int) -> bool:
    """Whether the key at the path, and none of its elder siblings in an array of tables, went away."""
    parent = path[:key_index]
    if _value(changed, parent) is _MISSING:
        return False
    before, after = _value(data, path), _value(changed, path)
    if key_index == len(path) - 1:
        return after is _MISSING
    place = path[key_index + 1]
    if not isinstance(place, int):
        return after is _MISSING
    array, rest = _value(data, path[: key_index + 1]), _value(changed, path[: key_index + 1])
    if rest is _MISSING:
        return place == 0 or len(array) > 1
    return len(rest) < len(array) and rest[:place] == array[:place] and (after is _MISSING or after != before)


def _value(data: Any, path: Path) -> Any:
    for part in path:
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            return _MISSING
    return data
