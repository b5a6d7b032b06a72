"""How far a run is: a moving line on a terminal, plain lines elsewhere, JSON lines for machines, or nothing.

All of it goes to the standard error stream. What a run tells of itself, it tells a `Progress`.
"""

from __future__ import annotations

import json
import os
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, Literal, TextIO

Style = Literal["auto", "plain", "json", "none"]

LINE_EVERY_S = 30.0
LINE_EVERY_SHARE = 0.05
LINES_APART_S = 5.0
JSON_EVERY_S = 1.0


@dataclass
class Stage:
    """One step on one layer, while it runs.

    Attributes
    ----------
    layer, step : what is done, on what
    total : how many there are to do, None where nobody knows (yet)
    unit : of what, in the plural
    done : how many are done
    """

    layer: str
    step: str
    total: int | None
    unit: str
    told: Callable[[Stage], None]
    started: float
    done: int = 0
    stopped: bool = False

    def advance(self, count: int = 1) -> None:
        """Add to what is done."""
        self.done += count
        self.told(self)

    @property
    def elapsed_s(self) -> float:
        """Return the seconds since the stage began."""
        return time.monotonic() - self.started

    @property
    def rate(self) -> float:
        """Return how many are done in a second."""
        return self.done / max(self.elapsed_s, 1e-9)

    @property
    def left_s(self) -> float | None:
        """Return the seconds still to go at this rate, None where nobody knows."""
        if self.total is None or self.done == 0:
            return None
        return max(self.total - self.done, 0) / self.rate


class Progress:
    """Says nothing; the others say what they are told."""

    @contextmanager
    def stage(self, layer: str, step: str, total: int | None, unit: str = "features") -> Iterator[Stage]:
        """Open a stage; the block calls its `Stage.advance`."""
        stage = Stage(layer, step, total, unit, self.advanced, time.monotonic())
        self.opened(stage)
        try:
            yield stage
        except BaseException:
            stage.stopped = True
            raise
        finally:
            self.closed(stage)

    def note(self, text: str) -> None:
        """Tell a detail, for those who asked for details."""

    def opened(self, stage: Stage) -> None:
        """Show that a stage begins."""

    def advanced(self, stage: Stage) -> None:
        """Show how far it is."""

    def closed(self, stage: Stage) -> None:
        """Show how it ended."""


class PlainProgress(Progress):
    """Whole lines: at a stage's end, and now and then while it runs.

    Parameters
    ----------
    stream : where to
    details : tell notes and beginnings, too
    """

    def __init__(self, stream: TextIO, *, details: bool = False) -> None:
        self._stream = stream
        self._details = details
        self._last_line = (time.monotonic(), 0)

    def note(self, text: str) -> None:
        """Write a detail."""
        if self._details:
            self._write(text)

    def opened(self, stage: Stage) -> None:
        """Write what begins, where details are wanted."""
        self._last_line = (stage.started, 0)
        total = "" if stage.total is None else f", {stage.total:,} {stage.unit}"
        self.note(f"{stage.layer}: {stage.step}: begins{total}")

    def advanced(self, stage: Stage) -> None:
        """Write a line where the last one is long ago."""
        now = time.monotonic()
        waited, gained = now - self._last_line[0], stage.done - self._last_line[1]
        grown = stage.total is not None and gained >= LINE_EVERY_SHARE * stage.total
        ended = stage.done == stage.total  # told by the closing line
        if not ended and (waited >= LINE_EVERY_S or (grown and waited >= LINES_APART_S)):
            self._last_line = (now, stage.done)
            self._write(running_line(stage))

    def closed(self, stage: Stage) -> None:
        """Write what was done in what time."""
        self._write(closing_line(stage))

    def _write(self, text: str) -> None:
        print(text, file=self._stream, flush=True)


