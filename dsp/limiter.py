"""What a limiter or another bend of the amplitude, ahead of the receive filter, does to the samples that are decided.

The wave ahead of the filter is put together again from the decisions and the pattern response; what of it lies beyond some amplitudes
is, behind the filter, what the linear response's residual is searched for.
"""

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dsp.eye import EARLIEST, HALO, LAGS, LATEST
from dsp.link import Scheme
from dsp.stretches import Stretches

RATE = 8  # points a symbol at which the wave is put together
_MOST = 6000  # symbols looked at
_LEAST = 1500
_RIDGE = 1e-3  # of the filter's greatest power gain, below which what it took away is left away
_LEAST_SHARE = (
    0.03  # of what is left over, below which a bend is not worth telling of unless it stands out now and then
)
_KNOTS = np.linspace(0.35, 0.95, 6)  # amplitudes at which the bend may change, of one that the wave rarely exceeds
_RARELY = 0.001
_EDGES = np.concatenate(([0.0], 0.0005 * 2.0 ** np.arange(7), np.arange(0.0625, 0.5, 0.0625)))
_EDGES = np.concatenate((_EDGES, [0.5], 1.0 - _EDGES[::-1]))
POINT_SHARES = np.diff(_EDGES)  # of the places that stand for the spread of a level: finer towards either end


@dataclass(frozen=True, slots=True)
class Bend:
    """What a bend of the amplitude puts on top of a linear response, at the decision instants; the wave's level units.

    Attributes
    ----------
    taps
        The part of it that a linear response takes in, ``(rails, rails * lags)``, as far as chance leaves it known.
    means, slopes
        By rail and level, ``(rails, levels)``: the mean of the rest, and how it changes with the ISI met.
    points
        What else there is where ISI is below and where it is above its mean: places with the shares `POINT_SHARES`, by rail and level,
        ``(rails, levels, 2, points)``.
    variance
        Of all but the linear part within the levels, ``(rails,)``.
    """

    taps: NDArray[np.float64]
    means: NDArray[np.float64]
    slopes: NDArray[np.float64]
    points: NDArray[np.float64]
    variance: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Residual:
    """One stretch's residual behind response and bend, ``(rails, n)``, and the symbols of all rails and lags, ``(rails * lags, n)``."""

    errors: NDArray[np.float32]
    symbols: NDArray[np.float32]


