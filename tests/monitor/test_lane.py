"""The second thread."""

import threading

import pytest

from monitor.lane import ThreadLane


@pytest.fixture
def lane():
    before = threading.active_count()
    made = ThreadLane(depth=2)
    yield made
    made.close()
    assert threading.active_count() == before


def test_work_is_done_in_order_in_another_thread(lane):
    done = []
    for number in range(50):
        lane.do(lambda number=number: done.append((number, threading.current_thread())))
    lane.wait()
    assert [number for number, _ in done] == list(range(50))
    assert {thread for _, thread in done} != {threading.current_thread()}
    assert len({thread for _, thread in done}) == 1


def test_the_giver_waits_when_it_is_far_ahead(lane):
    held = threading.Event()
    lane.do(held.wait)
    given = []

    def give():
        for number in range(4):
            lane.do(lambda: None)
            given.append(number)

    giver = threading.Thread(target=give)
    giver.start()
    giver.join(0.2)
    assert giver.is_alive()  # one in work and two pending are what a depth of 2 takes
    assert len(given) <= 2
    held.set()
    giver.join(10)
    assert not giver.is_alive()
    assert len(given) == 4


def test_an_error_reaches_the_giver_once_and_stops_the_work_behind_it(lane):
    done = []

    def fail():
        raise ValueError("too wide")

    held = threading.Event()
    lane.do(held.wait)
    lane.do(fail)
    lane.do(lambda: done.append("after"))
    held.set()
    with pytest.raises(ValueError, match="too wide"):
        lane.wait()
    assert done == []
    lane.do(lambda: done.append("later"))
    lane.wait()
    assert done == ["later"]


def test_an_error_reaches_the_giver_with_the_next_work(lane):
    failed = threading.Event()

    def fail():
        failed.set()
        raise ValueError("too wide")

    lane.do(fail)
    failed.wait(10)

    def give_on():
        while True:
            lane.do(lambda: None)

    with pytest.raises(ValueError, match="too wide"):
        give_on()


def test_closing_finishes_what_was_given():
    done = []
    lane = ThreadLane()
    for number in range(4):
        lane.do(lambda number=number: done.append(number))
    lane.close()
    assert done == [0, 1, 2, 3]
