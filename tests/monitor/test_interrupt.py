"""Ctrl-C as a wish for the end of the stream."""

import os
import signal
import threading

import numpy as np
import pytest

from dsp.block import Block
from monitor.interrupt import Interrupt, Interruptible
from tests.monitor.recordings import InMemory


@pytest.fixture(autouse=True)
def ctrl_c_is_heard():
    """Where the tests run in the background, Ctrl-C is ignored."""
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    yield
    signal.signal(signal.SIGINT, before)


def press_ctrl_c():
    os.kill(os.getpid(), signal.SIGINT)


def some_blocks(count):
    return [Block(np.zeros(10, np.float32), 10 * number) for number in range(count)]


def test_a_wish_between_blocks_ends_the_stream_after_the_block_in_work():
    with Interrupt() as interrupt:
        source = Interruptible(InMemory(*some_blocks(5)), interrupt)
        taken = []
        for block in source.blocks():
            taken.append(block.start)
            if block.start == 20:
                press_ctrl_c()
    assert taken == [0, 10, 20]
    assert interrupt.asked


def test_a_wish_while_waiting_for_a_quiet_stream_ends_it():
    read, write = os.pipe()

    def blocks():
        yield some_blocks(1)[0]
        os.read(read, 1)  # nobody ever writes
        raise AssertionError("the wait went on")

    with Interrupt() as interrupt:
        timer = threading.Timer(0.1, press_ctrl_c)
        stream = interrupt.blocks_until(blocks())
        next(stream)
        timer.start()
        assert list(stream) == []
        timer.join()
    assert interrupt.asked
    os.close(read)
    os.close(write)


def test_without_a_wish_the_whole_stream_comes():
    with Interrupt() as interrupt:
        assert len(list(interrupt.blocks_until(iter(some_blocks(5))))) == 5
    assert not interrupt.asked


def test_a_second_wish_ends_at_once():
    with Interrupt():
        press_ctrl_c()
        with pytest.raises(KeyboardInterrupt):
            press_ctrl_c()


def test_the_handler_before_is_put_back():
    before = signal.getsignal(signal.SIGINT)
    with Interrupt():
        assert signal.getsignal(signal.SIGINT) is not before
    assert signal.getsignal(signal.SIGINT) is before


def test_an_ignored_ctrl_c_stays_ignored():
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    with Interrupt() as interrupt:
        press_ctrl_c()
        assert signal.getsignal(signal.SIGINT) is signal.SIG_IGN
    assert not interrupt.asked


def test_in_another_thread_it_does_nothing():
    before = signal.getsignal(signal.SIGINT)
    seen = []

    def work():
        with Interrupt() as interrupt:
            seen.append(len(list(interrupt.blocks_until(iter(some_blocks(3))))))

    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert seen == [3]
    assert signal.getsignal(signal.SIGINT) is before


def test_notes_and_closing_are_the_source_s_own():
    class Closing(InMemory):
        closed = False

        def close(self):
            self.closed = True

    inner = Closing(*some_blocks(1), later=("cut short",))
    with Interruptible(inner, Interrupt()) as source:
        list(source.blocks())
        assert source.notes == ["cut short"]
        assert source.info is inner.info
    assert inner.closed
