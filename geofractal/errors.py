"""The tree of errors.

::

    GeofractalError                 root; never raised itself
    ├── ConfigError                 the YAML file or an option (exit code 2)
    ├── MeasureError                a measure's contract is broken (exit code 2)
    ├── SourceError                 a file cannot be read, or is not what it says (exit code 3)
    │   ├── LayerError              one layer of it
    │   └── SourceChangedError      it changed while it was read
    └── OutputError                 a result cannot be written (exit code 3)

A single feature never raises: its row stays, its new columns are null, and its note says why.
Every message says what failed, which one, what was allowed and what to try.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing that is wrong in a batch file: where it stands, what stood there, what may stand there.

    `line` and `column` count from 1; both are 0 where the batch did not come from a file.
    """

    file: str
    line: int
    column: int
    key: str
    said: str
    allowed: str = ""
    near: str = ""

    def __str__(self) -> str:
        """Return ``file:line:column: key: what is wrong; allowed: ...; did you mean ...?``."""
        place = f"{self.file}:{self.line}:{self.column}" if self.line else self.file
        text = ": ".join(part for part in (place, self.key, self.said) if part)
        text += f"; allowed: {self.allowed}" if self.allowed else ""
        return text + (f"; did you mean {self.near!r}?" if self.near else "")


class GeofractalError(Exception):
    """Root of all errors that geofractal raises on purpose."""

    exit_code = 4


class ConfigError(GeofractalError):
    """The batch file or an option is wrong; nothing has been measured.

    `problems` lists everything that is wrong with the file, in the order of its lines.
    """

    exit_code = 2

    def __init__(self, message: str, problems: tuple[Problem, ...] = ()) -> None:
        super().__init__(message)
        self.problems = problems


class MeasureError(GeofractalError):
    """A measure breaks the plug-in contract, or cannot be loaded."""

    exit_code = 2


class SourceError(GeofractalError):
    """A source file cannot be read, or is not what it says it is."""

    exit_code = 3


class LayerError(SourceError):
    """One layer of a source cannot be used as asked."""


class SourceChangedError(SourceError):
    """A source changed while it was being read."""


class OutputError(GeofractalError):
    """A result cannot be written where it was asked for."""

    exit_code = 3


class GeofractalWarning(UserWarning):
    """Something a user should know that stops nothing."""
