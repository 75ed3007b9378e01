from dataclasses import replace

import pytest

from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, Change, LiveState, Mark
from monitor.views.live_wording import (
    ago,
    alarm_words,
    best_words,
    by_urgency,
    change_lines,
    clock,
    health_words,
    key_figures,
    no_eye_lines,
    span_words,
)


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(0.0, "0:00"), (59.99, "0:59"), (192.0, "3:12"), (3723.4, "1:02:03"), (187_506.0, "2 d 4:05:06")],
)
def test_a_place_in_the_stream_reads_as_a_clock(seconds, words):
    assert clock(seconds) == words


@pytest.mark.parametrize(
    ("seconds", "words"),
    [(-0.1, "0 s ago"), (99.9, "99 s ago"), (100.0, "1 min ago"), (3599.0, "59 min ago"), (7500.0, "2 h 05 min ago")],
)
def test_how_long_ago_is_told_in_fitting_units(seconds, words):
    assert ago(seconds) == words


def test_the_history_says_what_it_covers():
    words = [span_words(seconds) for seconds in (None, 60.0, 600.0, 3600.0, 86400.0)]
    assert words == ["the whole watch", "the last minute", "the last 10 minutes", "the last hour", "the last 24 hours"]


def state(**fields):
    return LiveState(Snapshot(), seconds=100.0, locked=True, **fields)


def test_without_a_mark_the_user_is_told_how_to_set_one():
    assert change_lines(state()) == ("", "", "Mark the reading before you turn something: Space")


def test_the_change_has_its_word_its_points_and_its_interval():
    marks = (Mark(10.0, "", 60.0, 59.0, 61.0), Mark(40.0, "stub", 60.0, 59.0, 61.0))
    change = Change(-7.21, -8.04, -6.4, "worse")
    assert change_lines(state(marks=marks, change=change)) == (
        "worse",
        "−7.2 points",
        "since “stub”, 60 s ago · 95 %: −8.0 to −6.4",
    )
    assert change_lines(state(marks=marks[:1], change=change))[2].startswith("since mark 1, 90 s ago")


def test_a_change_that_is_not_known_says_why():
    mark = Mark(40.0, "", 60.0, 59.0, 61.0)
    assert change_lines(state(marks=(mark,)))[2] == "since mark 1, 60 s ago: measuring"
    assert change_lines(replace(state(marks=(mark,)), locked=False))[2].endswith(": no lock")
    unknown = Mark(40.0, "", None, None, None)
    assert change_lines(state(marks=(unknown,)))[2].endswith(": no opening was known then")


def test_the_best_is_told_with_its_time_or_not_at_all(live_states):
    assert best_words(live_states["busy"]) == "Best so far 84.1 % at 3:27"
    assert best_words(live_states["waiting"]) == ""


def test_the_reason_for_no_eye_is_told(live_states):
    assert no_eye_lines(live_states["waiting"]) == ("Searching", "waiting for samples")
    assert no_eye_lines(LiveState(Snapshot())) == ("Searching", "Waiting for samples.")
    assert no_eye_lines(live_states["no lock"])[0] == "Lock lost at 6:45"
    assert no_eye_lines(live_states["ended"])[0] == "The stream has ended"
    assert no_eye_lines(state())[0] == "Locked"


def test_alarms_are_in_the_order_in_which_they_need_a_hand():
    lines = {
        name: AlarmLine(name, severity, standing, since, "")
        for name, severity, standing, since in (
            ("seen", "high", "acknowledged", 9.0),
            ("shelf", "high", "shelved", 9.0),
            ("low", "low", "unacknowledged", 9.0),
            ("old", "high", "unacknowledged", 1.0),
            ("new", "high", "unacknowledged", 5.0),
            ("back", "medium", "returned", 5.0),
        )
    }
    assert [a.name for a in by_urgency(tuple(lines.values()))] == ["new", "old", "back", "low", "seen", "shelf"]
    assert alarm_words(lines["new"]) == "new  ·  raised at 0:05"
    assert alarm_words(lines["back"]) == "back  ·  over, not acknowledged, raised at 0:05"
    assert alarm_words(lines["seen"]) == "seen  ·  acknowledged, raised at 0:09"
    assert alarm_words(replace(lines["new"], state="strange")) == "new  ·  strange at 0:05"


def test_losses_and_delay_are_told_when_there_are_any(live_states):
    busy = live_states["busy"]
    assert health_words(busy) == "6:52  ·  1,024 samples lost  ·  37 % of traces drawn  ·  120,000 symbols"
    assert "  ·  0.4 s behind  ·  " in health_words(replace(busy, behind_s=0.42))
    assert health_words(live_states["calm"]) == "0:32  ·  120,000 symbols"


def test_key_figures_are_those_that_are_known_most_telling_first(live_states):
    labels = [figure.label for figure in key_figures(live_states["calm"].snapshot.reading)]
    assert labels[:4] == ["SNR", "Noise margin", "Width", "Bit error rate"]
    assert "Carrier" not in labels
    assert "Carrier" in [figure.label for figure in key_figures(live_states["busy"].snapshot.reading)]