def raw_response(response: NDArray[np.float64], matched: NDArray[np.float64]) -> NDArray[np.float64]:
    """The response ``(..., n)`` as it was ahead of the filter ``matched`` ``(m,)``, both of `RATE` points a symbol."""
    size = 1 << math.ceil(math.log2(response.shape[-1] + matched.size))
    centred = np.zeros(size)
    centred[: matched.size] = matched
    gain = np.fft.rfft(np.roll(centred, -(matched.size // 2)))
    power = np.abs(gain) ** 2
    spectrum = np.fft.rfft(response, size, axis=-1) * np.conj(gain) / (power + _RIDGE * power.max())
    return np.asarray(np.fft.irfft(spectrum, size, axis=-1)[..., : response.shape[-1]])


class Limiter:
    """A bend of the amplitude, if there is one: a limiter's, an amplifier's.

    ``response`` ``(rails, rails, lags * RATE)``: of a rail, to a rail's symbols, from the earliest lag on; ``matched`` ``(m,)``: the
    receive filter. `found` tells whether there is a bend beyond chance; nothing else means anything if there is none.
    """

    def __init__(
        self, stretches: Stretches, scheme: Scheme, response: NDArray[np.float64], matched: NDArray[np.float64]
    ) -> None:
        self.found = False
        self._scheme = scheme
        self._matched = matched
        kept = [stretch for stretch in stretches if stretch.decided.shape[1] > 4 * HALO]
        total = sum(stretch.decided.shape[1] - 2 * HALO for stretch in kept)
        if total < _LEAST:
            return
        kept = kept[:: max(math.ceil(total / _MOST), 1)]
        self._decided = np.concatenate([stretch.decided for stretch in kept], axis=1)
        ends = np.cumsum([stretch.decided.shape[1] for stretch in kept])
        # the symbols that have their neighbours
        self._core = np.concatenate(
            [
                np.arange(end - stretch.decided.shape[1] + HALO, end - HALO)
                for end, stretch in zip(ends, kept, strict=True)
            ]
        )
        self._sizes = [stretch.decided.shape[1] - 2 * HALO for stretch in kept]
        rails = scheme.rails
        self._lagged = np.ones((rails * LAGS + 1, self._core.size), np.float32)
        for rail in range(rails):
            for i, lag in enumerate(range(EARLIEST, LATEST + 1)):
                self._lagged[rail * LAGS + i] = self._decided[rail, self._core - lag]
        gram = (self._lagged @ self._lagged.T).astype(np.float64)
        self._gram = gram + np.eye(len(gram)) * 1e-6 * np.trace(gram) / len(gram)
        wave = np.concatenate([[wave[0, HALO:-HALO] for wave in stretch.waves] for stretch in kept], axis=1)
        self.raw = raw_response(response, matched)
        ahead = self._ahead(self.raw)
        self._tops = tuple(float(np.quantile(np.abs(part), 1.0 - _RARELY)) for part in (ahead.real, ahead))
        weights, rest = self._linear(np.concatenate((wave, self._features(self.raw))))
        error, free = rest[:rails], rest[rails:]
        self._weights, inverse = _fit(error, free)
        explained = self._weighted(free)
        self._met = self._weighted(weights[:, rails:].T)[:, :-1], explained
        self._left = error - explained
        used = self._weights.size * rails
        noise = float(np.sum(self._left**2)) / (error.size - used)
        beyond = float(np.sum(explained**2)) - noise * (used + 4.0 * math.sqrt(2.0 * used))
        rare = float(np.abs(explained).max()) > math.sqrt(noise)
        self.found = beyond > (0.0 if rare else _LEAST_SHARE * noise * error.size)
        self.rest = np.mean(self._left**2, axis=1)
        linear = weights[:, rails:].T
        if rails == 2:
            linear = linear[: self._weights.size] + 1j * linear[self._weights.size :]
        chance = float(np.einsum("fk,fg,gk->", linear.conj(), inverse.conj(), linear).real) * float(self.rest.sum())
        size = float(np.sum(self._met[0] ** 2))
        self.sure = max(1.0 - 2.0 * chance / max(size, 1e-18), 0.0)

    def residuals(self) -> list[Residual]:
        """What neither response nor bend explains, stretch by stretch."""
        ends = np.cumsum(self._sizes)[:-1]
        return [
            Residual(np.ascontiguousarray(errors, np.float32), np.ascontiguousarray(symbols))
            for errors, symbols in zip(
                np.split(self._left, ends, axis=1), np.split(self._lagged[:-1], ends, axis=1), strict=True
            )
        ]

    def pulses(self, matrix: NDArray[np.float64]) -> NDArray[np.float64] | None:
        """The response, as `raw`, of pulses matched to the filter that reach the instants as ``matrix`` ``(rails, rails)``.

        None where there is no filter to tell the pulse.
        """
        if self._matched.size == 1:
            return None
        pulse = self._matched / float(self._matched @ self._matched)
        place = -EARLIEST * RATE - pulse.size // 2
        line = np.zeros(self.raw.shape[2])
        first, last = max(place, 0), min(place + pulse.size, line.size)
        line[first:last] = pulse[first - place : last - place]
        return np.asarray(matrix[:, :, None] * line)

    def bend(self, taps: NDArray[np.float64], raw: NDArray[np.float64] | None = None) -> Bend:
        """What it does to the link of the response ``taps`` ``(rails, rails * lags)``, ahead of the filter ``raw``, None: as it is."""
        rails, levels = self._scheme.rails, self._scheme.levels
        if raw is None:
            linear, bent = self._met
        else:
            weights, free = self._linear(self._features(raw))
            linear, bent = self._weighted(weights.T)[:, :-1], self._weighted(free)
        others = taps.copy()
        for rail in range(rails):
            others[rail, rail * LAGS - EARLIEST] = 0.0
        isi = others.astype(np.float32) @ self._lagged[:-1]
        means, slopes = np.zeros((rails, levels)), np.zeros((rails, levels))
        points = np.zeros((rails, levels, 2, POINT_SHARES.size))
        variance = np.zeros(rails)
        middles = 0.5 * (_EDGES[1:] + _EDGES[:-1])
        for rail in range(rails):
            own = self._decided[rail, self._core]
            for m, level in enumerate(self._scheme.rail_levels):
                here = np.abs(own - level) < 1e-3
                if here.sum() < 4 * middles.size:
                    continue
                value, about = bent[rail, here], isi[rail, here] - isi[rail, here].mean()
                means[rail, m] = value.mean()
                value = value - value.mean()
                variance[rail] += float(value @ value) / own.size
                spread = float(about @ about)
                if spread > 1e-6 * here.sum():
                    slopes[rail, m] = float(value @ about) / spread
                rest = value - slopes[rail, m] * about
                for side, half in enumerate((about < 0.0, about >= 0.0)):
                    # without ISI there are no sides
                    some = np.sort(rest[half] if half.any() and spread > 1e-6 * here.sum() else rest)
                    points[rail, m, side] = np.interp(middles * (some.size - 1), np.arange(some.size), some)
                    points[rail, m, side, [0, -1]] = some[[0, -1]]
        return Bend(linear * self.sure, means, slopes, points, variance)

    def _ahead(self, raw: NDArray[np.float64]) -> NDArray[Any]:
        """The wave ahead of the filter, `RATE` points a symbol, ``(n,)``, complex where there are two rails."""
        from scipy.signal import oaconvolve  # slow to import, and seldom needed

        rails, n = self._decided.shape
        impulses = np.zeros((rails, n * RATE), np.float32)
        impulses[:, ::RATE] = self._decided
        start = -EARLIEST * RATE
        sent = [
            sum(oaconvolve(impulses[s], raw[r, s])[start : start + n * RATE] for s in range(rails))
            for r in range(rails)
        ]
        return np.asarray(sent[0] + 1j * sent[1] if rails == 2 else sent[0])

    def _features(self, raw: NDArray[np.float64]) -> NDArray[np.float64]:
        """The wave beyond each amplitude, behind the filter, ``(features, n)``, of I/Q real over imaginary parts."""
        from scipy.signal import oaconvolve  # slow to import, and seldom needed

        bent = _beyond(self._ahead(raw), *self._tops)
        if self._matched.size > 1:
            bent = oaconvolve(bent, self._matched[None, :].astype(np.float32), mode="same", axes=1)
        taken = bent[:, self._core * RATE]
        return np.concatenate((taken.real, taken.imag)) if self._scheme.rails == 2 else np.asarray(taken)

    def _linear(self, waves: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Least-squares weights of the symbols for each wave ``(m, n)``, ``(k, m)``, and what they leave over, ``(m, n)``."""
        right = (self._lagged @ waves.T.astype(np.float32)).astype(np.float64)
        weights = np.linalg.solve(self._gram, right)
        return weights, waves - weights.T.astype(np.float32) @ self._lagged

    def _weighted(self, features: NDArray[np.float64]) -> NDArray[np.float64]:
        """The bend of features ``(features, n)``, ``(rails, n)``."""
        if self._scheme.rails == 1:
            return np.asarray(self._weights.real @ features)[None, :]
        half = self._weights.size
        bent = self._weights @ (features[:half] + 1j * features[half:])
        return np.stack((bent.real, bent.imag))


def _beyond(wave: NDArray[Any], rail_top: float, top: float) -> NDArray[Any]:
    """What of a wave ``(n,)`` lies beyond each of `_KNOTS` times a top, ``(features, n)``: any odd bend is a sum of such.

    For I/Q of each rail by itself, as converters clip, and of the envelope, as amplifiers do.
    """
    if not np.iscomplexobj(wave):
        return np.stack([np.sign(wave) * np.maximum(np.abs(wave) - knot * rail_top, 0.0) for knot in _KNOTS])
    size = np.abs(wave)
    unit = wave / np.maximum(size, 1e-9 * top)
    rails = [
        np.sign(wave.real) * np.maximum(np.abs(wave.real) - knot, 0.0)
        + 1j * np.sign(wave.imag) * np.maximum(np.abs(wave.imag) - knot, 0.0)
        for knot in _KNOTS * rail_top
    ]
    return np.stack([*rails, *(unit * np.maximum(size - knot, 0.0) for knot in _KNOTS * top)])


def _fit(
    error: NDArray[np.float64], free: NDArray[np.float64]
) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    """Least-squares weights of features, complex ones as real over imaginary parts, for errors ``(rails, n)``.

    And what the errors' variance is multiplied with to give the weights', ``(features, features)``.
    """
    if error.shape[0] == 2:
        half = free.shape[0] // 2
        basis, target = free[:half] + 1j * free[half:], error[0] + 1j * error[1]
    else:
        basis, target = free.astype(np.complex128), error[0].astype(np.complex128)
    norm = np.sqrt(np.maximum(np.sum(np.abs(basis) ** 2, axis=1), 1e-300))
    gram = (basis.conj() @ basis.T) / np.outer(norm, norm)
    inverse = np.linalg.pinv(gram, rcond=1e-7, hermitian=True) / np.outer(norm, norm)
    return np.asarray(inverse @ (basis.conj() @ target)), np.asarray(inverse)


def compression(
    points: NDArray[np.complex128], shifts: NDArray[np.complex128], counts: NDArray[np.float64], noise: float
) -> tuple[float, float] | None:
    """How much less gain, dB, the greatest amplitude meets than the smallest, and how far it is turned against that, degrees.

    ``points`` ``(n,)`` ideal ones, ``shifts`` what they are off from a linear link, of samples of variance ``noise``. A gain that changes
    with the squared amplitude is fitted; None where all points are as large or where chance explains the change.
    """
    square = np.abs(points) ** 2
    weight = counts * square
    about = square - float(weight @ square) / float(weight.sum())
    spread = float(weight @ about**2)
    if spread < 1e-9 * float(weight @ square**2):
        return None
    # each point's own gain, least squares over all of them
    gain = 1.0 + shifts * np.conj(points) / np.maximum(square, 1e-12)
    slope = complex((weight * about) @ gain) / spread
    if abs(slope) < 4.0 * math.sqrt(noise / spread):
        return None
    mean = complex(weight @ gain) / float(weight.sum())
    nought = mean - slope * float(weight @ square) / float(weight.sum())
    ratio = (nought + slope * float(square.max())) / nought
    return -20.0 * math.log10(max(abs(ratio), 1e-6)), math.degrees(math.atan2(ratio.imag, ratio.real))
