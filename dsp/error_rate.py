"""Error rate from the pattern response and the noise: at one instant, over the sampling instant, over a threshold.

Semi-analytic: the data's part is enumerated, the noise's part is Gaussian. All in level units.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from dsp.diagnosis import ErrorCurve
from dsp.link import Scheme
from dsp.mixture import Spread, spread

_PATTERNS = 1024  # data patterns that are told apart where the noise depends on them
_NEGLIGIBLE = 0.01  # share of the noise variance that may as well be everywhere the same
_CURVE = 32  # steps of a curve
_NO_MORE = 1e-6  # share of what a threshold's nearer levels get wrong, below which further ones do not count


@dataclass(frozen=True, slots=True)
class Modulated:
    """Noise whose size the data sets: ``variance`` times the square of ``sum(taps * symbols)``.

    ``taps`` ``(rails * lags,)``: of the wave's slope for timing jitter (variance UI squared), of the other rail for phase jitter
    (radians squared).
    """

    variance: float
    taps: NDArray[np.float64]


def spread_given(
    level: float,
    own: int,
    taps: NDArray[np.float64],
    additive: float,
    modulated: tuple[Modulated, ...],
    levels: NDArray[np.float64],
    shares: NDArray[np.float64],
) -> Spread:
    """Spread of a sample about its own symbol's part when that symbol is ``level``.

    ``taps`` ``(n,)`` and those of ``modulated`` weigh the symbols of all rails and lags, ``own`` the place of the symbol itself;
    ``additive`` is the variance that no data changes; other symbols are drawn independently from ``levels`` with ``shares``.
    """
    mean = float(shares @ levels)
    variance = float(shares @ levels**2) - mean**2
    weight = np.zeros(taps.size)
    for part in modulated:
        weight += part.variance * part.taps**2
    weight[own] = 0.0
    others = taps.copy()
    others[own] = 0.0
    order = np.argsort(-weight)
    most = int(math.log(_PATTERNS) / math.log(levels.size) + 1e-9)
    told = order[:most]
    told = told[weight[told] * variance > _NEGLIGIBLE * additive]
    grid = np.indices((levels.size,) * told.size).reshape(told.size, levels.size**told.size)
    patterns, share = levels[grid].T, np.prod(shares[grid], axis=0)
    square = np.full(share.size, additive)
    for part in modulated:
        rest = part.taps.copy()
        rest[[own, *told]] = 0.0
        about = part.taps[own] * level + mean * rest.sum() + patterns @ part.taps[told]
        square += part.variance * (about**2 + variance * float(rest @ rest))
    others[told] = 0.0
    least = math.sqrt(float(square.min()))
    rest_spread = spread(others, levels, shares, least)
    small = max(rest_spread.sigma**2 - least**2, 0.0)
    if not told.size:
        return rest_spread
    return joined(patterns @ taps[told], share, np.sqrt(square + small), rest_spread)


def joined(shift: NDArray[np.float64], share: NDArray[np.float64], sigma: NDArray[np.float64], rest: Spread) -> Spread:
    """The sum of a shift that comes with a sigma, each ``(n,)`` with its ``share``, and the independent ``rest``."""
    step = float(sigma.min()) / 8.0
    reach = float(np.abs(shift).max() + np.abs(rest.at).max())
    step = max(step, reach / 2048)
    kernel, origin = _on_grid(rest.at, rest.share, step)
    group = np.floor((np.log(sigma) - math.log(float(sigma.min()))) / 0.02).astype(np.int64)
    at, shares, sigmas = [], [], []
    for one in np.unique(group):
        inside = group == one
        density, first = _on_grid(shift[inside], share[inside], step)
        density = np.convolve(density, kernel)
        some = density > 1e-20
        at.append((np.flatnonzero(some) + first + origin) * step)
        shares.append(density[some])
        weight = share[inside] / share[inside].sum()
        sigmas.append(np.full(int(some.sum()), math.sqrt(float(weight @ sigma[inside] ** 2))))
    places = np.concatenate(at)
    order = np.argsort(places)
    return Spread(places[order], np.concatenate(shares)[order], np.concatenate(sigmas)[order])


def _on_grid(at: NDArray[np.float64], share: NDArray[np.float64], step: float) -> tuple[NDArray[np.float64], int]:
    """Shares put on multiples of ``step``, each split between its two neighbours, and the multiple of the first."""
    place = at / step
    whole = np.floor(place).astype(np.int64)
    part = place - whole
    first = int(whole.min())
    size = int(whole.max()) - first + 2
    density = np.bincount(whole - first, weights=share * (1 - part), minlength=size)
    density += np.bincount(whole - first + 1, weights=share * part, minlength=size)
    return np.asarray(density, dtype=np.float64), first


@cache
def _bit_steps(levels: int) -> NDArray[np.float64]:
    """Bits more that are wrong beyond each threshold, for each level sent, shape ``(levels, levels - 1)``; Gray code."""
    gray = np.arange(levels) ^ (np.arange(levels) >> 1)
    wrong = np.asarray([[int(a ^ b).bit_count() for b in gray] for a in gray], dtype=np.float64)
    steps = np.diff(wrong, axis=1)
    # towards lower levels the thresholds are met the other way round
    below = np.arange(levels - 1)[None, :] < np.arange(levels)[:, None]
    return np.where(below, -steps, steps)


@dataclass(frozen=True, slots=True)
class Decisions:
    """Where samples lie when decisions are made: by rail and level.

    ``levels`` ``(rails, levels)``: the means; ``spreads[rail][level]``: about the mean.
    """

    levels: NDArray[np.float64]
    spreads: tuple[tuple[Spread, ...], ...]
    bits: int

    def openings(self, nominal: NDArray[np.float64], tail: float) -> NDArray[np.float64]:
        """Openings in per cent of the ``nominal`` levels' spacing, a share ``tail`` of each level outside, ``(rails, levels - 1)``."""
        result = np.empty((self.levels.shape[0], nominal.size - 1))
        for rail, (levels, spreads) in enumerate(zip(self.levels, self.spreads, strict=True)):
            # levels that are spread alike share one object
            one = all(reach is spreads[0] for reach in spreads)
            ends = [
                (reach.quantile(tail), -reach.mirrored().quantile(tail)) for reach in (spreads[:1] if one else spreads)
            ]
            low, high = np.broadcast_to(ends, (nominal.size, 2)).T
            result[rail] = levels[1:] + low[1:] - levels[:-1] - high[:-1]
        return 100.0 * result / np.diff(nominal)

    def midpoints(self) -> NDArray[np.float64]:
        """Thresholds half-way between the levels, shape ``(rails, levels - 1)``."""
        return np.asarray(0.5 * (self.levels[:, 1:] + self.levels[:, :-1]))

    def error_rate(self, thresholds: NDArray[np.float64]) -> float:
        """Bit error rate, Gray mapping, all points equally likely; thresholds ``(rails, levels - 1)``."""
        total = sum(self._of_threshold(r, t, float(v)) for (r, t), v in np.ndenumerate(thresholds))
        return min(max(total / self.bits, 0.0), 0.5)

    def _of_threshold(self, rail: int, threshold: int, value: float) -> float:
        """Wrong bits a symbol for which this threshold accounts."""
        count: int = self.levels.shape[1]
        steps = _bit_steps(count)[:, threshold]
        total = 0.0
        for side in (range(threshold, -1, -1), range(threshold + 1, count)):
            nearer = 0.0
            for m in side:
                distance, reach = value - float(self.levels[rail, m]), self.spreads[rail][m]
                beyond = reach.above(distance) if threshold >= m else reach.below(distance)
                total += float(steps[m]) * beyond
                nearer += beyond
                if beyond <= _NO_MORE * nearer:
                    break
        return total / count

    def best_thresholds(self) -> NDArray[np.float64]:
        """Those that make the fewest bits wrong, shape ``(rails, levels - 1)``."""
        result = self.midpoints()
        for rail, threshold in np.ndindex(*result.shape):
            low, high = self.levels[rail, threshold : threshold + 2]

            def cost(value: float, rail: int = rail, threshold: int = threshold) -> float:
                wrong = self._of_threshold(rail, threshold, value)
                return math.log(max(wrong, 1e-300))

            middle = float(result[rail, threshold])
            found = minimize_scalar(cost, bounds=(0.75 * low + 0.25 * high, 0.25 * low + 0.75 * high), method="bounded")
            # where nothing is ever wrong the middle is as good
            if found.fun < cost(middle):
                result[rail, threshold] = found.x
        return result

    def over_threshold(self, rail: int, eye: int) -> ErrorCurve:
        """Error rate as one eye's threshold goes from its lower to its upper level and the others stay half-way."""
        thresholds = self.midpoints()
        at = np.linspace(self.levels[rail, eye], self.levels[rail, eye + 1], _CURVE + 1)
        others = sum(
            self._of_threshold(r, t, float(v)) for (r, t), v in np.ndenumerate(thresholds) if (r, t) != (rail, eye)
        )
        rates = np.asarray([self._of_threshold(rail, eye, float(value)) + others for value in at]) / self.bits
        return ErrorCurve(at, np.clip(rates, 0.0, 0.5))


def over_time(error_rate: Callable[[float], float], best_ui: float) -> ErrorCurve:
    """Error rate half a symbol to either side of ``best_ui``; ``error_rate`` tells it at an instant in UI."""
    at = np.linspace(-0.5, 0.5, _CURVE + 1)
    return ErrorCurve(at, np.asarray([error_rate(best_ui + float(shift)) for shift in at]))


def phase_error_rate(scheme: Scheme, reach: Spread) -> float:
    """Bit error rate of points on a circle: the nearest two are as far as half their angle; ``reach`` spreads one rail.

    Source: J. G. Proakis, Digital Communications, 4th ed., sec. 5.2-7, union bound (from memory).
    """
    radius = math.sqrt(scheme.symbol_energy())
    return min(2.0 / scheme.bits * reach.below(-radius * math.sin(math.pi / scheme.points().size)), 0.5)
