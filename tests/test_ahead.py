"""Work ahead in a thread: the same items, errors passed on, stopped with the caller."""

import threading

import pytest

from geofractal.landcover.ahead import run_ahead


def test_items_come_in_order():
    assert list(run_ahead(lambda: iter(range(5)))) == [0, 1, 2, 3, 4]
    assert list(run_ahead(lambda: iter([]))) == []


def test_errors_are_raised_in_the_callers_thread():
    def failing():
        yield 1
        raise ValueError("row 7 is damaged")

    items = run_ahead(failing)
    assert next(items) == 1
    with pytest.raises(ValueError, match="row 7 is damaged"):
        next(items)


def test_a_caller_that_stops_ends_the_thread():
    before = threading.active_count()
    items = run_ahead(lambda: iter(range(1000)), 2)
    assert next(items) == 0
    items.close()
    assert threading.active_count() == before
