"""Spreads of a level against enumeration and against scipy's normal distribution."""

import itertools

import numpy as np
import pytest
from scipy.stats import norm

from dsp.mixture import Spread, spread


def enumerated(taps, levels, shares):
    """Every sum of the taps' symbols and how often it comes."""
    places = np.asarray(list(itertools.product(range(levels.size), repeat=taps.size)))
    return levels[places] @ taps, np.prod(shares[places], axis=1)


@pytest.mark.parametrize("sigma", [0.02, 0.1, 0.3])
@pytest.mark.parametrize(
    ("levels", "shares"), [((-1.0, 1.0), (0.5, 0.5)), ((-3.0, -1.0, 1.0, 3.0), (0.3, 0.2, 0.25, 0.25))]
)
def test_tails_are_those_of_the_enumerated_data(levels, shares, sigma):
    levels, shares = np.asarray(levels), np.asarray(shares)
    taps = np.asarray([0.11, -0.073, 0.031, 0.017, 0.0123])
    found = spread(taps, levels, shares, sigma)
    at, share = enumerated(taps, levels, shares)
    for tail in (1e-2, 1e-3, 1e-6, 1e-12):
        limit = found.quantile(tail)
        assert float(share @ norm.cdf((limit - at) / sigma)) == pytest.approx(tail, rel=0.04)
        assert found.below(limit) == pytest.approx(tail, rel=1e-6)
        upper = -found.mirrored().quantile(tail)
        assert found.above(upper) == pytest.approx(tail, rel=1e-6)
    assert found.variance() + found.sigma**2 == pytest.approx(share @ at**2 - (share @ at) ** 2 + sigma**2, rel=1e-6)


def test_every_place_may_have_its_own_noise():
    reach = Spread(np.asarray([-0.5, 0.1]), np.asarray([0.25, 0.75]), np.asarray([0.1, 0.3]))
    wanted = 0.25 * norm.cdf(-0.3, -0.5, 0.1) + 0.75 * norm.cdf(-0.3, 0.1, 0.3)
    assert reach.below(-0.3) == pytest.approx(wanted, rel=1e-12)
    assert reach.above(-0.3) == pytest.approx(1.0 - wanted, rel=1e-12)
    assert reach.below(reach.quantile(1e-9)) == pytest.approx(1e-9, rel=1e-6)


def test_far_tails_keep_their_logarithm():
    reach = Spread(np.zeros(1), np.ones(1), 1.0)
    assert np.log(reach.above(30.0)) == pytest.approx(norm.logsf(30.0), rel=1e-12)
    assert reach.quantile(1e-15) == pytest.approx(norm.ppf(1e-15), rel=1e-8)
