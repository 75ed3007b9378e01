"""The alarm board. States and transitions: ANSI/ISA-18.2-2016 and IEC 62682:2014 (from memory where not said otherwise)."""

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from dsp.reading import Budget, Reading
from monitor.alarm_rules import AlarmRule, BuiltInAlarm
from monitor.alarms import AlarmBoard
from monitor.document import reading_document
from monitor.errors import InputError

LOW = "opening_pct < 40"


def board(**keys):
    return AlarmBoard([AlarmRule("opening_pct", "<", 40.0, **keys)])


def told(events):
    return [(event.state, event.seconds) for event in events]


def feed(alarms, *values, start=0.0, step=1.0):
    """One reading a step; returns (state, seconds) of all that happened."""
    found = []
    for index, value in enumerate(values):
        seconds = start + index * step
        found += told(alarms.update({"opening_pct": value}, seconds, round(seconds * 1000)))
    return found


def state(alarms, name=LOW):
    return next(alarm for alarm in alarms.snapshot() if alarm.name == name)


# -- delays and dead band ----------------------------------------------------------------------------------------------

SEQUENCE = [0, 1, 0, 1, 1, 1, 0.95, 0.85, 0.95, 0.85, 0.8, 0.7, 1.1, 1.1]


def by_counting(values, limit, dead_band, on, off):
    """Activations of a high alarm, delays counted in samples: a loop of its own, not the board's way."""
    standing, count, persisted = False, 0, 0
    for value in values:
        cause = value > (limit - dead_band if standing else limit)
        persisted = persisted + 1 if cause != standing else 0
        if persisted >= (off if standing else on) and cause != standing:
            standing, persisted = cause, 0
            count += standing
    return count


@pytest.mark.parametrize(
    ("dead_band", "on", "off", "activations"), [(0, 1, 1, 4), (0.15, 1, 1, 3), (0.15, 2, 1, 2), (0.15, 2, 3, 1)]
)
def test_dead_band_and_delays_cut_the_activations_of_a_chattering_figure(dead_band, on, off, activations):
    # the four counts were worked out once outside this code; a delay of n samples ends n - 1 steps after the first
    rule = AlarmRule("q", ">", 0.9, 0.9 - dead_band, hold_s=on - 1.0, release_s=off - 1.0)
    alarms = AlarmBoard([rule])
    events = [alarms.update({"q": value}, second, second) for second, value in enumerate(SEQUENCE)]
    assert sum(event.state == "raised" for some in events for event in some) == activations
    assert alarms.activations == activations == by_counting(SEQUENCE, 0.9, dead_band, on, off)


@given(
    st.lists(st.sampled_from([0.5, 0.75, 0.8, 0.9, 0.95, 1.2]), max_size=60),
    st.sampled_from([0.0, 0.1, 0.15]),
    st.integers(1, 4),
    st.integers(1, 4),
    st.sampled_from([0.1, 1.0, 1 / 3]),
)
def test_activations_are_those_of_a_loop_that_counts_samples(values, dead_band, on, off, step):
    rule = AlarmRule("q", ">", 0.9, 0.9 - dead_band, hold_s=(on - 1) * step, release_s=(off - 1) * step)
    alarms = AlarmBoard([rule])
    for index, value in enumerate(values):
        alarms.update({"q": value}, index * step, index)
    assert alarms.activations == by_counting(values, 0.9, dead_band, on, off)


def test_an_alarm_is_raised_below_and_cleared_at_the_dead_bands_end():
    alarms = board(clear=45.0)
    assert feed(alarms, 50, 40, 39.9, 44.9, 45) == [("raised", 2.0), ("cleared", 4.0)]


def test_without_dead_band_the_limit_itself_is_well():
    assert feed(board(), 39, 40, 39) == [("raised", 0.0), ("cleared", 1.0), ("raised", 2.0)]


def test_what_does_not_last_is_not_raised():
    assert feed(board(hold_s=2.0), 30, 30, 50, 30, 30, 30) == [("raised", 5.0)]


