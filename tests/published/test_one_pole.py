"""NRZ behind a one-pole low-pass, whose eye has a closed form.

With x = exp(-T/tau) a bit ends at 1 - 2x of the drive at worst and 1 - x on average, so that the opening against the levels' own
means is (1 - 2x)/(1 - x) = 1 - D, D = x/(1 - x) being R. W. Lucky's peak distortion (Bell Syst. Tech. J. 44(4), 1965, from memory).
Transitions cross 0 between tau ln(2 - 2x) and tau ln 2. All of it derived here; `by_enumeration` checks it, and adds noise, over
every pattern of ITU-T O.150's 511-bit sequence.
"""

import math

import numpy as np
import pytest
from scipy.optimize import brentq
from scipy.special import ndtr

from dsp.transmitter import prbs
from tests.measuring import over_the_air, spec_for

STEEPNESS = [1.0, 1.5, 2.0, 3.0, 4.0, 5.0]  # T/tau
TAIL = 1e-3


def crossing_spread(steepness):
    """Of the threshold crossings, peak to peak, in UI."""
    return -math.log(1 - math.exp(-steepness)) / steepness


def link(steepness, sps, **more):
    """6000 bits of the 511-bit sequence: every pattern of nine bits, each as often as it must be."""
    return spec_for("pam2", "rect", sps, 6000, t_over_tau=steepness, bits="prbs9", delay_ui=0.3, seed=3, **more)


def by_enumeration(steepness, sigma=0.0, step=1 / 256):
    """Opening at the end of the bit (%), width (UI), best instant less centre (UI), by every pattern with Gaussian noise ``sigma``."""
    drive = 2.0 * np.tile(prbs(9, 511, 0), 3) - 1.0
    x = math.exp(-steepness)
    state = np.zeros(drive.size + 1)
    for k, level in enumerate(drive):
        state[k + 1] = level + (state[k] - level) * x
    old, end, now, after = state[511:1022], state[512:1023], drive[511:1022], drive[512:1023]

    def wave(t):
        """Of each bit ``t`` UI after its start; from 1 on the next bit drives."""
        if t <= 1:
            return now + (old - now) * math.exp(-steepness * t)
        return after + (end - after) * math.exp(-steepness * (t - 1))

    def quantile(values):
        if sigma == 0:
            return values.min()
        low, high = values.min() - 6 * sigma, values.max() + 6 * sigma
        return brentq(lambda v: float(np.mean(ndtr((v - values) / sigma))) - TAIL, low, high)

    def opening(t):
        y = wave(t)
        return 0.5 * (quantile(y[now > 0]) + quantile(-y[now < 0]))

    scale = 0.5 * (end[now > 0].mean() - end[now < 0].mean())
    early = brentq(opening, 0.02, 1.0)
    late = brentq(opening, 1.0, 1.98)
    times = np.arange(0.5, 1.0 + step / 2, step)
    best = times[int(np.argmax([opening(t) for t in times]))]
    return 100 * opening(1.0) / scale, late - early, best - 0.5 * (early + late)


@pytest.mark.parametrize("steepness", STEEPNESS)
def test_the_closed_forms_are_those_of_all_patterns(steepness):
    x = math.exp(-steepness)
    opening, width, offset = by_enumeration(steepness)
    assert opening == pytest.approx(100 * (1 - x / (1 - x)), abs=0.1)  # runs of nine bits, not endless ones
    assert width == pytest.approx(1 - crossing_spread(steepness), abs=1e-3)
    # the eye lies between the latest crossing before and the earliest after; it is widest open at the bit's end
    centre = 0.5 * (math.log(2) + math.log(2 - 2 * x)) / steepness + 0.5
    assert offset == pytest.approx(1 - centre, abs=1e-3)


