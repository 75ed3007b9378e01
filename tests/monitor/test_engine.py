"""The heart of a watch: lines and states from blocks, without threads and clocks."""

from concurrent.futures import Future

import numpy as np
import pytest
from scipy.stats import binom

from dsp.acquisition import NotFound
from dsp.block import Block
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit
from monitor import engine as engine_module
from monitor.errors import InputError
from monitor.session import settle_link
from tests.monitor.recordings import RATE, SYMBOL_RATE, pam2, qpsk
from tests.monitor.watched import QPSK_LINK, Watched, rules, stretches

RULES = rules("snr_db < 18", hold_s=0.3, release_s=0.3)


def test_the_lines_are_the_same_however_the_stream_is_cut():
    samples = stretches(25.0, 12.0, 25.0)
    rng = np.random.default_rng(3)
    seen = []
    for cuts in (
        [],
        sorted(rng.integers(1, samples.size, 300).tolist()),
        [1, 2, 3, 9599, 9600, 9601, 100_000],
    ):
        seen.append(Watched(rules=RULES, window=4800).feed(samples, cuts=cuts).finish().lines)
    assert seen[0] == seen[1] == seen[2]
    assert [line[3]["state"] for line in seen[0] if line[0] == "alarm"] == ["raised", "cleared"]
    assert len([line for line in seen[0] if line[0] == "reading"]) >= 3


def test_the_lines_are_the_same_however_a_stream_with_a_gap_is_cut():
    samples = stretches(25.0, 25.0)
    seen = []
    for step in (4800, 65_536):
        watched = Watched().feed(samples[:50_000], step=step).feed(samples[51_000:], lost=1000, step=step).finish()
        seen.append(watched.lines)
    assert seen[0] == seen[1]
    ((_, sample, seconds, fields),) = Watched().feed(samples[:50_000]).feed(samples[51_000:], lost=1000).of("gap")
    assert (sample, seconds, fields["samples_lost"]) == (51_000, 51_000 / RATE, 1000)


def test_the_lines_are_the_same_whether_somebody_watches_or_not():
    samples = stretches(25.0, 25.0, 25.0)
    plain = Watched(display=False).feed(samples).finish().lines
    assert Watched(display=True).feed(samples).finish().lines == plain
    assert len(plain) > 3


@pytest.mark.parametrize("rule", ["opening_low_pct < 60", "equaliser.opening_pct < 60"])
def test_alarms_over_what_takes_long_to_read_are_the_same_whether_somebody_watches_or_not(rule):
    samples = stretches(25.0, 13.0, 13.0)
    options = {"rules": rules(rule), "every_s": 5.0, "window": 4800}
    plain = Watched(display=False, **options).feed(samples).finish().lines
    assert Watched(display=True, **options).feed(samples).finish().lines == plain
    assert [line[3]["state"] for line in plain if line[0] == "alarm"] == ["raised"]


def test_a_link_that_is_identified_gives_the_same_lines_however_the_stream_is_cut():
    samples = stretches(25.0, 25.0, 25.0)
    lines = [Watched(Wanted()).feed(samples, step=step).finish().lines for step in (4800, 50_001)]
    assert lines[0] == lines[1]
    assert [line for line in lines[0] if line[0] == "reading"]


