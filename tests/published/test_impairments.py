"""One defect at a time, each with a closed form for what it does to the eye or the constellation."""

import itertools
import math

import numpy as np
import pytest
from scipy.stats import norm

from dsp.block import Block
from dsp.chain import Chain
from dsp.figures import Figures
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse, raised_cosine
from dsp.transmitter import prbs
from tests.measuring import RATE, over_the_air, spec_for


@pytest.mark.parametrize(
    ("scheme", "gain"), [("pam2", 0.2), ("pam2", 0.4), ("pam2", -0.3), ("pam4", 0.1), ("qpsk", 0.25)]
)
def test_an_echo_one_symbol_on_takes_its_own_height(scheme, gain):
    """Channel [1, a]: opening 1 - (M - 1)|a|, level spread |a|, MER -20 log10 |a| (R. W. Lucky's distortion of two taps; derived here)."""
    levels = find_scheme(scheme).levels
    spec = spec_for(
        scheme, "rrc:0.35", 4.3, 22_000, bits="prbs9" if levels == 2 else "random", echoes=((1.0, gain),), delay_ui=0.1
    )
    reading = over_the_air(spec).reading
    assert reading.opening_pct == pytest.approx(100 * (1 - (levels - 1) * abs(gain)), abs=2.0)
    # the closed form holds at the symbol's own instant; the eye is widest a little off it, where the echo is less than its height
    assert -0.25 < reading.mer_db + 20 * math.log10(abs(gain)) < 0.5
    rms_level = math.sqrt(find_scheme(scheme).symbol_energy() / find_scheme(scheme).rails)
    assert reading.level_rms_pct == pytest.approx(100 * abs(gain) * rms_level / 2, rel=0.06)
    assert reading.snr_db > 40  # what an echo does is not noise


def test_error_rate_behind_an_echo_counts_both_distances():
    """Two-level [1, a] in noise s: mean of Q over all neighbours of the raised cosine, where that is least (derived here)."""
    gain, snr_db = 0.2, 14.0
    s = 10 ** (-snr_db / 20)
    lags = np.arange(-5, 6)
    neighbours = np.asarray(list(itertools.product((-1.0, 1.0), repeat=lags.size - 1)))
    rates = []
    for shift in np.linspace(-0.15, 0.05, 21):
        taps = raised_cosine(lags + shift, 0.35) + gain * raised_cosine(lags + shift - 1, 0.35)
        cursor, rest = taps[5], np.delete(taps, 5)
        rates.append(np.mean(norm.sf((cursor + neighbours @ rest) / s)))
    # at the symbol's own instant it is (Q((1 + a)/s) + Q((1 - a)/s))/2
    both = [0.5 * math.erfc((1 + side * gain) / s / math.sqrt(2)) for side in (-1, 1)]
    assert rates[15] == pytest.approx(sum(both) / 2, rel=0.01)
    spec = spec_for("pam2", "rrc:0.35", 4.3, 22_000, echoes=((1.0, gain),), snr_db=snr_db, seed=31)
    reading = over_the_air(spec).reading
    assert min(rates) / 1.6 < reading.ber < min(rates) * 1.6


def test_a_boxcar_matched_to_nrz_makes_a_triangle():
    """The triangle pulse: opening 1 - 2|d| at an offset d, width 1 UI, one crossing instant (derived here).

    A sampled boxcar's edges fall between samples: the triangle is soft within a sample of its corners.
    """
    measured = over_the_air(spec_for("pam2", "rect", 32.3, 12_000, seed=32))
    reading = measured.reading
    assert reading.timing_slope_pct_per_ui == pytest.approx(200, rel=0.05)
    assert reading.opening_pct > 100 - 200 / 32.3
    assert reading.width_ui > 1 - 1.5 / 32.3
    assert reading.crossing_pp_ui < 1.5 / 32.3
    picture = measured.figures.image()
    for shift in (-0.25, -0.1, 0.1, 0.25):
        at = float(np.interp(picture.best_ui + shift, picture.column_ui, picture.opening_pct))
        assert at == pytest.approx(100 * (1 - 2 * abs(shift)), abs=200 / 32.3)


