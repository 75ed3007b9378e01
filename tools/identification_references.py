"""Textbook estimators of symbol rate and carrier, which are told what identification has to find, and the bounds of any estimator."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy import fft, signal

if TYPE_CHECKING:
    from dsp.transmitter import Transmission, TransmitSpec

_SLOWEST = 420.0  # samples a symbol, down to which a clock is looked for


def analytic(samples: NDArray[Any], spec: TransmitSpec) -> NDArray[np.complex128]:
    """The link's own band as I/Q about 0: its carrier, and what its pulse occupies, are told."""
    width = 0.5 * (1 + (spec.pulse.number or 1.0)) if spec.pulse.family in ("rrc", "rc") else 1.5
    edge = 1.05 * width * spec.symbol_rate_hz / spec.sample_rate_hz
    centre = spec.carrier_hz / spec.sample_rate_hz
    size = fft.next_fast_len(samples.size)
    transform = fft.fft(samples, size)
    transform[np.abs((fft.fftfreq(size) - centre + 0.5) % 1.0 - 0.5) > edge] = 0.0
    wave = fft.ifft(transform)[: samples.size]
    return np.asarray(wave * np.exp(-2j * np.pi * centre * np.arange(samples.size)))


def square_law_rate(wave: NDArray[np.complex128]) -> float:
    """Symbols a sample by the strongest line of the power of ``wave`` ``(n,)``.

    Source: M. Oerder and H. Meyr, Digital filter and square timing recovery, IEEE Trans. Commun. 36(5), 1988.
    """
    power = np.abs(wave) ** 2
    return _strongest(power - power.mean(), 1 / _SLOWEST, 0.5)


def power_law_carrier(symbols: NDArray[np.complex128], order: int) -> float:
    """Turn from symbol to symbol, cycles, up to multiples of ``1/order``, by the strongest line of the symbols' power.

    Source: A. J. and A. M. Viterbi, Nonlinear estimation of PSK-modulated carrier phase, IEEE Trans. Inf. Theory 29(4), 1983.
    """
    return _strongest(symbols**order, -0.5, 0.5) / order


def symbols_of(wave: NDArray[np.complex128], sent: Transmission, spec: TransmitSpec) -> NDArray[np.complex128]:
    """What the matched filter gives at the transmitter's own instants."""
    from dsp.pulses import receive_filter

    true_sps = spec.samples_per_symbol / (1 + 1e-6 * spec.clock_ppm)
    taps = np.asarray(receive_filter(spec.pulse, true_sps))
    filtered = signal.oaconvolve(wave, taps, mode="same")
    # between samples: four times as many by transform, then straight lines
    size = fft.next_fast_len(filtered.size)
    fine = signal.resample(np.pad(filtered, (0, size - filtered.size)), 4 * size)
    at = sent.instants[(sent.instants > 0) & (sent.instants < filtered.size - 2)] * 4
    grid = np.arange(fine.size)
    return np.asarray(np.interp(at, grid, fine.real) + 1j * np.interp(at, grid, fine.imag))


def _strongest(values: NDArray[Any], lowest: float, highest: float) -> float:
    """Frequency of the strongest line, cycles a value, refined between bins by a parabola through the logarithms of a Hann window's."""
    size = fft.next_fast_len(2 * values.size)
    level = np.abs(fft.fft(values * np.hanning(values.size), size))
    frequency = fft.fftfreq(size)
    peak = int(np.argmax(np.where((frequency >= lowest) & (frequency <= highest), level, 0.0)))
    left, middle, right = (math.log(max(float(level[(peak + step) % size]), 1e-300)) for step in (-1, 0, 1))
    bend = left - 2 * middle + right
    return float(frequency[peak]) + (0.5 * (left - right) / bend if bend < 0 else 0.0) / size


def rate_bound_ppm(rolloff: float, symbols: int, snr_db: float) -> float:
    """Modified Cramér-Rao bound of the symbol rate, ppm: of the slope of a timing that is known symbol by symbol to its own bound.

    Source: A. N. D'Andrea, U. Mengali and R. Reggiannini, IEEE Trans. Commun. 42(2/3/4), 1994: 1/(8 pi^2 xi Es/N0) a symbol, for a root
    raised cosine xi = 1/12 + a^2 (1/4 - 2/pi^2); a straight line's slope has 12/n^3 of that.
    """
    xi = 1 / 12 + rolloff**2 * (1 / 4 - 2 / math.pi**2)
    return 1e6 * math.sqrt(12 / (symbols**3 * 8 * math.pi**2 * xi * 10 ** (snr_db / 10)))


def carrier_bound(symbols: int, snr_db: float) -> float:
    """Modified Cramér-Rao bound of the carrier, cycles a symbol: 3/(2 pi^2 n^3 Es/N0), same source."""
    return math.sqrt(3 / (2 * math.pi**2 * symbols**3 * 10 ** (snr_db / 10)))