@pytest.mark.parametrize("sps", [33.7, 64.0])
@pytest.mark.parametrize("steepness", STEEPNESS)
def test_opening_instant_and_crossings_of_a_one_pole_link(steepness, sps):
    x = math.exp(-steepness)
    spread = crossing_spread(steepness)
    reading = over_the_air(link(steepness, sps), "none").reading
    centre = 0.5 * (math.log(2) + math.log(2 - 2 * x)) / steepness + 0.5
    assert reading.opening_pct == pytest.approx(100 * (1 - x / (1 - x)), abs=1.5)
    assert reading.best_instant_ui - reading.eyes[0].centre_ui == pytest.approx(1 - centre, abs=0.02)
    assert reading.crossing_pattern_pp_ui == pytest.approx(spread, abs=0.02)
    assert reading.crossing_pp_ui == pytest.approx(spread, abs=0.02)
    assert reading.width_ui == pytest.approx(1 - spread, abs=0.02)
    assert reading.snr_db > 45  # ISI is not noise


@pytest.mark.parametrize(("steepness", "sps"), [(1.5, 16.0), (2.0, 20.0), (3.0, 16.0), (5.0, 20.0)])
def test_sixteen_samples_a_symbol_do_but_for_the_slowest_links(steepness, sps):
    x = math.exp(-steepness)
    reading = over_the_air(link(steepness, sps), "none").reading
    assert reading.opening_pct == pytest.approx(100 * (1 - x / (1 - x)), abs=1.5)
    assert reading.crossing_pattern_pp_ui == pytest.approx(crossing_spread(steepness), abs=0.02)
    assert reading.width_ui == pytest.approx(1 - crossing_spread(steepness), abs=0.02)


@pytest.mark.parametrize("sps", [8.0, 10.3])
@pytest.mark.parametrize("steepness", STEEPNESS)
def test_fewer_samples_lose_no_more_than_the_corner_between_two_of_them(steepness, sps):
    """The wave turns by 2/tau at the bit's end: a straight line between two samples cuts off a quarter of that times their distance.

    So at 10 samples a symbol an unfiltered corner cannot be had within 1.5 points, whatever is done with the samples.
    """
    x = math.exp(-steepness)
    lost = 100 * 0.25 * 2 * steepness / sps / (1 - x)
    reading = over_the_air(link(steepness, sps), "none").reading
    assert -lost < reading.opening_pct - 100 * (1 - x / (1 - x)) < 1.5
    assert reading.crossing_pattern_pp_ui == pytest.approx(crossing_spread(steepness), abs=0.02)


@pytest.mark.parametrize("steepness", [1.0, 2.0, 3.0, 5.0])
def test_a_little_noise_closes_the_eye_by_its_quantile(steepness):
    sps, sigma = 33.7, 0.01
    opening, width, _ = by_enumeration(steepness, sigma)
    reading = over_the_air(link(steepness, sps, snr_db=10 * math.log10(sps / sigma**2)), "none").reading
    assert reading.opening_pct == pytest.approx(opening, abs=1.5)
    assert reading.width_ui == pytest.approx(width, abs=0.02)
    assert reading.crossing_pattern_pp_ui == pytest.approx(crossing_spread(steepness), abs=0.02)
    # at the crossing the wave falls by 1/tau of the drive a UI
    assert reading.crossing_random_rms_ui == pytest.approx(sigma / steepness, rel=0.25)


def test_rise_time_is_that_of_the_mean_transition():
    """From -(1 - x), a level's mean, the mean transition rises to 1 - (2 - x) x within its bit: derived here."""
    for steepness in (2.0, 4.0):
        x = math.exp(-steepness)
        low, high = -(1 - x), 1 - (2 - x) * x
        at = [low + share * (high - low) for share in (0.2, 0.8)]
        rise = math.log((1 - at[0]) / (1 - at[1])) / steepness
        reading = over_the_air(link(steepness, 33.7), "none").reading
        assert reading.rise_20_80_ui == pytest.approx(rise, abs=0.02)
        assert reading.dcd_ui == pytest.approx(0.0, abs=0.003)


def test_four_levels_close_three_times_as_fast():
    """M levels: 1 - (M - 1) D; the outer transitions' corners turn three times as sharply, and lose as much more between samples."""
    x = math.exp(-3.0)
    spec = spec_for("pam4", "rect", 55.3, 12000, t_over_tau=3.0, bits="prbs9", delay_ui=0.3, seed=4)
    reading = over_the_air(spec, "none").reading
    assert reading.opening_pct == pytest.approx(100 * (1 - 3 * x / (1 - x)), abs=3.0)
