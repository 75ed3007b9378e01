"""From samples to rails: rates, delays, frequency shift, discriminator."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline

from dsp.errors import DspError
from dsp.frontend import FrontEnd, matched_filter, plan, wants_corners
from dsp.link import SCHEMES, Link
from dsp.pulses import Pulse, root_raised_cosine
from tests.dsp.streams import link_of

RATE = 48_000.0


def make(scheme, sps, pulse):
    return Link(SCHEMES[scheme], RATE, RATE / sps, Pulse.parse(pulse))


@given(sps=st.floats(2.0, 2000.0))
def test_band_limited_links_have_4_to_8_samples_a_symbol(sps):
    for scheme, pulse in (("qpsk", "rrc:0.35"), ("pam4", "rrc:0.2")):
        chosen = plan(make(scheme, sps, pulse), complex_in=scheme != "pam4")
        assert 4.0 * (1 - 1e-9) <= chosen.sps <= 8.0
        assert chosen.rail_sps == pytest.approx(sps / chosen.decimate)
        assert chosen.sps == pytest.approx(chosen.rail_sps * chosen.interpolate)


@given(sps=st.floats(2.0, 2000.0))
def test_waves_with_corners_keep_as_many_as_there_are_up_to_64(sps):
    chosen = plan(make("pam2", sps, "rect"), complex_in=False)
    assert min(max(sps, 4.0), 32.0) * (1 - 1e-9) <= chosen.sps <= 64.0


@pytest.mark.parametrize(
    ("scheme", "pulse", "corners"),
    [
        ("pam2", "rect", True),
        ("pam2", "none", True),
        ("fsk2", "rect", True),
        ("gmsk", "gauss:0.3", False),
        ("gmsk", "gauss:1", True),
        ("pam2", "rrc:0.35", False),
        ("qpsk", "rect", False),
    ],
)
def test_corners_are_expected_of_square_waves_only(scheme, pulse, corners):
    assert wants_corners(SCHEMES[scheme], Pulse.parse(pulse)) is corners


def test_a_real_scheme_refuses_iq_samples():
    with pytest.raises(DspError, match="real baseband"):
        plan(link_of("pam2"), complex_in=True)


@pytest.mark.parametrize("sps", [2.3, 4.0, 9.7, 37.0, 411.0])
def test_a_carrier_tone_comes_out_whole_and_where_the_delay_says(sps):
    """A tone 0.2 symbol rates above the centre, the centre 0.11 of the sample rate up."""
    link = make("qpsk", sps, "rrc:0.35")
    front = plan(link, complex_in=True, centre=0.11)
    stage = FrontEnd(link, front)
    offset = 0.2 / sps
    n = np.arange(int(60 * sps) + 4000)
    (i, q) = stage.push(np.exp(2j * np.pi * (0.11 + offset) * n).astype(np.complex64))
    at = np.arange(i.size) * front.decimate - stage.delay
    # shifted by the oscillator, which counts from sample 0, then delayed
    expected = np.exp(2j * np.pi * offset * at)
    inside = at > stage.delay
    assert inside.sum() > 100
    np.testing.assert_allclose((i + 1j * q)[inside], expected[inside], atol=2e-3)


@pytest.mark.parametrize("sps", [24.0, 200.0])
def test_what_would_fold_into_the_band_is_taken_out(sps):
    link = make("qpsk", sps, "rrc:0.35")
    front = plan(link, complex_in=True)
    n = np.arange(40_000)
    (i, q) = FrontEnd(link, front).push(np.exp(2j * np.pi * (1 / front.decimate + 0.1 / sps) * n).astype(np.complex64))
    assert np.abs((i + 1j * q)[i.size // 2 :]).max() < 1e-3


@pytest.mark.parametrize("real", [False, True])
@pytest.mark.parametrize("deviation", [-0.5, 0.3])
def test_the_discriminator_tells_frequency_in_cycles_a_symbol(real, deviation):
    sps, centre = 40.0, 0.17
    link = make("fsk2", sps, "rect")
    front = plan(link, complex_in=not real, centre=centre, half_band=1.0 / sps)
    cycles = (centre + deviation / sps) * np.arange(20_000)
    samples = np.cos(2 * np.pi * cycles) if real else np.exp(2j * np.pi * cycles)
    (frequency,) = FrontEnd(link, front).push(samples.astype(np.float32 if real else np.complex64))
    # sps of the rails, so that a cycle a symbol is 1 whatever the decimation
    np.testing.assert_allclose(frequency[frequency.size // 2 :], deviation, atol=4e-3)


KINDS = {
    "real, decimated": (make("pam2", 21.3, "rrc:0.35"), False, 0.0, None),
    "square wave": (make("pam2", 90.0, "rect"), False, 0.0, None),
    "carrier": (make("qpsk", 13.0, "rrc:0.35"), True, 0.03, None),
    "fsk": (make("fsk2", 40.0, "rect"), True, 0.1, 0.03),
    "audio": (make("fsk2", 40.0, "rect"), False, 0.1, 0.03),
}


@pytest.mark.parametrize("kind", KINDS)
@settings(max_examples=12, deadline=None)
@given(cuts=st.lists(st.integers(0, 3000), max_size=6), single=st.integers(0, 2900))
def test_cuts_change_not_one_bit(kind, cuts, single):
    link, complex_in, centre, half = KINDS[kind]
    front = plan(link, complex_in=complex_in, centre=centre, half_band=half)
    rng = np.random.default_rng(1)
    samples = rng.standard_normal(3000).astype(np.float32)
    if complex_in:
        samples = (samples + 1j * rng.standard_normal(3000)).astype(np.complex64)
    whole = FrontEnd(link, front).push(samples)
    stage = FrontEnd(link, front)
    # a hundred blocks of one sample somewhere, and empty ones where cuts meet
    parts = [stage.push(part) for part in np.split(samples, sorted([*cuts, *range(single, single + 100)]))]
    for rail, pieces in zip(whole, zip(*parts, strict=True), strict=True):
        np.testing.assert_array_equal(np.concatenate(pieces), rail)


@pytest.mark.parametrize("sps", [2.0, 3.3, 4.0, 6.1])
@pytest.mark.parametrize("rolloff", [0.2, 0.5])
def test_the_matched_filter_turns_its_pulse_into_the_raised_cosine(sps, rolloff):
    """Nyquist's pulse at the symbol instants: 1 at its own, below -45 dB at all others."""
    link = make("pam2", sps, f"rrc:{rolloff}")
    front = plan(link, complex_in=False)
    stage = matched_filter(link, front)
    n = np.arange(int(120 * sps))
    centre = 60.25 * sps
    (out,) = stage.push((root_raised_cosine((n - centre) / sps, rolloff).astype(np.float32),))
    at = np.arange(out.size) / front.interpolate - stage.delay
    symbols = CubicSpline(at, out)(centre + sps * np.arange(-20, 21))
    assert symbols[20] == pytest.approx(1.0, abs=6e-3)
    others = np.delete(symbols, 20)
    assert 10 * np.log10(np.sum(others**2)) < -40


