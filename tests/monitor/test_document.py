"""The JSON document and the lines of text."""

import math

import pytest

from dsp.block import Block
from dsp.chain import ChainOptions
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from dsp.reading import Budget, Equaliser, Eye, Reading
from monitor.document import document, link_text, lock_text, reading_document, text, to_json
from monitor.session import Outcome, run
from tests.monitor.recordings import SYMBOL_RATE, InMemory, pam2, qpsk, strict_json

# what scripts rely on; a change here breaks them
TOP = "lidwatch source link lock reading intervals windows alarms speed"
SOURCE = "uri format sample_rate_hz samples seconds gaps samples_lost nonfinite clipped_pct notes"
LINK = "scheme levels symbol_rate_hz samples_per_symbol pulse carrier_hz identified"
LOCK = "timing carrier locked_pct slips acquired_at_s reason"
WINDOWS = "count symbols_each worst"
SPEED = "samples_per_s times_real_time coverage_pct"
READING = """symbols opening_pct opening_low_pct opening_high_pct closure_db eyes width_ui best_instant_ui
    timing_slope_pct_per_ui timing_tolerance_ui noise_margin_db level_rms_pct crossing_rms_ui crossing_pp_ui
    crossing_pattern_pp_ui crossing_random_rms_ui dcd_ui rise_20_80_ui periodic_jitter_ui periodic_jitter_hz
    level_linearity q snr_db mer_db evm_pct ber ber_low ber_high opening_at_ber_pct clock_ppm jitter_rms_ui carrier_hz
    phase_rms_deg iq_gain_db iq_skew_deg dc_pct budget equaliser verdict"""
EYE = "opening_pct height width_ui centre_ui threshold"
BUDGET = "isi_pct noise_pct timing_pct phase_pct levels_pct iq_pct clipping_pct unexplained_pct"
EQUALISER = "taps opening_pct"

QPSK = Wanted(find_scheme("qpsk"), SYMBOL_RATE, Pulse("rrc", 0.35), name="Skerry tide gauge")
PAM2 = Wanted(find_scheme("pam2"), SYMBOL_RATE, Pulse("rrc", 0.35))


@pytest.fixture(scope="module")
def measured():
    return run(InMemory(Block(qpsk(), 0)), QPSK, ChainOptions(window=1000))


@pytest.fixture(scope="module")
def silent():
    return run(InMemory(Block(0 * qpsk(), 0)), Wanted(), ChainOptions())


def keys(names):
    return set(names.split())


def test_the_document_has_exactly_the_promised_keys(measured, silent):
    for outcome in (measured, silent):
        found = document(outcome)
        assert list(found) == TOP.split()
        for part, names in (("source", SOURCE), ("link", LINK), ("lock", LOCK), ("windows", WINDOWS), ("speed", SPEED)):
            assert set(found[part]) == keys(names), part
    found = document(measured)
    for reading in (found["reading"], found["windows"]["worst"]):
        assert list(reading) == READING.split()
        assert [set(eye) for eye in reading["eyes"]] == [keys(EYE)] * 2
    low, high = found["intervals"]["snr_db"]
    assert low < found["reading"]["snr_db"] < high
    ends = {"timing_tolerance_early_ui", "timing_tolerance_late_ui"}  # of a reading's pair
    assert set(found["intervals"]) <= set(found["reading"]) | ends
    found = document(silent)
    assert found["reading"] is None
    assert found["intervals"] == {}
    assert found["windows"]["worst"] is None


def test_parts_of_a_reading_keep_their_keys_too():
    found = reading_document(
        Reading(1, budget=Budget(1.0), equaliser=Equaliser(7, 93.0), eyes=(Eye(1.0, 2.0, 0.1, 0, 0),))
    )
    assert set(found["budget"]) == keys(BUDGET)
    assert found["equaliser"] == {"taps": 7, "opening_pct": 93.0}
    assert set(found["eyes"][0]) == keys(EYE)


