"""What is remembered of weeks: bounded, the newest in full, no extreme forgotten."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.history import MOST_EVENTS, NEWEST, OLDER, TIERS, Gaps, History, Locks

STEP_S = 0.2


def filled(count, *, spike=None):
    history = History()
    for i in range(count):
        history.add(STEP_S * i, None if i % 1000 < 3 else 50.0 + (i == spike) * 30.0)
    return history.points()


def test_the_last_minutes_are_there_point_by_point_after_two_days():
    points = filled(864_000)
    newest = [p.seconds for p in points[-NEWEST:]]
    assert np.allclose(np.diff(newest), STEP_S)
    assert newest[-1] == pytest.approx(STEP_S * 863_999)
    seconds = np.array([p.seconds for p in points])
    age = seconds[-1] - seconds[:-1]
    # no more than a fiftieth of how long ago it was, wherever it lies: finer than a strip of pixels can show
    assert np.all(np.diff(seconds) <= np.maximum(age / 50, STEP_S + 1e-6))
    assert seconds[0] < 2 * 3600


@pytest.mark.parametrize("spike", [3, 70_501, 299_990])
def test_no_extreme_is_forgotten(spike):
    points = filled(300_000, spike=spike)
    highest = max((p for p in points if p.most_pct is not None), key=lambda p: p.most_pct)
    assert highest.most_pct == 80.0
    assert highest.least_pct == 80.0 if spike == 299_990 else 50.0
    at = STEP_S * spike
    assert abs(highest.seconds - at) <= max((STEP_S * 300_000 - at) / 50, STEP_S)


def test_memory_has_a_bound(monkeypatch):
    monkeypatch.setattr("monitor.history.NEWEST", 16)
    monkeypatch.setattr("monitor.history.OLDER", 8)
    monkeypatch.setattr("monitor.history.TIERS", 3)
    history = History()
    most = 0
    for i in range(20_000):
        history.add(float(i), float(i % 7))
        most = max(most, len(history.points()))
    assert most <= 16 + 2 * 8 + 3 * 4
    assert history.points()[-1].seconds == 19_999
    assert min(p.least_pct for p in history.points()) == 0.0
    assert NEWEST + (TIERS - 1) * OLDER < 6000


@given(st.lists(st.one_of(st.none(), st.floats(-100, 100)), min_size=1, max_size=3000))
def test_points_come_in_order_with_mean_between_least_and_greatest(values):
    history = History()
    for i, value in enumerate(values):
        history.add(float(i), value)
    points = history.points()
    assert [p.seconds for p in points] == sorted({p.seconds for p in points})
    known = [v for v in values if v is not None]
    for p in points:
        if p.opening_pct is not None:
            assert p.least_pct - 1e-9 <= p.opening_pct <= p.most_pct + 1e-9
    if known:
        assert min(p.least_pct for p in points if p.least_pct is not None) == min(known)
        assert max(p.most_pct for p in points if p.most_pct is not None) == max(known)


def test_of_many_gaps_the_newest_are_all_there_and_the_first_hour_still_has_some():
    gaps = Gaps()
    for i in range(20_000):
        gaps.add(float(i))
    at = gaps.all()
    assert len(at) == MOST_EVENTS
    assert at[-200:] == tuple(float(i) for i in range(19_800, 20_000))
    assert at[0] == 0.0
    assert sum(x < 3600 for x in at) >= 10


def test_of_many_losses_of_lock_long_locks_stay_and_the_order_is_kept():
    locks = Locks()
    for i in range(5000):
        locks.add(10.0 * i, True)
        locks.add(10.0 * i + (9.0 if i == 40 else 1.0), False)
    events = locks.all()
    assert len(events) <= MOST_EVENTS
    assert [gained for _, gained in events] == [True, False] * (len(events) // 2)
    assert (400.0, True) in events
    assert (409.0, False) in events
    assert events[-1] == (49_991.0, False)
