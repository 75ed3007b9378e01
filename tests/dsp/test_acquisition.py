"""Acquisition by its parts: the clock's line, the carrier's line, levels without a scale, detector slopes, doubts."""

import math

import numpy as np
import pytest

from dsp.acquisition import (
    CHANCE,
    Acquired,
    NotFound,
    acquire,
    clock_line,
    fit_levels,
    interpolate,
    noise_like_mer_db,
    plausibility_db,
    power_line,
)
from dsp.frontend import FrontEnd, matched_filter, plan
from dsp.interpolation import weights
from dsp.link import find_scheme
from tests.dsp.streams import link_of, send


def search(scheme, sent, sps=4.0, pulse="rrc:0.35", detector=None, symbols=None):
    link = link_of(scheme, sps, pulse)
    front = plan(link, complex_in=bool(np.iscomplexobj(sent.samples)))
    rails = FrontEnd(link, front).push(sent.samples)
    if symbols:
        rails = tuple(rail[: int(symbols * front.rail_sps)] for rail in rails)
    found = acquire(link, front, rails, detector=detector, timing_bandwidth=0.005, carrier_bandwidth=0.005)
    return link, front, found


# -- the clock's line ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("sps", [4.0, 4.37, 6.9])
@pytest.mark.parametrize("ppm", [-900.0, 0.0, 55.0])
def test_a_line_in_noise_is_found_with_its_rate_and_crest(sps, ppm):
    """Resolution bound for a tone in noise: about 1/N cycles; the crest within a few hundredths of a symbol."""
    rng = np.random.default_rng(1)
    n = np.arange(40_000)
    true = (1 + ppm * 1e-6) / sps
    crest = 1.234
    power = 1 + 0.2 * np.cos(2 * np.pi * true * (n - crest)) + 0.5 * rng.standard_normal(n.size)
    line = clock_line(power.astype(np.float32), sps)
    assert line.frequency == pytest.approx(true, abs=0.2 / n.size)
    # the phase is known best in the middle of the stretch
    middle = n.size / 2
    turns = (line.frequency * (middle - line.crest)) - true * (middle - crest)
    assert abs(turns - round(turns)) < 0.02
    assert line.chance < 1e-12


def test_the_chance_of_taking_white_noise_for_a_line_is_as_stated():
    """The share of noise stretches whose chance falls below c is about c: 400 stretches, c = 0.1 and 0.01.

    The peak is looked for on a grid eight times finer than the bins counted, which about doubles it.
    """
    rng = np.random.default_rng(2)
    chances = np.array([clock_line(rng.standard_normal(6000).astype(np.float32) ** 2, 4.0).chance for _ in range(400)])
    assert chances.min() > CHANCE * 100
    assert 0.05 < np.mean(chances < 0.1) < 0.25
    assert np.mean(chances < 0.01) < 0.04


def test_too_short_a_stretch_is_no_evidence():
    assert clock_line(np.ones(700, np.float32), 4.0).chance == 1.0
    assert clock_line(np.zeros(0, np.float32), 4.0).chance == 1.0


@pytest.mark.parametrize("value", [0.0, 0.9])
def test_a_constant_power_has_no_line(value):
    """A square wave without noise: its power says nothing, and must say so rather than NaN."""
    assert clock_line(np.full(20_000, value, np.float32), 20.0).chance == 1.0


# -- the carrier's line -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("scheme", "order"), [("bpsk", 2), ("qpsk", 4), ("8psk", 8), ("16qam", 4), ("64qam", 4)])
@pytest.mark.parametrize("turn", [-0.0123, 0.0, 0.031])
def test_the_power_line_tells_turn_and_phase_up_to_the_symmetry(scheme, order, turn):
    rng = np.random.default_rng(3)
    points = find_scheme(scheme).points()
    k = np.arange(4000)
    noise = 0.03 * (rng.standard_normal((2, k.size)) * np.abs(points).max()).astype(float)
    z = rng.choice(points, k.size) * np.exp(2j * np.pi * (turn * k + 0.017)) + noise[0] + 1j * noise[1]
    line = power_line(z, order)
    assert line.turn == pytest.approx(turn, abs=3e-5)
    middle = (line.turn - turn) * 2000 + line.phase - 0.017
    assert abs(middle * order - round(middle * order)) / order < 4e-3
    assert line.chance < 1e-10


