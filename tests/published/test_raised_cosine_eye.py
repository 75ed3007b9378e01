"""Eyes of raised-cosine links, clean, against the pulse itself.

The pulse: Proakis and Salehi, Digital Communications, 5th ed., sec. 9.2-1. `by_brute_force` superposes it symbol by symbol and takes
the quantiles that the opening is defined by; it shares no code with the program.
"""

import math
from functools import cache

import numpy as np
import pytest

from tests.measuring import over_the_air, spec_for

TAIL = 1e-3


def pulse(t, rolloff):
    """Raised cosine, 1 at 0; where 2 a t is 1 the limit is a mean of neighbours."""
    t = np.asarray(t, dtype=float)
    t = np.where(np.abs(np.abs(2 * rolloff * t) - 1) < 1e-6, t + 1e-5, t)
    return np.sinc(t) * np.cos(np.pi * rolloff * t) / (1 - (2 * rolloff * t) ** 2)


@cache
def by_brute_force(rolloff, levels, symbols=60_000):
    """Opening of the least eye (share of the spacing) at -0.5 to 0.5 UI in steps of 1/128."""
    rng = np.random.default_rng(11)
    sent = 2.0 * rng.integers(0, levels, symbols) - levels + 1
    times = np.arange(0, 65) / 128
    lags = np.arange(-24, 25)
    curve = []
    for t in times:
        wave = np.convolve(sent, pulse(t + lags, rolloff), "same")[50:-50]
        inner = sent[50:-50]
        gaps = []
        for level in np.unique(sent)[:-1]:
            low = np.quantile(wave[inner == level], 1 - TAIL)
            high = np.quantile(wave[inner == level + 2], TAIL)
            gaps.append((high - low) / 2)
        curve.append(min(gaps))
    return times, np.asarray(curve)


def width_of(rolloff, levels):
    times, curve = by_brute_force(rolloff, levels)
    below = np.flatnonzero(curve <= 0)
    if not below.size:
        return 1.0
    i = below[0]
    return 2 * float(times[i - 1] + (times[i] - times[i - 1]) * curve[i - 1] / (curve[i - 1] - curve[i]))


@pytest.mark.parametrize(("rolloff", "known"), [(0.2, 0.5050), (0.35, 0.6621), (0.5, 0.7842), (0.75, 0.9138)])
def test_brute_force_lies_just_above_the_widths_of_endless_patterns(rolloff, known):
    """``known``: twice the root of p(t) = sum over k of |p(t - k)|, computed here from the pulse."""
    lags = np.concatenate((np.arange(-4000, 0), np.arange(1, 4001)))
    low, high = 0.01, 0.5
    for _ in range(40):
        middle = 0.5 * (low + high)
        closed = pulse(middle, rolloff) <= np.abs(pulse(middle - lags, rolloff)).sum()
        low, high = (low, middle) if closed else (middle, high)
    assert 2 * low == pytest.approx(known, abs=5e-4)
    assert known - 0.002 < width_of(rolloff, 2) < known + 0.035


@pytest.mark.parametrize(
    ("scheme", "sent", "sps"),
    [
        ("pam2", "rrc:0.2", 2.6),
        ("pam2", "rrc:0.5", 10.3),
        ("pam2", "rc:0.35", 4.7),
        ("pam2", "rc:1", 6.0),
        ("qpsk", "rrc:0.2", 4.0),
        ("qpsk", "rrc:0.35", 2.6),
        ("qpsk", "rrc:0.75", 5.3),
        ("qpsk", "rrc:1", 3.1),
        ("pam4", "rrc:0.35", 2.6),
        ("pam4", "rc:0.5", 4.7),
        ("pam4", "rrc:1", 10.3),
        ("16qam", "rrc:0.2", 4.0),
        ("16qam", "rrc:0.5", 8.9),
    ],
)
def test_a_clean_raised_cosine_eye_is_whole_and_as_wide_as_its_pulse_makes_it(scheme, sent, sps):
    levels = 2 if scheme in ("pam2", "qpsk") else 4
    rolloff = float(sent.split(":")[1])
    measured = over_the_air(spec_for(scheme, sent, sps, 22_000 if levels == 2 else 44_000, seed=6, delay_ui=0.2))
    reading = measured.reading
    assert reading.opening_pct == pytest.approx(100.0, abs=1.5)
    assert reading.width_ui == pytest.approx(width_of(rolloff, levels), abs=0.02)
    # the curve between: at an eighth of a UI off the best instant, either side, scaled by the cursor there being what it is
    times, curve = by_brute_force(rolloff, levels)
    picture = measured.figures.image()
    best = picture.best_ui
    for shift in (0.0625, 0.125):
        wanted = 100 * float(np.interp(shift, times, curve))
        for side in (-1, 1):
            assert float(np.interp(best + side * shift, picture.column_ui, picture.opening_pct)) == pytest.approx(
                wanted, abs=3.0
            )


@pytest.mark.parametrize("rolloff", [0.35, 0.5, 1.0])
def test_timing_slope_is_the_mean_rate_down_to_half_the_opening(rolloff):
    times, curve = by_brute_force(rolloff, 2)
    half = float(np.interp(-0.5 * curve[0], -curve, times))
    reading = over_the_air(spec_for("qpsk", f"rrc:{rolloff}", 4.3, 22_000, seed=7)).reading
    assert reading.timing_slope_pct_per_ui == pytest.approx(50 / half, rel=0.04)
    early, late = reading.timing_tolerance_ui
    decibel = float(np.interp(-(10 ** (-1 / 20)) * curve[0], -curve, times))
    assert early == pytest.approx(-decibel, abs=0.01)
    assert late == pytest.approx(decibel, abs=0.01)


def test_full_roll_off_crosses_at_one_instant():
    """At roll-off 1 the pulse is 1/2 at half a symbol and 0 at every other half: all transitions cross mid-way."""
    reading = over_the_air(spec_for("pam2", "rrc:1", 6.1, 12_000, seed=8)).reading
    assert reading.crossing_rms_ui < 1e-3
    assert reading.crossing_pp_ui < 5e-3
    assert reading.width_ui == pytest.approx(1.0, abs=0.005)


@pytest.mark.parametrize("rolloff", [0.25, 0.35, 0.5, 0.75])
def test_crossings_spread_as_random_data_make_them(rolloff):
    """Of a zero-crossing search over the superposed pulse, in steps of 1/64 UI with straight lines between."""
    rng = np.random.default_rng(12)
    sent = 2.0 * rng.integers(0, 2, 20_000) - 1
    lags = np.arange(-24, 25)
    grid = np.arange(65) / 64
    waves = np.asarray([np.convolve(sent, pulse(t + lags, rolloff), "same") for t in grid])[:, 50:-51]
    turns = sent[50:-51] != sent[51:-50]
    crossing = []
    for wave in waves[:, turns].T:
        signs = np.flatnonzero(wave[:-1] * wave[1:] <= 0)
        crossing.append(np.mean([grid[i] + wave[i] / (wave[i] - wave[i + 1]) / 64 for i in (signs[0], signs[-1])]))
    reading = over_the_air(spec_for("pam2", f"rrc:{rolloff}", 4.9, 20_000, seed=9)).reading
    assert reading.crossing_rms_ui == pytest.approx(float(np.std(crossing)), rel=0.04)
    low, high = np.quantile(crossing, [TAIL, 1 - TAIL])
    assert reading.crossing_pp_ui == pytest.approx(float(high - low), abs=0.02)
    assert math.isclose(reading.dcd_ui, 0.0, abs_tol=0.005)