def test_what_comes_back_before_the_off_delay_does_not_clear():
    alarms = board(release_s=2.0)
    assert feed(alarms, 30, 50, 50, 30, 50, 50, 50) == [("raised", 0.0), ("cleared", 6.0)]


def test_a_delay_ends_when_it_should_whatever_the_last_bit_says():
    alarms = board(hold_s=2.0)
    assert feed(alarms, 30, 30, start=0.3, step=2.0) == [("raised", 2.3)]  # 2.3 - 0.3 < 2.0 in doubles


def test_the_worst_counts_from_the_first_sign_on():
    alarms = board(hold_s=2.0)
    feed(alarms, 20, 25, 30, 28, 50)
    (entry,) = alarms.record()
    assert entry == {
        "rule": LOW,
        "severity": "medium",
        "raised_at_s": 2.0,
        "cleared_at_s": 4.0,
        "worst": 20.0,
        "limit": 40.0,
        "unit": "%",
    }


def test_the_worst_of_one_time_is_not_that_of_the_next():
    alarms = board()
    feed(alarms, 10, 50, 35, 30, 50)
    assert [entry["worst"] for entry in alarms.record()] == [10.0, 30.0]


def test_a_sign_that_passed_does_not_count_as_worst_of_what_comes_later():
    alarms = board(hold_s=1.0)
    feed(alarms, 5, 50, 30, 30)
    assert alarms.record()[0]["worst"] == 30.0


# -- what cannot be known ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "unknown", [None, {}, {"opening_pct": None}, {"opening_pct": float("nan")}, {"opening_pct": "?"}]
)
def test_an_unknown_figure_neither_raises_nor_clears(unknown):
    alarms = board()
    assert alarms.update(unknown, 0.0, 0) == ()
    assert state(alarms).state == "normal"
    feed(alarms, 30, start=1.0)
    assert alarms.update(unknown, 2.0, 2) == ()
    assert state(alarms).state == "unacknowledged"
    assert state(alarms).value is None
    assert "now unknown" in state(alarms).text


def test_time_in_the_unknown_counts_towards_no_delay():
    assert feed(board(hold_s=2.0), 30, None, None, None, 30, 30) == [("raised", 5.0)]
    assert feed(board(release_s=2.0), 30, 50, None, None, None, 50, 50) == [("raised", 0.0), ("cleared", 6.0)]


def test_a_figure_known_every_other_time_still_raises():
    assert feed(board(hold_s=2.0), 30, None, 30, None, 30) == [("raised", 4.0)]


def test_a_reading_is_judged_as_its_document_has_it():
    alarms = AlarmBoard(
        [AlarmRule("opening_pct", "<", 40.0), AlarmRule("budget.isi_pct", ">", 30.0), AlarmRule("symbols", "<", 100.0)]
    )
    document = reading_document(Reading(50, opening_pct=35.0, budget=Budget(isi_pct=31.0)))
    assert [event.rule for event in alarms.update(document, 0.0, 0)] == [LOW, "budget.isi_pct > 30", "symbols < 100"]
    assert alarms.update(reading_document(Reading(50)), 1.0, 1) == ()
    assert [e.state for e in alarms.update({"budget.isi_pct": 3.0}, 2.0, 2)] == ["cleared"]


# -- transitions -------------------------------------------------------------------------------------------------------


def test_raised_acknowledged_cleared_is_normal_again():
    alarms = board()
    feed(alarms, 30)
    assert state(alarms).state == "unacknowledged"
    assert told(alarms.acknowledge(LOW, 1.0, 1)) == [("acknowledged", 1.0)]
    assert state(alarms).state == "acknowledged"
    assert feed(alarms, 50, start=2.0) == [("cleared", 2.0)]
    assert state(alarms).state == "normal"
    assert not state(alarms).shown