def test_noise_has_no_carrier():
    rng = np.random.default_rng(4)
    line = power_line(rng.standard_normal(2000) + 1j * rng.standard_normal(2000), 4)
    assert line.chance > 1e-4


# -- levels -------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("scheme", ["pam2", "pam3", "pam4", "pam8", "qpsk", "8psk", "16qam", "64qam"])
@pytest.mark.parametrize("gain", [1e-4, 1.0, 3e5])
def test_levels_are_found_without_knowing_the_scale(scheme, gain):
    rng = np.random.default_rng(5)
    kind = find_scheme(scheme)
    points = kind.points()
    index = rng.integers(0, points.size, 6000)
    values = np.stack((points[index].real, points[index].imag))[: kind.rails]
    noise_rms = 0.12 * math.sqrt(kind.rails)
    noisy = values + 0.12 * rng.standard_normal(values.shape) + 0.05
    fit = fit_levels(gain * noisy, kind)
    np.testing.assert_allclose(fit.decided, values, rtol=1e-9)
    np.testing.assert_allclose(fit.means, gain * (np.tile(kind.rail_levels, (kind.rails, 1)) + 0.05), atol=0.03 * gain)
    expected = 10 * math.log10(kind.symbol_energy() / noise_rms**2)
    assert fit.mer_db == pytest.approx(expected, abs=0.25)


@pytest.mark.parametrize(("scheme", "levels"), [("pam2", 2), ("pam3", 3), ("pam4", 4), ("pam8", 8)])
def test_noise_like_mer_is_that_of_the_best_quantiser(scheme, levels):
    """J. Max, IRE Trans. Inf. Theory 6(1), 1960, table I: mean squared errors .3634 .1902 .1175 .03454 of unit variance.

    Decisions by a quantiser of distortion D explain a share 1 - D: the ratio is (1 - D)/D.
    """
    distortion = {2: 0.3634, 3: 0.1902, 4: 0.1175, 8: 0.03454}[levels]
    assert noise_like_mer_db(find_scheme(scheme)) == pytest.approx(-10 * math.log10(distortion), abs=0.02)
    values = np.random.default_rng(6).standard_normal((1, 40_000))
    fit = fit_levels(values, find_scheme(scheme))
    # evenly spaced levels do no better than free ones
    assert fit.mer_db < 10 * math.log10((1 - distortion) / distortion) + 0.1


def test_the_scheme_sent_is_more_plausible_than_a_richer_one():
    for sent_as, instead in (("pam2", "pam4"), ("pam4", "pam8")):
        _, _, right = search(sent_as, send(sent_as, symbols=3000, snr_db=24.0, echoes=((1.0, 0.2),)))
        _, _, wrong = search(instead, send(sent_as, symbols=3000, snr_db=24.0, echoes=((1.0, 0.2),)))
        assert isinstance(right, Acquired)
        if isinstance(wrong, Acquired):
            assert (
                plausibility_db(right.fit, find_scheme(sent_as)) > plausibility_db(wrong.fit, find_scheme(instead)) + 3
            )