class JsonProgress(Progress):
    """One JSON object a line: ``event`` is begin, progress, end or note."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self._last = 0.0

    def note(self, text: str) -> None:
        """Write a detail."""
        self._write({"event": "note", "text": text})

    def opened(self, stage: Stage) -> None:
        """Write what begins."""
        self._write(_event("begin", stage))

    def advanced(self, stage: Stage) -> None:
        """Write how far it is, once a second."""
        now = time.monotonic()
        if now - self._last >= JSON_EVERY_S:
            self._last = now
            self._write(_event("progress", stage))

    def closed(self, stage: Stage) -> None:
        """Write how it ended."""
        self._write(_event("end", stage) | {"stopped": stage.stopped})

    def _write(self, event: dict[str, Any]) -> None:
        print(json.dumps(event, ensure_ascii=False), file=self._stream, flush=True)


class TerminalProgress(Progress):
    """A moving line for each open stage; what is finished stays above as a plain line."""

    def __init__(self, *, details: bool = False) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, TextColumn
        from rich.progress import Progress as Bars

        texts = [TextColumn(f"{{task.{shown}}}", markup=False) for shown in ("description", "fields[state]")]
        self._console = Console(stderr=True, highlight=False, markup=False)
        self._bars = Bars(texts[0], BarColumn(24), texts[1], console=self._console, refresh_per_second=5)
        self._details = details
        self._tasks: dict[int, Any] = {}

    def note(self, text: str) -> None:
        """Print a detail above the bars."""
        if self._details:
            self._console.print(text)

    def opened(self, stage: Stage) -> None:
        """Add a bar."""
        if not self._tasks:
            self._bars.start()
        label = f"{stage.layer}: {stage.step}"
        self._tasks[id(stage)] = self._bars.add_task(label, total=stage.total, state="")

    def advanced(self, stage: Stage) -> None:
        """Move the bar."""
        task = self._tasks[id(stage)]
        self._bars.update(task, total=stage.total, completed=stage.done, state=state_text(stage))

    def closed(self, stage: Stage) -> None:
        """Turn the bar into a plain line."""
        self._bars.remove_task(self._tasks.pop(id(stage)))
        self._console.print(closing_line(stage))
        if not self._tasks:
            self._bars.stop()


def make_progress(style: Style, *, details: bool = False) -> Progress:
    """Return what shows a run's progress on the standard error stream.

    `auto` moves on a terminal that can, and writes plain lines elsewhere. Colours heed ``NO_COLOR``.
    """
    if style == "none":
        return Progress()
    if style == "json":
        return JsonProgress(sys.stderr)
    if style == "auto" and sys.stderr.isatty() and os.environ.get("TERM") != "dumb":
        return TerminalProgress(details=details)
    return PlainProgress(sys.stderr, details=details)


def state_text(stage: Stage) -> str:
    """Return how far a stage is: ``1,200 of 5,000 features, 400/s, 10 s left``."""
    parts = [f"{stage.done:,}{'' if stage.total is None else f' of {stage.total:,}'} {stage.unit}"]
    parts.append(f"{stage.rate:,.3g}/s" if stage.rate < 100 else f"{stage.rate:,.0f}/s")
    if stage.left_s is not None:
        parts.append(f"{duration(stage.left_s)} left")
    return ", ".join(parts)


def running_line(stage: Stage) -> str:
    """Return the line of a stage that runs."""
    share = f"{stage.done / stage.total:.0%}, " if stage.total else ""
    return f"{stage.layer}: {stage.step}: {share}{state_text(stage)}"


def closing_line(stage: Stage) -> str:
    """Return the line of a stage that has ended."""
    unit = stage.unit.removesuffix("s") if stage.done == 1 else stage.unit
    done = f"{stage.done:,} {unit} in {duration(stage.elapsed_s)}"
    return f"{stage.layer}: {stage.step}: {'stopped after ' if stage.stopped else ''}{done}"


def duration(seconds: float) -> str:
    """Return seconds in words: ``0.4 s``, ``12 s``, ``3 min 5 s``, ``2 h 10 min``."""
    if seconds < 10:
        return f"{seconds:.1f} s"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60} s"
    return f"{whole // 3600} h {whole % 3600 // 60} min"


def _event(event: str, stage: Stage) -> dict[str, Any]:
    return {
        "event": event,
        "layer": stage.layer,
        "step": stage.step,
        "done": stage.done,
        "total": stage.total,
        "unit": stage.unit,
        "elapsed_s": round(stage.elapsed_s, 3),
        "left_s": None if stage.left_s is None else round(stage.left_s, 1),
    }
