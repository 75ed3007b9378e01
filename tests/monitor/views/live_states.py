"""States of a watched stream for the tests of the live views; the eyes are synthetic."""

from dataclasses import replace

import numpy as np

from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, Change, HistoryPoint, LiveState, Mark
from monitor.views.history import AlarmSpan
from tests.monitor.views.synthetic_eyes import baseband_reading, full_reading, make_eye

SOURCE = "tcp://skerry-7.harbour.example:5555 · cf32_le · 1000000 Hz"


def make_history(count, step_s, *, seed=1, without=()):
    """A wandering opening, a point each ``step_s``; none within the stretches ``without``."""
    rng = np.random.default_rng(seed)
    points, value = [], 60.0
    for number in range(1, count + 1):
        at = number * step_s
        value += rng.normal() * 1.2 + (70.0 - value) * 0.03
        low, high = np.abs(rng.normal(size=2))
        if not any(first < at < last for first, last in without):
            points.append(HistoryPoint(at, value, value - low, value + high))
    return tuple(points)


def make_states():
    """Realistic live states, by name."""
    qpsk = make_eye(2, ("I", "Q"), noise=0.09, echo=0.06, symbols=800)
    pam2 = make_eye(2, noise=0.06, rolloff=0.5, symbols=800)
    reading = full_reading(*qpsk)
    busy = LiveState(
        snapshot=Snapshot(
            qpsk[0], reading, SOURCE, "Skerry tide gauge: qpsk at 250000 Bd, pulse rrc:0.35", "locked", (), 412.3, 37.0
        ),
        seconds=412.3,
        locked=True,
        history=make_history(2000, 0.206, without=((100.0, 130.0),)),
        marks=(
            Mark(60.0, "", 61.0, 60.0, 62.0),
            Mark(210.0, "stub trimmed", 64.0, 63.0, 65.0),
            Mark(330.0, "feed turned east", 62.0, 61.0, 63.0),
        ),
        gaps_s=(40.0, 44.0, 250.0, 390.0),
        locks=((0.8, True), (100.0, False), (130.0, True)),
        alarms=(
            AlarmLine("opening_pct < 70", "high", "unacknowledged", 388.2, "now 66.1 %, limit 70 %"),
            AlarmLine("clipping", "medium", "returned", 300.0, "limit 0.01 %"),
            AlarmLine("samples lost", "low", "acknowledged", 390.0, "now 0"),
        ),
        change=Change(4.2, 2.9, 5.5, "better"),
        best=replace(reading, opening_pct=84.1),
        best_at_s=207.4,
        samples_lost=1024,
        behind_s=0.1,
        notices=("6:30 samples lost: 1,024",),
        rails=("I", "Q"),
    )
    calm = LiveState(
        snapshot=Snapshot(
            pam2[0], baseband_reading(*pam2), "audio:harbour", "pam2 at 1200 Bd", "locked", (), 32.0, 100.0
        ),
        seconds=32.0,
        locked=True,
        history=make_history(150, 0.21),
        marks=(Mark(20.0, "", 61.0, 60.0, 62.0),),
        locks=((0.4, True),),
        change=Change(-0.3, -1.2, 0.6, "no significant change"),
        best=baseband_reading(*pam2),
        best_at_s=8.0,
    )
    return {
        "busy": busy,
        "calm": calm,
        "worse": replace(busy, change=Change(-7.2, -8.0, -6.4, "worse"), alarms=()),
        "no lock": replace(
            busy,
            snapshot=replace(busy.snapshot, image=None, reading=None, lock_text="no lock"),
            locked=False,
            searching="qpsk: no line at the symbol rate in the last 2 s",
            locks=(*busy.locks, (405.0, False)),
            history=tuple(point for point in busy.history if point.seconds < 405.0),
            change=None,
        ),
        "waiting": LiveState(Snapshot(source_text=SOURCE), searching="waiting for samples"),
        "ended": replace(calm, ended=True, locked=False, snapshot=replace(calm.snapshot, image=None)),
    }


SPANS = (AlarmSpan("lock lost", "high", 98.0, 131.0), AlarmSpan("clipping", "medium", 300.0, 360.0))
