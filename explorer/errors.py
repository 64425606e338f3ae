"""Errors: raised on every floor, shown to the user by cli; nothing below it is imported.

ExplorerError                something the user can read and act on; exit status 2 unless said otherwise
├── StudyError               the study file is wrong: carries every fault found, each with its place
├── OptionError              a command or function was given a value it cannot take
├── RunError                 a folder or file of a run cannot be read or written
└── IncompleteError          the computation could not be completed; what was computed stays (exit status 3)
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Fault:
    """One thing wrong in a study: where, what was found, what is allowed and how to mend it."""

    file: str
    line: int | None
    key: str
    found: str
    allowed: str
    mend: str = ""

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}:{self.line}"
        said = "; ".join(part for part in (self.found, self.allowed, self.mend) if part)
        return f"{place}: {self.key}: {said}" if self.key else f"{place}: {said}"


class ExplorerError(Exception):
    """The root of every error a user may see; `exit_status` is what the command line ends with."""

    exit_status = 2


class StudyError(ExplorerError):
    """All faults of one study together, in the order of their lines."""

    def __init__(self, faults: list[Fault]) -> None:
        self.faults = sorted(faults, key=lambda fault: (fault.line or 0, fault.key))
        count = f"{len(faults)} faults" if len(faults) > 1 else "1 fault"
        super().__init__(
            "\n".join([*(str(fault) for fault in self.faults), f"{count}; nothing was computed"])
        )

    def __reduce__(self) -> tuple[type[StudyError], tuple[list[Fault]]]:
        """From its faults, so that it can come from another process."""
        return type(self), (self.faults,)


class OptionError(ExplorerError):
    """An option or argument has a value that is not allowed; the message says which are."""


class RunError(ExplorerError):
    """A run's folder or file cannot be read or written."""


class IncompleteError(ExplorerError):
    """The computation stopped before its end; finished tiles stay and are used by the next run."""

    exit_status = 3