def test_values_are_those_of_the_run(measured):
    found = document(measured)
    assert found["source"] == {
        "uri": "memory",
        "format": "cf32_le",
        "sample_rate_hz": 48000.0,
        "samples": 12000,
        "seconds": 0.25,
        "gaps": 0,
        "samples_lost": 0,
        "nonfinite": 0,
        "clipped_pct": 0.0,
        "notes": [],
    }
    assert {**found["link"], "carrier_hz": 0} == {
        "scheme": "qpsk",
        "levels": 2,
        "symbol_rate_hz": 12000.0,
        "samples_per_symbol": 4.0,
        "pulse": "rrc:0.35",
        "carrier_hz": 0,
        "identified": ["carrier_hz"],
    }
    assert found["link"]["carrier_hz"] == found["reading"]["carrier_hz"] == pytest.approx(0, abs=1.2)
    assert found["lock"]["timing"] is True
    assert found["lock"]["carrier"] is True
    assert found["lock"]["reason"] is None
    assert 0 <= found["lock"]["acquired_at_s"] < 0.01
    assert found["reading"]["snr_db"] == measured.reading.snr_db
    assert found["windows"]["count"] == 2
    assert found["speed"]["times_real_time"] == pytest.approx(0.25 / measured.elapsed_s)


def test_a_scheme_without_carrier_has_null_for_its_lock():
    found = document(run(InMemory(Block(pam2(), 0)), PAM2, ChainOptions()))
    assert found["lock"]["carrier"] is None
    assert found["link"]["carrier_hz"] is None
    assert found["reading"]["phase_rms_deg"] is None


def test_what_is_not_known_is_null(silent):
    found = document(silent)
    assert found["link"]["identified"] == []
    assert {value for key, value in found["link"].items() if key != "identified"} == {None}
    assert found["lock"]["timing"] is False
    assert found["lock"]["carrier"] is None
    assert found["lock"]["acquired_at_s"] is None
    assert found["lock"]["reason"] == silent.reason
    assert found["speed"]["coverage_pct"] is None


def test_a_given_link_is_told_even_without_a_lock():
    outcome = run(InMemory(Block(0 * qpsk(), 0)), Wanted(QPSK.scheme, SYMBOL_RATE, QPSK.pulse, 30.0), ChainOptions())
    found = document(outcome)
    assert (found["link"]["scheme"], found["link"]["carrier_hz"]) == ("qpsk", 30.0)
    assert (found["lock"]["timing"], found["lock"]["carrier"]) == (False, False)


@pytest.mark.parametrize("odd", [math.nan, math.inf, -math.inf])
def test_nothing_but_finite_numbers_is_written(odd):
    outcome = Outcome(InMemory(), reading=Reading(3, opening_pct=odd, timing_tolerance_ui=(odd, 0.1)), elapsed_s=odd)
    found = strict_json(to_json(outcome))
    assert found["reading"]["opening_pct"] is None
    assert found["reading"]["timing_tolerance_ui"] == [None, 0.1]
    assert found["source"]["clipped_pct"] is None  # a share of no samples
    assert reading_document(None) is None


def test_the_document_is_ascii_and_survives_the_trip(measured):
    written = to_json(measured)
    assert written.isascii()
    assert strict_json(written) == document(measured)


def test_the_text_tells_source_link_lock_and_figures(measured):
    lines = list(text(measured))
    assert lines[0] == "memory: cf32_le, 48000 Hz, 0.250 s"
    assert lines[1] == "Skerry tide gauge: qpsk at 12000 Bd, pulse rrc:0.35 (found: carrier)"
    assert lines[2].startswith("locked ")
    assert lines[2].endswith(f"% of the time, 0 slips, {measured.reading.symbols} symbols")
    low, high = measured.reading.opening_low_pct, measured.reading.opening_high_pct
    assert lines[3] == f"opening {measured.reading.opening_pct:.1f} % ({low:.1f} to {high:.1f} %)"
    assert any(line.split()[:3] == ["SNR", f"{measured.reading.snr_db:.1f}", "dB"] for line in lines)
    assert lines[-1] == f"worst of 2 windows: {measured.windows.worst.opening_pct:.1f} % open"


def test_the_text_without_a_lock_gives_notes_and_the_reason():
    source = InMemory(Block(0 * qpsk(), 0, nonfinite=4), notes=("left out 3 bytes",))
    outcome = run(source, Wanted(), ChainOptions())
    assert list(text(outcome)) == [
        "memory: cf32_le, 48000 Hz, 0.250 s",
        "note: left out 3 bytes",
        "note: 4 samples not finite, taken as 0",
        f"nothing to measure: {outcome.reason}",
    ]
    assert (link_text(outcome), lock_text(outcome)) == ("", "no lock")


def test_an_interval_stands_behind_the_opening(measured):
    outcome = Outcome(InMemory(), reading=Reading(3, opening_pct=80.0, opening_low_pct=78.24, opening_high_pct=81.5))
    assert "opening 80.0 % (78.2 to 81.5 %)" in list(text(outcome))


def test_a_single_slip_is_one_slip():
    assert lock_text(Outcome(InMemory(), reading=Reading(3), slips=1)).endswith("1 slip")
