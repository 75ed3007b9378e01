"""The pattern response: how long it is taken to be."""

import numpy as np
import pytest

from dsp.eye import EARLIEST, LATEST
from dsp.pattern import Pattern, order
from tests.dsp.streams import link_of, run, send

LAGS = np.arange(EARLIEST, LATEST + 1)


def test_taps_of_chance_are_no_response():
    rng = np.random.default_rng(7)
    lengths = [order(rng.standard_normal((1, 1, LAGS.size)), np.ones((1, 1, 1))) for _ in range(300)]
    assert np.mean(np.asarray(lengths) == 0) > 0.6
    assert np.mean(lengths) < 2.0


@pytest.mark.parametrize("lag", [-6, -1, 2, 7, 12])
def test_the_response_reaches_as_far_as_its_last_tap_that_counts(lag):
    rng = np.random.default_rng(8)
    taps = 0.3 * rng.standard_normal((1, 1, LAGS.size))
    taps[..., lag == LAGS] = 30.0
    assert order(taps, np.ones((1, 1, 1))) == abs(lag)


def test_an_echo_far_off_is_kept_and_what_lies_beyond_it_is_not():
    sums = run(link_of("pam2"), send("pam2", symbols=12_000, snr_db=20.0, echoes=((4.0, 0.2),)).samples).total
    taps = Pattern(sums).model(0.0).taps[0, 0]
    assert taps[LAGS == 4] == pytest.approx(0.2 / 1.0, abs=0.02)
    assert np.count_nonzero(taps[np.abs(LAGS) > 6]) <= 2
