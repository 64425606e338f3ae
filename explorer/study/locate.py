"""Places: a study's text and a key path in, the line where that key stands out, for reading's faults.

No TOML reader tells positions. A key's place is found by trial: rename one candidate, parse again, and see
whether the value at the path went away or lost a part.
"""

from __future__ import annotations

import re
import tomllib
from typing import Any

Path = tuple[str | int, ...]

_MISSING = object()
_MOST_TRIALS = 200


def line_of(text: str, path: Path) -> int | None:
    """Line (from 1) of the key at `path`, or of its nearest existing parent; None for no text at all."""
    data = _parsed(text)
    while path:
        if _value(data, path) is not _MISSING:
            line = _existing(text, data, path)
            if line is not None:
                return line
        path = path[:-1]
    return 1 if text else None


def _parsed(text: str) -> Any:
    """The data with numbers as written, because a NaN equals nothing."""
    return tomllib.loads(text, parse_float=str)


def _existing(text: str, data: Any, path: Path) -> int | None:
    last = max(index for index, part in enumerate(path) if isinstance(part, str))
    key, place = str(path[last]), path[last + 1] if last + 1 < len(path) else 0
    pattern = re.compile(rf"(?<![\w-]){re.escape(key)}(?=[\"']?\s*[=.\]])")
    elder = 0  # headers of the same array that were passed
    for match in list(pattern.finditer(text))[:_MOST_TRIALS]:
        renamed = f"{text[: match.start()]}{key}-renamed{text[match.end() :]}"
        try:
            changed = _parsed(renamed)
        except tomllib.TOMLDecodeError:
            continue
        before, after = _value(data, path[: last + 1]), _value(changed, path[: last + 1])
        if _value(changed, path[:last]) is _MISSING or not _shrunk(before, after):
            continue
        if after is _MISSING or elder == place:
            return text.count("\n", 0, match.start()) + 1
        elder += 1
    return None


def _shrunk(before: Any, after: Any) -> bool:
    """Whether a key went away; a table under several headers only loses a part, an array of tables one of them."""
    if isinstance(before, list) and isinstance(after, list):
        return len(after) < len(before)
    return after is _MISSING or (isinstance(before, dict) and before != after)


def _value(data: Any, path: Path) -> Any:
    for part in path:
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            return _MISSING
    return data
