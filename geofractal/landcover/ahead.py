"""Work on the next strips in a thread of its own while the caller is busy with one."""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable, Iterator
from typing import TypeVar

T = TypeVar("T")


def run_ahead(make: Callable[[], Iterator[T]], room: int = 1) -> Iterator[T]:
    """Run `make` in a thread and yield what it yields; an error there is raised here.

    Parameters
    ----------
    make : what to iterate; begun and ended in the thread
    room : how many items may wait for the caller
    """
    waiting: queue.Queue[tuple[T | None, BaseException | None]] = queue.Queue(room)
    stopped = threading.Event()

    def offer(item: T | None, error: BaseException | None = None) -> None:
        while not stopped.is_set():
            try:
                waiting.put((item, error), timeout=0.1)
            except queue.Full:
                continue
            return

    def work() -> None:
        try:
            for item in make():
                offer(item)
                if stopped.is_set():
                    return
            offer(None)
        except BaseException as error:  # noqa: BLE001 - raised again in the caller's thread
            offer(None, error)

    worker = threading.Thread(target=work, name="strips-ahead", daemon=True)
    worker.start()
    try:
        while True:
            item, error = waiting.get()
            if error is not None:
                raise error
            if item is None:
                return
            yield item
    finally:
        stopped.set()
        worker.join()
