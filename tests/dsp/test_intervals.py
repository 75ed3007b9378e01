"""Intervals: what the jackknife makes of numbers whose law is known, and how often figures' intervals hold the truth."""

import math
from itertools import pairwise

import numpy as np
import pytest
from scipy.stats import binom

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.figures import Figures
from dsp.intervals import Estimate, difference, jackknife
from dsp.transmitter import transmit
from tests.measuring import link_for, over_the_air, spec_for

RUNS = 60
# what so many runs of an interval that holds 90 to 98 % show but once in a thousand times
FEWEST = int(binom.ppf(5e-4, RUNS, 0.90))


def parts_of(values, sizes):
    """The mean of all values, and the means without each part."""
    edges = np.cumsum([0, *sizes])
    without = [{"mean": float(np.delete(values, np.s_[a:b]).mean())} for a, b in pairwise(edges)]
    return {"mean": float(values.mean())}, without, sizes


def test_the_error_of_a_mean_is_the_textbook_one():
    rng = np.random.default_rng(1)
    errors = []
    for _ in range(300):
        whole, without, sizes = parts_of(rng.normal(size=1000), [100] * 10)
        errors.append(jackknife(whole, without, sizes)["mean"].error)
    assert math.sqrt(np.mean(np.square(errors))) == pytest.approx(1 / math.sqrt(1000), rel=0.05)


@pytest.mark.parametrize("sizes", [[100] * 10, [50, 150, 80, 120, 100, 100, 60, 140]], ids=["equal", "unequal"])
@pytest.mark.parametrize("memory", [0.0, 0.8], ids=["independent", "dependent"])
def test_intervals_hold_the_truth_for_dependent_samples_too(sizes, memory):
    """First-order autoregression: its mean's variance is (1 + a)/(1 - a) times that of independent values."""
    rng = np.random.default_rng(2)
    held = 0
    for _ in range(400):
        noise = rng.normal(size=sum(sizes))
        values = np.empty_like(noise)
        values[0] = noise[0] / math.sqrt(1 - memory**2)
        for i in range(1, noise.size):
            values[i] = memory * values[i - 1] + noise[i]
        whole, without, parts = parts_of(values, sizes)
        low, high = jackknife(whole, without, parts)["mean"].interval()
        held += low <= 0.0 <= high
    assert 0.90 <= held / 400 <= 0.98


def test_what_is_unknown_in_a_part_has_no_interval():
    whole = {"a": 1.0, "b": 1.0, "c": None}
    without = [{"a": 1.0 + i, "b": None if i == 2 else 1.0, "c": 1.0} for i in range(5)]
    assert set(jackknife(whole, without, [10] * 5)) == {"a"}
    assert jackknife(whole, without[:3], [10] * 3) == {}


def test_an_error_rate_s_interval_is_a_factor_and_stays_above_0():
    without = [{"ber": 1e-6 * factor} for factor in (0.7, 1.3, 0.9, 1.1, 1.6, 0.8)]
    estimate = jackknife({"ber": 1e-6}, without, [10] * 6)["ber"]
    low, high = estimate.interval()
    assert 0 < low < 1e-6 < high
    assert low * high == pytest.approx(1e-12)


def test_a_difference_has_both_errors():
    change = difference(Estimate(5.0, 0.3, 7.0), Estimate(3.0, 0.4, 7.0))
    assert change.value == 2.0
    assert change.error == pytest.approx(0.5)
    # Welch and Satterthwaite: (a + b)^2 / (a^2/7 + b^2/7)
    assert change.freedom == pytest.approx(0.25**2 / ((0.09**2 + 0.16**2) / 7))


def test_the_figures_intervals_hold_the_truth():
    """Short runs against one of fifty times their length; the bound is met but once in a thousand times by 90 %."""
    defects = {"snr_db": 18.0, "echoes": ((1.0, 0.3 + 0.1j),)}
    truth = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 90_000, seed=1000, **defects)).reading
    held = dict.fromkeys(("opening_pct", "snr_db", "mer_db", "q", "ber", "opening_at_ber_pct", "clock_ppm"), 0)
    for seed in range(RUNS):
        found = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 1_800, seed=seed, **defects))
        for key in held:
            low, high = found.figures.interval(key)
            held[key] += low <= getattr(truth, key) <= high
    assert min(held.values()) >= FEWEST, held


def test_changes_of_a_steady_link_are_seldom_called_significant():
    """5 % by construction; the bound is the binomial's 99.9 % point."""
    window, runs = 1_500, 10
    alarms = pairs = 0
    for seed in range(runs):
        spec = spec_for("qpsk", "rrc:0.35", 4.0, 8 * window + 100, snr_db=15.0, seed=seed)
        found = []

        options = ChainOptions(window=window)
        chain = Chain(link_for(spec), complex_in=True, options=options, on_window=found.append)
        chain.push(Block(transmit(spec).samples, 0))
        chain.finish()
        estimates = [Figures(sums, chain.context()).estimates["opening_pct"] for sums in found]
        for now, before in zip(estimates[1::2], estimates[::2], strict=False):
            low, high = difference(now, before).interval()
            alarms += not low <= 0.0 <= high
            pairs += 1
    assert pairs >= 3 * runs
    assert alarms <= binom.ppf(0.999, pairs, 0.05)