def test_complex_taps_are_for_iq_at_4_samples_and_more():
    taps = Pulse("taps", None, (0.1 + 0.2j, 1.0, 0.1 - 0.2j))
    link = Link(SCHEMES["pam2"], RATE, RATE / 4, taps)
    front = plan(link, complex_in=False)
    with pytest.raises(DspError, match="complex taps"):
        matched_filter(link, front)
    link = Link(SCHEMES["qpsk"], RATE, RATE / 4, taps)
    i, q = matched_filter(link, plan(link, complex_in=True)).push((np.ones(3, np.float32), np.zeros(3, np.float32)))
    assert (i + 1j * q)[2] == pytest.approx(1.2)


@pytest.mark.parametrize("scheme", ["pam2", "qpsk", "fsk2"])
def test_nothing_and_a_constant_make_no_nan(scheme):
    link = make(scheme, 12.0, "rect" if scheme == "fsk2" else "rrc:0.35")
    complex_in = scheme != "pam2"
    stage = FrontEnd(link, plan(link, complex_in=complex_in))
    dtype = np.complex64 if complex_in else np.float32
    for samples in (np.zeros(0, dtype), np.zeros(500, dtype), np.ones(500, dtype)):
        rails = stage.push(samples)
        assert len(rails) == (2 if scheme == "qpsk" else 1)
        assert all(np.all(np.isfinite(rail)) for rail in rails)
        assert all(rail.dtype == np.float32 for rail in rails)