# -- the whole of it ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("detector", ["gardner", "mueller-muller", "derivative"])
@pytest.mark.parametrize("scheme", ["pam2", "pam4", "bpsk", "qpsk", "oqpsk", "pi4dqpsk", "8psk", "16qam", "64qam"])
def test_each_scheme_is_found_where_it_is(scheme, detector):
    sent = send(scheme, 4.3, symbols=3000, snr_db=28.0, clock_ppm=80.0, delay_ui=0.37,
                **({"carrier_hz": 90.0, "carrier_phase_deg": 40.0} if find_scheme(scheme).kind == "carrier" else {}))  # fmt: skip
    link, front, found = search(scheme, sent, 4.3, detector=detector)
    assert isinstance(found, Acquired)
    # of the rail alone: a one-railed carrier sees half of the noise
    assert found.mer_db == pytest.approx(31.0 if scheme == "bpsk" else 28.0, abs=2.0)
    start = found.start
    assert front.sps / start.sps == pytest.approx(1 + 80e-6, abs=2e-5)
    # the decision instant lies on a symbol's
    filters = matched_filter(link, front)
    at = start.instant + start.offset_ui * start.sps - filters.delay
    late = np.interp(at, sent.instants, np.arange(sent.instants.size))
    if scheme == "oqpsk":  # with the carrier a quarter turn on, Q leads
        late *= 2
    assert abs(late - round(late)) < 0.06
    if find_scheme(scheme).kind == "carrier":
        turn = found.carrier * front.rail_sps + start.turn
        assert turn == pytest.approx(90.0 / 1e4, abs=2e-4)


@pytest.mark.parametrize("rolloff", [0.25, 0.5, 1.0])
def test_the_detector_s_slope_is_measured_as_its_closed_form(rolloff):
    """Rice, Digital Communications, 2009, eqs. 8.45 and 8.50, times the energy 2 of QPSK in level units."""
    sent = send("qpsk", symbols=6000, pulse=f"rrc:{rolloff}", snr_db=40.0)
    gardner = 2 * 2 * math.sin(math.pi * rolloff / 2) / (1 - rolloff**2 / 4)
    # at a roll-off of one half the limit, pi/2
    mueller = -math.pi if rolloff == 0.5 else -4 * math.cos(math.pi * rolloff) / (1 - 4 * rolloff**2)
    for detector, expected in (("gardner", gardner), ("mueller-muller", mueller)):
        _, _, found = search("qpsk", sent, pulse=f"rrc:{rolloff}", detector=detector)
        # measured over +-0.05 UI: the sine has bent by 1.6 % there
        assert found.start.detector_slope == pytest.approx(expected, rel=0.06)


@pytest.mark.parametrize("stretch", [1024, 12_000])
@pytest.mark.parametrize("scheme", ["qpsk", "oqpsk"])
def test_a_long_stretch_finds_as_well_as_a_short_one(scheme, stretch):
    sent = send(scheme, symbols=stretch + 100, snr_db=20.0, clock_ppm=-200.0, carrier_hz=-150.0, delay_ui=0.18)
    for detector in ("gardner", "derivative"):
        _, _, found = search(scheme, sent, detector=detector, symbols=stretch)
        assert isinstance(found, Acquired)
        assert found.mer_db > 18.0


def test_levels_come_in_the_unit_of_the_samples():
    sent = send("pam4", symbols=3000, snr_db=30.0, gain=1e-7)
    _, _, found = search("pam4", sent)
    np.testing.assert_allclose(found.start.means[0], 1e-7 * np.array([-3, -1, 1, 3]), rtol=0.02, atol=1e-9)


@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "oqpsk"])
@pytest.mark.parametrize("size", [0, 1, 50, 400])
def test_a_stretch_too_short_is_not_found_and_says_why(scheme, size):
    link = link_of(scheme)
    front = plan(link, complex_in=scheme != "pam2")
    rng = np.random.default_rng(7)
    rails = tuple(rng.standard_normal(size).astype(np.float32) for _ in range(1 if scheme == "pam2" else 2))
    if size == 0:
        rails = tuple(np.zeros(1, np.float32) for _ in rails)  # a stretch is never empty
    found = acquire(link, front, rails, detector=None, timing_bandwidth=0.005, carrier_bandwidth=0.005)
    assert isinstance(found, NotFound)
    assert found.reason


def test_interpolation_at_any_instant():
    rail = np.sin(0.7 * np.arange(200)).astype(np.float32)
    at = np.array([10.0, 10.25, 57.9, 180.999])
    np.testing.assert_allclose(interpolate(rail, at, weights(0.2)), np.sin(0.7 * at), atol=2e-3)
