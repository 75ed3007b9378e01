"""The textbook estimators that identification is held against, and the bounds, on streams whose truth is known."""

import numpy as np
import pytest

from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit
from tools.identification_references import (
    analytic,
    carrier_bound,
    power_law_carrier,
    rate_bound_ppm,
    square_law_rate,
    symbols_of,
)


def test_the_bounds_are_the_published_ones():
    """D'Andrea, Mengali and Reggiannini, IEEE Trans. Commun. 42, 1994, at 20 dB over 100 symbols: 3.8985e-5 cycles a symbol.

    The timing's bound for roll-off 0.35, 0.003769 UI over 100 symbols, is 0.03769 a symbol; a line's slope has sqrt(12/n^3) of it.
    """
    assert carrier_bound(100, 20.0) == pytest.approx(3.8985e-5, rel=1e-3)
    assert rate_bound_ppm(0.35, 100, 20.0) == pytest.approx(1e6 * 0.03769 * np.sqrt(12 / 100**3), rel=1e-3)


def test_the_textbook_estimators_come_near_the_truth_on_a_plain_link():
    spec = TransmitSpec(
        scheme="qpsk", symbol_rate_hz=10_000, sample_rate_hz=47_000, pulse=Pulse("rrc", 0.5), symbols=8000, snr_db=25.0,
        clock_ppm=30.0, carrier_hz=1234.0, seed=4,
    )  # fmt: skip
    sent = transmit(spec)
    wave = analytic(sent.samples, spec)
    assert square_law_rate(wave) * 47_000 == pytest.approx(10_000 * (1 + 30e-6), rel=5e-6)
    turn = power_law_carrier(symbols_of(wave, sent, spec), 4)
    assert (turn + 0.125) % 0.25 - 0.125 == pytest.approx(0.0, abs=1e-6)