def _columns(gain_db, skew_deg):
    g, s = 10 ** (gain_db / 20), math.radians(skew_deg)
    return np.array([[1.0, 0.0], [g * math.sin(s), g * math.cos(s)]])


@pytest.mark.parametrize("scheme", ["qpsk", "16qam"])
@pytest.mark.parametrize(("gain_db", "skew_deg"), [(0.5, 0.0), (0.0, 2.0), (1.0, 5.0), (-0.5, -3.0)])
def test_gain_and_skew_of_a_modulator_come_out_with_the_mer_that_they_leave(scheme, gain_db, skew_deg):
    """MER = (1 + 2 g cos s + g^2)/(1 - 2 g cos s + g^2), the image rejection, one complex gain taken out (derived here).

    A carrier recovered a quarter turn further swaps I and Q: then gain and skew are those of the swapped axes.
    """
    g, s = 10 ** (gain_db / 20), math.radians(skew_deg)
    spec = spec_for(scheme, "rrc:0.35", 4.3, 9_000, iq_gain_db=gain_db, iq_skew_deg=skew_deg, carrier_hz=50.0, seed=33)
    reading = over_the_air(spec).reading
    image = 10 * math.log10((1 + 2 * g * math.cos(s) + g * g) / (1 - 2 * g * math.cos(s) + g * g))
    assert reading.mer_db == pytest.approx(image, abs=0.3)
    swapped = np.array([[0.0, 1.0], [-1.0, 0.0]]) @ _columns(gain_db, skew_deg) @ np.array([[0.0, -1.0], [1.0, 0.0]])
    turn = math.atan2(-swapped[0, 1], swapped[1, 1])
    upright = np.array([[math.cos(turn), math.sin(turn)], [-math.sin(turn), math.cos(turn)]]) @ swapped
    other = (
        20 * math.log10(math.hypot(*upright[1]) / abs(upright[0, 0])),
        math.degrees(math.atan2(upright[1, 0], upright[1, 1])),
    )
    found = (reading.iq_gain_db, reading.iq_skew_deg)
    assert any(found == pytest.approx(wanted, abs=0.1) for wanted in ((gain_db, skew_deg), other))


def test_a_constant_moves_the_levels_and_nothing_else():
    """Rails 1 + d and -1 + d: with the threshold at d, opening and error rate stay (derived here); 1.5 is light that never goes out."""
    for offset in (0.1, 1.5):
        spec = spec_for("pam2", "rrc:0.35", 4.3, 12_000, dc=offset, snr_db=14.0, seed=34)
        reading = over_the_air(spec).reading
        sigma = 10 ** (-14.0 / 20)
        assert reading.dc_pct == pytest.approx(100 * offset, abs=1.0)
        assert reading.opening_pct == pytest.approx(100 * (1 - 3.0902 * sigma), abs=2.0)
        wanted = 0.5 * math.erfc(1 / sigma / math.sqrt(2))
        assert wanted / 1.5 < reading.ber < wanted * 1.5
    complex_reading = over_the_air(
        spec_for("qpsk", "rrc:0.35", 4.3, 9_000, dc=0.1 + 0.05j, snr_db=30.0, seed=35)
    ).reading
    assert complex_reading.dc_pct == pytest.approx(100 * abs(0.1 + 0.05j) / math.sqrt(2), abs=0.5)


@pytest.mark.parametrize("jitter", [0.01, 0.02])
@pytest.mark.parametrize("rolloff", [0.25, 0.5])
def test_jitter_of_the_symbols_lowers_the_mer_by_the_pulses_curvature(jitter, rolloff):
    """MER = -10 log10(C s^2), C = pi^2/3 + a^2 (pi^2 - 8) - a pi^2/2 (the power of a raised cosine's derivative; derived here)."""
    power = math.pi**2 / 3 + rolloff**2 * (math.pi**2 - 8) - rolloff * math.pi**2 / 2
    spec = spec_for("qpsk", f"rrc:{rolloff}", 4.3, 16_000, jitter_rms_ui=jitter, seed=36)
    assert over_the_air(spec).reading.mer_db == pytest.approx(-10 * math.log10(power * jitter**2), abs=0.4)


