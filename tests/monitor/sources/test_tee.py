"""One stream for several readers."""

import threading
import time

import numpy as np
import pytest

from dsp.block import Block
from monitor.sources.tee import _MOST_WAITING, Tee
from tests.monitor.recordings import InMemory


def some(count):
    return [Block(np.full(3, number, np.float32), 3 * number) for number in range(count)]


class Counting(InMemory):
    """Counts the blocks that were asked for, and the times it was closed."""

    asked = closed = 0

    def blocks(self):
        for block in super().blocks():
            self.asked += 1
            yield block

    def close(self):
        self.closed += 1


@pytest.mark.parametrize("pauses", [(0.0, 0.0, 0.0), (0.0, 0.0005, 0.0)])
def test_each_branch_gets_every_block_in_order(pauses):
    source = Counting(*some(300))
    tee = Tee(source, 3)
    got = [[], [], []]

    def read(number, branch):
        for block in branch.blocks():
            got[number].append(block.start)
            time.sleep(pauses[number])
        branch.close()

    threads = [threading.Thread(target=read, args=(number, tee.branch())) for number in range(3)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(20)
    assert got == [[3 * number for number in range(300)]] * 3
    assert (source.asked, source.closed) == (300, 1)


def test_the_stream_waits_for_the_slowest_branch_in_bounded_memory_and_not_for_one_that_left():
    source = Counting(*some(1000))
    tee = Tee(source, 2)
    quick, idle = tee.branch(), tee.branch()
    got = []

    def read():
        got.extend(block.start for block in quick.blocks())

    thread = threading.Thread(target=read)
    thread.start()
    end = time.monotonic() + 10
    while source.asked < _MOST_WAITING:
        assert time.monotonic() < end
        time.sleep(0.01)
    time.sleep(0.3)
    assert source.asked == _MOST_WAITING
    idle.close()
    thread.join(20)
    assert len(got) == 1000
    assert list(idle.blocks()) == []
    assert source.closed == 0
    quick.close()
    quick.close()
    assert source.closed == 1
