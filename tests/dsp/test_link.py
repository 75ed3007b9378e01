"""Schemes and links: what a name means and what is refused."""

import dataclasses

import numpy as np
import pytest

from dsp.errors import DspError
from dsp.link import SCHEMES, Link, find_scheme
from dsp.pulses import Pulse

NAMES = {
    *("pam2", "pam3", "pam4", "pam8", "bpsk", "qpsk", "oqpsk", "pi4dqpsk", "8psk", "16qam", "64qam"),
    *("fsk2", "fsk4", "gfsk", "msk", "gmsk"),
}


def test_every_scheme_of_the_contract_is_there():
    assert set(SCHEMES) == NAMES
    assert find_scheme("nrz") is SCHEMES["pam2"]
    with pytest.raises(DspError, match=r"'qam'.*16qam"):
        find_scheme("qam")


@pytest.mark.parametrize("scheme", SCHEMES.values(), ids=list(SCHEMES))
def test_laws_of_a_scheme(scheme):
    points, levels = scheme.points(), np.asarray(scheme.rail_levels)
    assert np.all(np.diff(levels) > 0)
    np.testing.assert_allclose(levels, -levels[::-1])
    # the scale is the least-squares one onto ..., -1, +1, ...
    even = 2.0 * np.arange(levels.size) - levels.size + 1
    assert levels @ even == pytest.approx(levels @ levels, rel=1e-12)
    if scheme.name != "pam3":
        assert points.size == 2**scheme.bits
    rails = [points.real, points.imag][: scheme.rails]
    for rail in rails:
        np.testing.assert_allclose(np.unique(np.round(rail, 9)), np.round(levels, 9))
    assert scheme.symbol_energy() == pytest.approx(np.mean(np.abs(points) ** 2))
    if scheme.symmetry:
        turned = points * np.exp(2j * np.pi / scheme.symmetry)
        assert max(np.min(np.abs(points - z)) for z in turned) < 1e-9
    assert (scheme.kind == "carrier") == (scheme.symmetry > 0)


def test_eight_phases_lie_evenly_on_a_circle():
    points = SCHEMES["8psk"].points()
    np.testing.assert_allclose(np.abs(points), np.abs(points[0]))
    np.testing.assert_allclose(np.diff(np.sort(np.angle(points))), np.pi / 4)


@pytest.mark.parametrize(
    ("sample_rate", "symbol_rate", "text"),
    [
        (48000.0, 24001.0, "samples a symbol"),
        (48000.0, 23.9, "2 to 2000"),
        (0.0, 100.0, "sample rate"),
        (float("nan"), 100.0, "sample rate"),
        (float("inf"), 100.0, "sample rate"),
        (48000.0, 0.0, "symbol rate"),
        (48000.0, -1.0, "symbol rate"),
        (48000.0, float("nan"), "symbol rate"),
    ],
)
def test_rates_that_cannot_be_measured_are_refused(sample_rate, symbol_rate, text):
    with pytest.raises(DspError, match=text):
        Link(SCHEMES["qpsk"], sample_rate, symbol_rate, Pulse("rrc", 0.35))


def test_the_limits_of_the_ratio_are_allowed_and_a_link_is_a_value():
    assert Link(SCHEMES["qpsk"], 48000.0, 24000.0, Pulse("none")).samples_per_symbol == 2.0
    link = Link(SCHEMES["qpsk"], 48000.0, 24.0, Pulse("none"))
    assert link.samples_per_symbol == 2000.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        link.name = "x"
