"""One executor shape, `concurrent.futures.Executor`: in this thread, on threads, or on processes."""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Executor, Future, ProcessPoolExecutor, ThreadPoolExecutor
from multiprocessing import get_context
from typing import Any, TypeVar

T = TypeVar("T")


class SerialExecutor(Executor):
    """Run each call at once in this thread: the same shape, and a plain traceback."""

    def submit(self, fn: Callable[..., T], /, *args: Any, **kwargs: Any) -> Future[T]:
        """Call `fn` now and return its finished future."""
        future: Future[T] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:  # noqa: BLE001 - a future carries whatever its call raised
            future.set_exception(error)
        return future


def make_executor(workers: int, *, processes: bool) -> Executor:
    """Return an executor: threads for kernels, processes for code that holds the interpreter lock."""
    if processes:
        return ProcessPoolExecutor(workers, mp_context=get_context("spawn"))
    return SerialExecutor() if workers == 1 else ThreadPoolExecutor(workers, "geofractal")


def available_workers() -> int:
    """Return the number of processors this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def in_order(
    executor: Executor, call: Callable[..., T], inputs: Iterable[tuple[Any, ...]], ahead: int
) -> Iterator[T]:
    """Yield ``call(*input)`` in the order of the inputs, with at most `ahead` calls under way.

    The bound is the back-pressure: a reader never runs further ahead of the work than this.
    """
    waiting: deque[Future[T]] = deque()
    try:
        for arguments in inputs:
            waiting.append(executor.submit(call, *arguments))
            if len(waiting) >= ahead:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()
    finally:
        for future in waiting:
            future.cancel()