def test_what_returns_before_it_is_acknowledged_stays_shown_until_it_is():
    alarms = board()
    feed(alarms, 30, 50)
    assert (state(alarms).state, state(alarms).shown, state(alarms).active) == ("returned", True, False)
    assert alarms.record()[0]["cleared_at_s"] == 1.0
    assert told(alarms.acknowledge(None, 2.0, 2)) == [("acknowledged", 2.0)]
    assert state(alarms).state == "normal"
    assert alarms.record()[0]["cleared_at_s"] == 1.0


def test_what_returned_may_come_again_as_a_new_alarm():
    alarms = board()
    assert feed(alarms, 30, 50, 30) == [("raised", 0.0), ("cleared", 1.0), ("raised", 2.0)]
    assert (state(alarms).state, state(alarms).activations) == ("unacknowledged", 2)


def test_a_latched_alarm_stays_until_it_is_acknowledged():
    alarms = board(latch=True)
    assert feed(alarms, 30, 50, 60) == [("raised", 0.0), ("latched", 1.0)]
    assert (state(alarms).state, state(alarms).active) == ("latched", True)
    assert alarms.record()[0]["cleared_at_s"] is None
    assert told(alarms.acknowledge(None, 3.0, 3)) == [("acknowledged", 3.0), ("cleared", 3.0)]
    assert state(alarms).state == "normal"
    assert alarms.record()[0]["cleared_at_s"] == 3.0


def test_a_latched_alarm_whose_cause_comes_back_is_the_same_alarm():
    alarms = board(latch=True)
    assert feed(alarms, 30, 50, 20, 50) == [("raised", 0.0), ("latched", 1.0), ("resumed", 2.0), ("latched", 3.0)]
    assert alarms.activations == 1
    assert state(alarms).worst == 20.0


def test_a_latched_alarm_acknowledged_while_its_cause_is_there_clears_with_it():
    alarms = board(latch=True)
    feed(alarms, 30)
    assert told(alarms.acknowledge(LOW, 0.5, 0)) == [("acknowledged", 0.5)]
    assert feed(alarms, 30, 50, start=1.0) == [("cleared", 2.0)]
    assert state(alarms).state == "normal"


def test_nothing_to_acknowledge_is_no_event():
    alarms = board()
    assert alarms.acknowledge(None, 0.0, 0) == ()
    feed(alarms, 30)
    alarms.acknowledge(None, 1.0, 1)
    assert alarms.acknowledge(None, 2.0, 2) == ()


def test_an_unknown_name_is_answered_with_the_names_there_are():
    with pytest.raises(InputError, match=r"no alarm 'opening'; there are 'opening_pct < 40', 'no samples'"):
        board().acknowledge("opening", 0.0, 0)


# -- the shelf ---------------------------------------------------------------------------------------------------------


def test_a_shelved_alarm_is_not_raised_until_its_time_is_over():
    alarms = board()
    assert told(alarms.shelve(LOW, 10.0, 0.0, 0)) == [("shelved", 0.0)]
    assert feed(alarms, 30, 30, start=5.0) == []
    assert (state(alarms).state, state(alarms).shelved_until_s) == ("shelved", 10.0)
    assert feed(alarms, 30, start=10.0) == [("unshelved", 10.0), ("raised", 10.0)]
    assert state(alarms).state == "unacknowledged"


def test_a_shelf_ends_by_time_alone():
    alarms = board()
    alarms.shelve(LOW, 10.0, 0.0, 0)
    assert alarms.advance(9.9, 9) == ()
    assert told(alarms.advance(10.1, 10)) == [("unshelved", 10.1)]
    assert alarms.advance(20.0, 20) == ()


def test_what_stood_before_the_shelf_stands_after_it():
    alarms = board()
    feed(alarms, 30)
    alarms.acknowledge(LOW, 0.5, 0)
    alarms.shelve(LOW, 10.0, 1.0, 1)
    assert feed(alarms, 20, 30, start=2.0) == []
    assert told(alarms.unshelve(LOW, 5.0, 5)) == [("unshelved", 5.0)]
    assert (state(alarms).state, state(alarms).worst, alarms.activations) == ("acknowledged", 20.0, 1)


