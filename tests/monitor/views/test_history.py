import itertools
import math

import numpy as np
import pytest

from monitor.state import AlarmLine, HistoryPoint
from monitor.views.history import AlarmMemory, history_runs, lost_spans, time_ticks, value_range


def point(seconds, value, reach=0.0):
    return HistoryPoint(seconds, value, value - reach, value + reach)


def test_each_pixel_holds_the_least_the_mean_and_the_most_of_its_points():
    rng = np.random.default_rng(5)
    points = [point(t, 50.0 + 10.0 * rng.normal(), abs(rng.normal())) for t in np.sort(rng.uniform(0.0, 100.0, 700))]
    (run,) = history_runs(points, (), 0.0, 100.0, 60)
    for x, least, mean, most in zip(run.x, run.least, run.mean, run.most, strict=True):
        held = [p for p in points if math.floor(p.seconds * 0.6) == math.floor(x)]
        assert least == min(p.least_pct for p in held)
        assert mean == pytest.approx(sum(p.opening_pct for p in held) / len(held))
        assert most == max(p.most_pct for p in held)


def test_the_curve_breaks_at_lost_locks_and_unknown_openings_and_nowhere_else():
    points = [point(float(t), 50.0) for t in range(100) if not 30 <= t < 40]
    points[70] = HistoryPoint(points[70].seconds, None, None, None)
    runs = history_runs(points, ((30.0, 39.5),), 0.0, 100.0, 1000)
    ends = [(run.x[0] // 10, run.x[-1] // 10) for run in runs]
    assert ends == [(0, 29), (40, 79), (81, 99)]


def test_only_the_asked_stretch_is_drawn():
    points = [point(float(t), float(t)) for t in range(100)]
    (run,) = history_runs(points, (), 40.0, 60.0, 200)
    assert run.mean.tolist() == [float(t) for t in range(40, 61)]
    assert run.x[0] == 0.5
    assert run.x[-1] == 199.5


@pytest.mark.parametrize(("start", "end", "width"), [(0.0, 0.0, 100), (5.0, 1.0, 100), (0.0, 10.0, 0)])
def test_a_stretch_without_length_or_room_is_empty(start, end, width):
    assert history_runs([point(1.0, 5.0)], (), start, end, width) == []


def test_no_points_or_none_known_is_empty():
    assert history_runs([], (), 0.0, 10.0, 100) == []
    assert history_runs([HistoryPoint(1.0, None, None, None)], (), 0.0, 10.0, 100) == []
    assert history_runs([point(50.0, 1.0)], (), 0.0, 10.0, 100) == []


@pytest.mark.parametrize(
    ("values", "best", "expected"),
    [
        ((70.0, 72.0), None, (50.0, 80.0)),
        ((55.0, 72.0), 84.1, (50.0, 90.0)),
        ((99.0, 100.0), 100.0, (80.0, 110.0)),
        ((-500.0, 20.0), None, (-110.0, 30.0)),
        ((), None, (0.0, 100.0)),
    ],
)
def test_the_axis_is_whole_tens_round_what_is_there(values, best, expected):
    runs = history_runs([point(float(n), v) for n, v in enumerate(values)], (), 0.0, 10.0, 100)
    assert value_range(runs, best) == expected


@pytest.mark.parametrize(
    ("locks", "locked", "expected"),
    [
        ((), False, ((0.0, 60.0),)),
        ((), True, ()),
        (((2.0, True),), True, ((0.0, 2.0),)),
        (((2.0, True), (10.0, False), (15.0, True)), True, ((0.0, 2.0), (10.0, 15.0))),
        (((2.0, True), (10.0, False)), False, ((0.0, 2.0), (10.0, 60.0))),
        # older events have been dropped: it was locked before the first
        (((10.0, False), (12.0, False), (15.0, True)), True, ((10.0, 15.0),)),
    ],
)
def test_times_without_lock_follow_from_what_was_told(locks, locked, expected):
    assert lost_spans(locks, 60.0, locked=locked) == expected


@pytest.mark.parametrize("span", [0.5, 7.0, 60.0, 412.0, 3599.0, 90_000.0, 7 * 86_400.0, 400 * 86_400.0])
def test_ticks_are_round_evenly_spaced_and_not_too_many(span):
    ticks = list(time_ticks(1234.5, 1234.5 + span, 10))
    assert len(ticks) <= 11
    assert all(1234.5 <= tick <= 1234.5 + span for tick in ticks)
    steps = {round(b - a) for a, b in itertools.pairwise(ticks)}
    assert len(steps) <= 1
    assert all(tick % step == 0 for tick in ticks for step in steps)


def alarm(name, since, state="unacknowledged"):
    return AlarmLine(name, "high", state, since, "")


def test_an_alarm_is_remembered_from_its_start_to_when_it_was_last_told():
    memory = AlarmMemory()
    memory.tell((alarm("a", 3.0),), 4.0)
    memory.tell((alarm("a", 3.0), alarm("b", 5.0)), 6.0)
    memory.tell((alarm("b", 5.0),), 8.0)
    memory.tell((alarm("b", 5.0, "acknowledged"),), 9.0)
    assert [(span.name, span.start_s, span.end_s) for span in memory.spans()] == [("a", 3.0, 6.0), ("b", 5.0, 9.0)]


@pytest.mark.parametrize("over", ["returned", "latched"])
def test_an_alarm_whose_cause_has_gone_ends_though_it_still_shows(over):
    memory = AlarmMemory()
    memory.tell((alarm("a", 3.0),), 4.0)
    for now in (5.0, 50.0):
        memory.tell((alarm("a", 3.0, over),), now)
    assert [(span.start_s, span.end_s) for span in memory.spans()] == [(3.0, 4.0)]


def test_an_alarm_that_comes_again_is_another():
    memory = AlarmMemory()
    for since, now in ((1.0, 2.0), (7.0, 8.0)):
        memory.tell((alarm("a", since),), now)
        memory.tell((), now + 1.0)
    assert [(span.start_s, span.end_s) for span in memory.spans()] == [(1.0, 2.0), (7.0, 8.0)]


def test_the_memory_is_bounded():
    memory = AlarmMemory()
    for number in range(1000):
        memory.tell((alarm("a", float(number)),), number + 0.5)
    spans = memory.spans()
    assert len(spans) == 513
    assert [span.start_s for span in spans[-200:]] == [float(number) for number in range(800, 1000)]
    # older ones have become one, but none is forgotten
    assert spans[0].start_s == 0.0
    assert sum(span.end_s - span.start_s > 0.5 for span in spans) > 0


def test_a_flood_of_one_alarm_does_not_drive_another_out_of_the_memory():
    memory = AlarmMemory()
    memory.tell((alarm("rain", 1.0),), 2.0)
    for number in range(10, 2000):
        memory.tell((alarm("a", float(number)),), number + 0.5)
    assert ("rain", 1.0) in [(span.name, span.start_s) for span in memory.spans()]
