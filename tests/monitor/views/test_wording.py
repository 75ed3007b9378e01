import dataclasses

import pytest

from dsp.reading import READING_KEYS, Budget, Reading
from monitor.views.wording import (
    budget_rows,
    figure_groups,
    interval_text,
    plain,
    power_of_ten,
    rate_interval,
    sentence,
    signed,
    telling_rows,
)
from tests.monitor.views.synthetic_eyes import full_reading, make_eye


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [(0.0, 1, "0.0"), (-0.04, 1, "0.0"), (-12.44, 1, "−12.4"), (1234567.0, 0, "1,234,567"), (99.96, 1, "100.0")],
)
def test_numbers_have_a_true_minus_and_grouped_thousands(value, digits, text):
    assert plain(value, digits) == text


def test_signed_numbers_carry_a_plus_only_above_zero():
    assert [signed(value, 1) for value in (1.0, -1.0, 0.0, 0.01, -0.01)] == ["+1.0", "−1.0", "0.0", "0.0", "0.0"]


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (3.14e-7, "3.1 × 10⁻⁷"),
        (9.96e-5, "1.0 × 10⁻⁴"),
        (0.0123, "0.012"),
        (1e-12, "1.0 × 10⁻¹²"),
        (0.0, "below 10⁻¹⁸"),
    ],
)
def test_error_rates_are_powers_of_ten(value, text):
    assert power_of_ten(value) == text


def test_an_unknown_figure_has_no_line():
    assert figure_groups(Reading(symbols=10)) == ()
    (group,) = figure_groups(Reading(symbols=10, snr_db=20.0))
    assert [(figure.label, figure.value) for figure in group.figures] == [("SNR", "20.0 dB")]


@pytest.mark.parametrize("bad", [float("nan"), float("inf")])
def test_a_figure_that_is_not_finite_has_no_line(bad):
    assert figure_groups(Reading(symbols=10, snr_db=bad, timing_tolerance_ui=(bad, 0.1))) == ()


def test_every_scalar_figure_of_a_reading_has_a_line_of_its_own():
    image, eyes = make_eye(2, symbols=50)
    full = full_reading(image, eyes)
    elsewhere = {"symbols", "opening_pct", "opening_low_pct", "opening_high_pct", "eyes", "budget", "verdict"}

    def lines(reading):
        return sum(len(group.figures) for group in figure_groups(reading))

    for key in set(READING_KEYS) - elsewhere:
        assert lines(dataclasses.replace(full, **{key: None})) == lines(full) - 1, key


def test_the_interval_needs_both_ends():
    assert interval_text(Reading(1, 70.0, 68.5, 71.54)) == "68.5 to 71.5 %"
    assert interval_text(Reading(1, 70.0, None, 71.5)) is None
    assert interval_text(Reading(1, 70.0, 68.5, float("nan"))) is None


def test_the_budget_is_sorted_and_leaves_out_what_is_unknown():
    rows = budget_rows(Budget(isi_pct=3.0, noise_pct=9.0, unexplained_pct=-1.0))
    assert rows == [("Noise", 9.0), ("Neighbouring symbols", 3.0), ("Not explained", -1.0)]
    assert budget_rows(Budget()) == []


def test_a_sentence_has_true_minus_signs_and_keeps_its_hyphens():
    text = "What is left, -14.5 dB strong, from -3 to 86 %; a 5-tap equaliser of 2026-12"
    assert sentence(text) == "What is left, −14.5 dB strong, from −3 to 86 %; a 5-tap equaliser of 2026-12"


def test_an_interval_that_lies_below_all_that_is_told_is_told_once():
    assert rate_interval(1e-30, 1e-25) == "below 10⁻¹⁸"
    assert rate_interval(1e-30, 2e-9) == "below 10⁻¹⁸ to 2.0 × 10⁻⁹"


def test_at_a_glance_causes_that_take_nothing_are_left_out():
    rows = telling_rows(Budget(isi_pct=3.0, noise_pct=0.04, iq_pct=-0.2, unexplained_pct=0.0))
    assert rows == [("Neighbouring symbols", 3.0), ("I/Q imbalance", -0.2)]


def test_a_figure_is_told_with_its_interval_and_the_unit_once():
    reading = Reading(1000, snr_db=27.69, q=5.04, phase_rms_deg=0.747, ber=1e-7)
    intervals = {"snr_db": (27.6, 27.78), "q": (5.02, 5.06), "phase_rms_deg": (0.65, 0.84), "ber": (1e-8, 2e-7)}
    told = {f.label: f.interval for group in figure_groups(reading, intervals) for f in group.figures}
    assert told == {
        "SNR": "27.6 to 27.8 dB",
        "Q": "5.02 to 5.06",
        "Phase jitter": "0.65° to 0.84° rms",
        "Bit error rate": "1.0 × 10⁻⁸ to 2.0 × 10⁻⁷",
    }
    assert not [
        f for group in figure_groups(reading, {"snr_db": (float("nan"), 2.0)}) for f in group.figures if f.interval
    ]
    below = figure_groups(Reading(1000, ber=1e-30), {"ber": (1e-40, 1e-25)})[0].figures[0]
    assert below.interval == "below 10⁻¹⁸"
