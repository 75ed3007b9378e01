"""Interpolation between samples: short weight tables for any fraction of a sample.

A table has shape ``(PHASES + 1, TAPS)``, float32; row ``p`` weighs the samples at -3 .. +4 about the one at or before the
wanted instant, for the fraction ``p / PHASES``.
"""

from functools import cache, lru_cache

import numpy as np
from numpy.typing import NDArray

from dsp.errors import DspError

PHASES = 512
TAPS = 8
BEFORE = 3  # samples used ahead of the one at or before the wanted instant


@cache
def weights(band: float) -> NDArray[np.float32]:
    """Least-squares fractional-delay weights for signals up to ``band`` cycles a sample (0 < band < 0.5).

    Minimises the mean squared error of ``exp(j w t)`` over the band, fraction by fraction; below -60 dB for ``band`` up to 0.27.
    Source: T. I. Laakso et al., Splitting the unit delay, IEEE Signal Processing Magazine 13(1), 1996, sec. on
    general least squares (from memory).
    """
    return np.ascontiguousarray(_solve(band, np.arange(PHASES + 1.0) / PHASES, derivative=False), dtype=np.float32)


@cache
def slope_weights(band: float) -> NDArray[np.float32]:
    """As `weights`, for the derivative per sample."""
    return np.ascontiguousarray(_solve(band, np.arange(PHASES + 1.0) / PHASES, derivative=True), dtype=np.float32)


@cache
def cubic_weights() -> NDArray[np.float32]:
    """Four-point Lagrange weights in a table of eight taps: for waveforms with corners, sampled finely.

    Source: M. Abramowitz and I. Stegun, Handbook of Mathematical Functions, 25.2.13 (from memory).
    """
    mu = np.arange(PHASES + 1) / PHASES
    table = np.zeros((PHASES + 1, TAPS))
    table[:, BEFORE - 1] = -mu * (mu - 1) * (mu - 2) / 6
    table[:, BEFORE] = (mu + 1) * (mu - 1) * (mu - 2) / 2
    table[:, BEFORE + 1] = -(mu + 1) * mu * (mu - 2) / 2
    table[:, BEFORE + 2] = (mu + 1) * mu * (mu - 1) / 6
    return np.ascontiguousarray(table, dtype=np.float32)


@cache
def cubic_slope_weights() -> NDArray[np.float32]:
    """The derivative of `cubic_weights` by the fraction, per sample."""
    mu = np.arange(PHASES + 1) / PHASES
    table = np.zeros((PHASES + 1, TAPS))
    table[:, BEFORE - 1] = -(3 * mu**2 - 6 * mu + 2) / 6
    table[:, BEFORE] = (3 * mu**2 - 4 * mu - 1) / 2
    table[:, BEFORE + 1] = -(3 * mu**2 - 2 * mu - 2) / 2
    table[:, BEFORE + 2] = (3 * mu**2 - 1) / 6
    return np.ascontiguousarray(table, dtype=np.float32)


@lru_cache(maxsize=8)
def spread_weights(band: float, step: float, count: int, span: int) -> NDArray[np.float32]:
    """Weights of ``count`` points ``step`` samples apart, of which the first is the wanted instant; flat ``(PHASES + 1, span, count)``.

    They weigh the samples from -3 on about the one at or before the wanted instant; ``band`` as in `weights`. Raises DspError where
    ``span`` samples do not reach.
    """
    places = np.arange(PHASES + 1)[:, None] / PHASES + step * np.arange(count)
    whole = np.floor(places).astype(np.int64)
    if int(whole.max()) + TAPS > span:
        raise DspError(f"{count} points {step:.3g} samples apart need more than {span} samples")
    each = _solve(band, np.asarray(places - whole, np.float64).reshape(-1), derivative=False).reshape(
        PHASES + 1, count, TAPS
    )
    table = np.zeros((PHASES + 1, span, count), np.float32)
    row, point = np.indices(whole.shape)
    for tap in range(TAPS):
        table[row, whole + tap, point] = each[:, :, tap]
    return table.reshape(-1)


@cache
def expander(factor: int, band: float) -> NDArray[np.float32]:
    """Weights that put ``factor`` points into each sample interval, shape ``(factor, 6)``, for the samples at -2 .. +3.

    As `weights` for signals up to ``band`` cycles a sample, below -70 dB for 0.13; for ``band`` 0 as `cubic_weights`.
    """
    if band > 0:
        return np.ascontiguousarray(_solve(band, np.arange(0.0, factor) / factor, derivative=False, taps=6), np.float32)
    return np.ascontiguousarray(cubic_weights()[:: PHASES // factor, 1:7][:factor])


def _solve(band: float, fractions: NDArray[np.float64], *, derivative: bool, taps: int = TAPS) -> NDArray[np.float64]:
    places = np.arange(taps) - (taps // 2 - 1)
    edge = 2 * np.pi * band
    gram = edge * np.sinc(2 * band * (places[:, None] - places[None, :]))
    gram += 1e-9 * edge * np.eye(taps)
    distance = fractions[:, None] - places[None, :]
    if derivative:
        near = np.abs(distance) < 1e-9
        safe = np.where(near, 1.0, distance)
        # d/dx of sin(edge x)/x
        target = np.where(near, 0.0, edge * np.cos(edge * safe) / safe - np.sin(edge * safe) / safe**2)
    else:
        target = edge * np.sinc(2 * band * distance)
    return np.asarray(np.linalg.solve(gram, target.T).T)
