"""One shape of executor: results in order, bounded work ahead, errors carried over."""

import threading

import pytest

from geofractal.batch.executor import SerialExecutor, in_order, make_executor


def _square(value):
    if value < 0:
        raise ValueError(f"{value} is negative")
    return value * value


@pytest.mark.parametrize(("workers", "processes"), [(1, False), (3, False), (2, True)])
def test_results_come_in_the_order_of_the_inputs(workers, processes):
    with make_executor(workers, processes=processes) as executor:
        found = list(in_order(executor, _square, ((value,) for value in range(20)), ahead=4))
    assert found == [value * value for value in range(20)]


@pytest.mark.parametrize("workers", [1, 2])
def test_an_error_reaches_the_caller_with_its_text(workers):
    with (
        make_executor(workers, processes=False) as executor,
        pytest.raises(ValueError, match="-1 is negative"),
    ):
        list(in_order(executor, _square, [(2,), (-1,)], ahead=4))


def test_the_reader_is_held_back_to_the_stated_number_ahead():
    taken = []
    gate = threading.Event()

    def wait(value):
        gate.wait(5)
        return value

    def inputs():
        for value in range(10):
            taken.append(value)
            yield (value,)

    with make_executor(2, processes=False) as executor:
        results = in_order(executor, wait, inputs(), ahead=3)
        threading.Timer(0.2, gate.set).start()
        assert next(results) == 0
        assert len(taken) == 3
        assert list(results) == list(range(1, 10))


def test_the_serial_executor_is_an_executor():
    with SerialExecutor() as executor:
        assert executor.submit(_square, 3).result() == 9
