"""Work handed to several processes: results, order, failures, and what becomes of the processes."""

import os
import signal
import sys
import threading
import time

import pytest

from pathplan.errors import PathplanError, UnreachableError
from pathplan.workers import cores, work_through

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="work is done in processes on Linux only")


def children() -> set[int]:
    """Processes that this one has started, finished ones that nobody waited for included."""
    with open(f"/proc/self/task/{threading.get_native_id()}/children") as file:
        return {int(number) for number in file.read().split()}


@pytest.fixture(autouse=True)
def nothing_is_left():
    before = children()
    yield
    assert children() == before


@pytest.mark.parametrize("jobs", [1, 2, 3, 50])
def test_results_are_in_the_order_of_the_work(jobs):
    def work(item):
        time.sleep(0.02 * (item % 3 == 0))
        return item, item * item

    told = []
    assert work_through(work, range(20), jobs, told.append) == [(k, k * k) for k in range(20)]
    assert told == list(range(1, 21))


def test_several_processes_take_part():
    def work(item):
        time.sleep(0.05)
        return os.getpid()

    assert len(set(work_through(work, range(6), 2)) - {os.getpid()}) == 2
    assert set(work_through(work, range(2), 1)) == {os.getpid()}
    assert work_through(work, [], 2) == []


@pytest.mark.parametrize("jobs", [1, 2])
def test_the_first_failure_in_order_is_raised_as_it_is(jobs):
    def work(item):
        if item == 3:
            time.sleep(0.1)
        if item in (3, 4):
            raise UnreachableError(f"item {item}", data={"step": item})
        return item

    with pytest.raises(UnreachableError, match=r"^item 3$") as caught:
        work_through(work, range(10), jobs)
    assert caught.value.data == {"step": 3}


def test_a_process_that_is_ended_from_outside_is_told():
    def work(item):
        if item == 1:
            os.kill(os.getpid(), signal.SIGKILL)
        return item

    with pytest.raises(PathplanError, match="ended from outside"):
        work_through(work, range(4), 2)


def test_an_interrupt_ends_them_all_and_lets_them_tidy_up(tmp_path):
    def work(item):
        try:
            (tmp_path / f"begun{item}").touch()
            time.sleep(60)
        except KeyboardInterrupt:
            time.sleep(0.05)
            (tmp_path / f"tidied{item}").touch()
            raise

    def interrupt():
        while len(list(tmp_path.glob("begun*"))) < 2:
            time.sleep(0.01)
        os.kill(os.getpid(), signal.SIGINT)

    before = signal.signal(signal.SIGINT, signal.default_int_handler)  # heard by tests in the background too
    thread = threading.Thread(target=interrupt)
    thread.start()
    start = time.monotonic()
    try:
        with pytest.raises(KeyboardInterrupt):
            work_through(work, range(4), 2)
    finally:
        signal.signal(signal.SIGINT, before)
    thread.join()
    assert time.monotonic() - start < 30
    assert {path.name for path in tmp_path.iterdir()} == {"begun0", "begun1", "tidied0", "tidied1"}


def test_signals_are_as_they_were():
    before = signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)
    mask = signal.pthread_sigmask(signal.SIG_BLOCK, set())
    assert work_through(abs, [-1, -2], 2) == [1, 2]
    assert (signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)) == before
    assert signal.pthread_sigmask(signal.SIG_BLOCK, set()) == mask


def test_cores():
    assert 1 <= cores() <= (os.cpu_count() or 1)