def test_an_alarm_may_clear_on_the_shelf():
    alarms = board()
    feed(alarms, 30)
    alarms.shelve(LOW, 10.0, 1.0, 1)
    assert feed(alarms, 50, 30, start=2.0) == [("cleared", 2.0)]
    assert feed(alarms, 30, start=12.0) == [("unshelved", 12.0), ("raised", 12.0)]
    assert [entry["cleared_at_s"] for entry in alarms.record()] == [2.0, None]


def test_a_shelved_alarm_is_not_acknowledged_by_the_way():
    alarms = board()
    feed(alarms, 30)
    alarms.shelve(LOW, 10.0, 1.0, 1)
    assert alarms.acknowledge(None, 2.0, 2) == ()
    alarms.unshelve(None, 3.0, 3)
    assert state(alarms).state == "unacknowledged"


def test_shelving_again_counts_from_then():
    alarms = board()
    alarms.shelve(LOW, 10.0, 0.0, 0)
    alarms.shelve(LOW, 10.0, 5.0, 5)
    assert alarms.advance(14.0, 14) == ()
    assert told(alarms.advance(15.0, 15)) == [("unshelved", 15.0)]


def test_without_a_name_the_foremost_alarm_is_shelved():
    rules = [
        AlarmRule("opening_pct", "<", 40.0, severity="low"),
        AlarmRule("opening_pct", "<", 30.0, severity="high"),
        AlarmRule("snr_db", "<", 10.0, severity="high"),
    ]
    alarms = AlarmBoard(rules)
    assert alarms.shelve(None, 5.0, 0.0, 0) == ()
    alarms.update({"opening_pct": 20.0}, 0.0, 0)
    alarms.update({"snr_db": 5.0}, 1.0, 1)
    shelved = [alarms.shelve(None, 60.0, 2.0, 2)[0].rule for _ in range(3)]
    assert shelved == ["snr_db < 10", "opening_pct < 30", LOW]
    assert alarms.shelve(None, 5.0, 3.0, 3) == ()


def test_what_is_acknowledged_is_shelved_after_what_is_not():
    alarms = AlarmBoard([AlarmRule("q", "<", 4.0, severity="high"), AlarmRule("q", "<", 5.0, severity="low")])
    alarms.update({"q": 3.0}, 0.0, 0)
    alarms.acknowledge("q < 4", 1.0, 1)
    assert alarms.shelve(None, 60.0, 2.0, 2)[0].rule == "q < 5"


@pytest.mark.parametrize("for_s", [0.0, -1.0, float("nan"), float("inf"), 86401.0])
def test_a_shelf_without_end_is_refused(for_s):
    with pytest.raises(InputError, match="more than 0 and at most 86400 seconds"):
        board().shelve(LOW, for_s, 0.0, 0)


# -- alarms without a rule ---------------------------------------------------------------------------------------------


def test_a_condition_raises_and_clears_its_alarm():
    alarms = AlarmBoard()
    (raised,) = alarms.condition("no samples", True, 12.0, 480, 2.0)
    assert (raised.state, raised.rule, raised.severity, raised.seconds, raised.sample) == (
        "raised",
        "no samples",
        "high",
        12.0,
        480,
    )
    (cleared,) = alarms.condition("no samples", False, 15.0, 600)
    assert (cleared.state, cleared.worst, cleared.unit) == ("cleared", 2.0, "s")


def test_lost_samples_are_one_alarm_until_none_were_lost_for_a_while():
    alarms = AlarmBoard()
    events = []
    for second, lost in enumerate([0, 100, 0, 0, 700, 0, 0, 0, 0, 0, 0]):
        events += alarms.condition("samples lost", lost > 0, float(second), second, lost)
    assert told(events) == [("raised", 1.0), ("cleared", 10.0)]
    assert alarms.record()[0]["worst"] == 700.0


def test_a_condition_holds_until_told_otherwise():
    alarms = AlarmBoard([], [BuiltInAlarm("lock lost", "high", hold_s=2.0)])
    alarms.condition("lock lost", True, 1.0, 1)
    assert alarms.advance(2.9, 2) == ()
    assert told(alarms.advance(3.0, 3)) == [("raised", 3.0)]


