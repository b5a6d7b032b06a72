"""Ctrl-C: the process ends within two seconds, its temporary files go, and it says what stays.

Results appear by renaming whole files only, so a run may end at any moment and is ended at once. A
signal that arrives while native code holds the interpreter lock (GDAL building an index, for minutes
on large layers) reaches no Python code. So a second, tiny process is told of temporary files and
signals through a pipe that the system itself writes to, and ends the first where that has not gone
after a grace period. This file is also that process's program, so it imports nothing of ours.
"""

from __future__ import annotations

import glob
import json
import os
import select
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

GRACE_S = 1.5
_SIGNALS = (signal.SIGINT, signal.SIGTERM)


class _State:
    """What this process has under way; one for the process, since signals are."""

    def __init__(self) -> None:
        self.temporary: set[str] = set()
        self.kept = "Nothing was finished; earlier outputs are as they were."
        self.shields = 0
        self.pending = 0
        self.pipe = -1
        self.lock = threading.RLock()

    def tell(self, word: str, text: str) -> None:
        """Send a message to the watching process, if there is one."""
        if self.pipe >= 0:
            select.select([], [self.pipe], [])
            with suppress(BrokenPipeError):
                os.write(self.pipe, json.dumps([word, text]).encode("ascii") + b"\n")


_state = _State()


def register(path: Path) -> None:
    """Note a temporary file or folder, to be removed on interrupt."""
    text = str(path.absolute())
    _state.temporary.add(text)
    _state.tell("register", text)


def unregister(path: Path) -> None:
    """Forget a temporary file or folder."""
    text = str(path.absolute())
    _state.temporary.discard(text)
    _state.tell("unregister", text)


def set_kept(message: str) -> None:
    """Set the sentence that tells an interrupted user what is kept."""
    _state.kept = message
    _state.tell("kept", message)


@contextmanager
def shielded() -> Iterator[None]:
    """Let a block of a few renames end before an interrupt ends the process."""
    with _state.lock:
        _state.shields += 1
    try:
        yield
    finally:
        with _state.lock:
            _state.shields -= 1
            leave = _state.pending and not _state.shields
        if leave:
            _leave(_state.pending)


@contextmanager
def guarded() -> Iterator[None]:
    """End the process on SIGINT or SIGTERM, with exit code 128 + signal, while the block runs.

    Only for the main thread of a command; a library call leaves signals to its caller.
    """
    before = {number: signal.signal(number, _on_signal) for number in _SIGNALS}
    try:
        with _watched():
            yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


@contextmanager
def _watched() -> Iterator[None]:
    if os.name != "posix":  # elsewhere no pipe can be written to by a signal
        yield
        return
    reading, writing = os.pipe()
    os.set_blocking(writing, False)
    program = [sys.executable, "-I", "-S", __file__, str(os.getpid())]
    with subprocess.Popen(program, stdin=reading, start_new_session=True):
        os.close(reading)
        before = signal.set_wakeup_fd(writing, warn_on_full_buffer=False)
        _state.pipe = writing
        for path in sorted(_state.temporary):
            _state.tell("register", path)
        try:
            yield
        finally:
            signal.set_wakeup_fd(before)
            _state.pipe = -1
            os.close(writing)


def _on_signal(number: int, _frame: Any) -> None:
    if _state.shields:
        _state.pending = number
    else:
        _leave(number)


def _leave(number: int) -> None:
    """Stop helpers, remove temporary files, say what is kept, and end without waiting for any thread."""
    multiprocessing = sys.modules.get("multiprocessing")
    for child in multiprocessing.active_children() if multiprocessing else ():
        child.terminate()
    _clear(_state.temporary.copy(), _state.kept)
    os._exit(128 + number)


def _clear(temporary: Iterable[str], kept: str) -> None:
    for path in map(Path, temporary):
        _remove(path)
        for index in path.parent.glob(f"{glob.escape(path.name)}.tmp_rtree_*"):  # GDAL's, beside a GeoPackage
            _remove(index)
    shown = "\x1b[?25h" if os.isatty(2) else ""  # a progress display hides the cursor
    with suppress(OSError):
        os.write(2, f"{shown}\nInterrupted. {kept}\n".encode())


def _remove(path: Path) -> None:
    with suppress(OSError):
        if path.is_dir() and not path.is_symlink():
            shutil.rmtree(path, ignore_errors=True)
        else:
            path.unlink()


def _watch(parent: int) -> None:
    """Read the pipe until the parent closes it; after a signal, end the parent when the grace is over."""
    for number in _SIGNALS:
        signal.signal(number, signal.SIG_IGN)
    temporary: set[str] = set()
    kept, unread, deadline = _state.kept, b"", float("inf")
    while (left := deadline - time.monotonic()) > 0:
        if not select.select([0], [], [], min(left, 60.0))[0]:
            continue
        data = os.read(0, 1 << 16)
        if not data:
            return
        for number in _SIGNALS:
            if bytes([number]) in data:
                deadline = min(deadline, time.monotonic() + GRACE_S)
                data = data.replace(bytes([number]), b"")
        *lines, unread = (unread + data).split(b"\n")
        for word, text in map(json.loads, lines):
            if word == "register":
                temporary.add(text)
            elif word == "unregister":
                temporary.discard(text)
            else:
                kept = text
    with suppress(ProcessLookupError):
        os.kill(parent, signal.SIGKILL)
    _clear(temporary, kept)


if __name__ == "__main__":
    _watch(int(sys.argv[1]))
