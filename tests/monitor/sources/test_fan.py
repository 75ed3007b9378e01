"""One live source, several takers."""

import threading
import time

import numpy as np
import pytest

from dsp.block import Block
from monitor.errors import MonitorError
from monitor.sources.fan import Fan
from monitor.sources.ring import ThreadedReader


class Counting:
    """Gives numbered blocks, then ends or fails; notes when two threads are in it at once."""

    def __init__(self, blocks, failure=None):
        self.uri, self.warnings, self.ended, self.closed = "counting", ("beware",), False, 0
        self.patient = False
        self.left = blocks
        self.given = 0
        self.failure = failure
        self.inside = threading.Lock()

    def poll(self, timeout_s):
        assert self.inside.acquire(blocking=False), "two threads in one source"
        try:
            time.sleep(0.001)
            if self.given == self.left:
                if self.failure is not None:
                    raise self.failure
                self.ended = True
                return ()
            self.given += 1
            return (Block(np.full(10, self.given, np.float32), self.given * 10),)
        finally:
            self.inside.release()

    def close(self):
        self.closed += 1


def taken(branch):
    items = []
    while not branch.ended:
        items += branch.poll(0.1)
    branch.close()
    return [int(item.samples[0]) for item in items]


def test_every_branch_gets_every_block_in_order_from_threads_of_their_own():
    source = Counting(200)
    fan = Fan(lambda: source, 3)
    got = {}

    def take(number):
        got[number] = taken(fan.branch(number))

    threads = [threading.Thread(target=take, args=(number,)) for number in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(20)
    assert got == {number: list(range(1, 201)) for number in range(3)}
    assert source.closed == 1


def test_a_branch_opened_late_misses_nothing():
    source = Counting(5)
    fan = Fan(lambda: source, 2)
    first = fan.branch(0)
    assert taken(first) == [1, 2, 3, 4, 5]
    assert source.closed == 0
    assert taken(fan.branch(1)) == [1, 2, 3, 4, 5]
    assert source.closed == 1


def test_a_branch_that_leaves_keeps_nothing_from_the_others():
    source = Counting(5)
    fan = Fan(lambda: source, 2)
    first, second = fan.branch(0), fan.branch(1)
    first.close()
    assert source.closed == 0
    assert taken(second) == [1, 2, 3, 4, 5]


def test_a_source_that_breaks_is_told_to_every_branch_after_what_came_before():
    fan = Fan(lambda: Counting(2, MonitorError("the cable is out")), 2)
    branches = [fan.branch(0), fan.branch(1)]
    got = [0, 0]

    def take(number):
        while True:
            got[number] += len(branches[number].poll(0.1))

    for number in range(2):
        with pytest.raises(MonitorError, match="cable"):
            take(number)
    assert got == [2, 2]


def test_what_cannot_be_opened_is_told_to_every_branch():
    def refuse():
        raise MonitorError("no such device")

    fan = Fan(refuse, 2)
    for number in range(2):
        with pytest.raises(MonitorError, match="no such device"):
            fan.branch(number)


def test_warnings_come_once():
    fan = Fan(lambda: Counting(1), 2)
    assert [fan.branch(number).warnings for number in range(2)] == [("beware",), ()]


def test_readers_in_threads_share_a_source():
    source = Counting(50)
    fan = Fan(lambda: source, 2)
    readers = [ThreadedReader(lambda number=number: fan.branch(number)) for number in range(2)]
    for reader in readers:
        got = 0
        while not reader.ended:
            got += len(reader.poll(0.1))
        assert got == 50
        reader.close()
    assert source.closed == 1


def test_a_patient_source_waits_for_the_slowest_and_another_does_not():
    for patient in (True, False):
        source = Counting(1000)
        source.patient = patient
        fan = Fan(lambda source=source: source, 2)
        fast, slow = fan.branch(0), fan.branch(1)
        assert fast.patient == patient
        got = 0
        for _ in range(300):
            got += len(fast.poll(0.001))
        assert (source.given < 100) == patient
        assert len(slow.poll(0.1)) == source.given
        # and on it goes
        before = source.given
        fast.poll(0.1)
        assert source.given == before + 1
        slow.close()
        got += 1 + len(taken(fast))
        assert got == 1000