def test_a_condition_on_the_shelf_is_raised_when_the_shelf_ends():
    alarms = AlarmBoard()
    alarms.shelve("lock lost", 10.0, 0.0, 0)
    assert alarms.condition("lock lost", True, 1.0, 1) == ()
    assert told(alarms.advance(10.0, 10)) == [("unshelved", 10.0), ("raised", 10.0)]


def test_a_name_that_is_no_condition_is_an_error_of_the_program():
    with pytest.raises(KeyError):
        board().condition("rain", True, 0.0, 0)
    with pytest.raises(KeyError):
        board().condition(LOW, True, 0.0, 0)


def test_two_alarms_of_one_name_are_refused():
    with pytest.raises(InputError, match="two alarms have the same rule"):
        AlarmBoard([AlarmRule("q", "<", 3.0), AlarmRule("q", "<", 3.0, severity="high")])


def test_time_that_goes_back_stands_still():
    alarms = AlarmBoard()
    alarms.condition("no samples", True, 12.0, 480, 2.0)
    (cleared,) = alarms.condition("no samples", False, 10.0, 480)
    assert (cleared.raised_at_s, cleared.cleared_at_s, cleared.seconds) == (12.0, 12.0, 12.0)


# -- what is told ------------------------------------------------------------------------------------------------------


def test_an_events_fields_are_those_of_the_journal():
    alarms = board(severity="high")
    (event,) = alarms.update({"opening_pct": 31.0}, 2.0, 96000)
    assert event.fields() == {
        "state": "raised",
        "rule": LOW,
        "severity": "high",
        "value": 31.0,
        "worst": 31.0,
        "limit": 40.0,
        "unit": "%",
        "raised_at_s": 2.0,
        "cleared_at_s": None,
    }
    (shelved,) = alarms.shelve(LOW, 60.0, 3.0, 0)
    assert shelved.fields()["shelved_until_s"] == 63.0


def test_a_snapshot_does_not_change_with_the_board():
    alarms = board()
    before = state(alarms)
    feed(alarms, 30)
    assert before.state == "normal"
    now = state(alarms)
    assert (now.since_s, now.text) == (0.0, "now 30 %, limit 40 %, worst 30 %")


def test_a_snapshot_lists_rules_first_and_built_in_alarms_after():
    names = [alarm.name for alarm in board().snapshot()]
    assert names == [LOW, "no samples", "lock lost", "samples lost", "clipping"]


def test_a_years_chatter_does_not_fill_the_memory():
    alarms = board()
    alarms.condition("no samples", True, 0.0, 0, 1.0)  # stands all the time, and is never left out
    for second in range(1, 13_000):
        feed(alarms, 30, 50, start=float(second), step=0.5)
    record = alarms.record()
    assert len(record) <= 11_001
    assert len(record) + alarms.left_out == alarms.activations == 13_000
    assert record[0]["rule"] == "no samples"


# -- laws --------------------------------------------------------------------------------------------------------------

ACTIONS = st.lists(
    st.one_of(
        st.tuples(st.just("update"), st.sampled_from([None, 10.0, 39.0, 40.0, 43.0, 45.0, 60.0])),
        st.tuples(st.just("condition"), st.booleans()),
        st.tuples(st.just("acknowledge"), st.none()),
        st.tuples(st.just("shelve"), st.sampled_from([0.5, 3.0])),
        st.tuples(st.just("unshelve"), st.none()),
        st.tuples(st.just("advance"), st.none()),
    ),
    max_size=60,
)
STEPS = st.lists(st.sampled_from([0.0, 0.25, 1.0, 4.0]), min_size=60, max_size=60)
RULES = st.builds(
    AlarmRule,
    st.just("opening_pct"),
    st.just("<"),
    st.just(40.0),
    st.sampled_from([None, 40.0, 45.0]),
    st.sampled_from([0.0, 1.0, 3.0]),
    st.sampled_from([0.0, 1.0, 3.0]),
    latch=st.booleans(),
)


