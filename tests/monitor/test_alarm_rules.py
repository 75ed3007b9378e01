"""Alarm rules as a link file writes them."""

import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dsp.reading import READING_KEYS
from monitor.alarm_rules import FIGURES, AlarmRule, built_in_alarms, number_text, parse_rule, parse_rules, unit_of
from monitor.errors import InputError


def test_every_key_of_a_table_is_read():
    tables = tomllib.loads(
        """
        [[alarm]]
        rule = "opening_pct < 40"
        clear = 45
        hold_s = 2.0
        release_s = 5.0
        severity = "high"
        latch = true
        """
    )["alarm"]
    (rule,) = parse_rules(tables)
    assert rule == AlarmRule("opening_pct", "<", 40.0, 45.0, 2.0, 5.0, "high", True)
    assert rule.text == "opening_pct < 40"
    assert rule.unit == "%"


def test_what_is_not_given_is_no_delay_no_dead_band_no_latch_and_medium():
    (rule,) = parse_rules([{"rule": "snr_db<12.5"}])
    assert rule == AlarmRule("snr_db", "<", 12.5, None, 0.0, 0.0, "medium", False)
    assert parse_rules([]) == ()


@pytest.mark.parametrize(
    ("text", "written"),
    [
        ("opening_pct < 40", "opening_pct < 40"),
        ("  ber>1e-6 ", "ber > 1e-6"),
        ("clock_ppm > +2.50", "clock_ppm > 2.5"),
        ("carrier_hz < -1.5E3", "carrier_hz < -1500"),
        ("q < .5", "q < 0.5"),
        ("budget.isi_pct > 30", "budget.isi_pct > 30"),
        ("equaliser.opening_pct < 60", "equaliser.opening_pct < 60"),
    ],
)
def test_a_rule_is_written_as_one_would_type_it(text, written):
    rule = parse_rule(text)
    assert rule.text == written
    assert parse_rule(rule.text) == rule


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_a_number_written_reads_back_the_same(value):
    assert float(number_text(value)) == value
    assert parse_rule(f"q > {number_text(value)}").limit == value


def test_figures_are_the_single_numbers_of_the_reading():
    assert {"opening_pct", "snr_db", "ber", "symbols", "budget.noise_pct"} <= set(FIGURES)
    assert not {"eyes", "timing_tolerance_ui", "budget", "equaliser", "verdict"} & set(FIGURES)
    assert len(set(FIGURES)) == len(FIGURES)
    assert {figure.partition(".")[0] for figure in FIGURES} == set(READING_KEYS) - {
        "eyes",
        "timing_tolerance_ui",
        "verdict",
    }


@pytest.mark.parametrize(
    ("figure", "unit"),
    [
        ("opening_pct", "%"),
        ("timing_slope_pct_per_ui", "%/UI"),
        ("closure_db", "dB"),
        ("width_ui", "UI"),
        ("carrier_hz", "Hz"),
        ("clock_ppm", "ppm"),
        ("iq_skew_deg", "°"),
        ("q", ""),
        ("ber", ""),
    ],
)
def test_the_unit_is_what_the_name_ends_in(figure, unit):
    assert unit_of(figure) == unit


@pytest.mark.parametrize(
    ("table", "says"),
    [
        ({}, "there must be a rule as text"),
        ({"rule": 3}, "there must be a rule as text"),
        ({"rule": ""}, "cannot be read; write a figure, < or >, and a number"),
        ({"rule": "opening_pct <= 40"}, "cannot be read"),
        ({"rule": "opening_pct < 40 %"}, "cannot be read"),
        ({"rule": "opening_pct < 4,5"}, "cannot be read"),
        ({"rule": "opening_pct < 1_0"}, "cannot be read"),
        ({"rule": "opening_pct < nan"}, "cannot be read"),
        ({"rule": "40 > opening_pct"}, "figure '40' is not known|cannot be read"),
        ({"rule": "opening_pct < 1e999"}, "the limit must be finite"),
        ({"rule": "opning_pct < 40"}, "figure 'opning_pct' is not known; near it: opening_pct"),
        ({"rule": "snr < 12"}, "near it: .*snr_db"),
        ({"rule": "zzzzzz < 12"}, "take one of symbols, opening_pct"),
        ({"rule": "budget > 12"}, "'budget' is not one number; take one of budget.isi_pct"),
        ({"rule": "eyes > 12"}, "'eyes' is not one number"),
        (
            {"rule": "opening_pct < 40", "clear": 39},
            "clear = 39 lies below the limit of 'opening_pct < 40'; it must be at",
        ),
        (
            {"rule": "ber > 1e-6", "clear": 1e-5},
            "clear = 1e-5 lies above the limit of 'ber > 1e-6'; it must be at or below",
        ),
        ({"rule": "q < 3", "clear": float("nan")}, "clear must be finite"),
        ({"rule": "q < 3", "clear": "4"}, "clear must be a number, got '4'"),
        ({"rule": "q < 3", "clear": True}, "clear must be a number, got True"),
        ({"rule": "q < 3", "hold_s": -1}, "hold_s must lie between 0 and"),
        ({"rule": "q < 3", "hold_s": float("nan")}, "hold_s must lie between 0 and"),
        ({"rule": "q < 3", "release_s": 10**400}, "release_s must lie between 0 and"),
        ({"rule": "q < 3", "severity": "urgent"}, "severity 'urgent' is not known; take low, medium, high"),
        ({"rule": "q < 3", "severity": 1}, "severity must be text, got 1"),
        ({"rule": "q < 3", "latch": "yes"}, "latch must be true or false, got 'yes'"),
        (
            {"rule": "q < 3", "delay": 1},
            "'delay' is not a key of .*; take rule, clear, hold_s, release_s, severity, latch",
        ),
    ],
)
def test_a_mistake_is_one_line_with_the_number_of_the_table(table, says):
    good = {"rule": "opening_pct < 10"}
    with pytest.raises(InputError, match=says) as caught:
        parse_rules([good, table], where="link file skerry.toml")
    assert str(caught.value).startswith("link file skerry.toml: alarm 2: ")
    assert "\n" not in str(caught.value)


def test_a_clear_at_the_limit_is_no_dead_band():
    assert parse_rules([{"rule": "q < 3", "clear": 3}])[0].clear == 3.0


def test_the_same_rule_twice_is_refused():
    with pytest.raises(InputError, match="alarm 2: 'q < 3' stands already in alarm 1"):
        parse_rules([{"rule": "q < 3"}, {"rule": "q<3.0", "severity": "high"}])


def test_a_rule_made_by_hand_is_checked_too():
    with pytest.raises(InputError, match="comparison must be < or >"):
        AlarmRule("q", "<=", 3.0)
    with pytest.raises(InputError, match="the limit must be finite"):
        AlarmRule("q", "<", float("inf"))


def test_the_built_in_alarms_are_four():
    alarms = built_in_alarms(2.0)
    assert [alarm.text for alarm in alarms] == ["no samples", "lock lost", "samples lost", "clipping"]
    assert alarms[0].limit == 2.0