def _held(levels, sps, count, ramp=0.0, late_fall=0.0):
    """NRZ of given levels with linear ramps; falling edges come ``late_fall`` UI late. Sample i stands at (i + 0.5)/sps UI."""
    t = (np.arange(int(count * sps)) + 0.5) / sps
    k = np.minimum(t.astype(int), count - 1)
    before = np.where(k > 0, levels[np.maximum(k - 1, 0)], levels[0])
    late = np.where(before > levels[k], late_fall, 0.0)
    share = np.clip((t - k - late) / max(ramp, 1e-9), 0.0, 1.0)
    return (before + (levels[k] - before) * share).astype(np.float32)


def _read(wave, scheme, sps, pulse="none"):
    chain = Chain(Link(find_scheme(scheme), RATE * sps, RATE, Pulse.parse(pulse)), complex_in=False)
    chain.push(Block(wave, 0))
    chain.finish()
    return Figures(chain.total, chain.context()).reading()


@pytest.mark.parametrize("ramp", [0.3, 0.5])
def test_a_linear_ramp_rises_from_20_to_80_percent_in_six_tenths_of_it_and_crosses_at_one_instant(ramp):
    bits = 2.0 * np.tile(prbs(9, 511, 0), 12) - 1.0
    reading = _read(_held(bits, 32.3, bits.size, ramp), "pam2", 32.3)
    assert reading.rise_20_80_ui == pytest.approx(0.6 * ramp, abs=0.01)
    assert reading.crossing_pp_ui < 0.01
    assert reading.opening_pct == pytest.approx(100, abs=1.5)
    assert reading.dcd_ui == pytest.approx(0.0, abs=0.005)


@pytest.mark.parametrize("late", [0.04, 0.1])
def test_late_falling_edges_are_duty_cycle_distortion(late):
    """Two Diracs a distance apart: rms half of it (FC-MJSQ's model of duty-cycle distortion, from memory)."""
    bits = 2.0 * np.tile(prbs(9, 511, 0), 12) - 1.0
    reading = _read(_held(bits, 32.3, bits.size, 0.3, late), "pam2", 32.3)
    assert reading.dcd_ui == pytest.approx(late, abs=0.005)
    assert reading.crossing_rms_ui == pytest.approx(late / 2, abs=0.004)


@pytest.mark.parametrize(
    ("levels", "ratio"),
    [
        ((-3.0, -1.0, 1.0, 3.0), 1.0),
        ((-3.0, -0.9, 0.9, 3.0), 0.9),
        ((-3.0, -1.1, 1.1, 3.0), 0.9),
        ((-3.0, -1.0, 1.2, 3.0), 0.8),
        ((0.0, 0.9, 2.1, 3.0), 0.8),
    ],
)
def test_level_separation_mismatch_of_four_levels(levels, ratio):
    """IEEE 802.3 Annex 120D.3.1.2: min(3 ES1, 3 ES2, 2 - 3 ES1, 2 - 3 ES2) (formula from memory); the eye is scaled to the levels' line."""
    rng = np.random.default_rng(37)
    sent = np.asarray(levels)[rng.integers(0, 4, 6000)]
    wave = _held(sent, 32.3, sent.size, 0.4) + 0.02 * rng.standard_normal(int(6000 * 32.3)).astype(np.float32)
    reading = _read(wave.astype(np.float32), "pam4", 32.3)
    assert reading.level_linearity == pytest.approx(ratio, abs=0.012)
    unit = np.polyfit([-3, -1, 1, 3], levels, 1)[0]
    for eye, gap in zip(reading.eyes, np.diff(levels), strict=True):
        # between samples, white noise is a little less than at them
        assert eye.opening_pct == pytest.approx(100 * (gap / 2 - 3.0902 * 0.018) / unit, abs=2.0)
        assert eye.height == pytest.approx(2 * eye.opening_pct / 100)
    assert over_the_air(spec_for("pam2", "rrc:0.5", 4.3, 3000)).reading.level_linearity is None