@pytest.mark.parametrize("every", [0.5, 1.0])
def test_there_is_a_reading_for_every_interval_asked_for(every):
    watched = Watched(every_s=every).feed(stretches(25.0, 25.0, 25.0))
    seconds = [line[2] for line in watched.of("reading")]
    slots = [int(s // every) for s in seconds]
    assert slots == list(range(len(slots)))
    assert len(slots) == round(3.0 / every) + (seconds[-1] >= 3.0)


def test_the_readings_figures_are_those_of_the_stream():
    watched = Watched().feed(stretches(22.0, 22.0, 22.0))
    last = watched.of("reading")[-1][3]
    assert last["snr_db"] == pytest.approx(22.0, abs=0.3)
    assert last["opening_low_pct"] < last["opening_pct"] < last["opening_high_pct"]
    assert last["clock_ppm"] == pytest.approx(0.0, abs=20.0)


# --- what happens to a stream


def test_a_gap_is_a_line_an_alarm_and_a_place_in_the_history_over_which_the_lock_is_held():
    samples = stretches(25.0, 25.0)
    watched = Watched().feed(samples[:48_000]).feed(samples[48_000:], lost=960)
    state = watched.engine.state()
    assert state.samples_lost == 960
    assert state.gaps_s == (48_960 / RATE,)
    assert state.locked
    assert watched.raised() == [("samples lost", "raised")]
    assert [line[3]["state"] for line in watched.of("lock")] == ["gained"]
    assert len(watched.of("reading")) == 2
    assert watched.engine.position == samples.size + 960
    assert watched.engine.samples == samples.size


def test_lost_samples_before_an_empty_block_are_told_to_the_chain_with_the_next():
    samples = stretches(25.0, 25.0)
    watched = Watched().feed(samples[:48_000])
    watched.engine.feed(Block(samples[:0], 48_000, 500))
    watched.feed(samples[48_000:])
    assert watched.engine._chain.gaps == 1
    assert watched.engine._chain.samples_lost == 500
    assert watched.engine.position == samples.size + 500


def test_lost_samples_stay_an_alarm_for_five_seconds_of_the_stream():
    samples = stretches(*[25.0] * 4)
    watched = Watched().feed(samples[:4800]).feed(samples[4800:], lost=10).feed(stretches(*[25.0] * 4))
    raised, cleared = watched.of("alarm", rule="samples lost")
    assert (raised[3]["state"], cleared[3]["state"]) == ("raised", "cleared")
    assert cleared[2] - raised[2] == pytest.approx(5.0, abs=0.5)


def test_clipping_is_judged_at_fixed_places_of_the_stream():
    samples = stretches(25.0)
    lines = []
    for step in (1200, 9600):
        watched = Watched()
        watched.feed(samples[:9600], step=step).feed(samples[9600:19_200], clipped=50).feed(samples[19_200:], step=step)
        (line,) = watched.of("alarm", rule="clipping")
        lines.append(line)
        assert line[1] == 19_200
        assert line[3]["value"] == pytest.approx(100.0 * 50 / 9600)
    assert lines[0] == lines[1]


def test_a_stall_is_an_alarm_that_samples_end():
    watched = Watched(stall_s=2.0).feed(qpsk(6000))
    watched.engine.idle(1.9)
    assert watched.raised() == []
    watched.engine.idle(2.1)
    watched.engine.idle(3.0)
    assert watched.raised() == [("no samples", "raised")]
    assert any("no samples for 2 s" in text for text in watched.engine.state().notices)
    watched.feed(qpsk(6000))
    assert ("no samples", "cleared") in watched.raised()


def test_a_sender_that_begins_anew_is_looked_for_again_with_the_count_going_on():
    samples = stretches(25.0)
    watched = Watched().feed(samples)
    watched.engine.changed(sample_rate_hz=RATE, complex_in=True, why="the sender began anew as stream b")
    watched.feed(samples)
    assert [line[3]["state"] for line in watched.of("lock")] == ["gained", "lost", "gained"]
    assert watched.of("lock")[1][3]["why"] == "the sender began anew as stream b"
    assert watched.of("lock")[2][1] >= samples.size
    assert watched.of("gap")[0][3]["why"] == "the sender began anew as stream b"
    assert ("lock lost", "raised") in watched.raised()
    assert watched.engine.state().locked
    assert any("began anew" in text for text in watched.engine.state().notices)


def test_a_sender_that_changes_its_rate_is_measured_at_the_new_one_and_time_goes_on():
    watched = Watched().feed(stretches(25.0))
    fast = transmit(
        TransmitSpec(
            scheme="qpsk",
            symbol_rate_hz=SYMBOL_RATE,
            sample_rate_hz=2 * RATE,
            pulse=Pulse("rrc", 0.35),
            symbols=24_000,
            seed=5,
            snr_db=20.0,
        )
    ).samples
    watched.engine.changed(sample_rate_hz=2 * RATE, complex_in=True, why="the sample rate changed")
    watched.feed(fast)
    seconds = [line[2] for line in watched.lines if line[0] == "reading"]
    assert seconds == sorted(seconds)
    assert watched.engine.seconds == pytest.approx(3.0)
    assert watched.engine.samples == 48_000 + fast.size
    assert watched.of("reading")[-1][3]["snr_db"] == pytest.approx(20.0, abs=0.5)


def test_a_rate_that_cannot_carry_the_link_is_waited_out_once_the_watch_runs():
    samples = stretches(25.0)
    watched = Watched().feed(samples)
    watched.engine.changed(sample_rate_hz=18_000.0, complex_in=True, why="the sample rate changed")
    watched.feed(samples)
    state = watched.engine.state()
    assert not state.locked
    assert "samples a symbol" in state.searching
    assert any("samples a symbol" in line[3]["why"] for line in watched.of("gap"))
    watched.engine.changed(sample_rate_hz=RATE, complex_in=True, why="back")
    watched.feed(samples)
    assert watched.engine.state().locked


def test_a_link_that_cannot_be_at_the_start_is_the_users_mistake():
    watched = Watched(Wanted(scheme=find_scheme("qpsk"), symbol_rate_hz=40_000.0, pulse=Pulse("rrc", 0.35)))
    with pytest.raises(InputError, match="samples a symbol"):
        watched.feed(stretches(25.0))


def test_a_fade_loses_the_lock_with_its_alarm_and_the_link_is_found_again():
    samples = stretches(25.0, 25.0, 25.0).copy()
    rng = np.random.default_rng(2)
    noise = 0.05 * (rng.normal(size=24_000) + 1j * rng.normal(size=24_000))
    samples[48_000:72_000] = noise.astype(np.complex64)
    watched = Watched().feed(samples)
    states = [(line[3]["state"], round(line[2], 1)) for line in watched.of("lock")]
    assert [state for state, _ in states] == ["gained", "lost", "gained"]
    assert states[1][1] == pytest.approx(1.0, abs=0.15)
    assert 1.4 <= states[2][1] <= 2.0
    assert [entry for entry in watched.raised() if entry[0] == "lock lost"] == [
        ("lock lost", "raised"),
        ("lock lost", "cleared"),
    ]
    assert watched.engine.state().locked


def test_without_lock_there_is_neither_picture_nor_figure_but_words():
    rng = np.random.default_rng(1)
    noise = (rng.normal(size=96_000) + 1j * rng.normal(size=96_000)).astype(np.complex64) * 0.1
    watched = Watched().feed(noise)
    state = watched.engine.state()
    assert (state.locked, state.snapshot.image, state.snapshot.reading) == (False, None, None)
    assert state.searching
    assert state.snapshot.lock_text.startswith("no lock: ")
    assert watched.of("reading") == []


def test_what_was_identified_and_is_gone_is_identified_anew(monkeypatch):
    monkeypatch.setattr(engine_module, "RELOOK_SECONDS", 1.0)
    slow = transmit(
        TransmitSpec(
            scheme="qpsk",
            symbol_rate_hz=9600.0,
            sample_rate_hz=RATE,
            pulse=Pulse("rrc", 0.35),
            symbols=38_400,
            seed=5,
            snr_db=25.0,
        )
    ).samples
    watched = Watched(Wanted()).feed(stretches(25.0, 25.0, 25.0))
    assert "qpsk at 12000 Bd" in watched.engine.state().snapshot.link_text
    rng = np.random.default_rng(4)
    pause = 0.01 * (rng.normal(size=72_000) + 1j * rng.normal(size=72_000))
    watched.feed(pause.astype(np.complex64)).feed(slow)
    words = watched.engine.state().snapshot.link_text.split()
    assert words[:2] == ["qpsk", "at"]
    assert float(words[2]) == pytest.approx(9600.0, abs=0.5)


def test_two_real_levels_are_watched_as_well():
    link = Wanted(scheme=find_scheme("pam2"), symbol_rate_hz=SYMBOL_RATE, pulse=Pulse("rrc", 0.35))
    watched = Watched(link, complex_in=False).feed(pam2(24_000))
    assert watched.engine.state().rails == ("",)
    assert watched.of("reading")[-1][3]["opening_pct"] > 50


# --- marks


def test_no_more_than_one_in_twenty_marks_on_a_steady_link_shows_a_change():
    # each mark compares two disjoint windows of one steady stream; 5 % by construction, the bound by the binomial's 99.9 % point
    window, marks = 3200, 40
    size = (
        10 * window
    )  # samples; a mark leaves out the block it falls into, and a whole reading is taken in a little later
    samples = qpsk(size * (marks + 2) // 4, 16.0)
    watched = Watched(window=window, rules=RULES)
    watched.feed(samples[: 2 * size])
    verdicts = []
    for number in range(2, marks + 2):
        watched.engine.mark()
        assert watched.engine.state().change is None
        watched.feed(samples[number * size : (number + 1) * size])
        change = watched.engine.state().change
        if change is not None:
            verdicts.append(change.verdict)
            assert change.low <= change.points <= change.high
    assert len(verdicts) >= 0.9 * marks
    false = sum(verdict != "no significant change" for verdict in verdicts)
    assert false <= binom.ppf(0.999, len(verdicts), 0.05), f"{false} of {len(verdicts)}"


@pytest.mark.parametrize(("before", "after", "verdict"), [(18.0, 22.0, "better"), (22.0, 18.0, "worse")])
def test_a_change_that_is_more_than_chance_is_told_by_its_direction(before, after, verdict):
    watched = Watched(display=True).feed(stretches(before, before))
    watched.engine.mark("trimmer")
    watched.feed(stretches(before, before, after, after, after)[2 * 48_000 :])
    state = watched.engine.state()
    assert state.change.verdict == verdict
    assert (state.change.points > 0) is (verdict == "better")
    ((_, _, _, fields),) = watched.of("mark")
    assert fields["name"] == "trimmer"
    assert fields["opening_pct"] == pytest.approx(state.marks[0].opening_pct)


def test_a_mark_pressed_twice_still_compares_with_the_last_full_reading():
    samples = stretches(20.0, 20.0, 20.0, 20.0)
    watched = Watched(display=True).feed(samples[:96_000])
    watched.engine.mark("a")
    watched.engine.mark("b")
    watched.feed(samples[96_000:])
    assert watched.engine.state().change is not None
    watched.engine.name_mark("c")
    assert [mark.name for mark in watched.engine.state().marks] == ["a", "c"]


def test_a_mark_without_lock_has_nothing_to_compare_with():
    watched = Watched(display=True)
    watched.engine.mark("early")
    watched.feed(stretches(20.0, 20.0))
    state = watched.engine.state()
    assert state.change is None
    assert state.marks[0].opening_pct is None


def test_the_best_reading_stays():
    watched = Watched(display=True).feed(stretches(26.0, 26.0, 16.0, 16.0, 16.0))
    state = watched.engine.state()
    assert state.best.snr_db == pytest.approx(26.0, abs=0.5)
    assert state.best_at_s < 2.5
    assert state.snapshot.reading.snr_db < 20


# --- what is shown


def test_persistence_shows_what_came_since_the_last_look_all_of_it_or_a_fading_share():
    samples = stretches(*[25.0] * 4)
    last = samples.size - round(0.1 * RATE)
    traces = {}
    for persistence in (0.0, 0.5, None):
        watched = Watched(display=True)
        watched.engine.persistence_s = persistence
        watched.feed(samples[:last]).engine.state()
        watched.engine.seen()
        traces[persistence] = watched.feed(samples[last:]).engine.state().snapshot.image.traces
    assert 0.03 * SYMBOL_RATE < traces[0.0] < 0.2 * SYMBOL_RATE
    # all but what the lock guard still holds back
    assert 3.5 * SYMBOL_RATE < traces[None] <= 4 * SYMBOL_RATE
    # a geometric sum: rate times persistence
    assert traces[0.5] == pytest.approx(0.5 * SYMBOL_RATE, rel=0.1)


def test_clear_empties_the_picture():
    watched = Watched(display=True)
    watched.engine.persistence_s = None
    watched.feed(stretches(25.0, 25.0))
    watched.engine.clear()
    watched.feed(stretches(25.0, 25.0, 25.0)[96_000:100_800])
    assert watched.engine.state().snapshot.image.traces < 0.3 * SYMBOL_RATE


def test_the_state_tells_how_far_the_figures_are_behind():
    watched = Watched().feed(stretches(25.0, 25.0))
    assert 0.0 <= watched.engine.state().behind_s < 0.05


def test_an_alarm_of_a_rule_is_raised_acknowledged_and_shelved():
    watched = Watched(rules=RULES).feed(stretches(12.0, 12.0, 12.0))
    (alarm,) = (a for a in watched.engine.state().alarms if a.name == "snr_db < 18")
    assert alarm.state == "unacknowledged"
    watched.engine.acknowledge()
    watched.engine.shelve(60.0)
    states = [state for name, state in watched.raised() if name == "snr_db < 18"]
    assert states == ["raised", "acknowledged", "shelved"]


def test_the_tap_sees_every_sample_once_under_the_journals_count():
    class Tap:
        def __init__(self):
            self.blocks = []

        def describe(self, *args, **more): ...

        def block(self, block):
            self.blocks.append(block)

    tap = Tap()
    samples = stretches(25.0)
    Watched(tap=tap).feed(samples[:20_000]).feed(samples[20_000:], lost=77)
    np.testing.assert_array_equal(np.concatenate([b.samples for b in tap.blocks]), samples)
    assert tap.blocks[0].start == 0
    ends = [b.start + b.samples.size for b in tap.blocks]
    jumps = [b.start - end for end, b in zip(ends, tap.blocks[1:], strict=False)]
    assert [jump for jump in jumps if jump] == [77]


def test_a_stream_that_ends_early_is_looked_at_with_what_there_is():
    watched = Watched(Wanted()).feed(qpsk(6000)).finish()
    assert [line[3]["state"] for line in watched.of("lock")] == ["gained", "lost"]
    assert Watched(Wanted()).feed(qpsk(6000)[:100]).finish().of("lock") == []


def test_wanted_parts_that_are_given_stay_as_given():
    wanted = Wanted(scheme=QPSK_LINK.scheme)
    watched = Watched(wanted).feed(stretches(25.0, 25.0, 25.0))
    assert "qpsk at 12000 Bd" in watched.engine.state().snapshot.link_text


# --- what is left out for want of time


def test_relief_leaves_out_traces_and_readings_in_between_and_says_so():
    samples = stretches(*[22.0] * 4)
    plain, relieved = (Watched(rules=RULES, window=8000).feed(samples[:96_000]) for _ in range(2))
    relieved.engine.relieve(2)
    judged = []
    for watched in (plain, relieved):
        before = len(watched.engine.state().history)
        watched.feed(samples[96_000:])
        judged.append(len(watched.engine.state().history) - before)
    assert judged[1] <= judged[0] / 2
    now, then = (watched.of("reading")[-1][3] for watched in (relieved, plain))
    assert then["coverage_pct"] == 100.0
    assert now["coverage_pct"] == pytest.approx(25.0, abs=5.0)
    assert relieved.engine.state().snapshot.coverage_pct == pytest.approx(now["coverage_pct"], abs=2.0)
    # timing, noise and errors see every symbol all the same
    assert now["symbols"] == pytest.approx(then["symbols"], rel=0.2)
    assert now["snr_db"] == pytest.approx(then["snr_db"], abs=0.3)
    relieved.engine.relieve(0)
    relieved.feed(samples[48_000:])
    assert relieved.engine.state().snapshot.coverage_pct == 100.0


def test_with_few_traces_drawn_the_newest_of_them_stay_until_there_are_newer():
    samples = stretches(25.0, 25.0)
    watched = Watched(display=True)
    watched.engine.persistence_s = 0.0
    watched.feed(samples[:24_000])
    watched.engine.relieve(4)
    traces = []
    for at in range(24_000, samples.size, 2400):
        watched.feed(samples[at : at + 2400])
        traces.append(watched.engine.state().snapshot.image.traces)
        watched.engine.seen()
    assert min(traces) > 0


class Aside:
    """An executor under the test's control: ``answer`` finishes a search that was asked for; figures are made at once."""

    def __init__(self):
        self.asked = []

    def submit(self, work, *arguments):
        future = Future()
        if work is settle_link:
            self.asked.append((arguments, future))
        else:
            future.set_result(work(*arguments))
        return future

    def answer(self, what):
        self.asked[-1][1].set_result(what)


def test_a_search_in_vain_is_told_and_goes_on_with_short_and_long_stretches_in_turn():
    aside = Aside()
    watched = Watched(Wanted(scheme=find_scheme("qpsk")), aside=aside)
    noise = np.random.default_rng(5).normal(size=(48_000, 2)).astype(np.float32).view(np.complex64).ravel()
    lengths, told = [], []
    for _ in range(30):
        before = len(aside.asked)
        watched.feed(noise)
        if len(aside.asked) > before:
            head = aside.asked[-1][0][0]
            lengths.append(round(sum(block.samples.size for block in head) / RATE))
            told.append(watched.engine.state().searching)
            aside.answer(NotFound("no clock line"))
    # the newest two seconds, then all there is, up to eight and the second since; never long without a look
    assert set(lengths[0::2]) == {2}
    long = lengths[1::2]
    assert long == sorted(long)
    assert 8 <= long[-1] <= 9
    assert len(lengths) >= 9
    assert told[0] == "looking for symbol rate and pulse in the last 2.0 s"
    assert told[1].endswith("; before: no clock line")


def test_a_link_that_comes_after_a_search_in_vain_is_locked_to():
    watched = Watched(Wanted(), aside=(aside := Aside()))
    watched.feed(np.zeros(3 * 48_000, np.complex64))
    aside.answer(NotFound("silence"))
    watched.feed(qpsk(48_000))
    found = aside.asked[-1][0]
    aside.answer(settle_link(*found))
    watched.feed(qpsk(24_000))
    assert watched.of("lock", state="gained")
    # the next search, should there be one, begins afresh
    assert "before" not in watched.engine.state().searching
