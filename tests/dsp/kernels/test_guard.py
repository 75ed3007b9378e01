"""What watches the loops' symbols, against plain sums."""

import numpy as np
import pytest

from dsp._kernels import guard as kernel
from dsp.chain import power_mean
from dsp.link import find_scheme


def test_powers_are_those_of_levels_and_errors():
    rng = np.random.default_rng(1)
    decided = rng.choice(np.array([-1, 1], np.float32), (2, 900))
    values = decided + 0.1 * rng.standard_normal((2, 900)).astype(np.float32)
    signal, noise = kernel.powers(values, decided, 100, 850)
    part = slice(100, 850)
    assert signal == 1500.0
    assert noise == pytest.approx(np.sum((values[:, part].astype(float) - decided[:, part]) ** 2), rel=1e-5)


@pytest.mark.parametrize("rails", [1, 2])
@pytest.mark.parametrize("begin", [-5, 0, 17, 40, 80])
def test_silence_begins_with_the_first_quiet_value(rails, begin):
    held, n, length = 10, 60, 8
    rng = np.random.default_rng(2)
    line = np.sign(rng.standard_normal((2, held + n))).astype(np.float32)
    line[:, max(held + begin, 0) :] *= 0.01
    powers = np.concatenate((np.sum(line[:rails, :held].astype(float) ** 2, axis=0), np.full(n, np.nan)))
    found = kernel.silence(line[:, held:], rails, 0.1 * rails, length, powers)
    assert found == (begin if begin < n else n)
    if found == n:
        np.testing.assert_allclose(powers, np.sum(line[:rails].astype(float) ** 2, axis=0), rtol=1e-6)


def test_a_total_is_the_sum_of_its_part():
    values = np.random.default_rng(3).standard_normal(500)
    assert kernel.total_of(values, 20, 470) == pytest.approx(values[20:470].sum())


@pytest.mark.parametrize("name", ["bpsk", "qpsk", "8psk", "64qam"])
def test_the_power_that_takes_the_data_away_is_summed_as_it_is_for_points(name):
    scheme = find_scheme(name)
    values = np.random.default_rng(3).standard_normal((2, 1000)).astype(np.float32)
    looked_at = slice(3, 990, 7)
    points = power_mean(values[0, looked_at] + 1j * values[1, looked_at], scheme)
    total, count = kernel.upright(values, 3, 990, 7, scheme.symmetry, scheme.symbol_energy())
    assert count == points.size
    assert total == pytest.approx(float(points.sum()), abs=1e-3)
