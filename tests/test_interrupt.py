"""Ctrl-C ends a command within two seconds, even in native code that holds the interpreter lock."""

import os
import signal
import subprocess
import sys
import time

import pytest

posix = pytest.mark.skipif(os.name != "posix", reason="signals reach a pipe only on POSIX")

PROGRAM = """
import collections, itertools, sys, time
from pathlib import Path
from geofractal import interrupt

folder, how = Path(sys.argv[1]), sys.argv[2]
(folder / "half.gpkg").touch()
(folder / "half.gpkg.tmp_rtree_shore.db").touch()
(folder / "work").mkdir()
(folder / "work" / "part").touch()
(folder / "work-of-others").touch()
interrupt.register(folder / "half.gpkg")
with interrupt.guarded():
    interrupt.register(folder / "work")
    (folder / "done.gpkg").touch()
    interrupt.register(folder / "done.gpkg")
    interrupt.unregister(folder / "done.gpkg")
    interrupt.set_kept("Kept: done.gpkg.")
    print("ready", flush=True)
    if how == "python":
        time.sleep(60)
    elif how == "native":
        collections.deque(itertools.repeat(0, 10**12), maxlen=0)  # holds the interpreter lock all the while
    elif how == "renaming":
        with interrupt.shielded():
            time.sleep(0.7)
            (folder / "renamed").touch()
        (folder / "after").touch()
"""


def interrupted(folder, how, number):
    process = subprocess.Popen(
        [sys.executable, "-c", PROGRAM, str(folder), how],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    process.stdout.readline()
    time.sleep(0.3)
    began = time.monotonic()
    os.killpg(process.pid, number)  # as a terminal does: the whole group
    code = process.wait(10)
    taken = time.monotonic() - began
    return code, taken, process.stderr.read()


def names(folder):
    return {path.name for path in folder.iterdir()}


@posix
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_an_interrupt_removes_temporary_files_and_says_what_is_kept(tmp_path, number):
    code, taken, said = interrupted(tmp_path, "python", number)
    assert code == 128 + number
    assert taken < 1.0
    assert names(tmp_path) == {"done.gpkg", "work-of-others"}
    assert said == "\nInterrupted. Kept: done.gpkg.\n"


@posix
def test_native_code_that_holds_the_interpreter_lock_is_ended_within_two_seconds(tmp_path):
    code, taken, said = interrupted(tmp_path, "native", signal.SIGINT)
    assert code == -signal.SIGKILL
    assert taken < 2.0
    assert said == "\nInterrupted. Kept: done.gpkg.\n"  # read to its end, so the watcher has ended, too
    assert names(tmp_path) == {"done.gpkg", "work-of-others"}


@posix
def test_renames_that_belong_together_are_let_to_end(tmp_path):
    code, taken, _ = interrupted(tmp_path, "renaming", signal.SIGINT)
    assert code == 130
    assert taken < 2.0
    assert names(tmp_path) == {"done.gpkg", "work-of-others", "renamed"}


@posix
def test_a_run_that_ends_by_itself_leaves_no_watcher_and_the_old_handlers():
    program = (
        "import signal; from geofractal import interrupt; before = signal.getsignal(signal.SIGINT)\n"
        "with interrupt.guarded(): assert signal.getsignal(signal.SIGINT) is not before\n"
        "assert signal.getsignal(signal.SIGINT) is before; print('ended')"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, timeout=10, check=True
    )
    assert (done.stdout, done.stderr) == ("ended\n", "")