def play(alarms, actions, steps, between=lambda alarms, seconds: ()):
    seconds, found = 0.0, []
    for index, ((action, value), step) in enumerate(zip(actions, steps, strict=False)):
        seconds += step
        name = LOW if index % 2 else "clipping"
        match action:
            case "update":
                found += alarms.update({"opening_pct": value}, seconds, index)
            case "condition":
                found += alarms.condition("clipping", value, seconds, index, 1.0)
            case "acknowledge":
                found += alarms.acknowledge(None, seconds, index)
            case "shelve":
                found += alarms.shelve(name, value, seconds, index)
            case "unshelve":
                found += alarms.unshelve(name, seconds, index)
            case "advance":
                found += alarms.advance(seconds, index)
        found += between(alarms, seconds)
    return found


@settings(max_examples=200)
@given(RULES, ACTIONS, STEPS)
def test_whatever_happens_the_story_of_each_alarm_makes_sense(rule, actions, steps):
    alarms = AlarmBoard([rule])
    events = play(alarms, actions, steps)
    assert [event.seconds for event in events if event.rule == LOW] == sorted(
        event.seconds for event in events if event.rule == LOW
    )
    for name in (LOW, "clipping"):
        open_, shelved, unseen = False, False, False
        for event in (event for event in events if event.rule == name):
            match event.state:
                case "raised":
                    assert not open_
                    assert not shelved
                    open_, unseen = True, True
                    assert event.raised_at_s == event.seconds
                    assert event.cleared_at_s is None
                case "cleared":
                    assert open_
                    open_ = False
                    assert event.cleared_at_s == event.seconds >= event.raised_at_s
                case "acknowledged":
                    assert unseen
                    assert not shelved
                    unseen = False
                case "shelved":
                    shelved = True
                case "unshelved":
                    assert shelved
                    shelved = False
                case "latched" | "resumed":
                    assert open_
                    assert rule.latch
        now = state(alarms, name)
        assert (now.active, now.state == "shelved") == (open_, shelved)
        assert (now.state in ("unacknowledged", "returned", "latched")) == (unseen and not shelved)
    record = alarms.record()
    assert len(record) == alarms.activations == sum(event.state == "raised" for event in events)
    for entry in record:
        assert entry["cleared_at_s"] is None or entry["cleared_at_s"] >= entry["raised_at_s"]
        assert entry["rule"] != LOW or entry["worst"] < (rule.clear or rule.limit)


@given(RULES, ACTIONS, STEPS)
def test_looking_and_letting_no_time_pass_change_nothing(rule, actions, steps):
    def advance(alarms, seconds):
        return alarms.advance(seconds, 0)

    def look_and_advance(alarms, seconds):
        events = advance(alarms, seconds)
        alarms.snapshot()
        alarms.record()
        return events + advance(alarms, seconds)

    plain, looked_at = AlarmBoard([rule]), AlarmBoard([rule])
    events, others = play(plain, actions, steps, advance), play(looked_at, actions, steps, look_and_advance)
    assert [(event.state, event.rule, event.seconds, event.worst) for event in events] == [
        (event.state, event.rule, event.seconds, event.worst) for event in others
    ]
    assert plain.snapshot() == looked_at.snapshot()


@given(RULES, st.lists(st.tuples(st.sampled_from([None, 10.0, 39.0, 43.0, 60.0]), st.integers(1, 4)), max_size=30))
def test_how_often_a_lasting_value_is_read_does_not_matter(rule, stretches):
    """A value held for n seconds and read once a second gives the alarms of the same value read four times a second."""
    seen = []
    for per_second in (1, 4):
        alarms = AlarmBoard([rule])
        events, start = [], 0
        for value, length in stretches:
            for part in range(length * per_second):
                at = start + part / per_second
                events += alarms.update({"opening_pct": value}, at, 0)
            start += length
        seen.append([(event.state, event.seconds) for event in events])
    assert seen[0] == seen[1]
