"""Work in a second process: its answers, its errors, and what happens when either process dies."""

import os
import signal
import subprocess
import sys
import time
from contextlib import suppress

import numpy as np
import pytest

from dsp.block import Block
from dsp.errors import DspError
from monitor.beside import Beside
from monitor.engine import whole_figures
from tests.monitor.watched import Watched, stretches


def where(*_):
    return os.getpid()


def fail(text):
    raise DspError(text)


def alive(pid):
    with suppress(ProcessLookupError):
        os.kill(pid, 0)
        with open(f"/proc/{pid}/stat") as stat:
            return stat.read().rsplit(")", 1)[1].split()[0] != "Z"
    return False


def until(what, seconds=10.0):
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if what():
            return True
        time.sleep(0.02)
    return False


def test_work_is_done_in_another_process_in_turn():
    with Beside() as beside:
        answers = [beside.submit(np.add, k, 1) for k in range(5)]
        assert [answer.result(10) for answer in answers] == [1, 2, 3, 4, 5]
        assert beside.submit(where).result(10) != os.getpid()


def test_what_fails_there_is_raised_here_and_the_next_work_is_done():
    with Beside() as beside:
        with pytest.raises(DspError, match="no such link"):
            beside.submit(fail, "no such link").result(10)
        assert beside.submit(max, 3, 4).result(10) == 4


def test_where_the_process_was_killed_work_goes_on_in_this_one():
    with Beside() as beside:
        os.kill(beside.submit(where).result(10), signal.SIGKILL)
        assert beside.submit(where).result(10) == os.getpid()
        assert beside.submit(max, 3, 4).result(10) == 4


def test_the_process_ends_with_the_watch_though_it_works():
    beside = Beside()
    pid = beside.submit(where).result(10)
    beside.submit(time.sleep, 60)
    began = time.monotonic()
    beside.shutdown()
    assert time.monotonic() - began < 5
    assert not alive(pid)


@pytest.mark.skipif(sys.platform != "linux", reason="looks into /proc")
def test_the_process_ends_when_its_parent_is_killed():
    program = (
        "import os, time\nfrom monitor.beside import Beside\nbeside = Beside()\n"
        "print(beside.submit(os.getpid).result(10), flush=True)\ntime.sleep(60)\n"
    )
    with subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE, text=True) as parent:
        pid = int(parent.stdout.readline())
        assert alive(pid)
        parent.kill()
    assert until(lambda: not alive(pid))


def test_a_whole_reading_is_the_same_from_the_other_process():
    samples = stretches(20.0)
    watched = Watched(display=True).feed(samples)
    sums, context = watched.engine._merged(), watched.engine._chain.context()
    with Beside() as beside:
        there = beside.submit(whole_figures, sums, context, True).result(30)
    here = whole_figures(sums, context, True)
    assert there.reading == here.reading
    assert there.opening == here.opening
    assert there.diagnosis.remarks == here.diagnosis.remarks


def test_a_watch_with_it_gives_the_lines_that_one_without_gives():
    samples = stretches(25.0, 25.0, 25.0)
    alone = Watched().feed(samples).finish().lines
    with Beside() as beside:
        watched = Watched(aside=beside)
        for at in range(0, samples.size, 4800):
            watched.engine.feed(Block(samples[at : at + 4800], at))
            until(lambda: watched.engine._asked is None or watched.engine._asked.ready())
        lines = watched.finish().lines
    assert lines == alone
