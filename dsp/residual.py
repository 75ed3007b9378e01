"""What the pattern response leaves over at the decision instant, as running sums, and what it is made of.

The response is that of the symbols before (`ResidualMeter`), so that nothing is kept but sums; they add up as those of the eye do.
Slopes are per UI, values in level units.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import median_filter
from scipy.special import gammainccinv, gammaincinv

from dsp._kernels import residual as kernel
from dsp.link import Scheme
from dsp.sums import laid_out

PRODUCT_LAGS = 4  # symbols between two residuals whose products are summed, from 0 on
FRAME = 1024  # symbols of one spectrum
CELLS = 128  # rows and columns of the constellation
_MEMORY = 8192.0  # symbols that the running response remembers
_REFIT = 16384  # symbols after which it is fitted anew at the latest
_LEAST_FIT = 384
_LEAST_SPLIT = 2000
_EAGER, _STRETCH, _OFTEN = 65536, 8192, 4  # symbols of a thrifty run that are all looked at; then a stretch in so many
_PATTERN = {2: (-2, -1, 0, 1, 2), 3: (-1, 0, 1), 4: (-1, 0, 1), 8: (-1, 0, 1)}


def pattern_around(levels: int) -> tuple[int, ...]:
    """Offsets of the symbols that make a pattern, for so many levels a rail."""
    return _PATTERN[levels]


def pairs(rails: int) -> tuple[tuple[int, int, int], ...]:
    """Rail, other rail and lag of each sum of products."""
    own = tuple((rail, rail, lag) for rail in range(rails) for lag in range(PRODUCT_LAGS))
    return (*own, (0, 1, 0)) if rails == 2 else own


class ResidualSums:
    """Sums over a stretch of symbols.

    Attributes
    ----------
    products
        Normal equations of products of residuals less what patterns explain, ``(pairs, 10)``; see `dsp._kernels.residual.add_products`.
    patterns
        Count and sum of the residual by the pattern of a rail's own symbols, ``(rails, patterns, 2)``; ``square`` ``(rails,)``: of its
        squares.
    points
        Count and sums of both residuals by the point decided, ``(levels**2, 3)``; two rails only.
    power, frames
        Summed spectra of the residual (I + jQ where there are two rails), ``(FRAME,)``, and how many.
    constellation, reach
        Decision samples counted from ``-reach`` to ``reach`` level units, ``(CELLS, CELLS)``, Q by row; two rails only, and none where
        only ``small`` sums are wanted.
    """

    def __init__(self, scheme: Scheme, *, small: bool = False) -> None:
        self._numbers, (self.products, self.patterns, self.square, self.points, self.power) = laid_out(
            (len(pairs(scheme.rails)), 10),
            (scheme.rails, scheme.levels ** len(pattern_around(scheme.levels)), 2),
            (scheme.rails,),
            (scheme.levels**2 if scheme.rails == 2 else 0, 3),
            (FRAME,),
        )
        self.frames = 0
        self.constellation = np.zeros((CELLS, CELLS) if scheme.rails == 2 and not small else (0, 0), np.uint32)
        self.reach = 1.6 * max(scheme.rail_levels)

    def merge(self, other: "ResidualSums", sign: int = 1) -> None:
        """Add the sums of another stretch of the same link, or with ``sign`` -1 take them away."""
        self.frames += sign * other.frames
        if self.constellation.size:
            self.constellation += other.constellation
        join = np.add if sign > 0 else np.subtract
        join(self._numbers, other._numbers, out=self._numbers)


class ResidualMeter:
    """Takes the residual of slabs of symbols against the response of those before and of their own.

    With ``thrifty`` only the first symbols of a run are all looked at, and then one stretch of `_OFTEN`.
    """

    def __init__(self, scheme: Scheme, phases: int, lags: int, *, thrifty: bool) -> None:
        self._thrifty = thrifty
        self._scheme = scheme
        self._phases = phases
        self._lags = lags
        self._around = np.asarray(pattern_around(scheme.levels), np.int32)
        self._window = np.hanning(FRAME + 1)[:-1].astype(np.float32)
        # of the wave about the instant: itself, its slopes, and half a symbol on or before where the other rail lags
        near = 1 if phases <= 16 else phases // 16
        self._steps = (-2 * near, -near, 0, near, 2 * near)
        self._half = phases // 2 if scheme.stagger else 0
        steps = {*self._steps, self._half, -self._half}
        self._wanted = sorted({step % phases for step in steps})
        self.restart()

    def restart(self) -> None:
        """A new run of symbols: nothing of the one before holds."""
        regressors = self._scheme.rails * self._lags + 1
        self._gram = np.zeros((regressors, regressors))
        self._cross = np.zeros((self._scheme.rails, regressors, len(self._wanted)))
        self._known = 0.0  # symbols in the running sums
        self._seen = 0  # of this run
        self._since = 0
        self._fitted = 0.0
        self._rows: NDArray[np.float32] | None = None
        self._table = np.zeros((self._scheme.rails, self._scheme.levels**self._around.size, 2))
        self._square = np.zeros(self._scheme.rails)
        self._deviations: NDArray[np.float32] | None = None
        self._held = np.zeros(0, np.complex64 if self._scheme.rails == 2 else np.float32)

    def push(
        self,
        sums: ResidualSums,
        gram: NDArray[np.float64],
        cross: NDArray[np.float64],
        regressors: Callable[[], NDArray[np.float32]],
        values: NDArray[np.float32],
        classes: NDArray[np.int8],
        first: int,
    ) -> None:
        """Take a slab.

        ``gram`` ``(k, k)`` and ``cross`` ``(rails, k, phases)`` are its normal equations, ``regressors`` makes its regressors ``(k, n)``;
        ``values`` ``(rails, n)`` is the wave at the decision instants, ``classes`` ``(rails, m)`` the levels decided, of which ``first``
        is the slab's.
        """
        count = values.shape[1]
        keep = min(_MEMORY / max(self._known, 1.0), 1.0)
        self._gram = keep * self._gram + gram
        self._cross = keep * self._cross + cross[:, :, self._wanted]
        self._known = keep * self._known + count
        self._since += count
        skipped = self._thrifty and self._seen >= _EAGER and self._seen // _STRETCH % _OFTEN != 0
        self._seen += count
        if self._known < _LEAST_FIT or skipped:
            self._held = self._held[:0]
            return
        fresh = self._rows is None or self._since >= min(self._fitted, _REFIT)
        if fresh:
            self._fit()
        assert self._rows is not None
        rails = self._scheme.rails
        waves = self._rows @ regressors()
        parts = waves.reshape(rails, -1, count)
        errors = values - parts[:, 0]
        late, early = parts[:, 1], parts[:, 2]
        others = np.stack((-parts[0, 3], parts[1, 3])) if rails == 2 else np.zeros_like(errors)
        self._take_patterns(sums, errors, classes, first, keep, fresh=fresh)
        sums.products += products_of(errors, late, early, others)
        if rails == 2:
            kernel.add_constellation(values[0], values[1], 0.5 * CELLS / sums.reach, 0.5 * CELLS, sums.constellation)
        self._spectra(sums, errors)

    def _take_patterns(
        self,
        sums: ResidualSums,
        errors: NDArray[np.float32],
        classes: NDArray[np.int8],
        first: int,
        keep: float,
        *,
        fresh: bool,
    ) -> None:
        """Sum the residuals by pattern and by point, then take out of them, in place, what the patterns' means explain."""
        levels, count = self._scheme.levels, errors.shape[1]
        table = np.zeros_like(self._table)
        for rail, error in enumerate(errors):
            kernel.add_patterns(error, classes[rail], first, self._around, levels, table[rail])
        square = np.einsum("rk,rk->r", errors, errors)
        sums.patterns += table
        sums.square += square
        if errors.shape[0] == 2:
            here = classes[:, first : first + count]
            kernel.add_points(errors[0], errors[1], here[0], here[1], levels, sums.points)
        self._table = keep * self._table + table
        self._square = keep * self._square + square
        if fresh:
            means, _ = pattern_means(self._table, self._square, levels)
            self._deviations = means.astype(np.float32) if means.any() else None
        if self._deviations is not None:
            for rail, error in enumerate(errors):
                kernel.take_patterns(error, classes[rail], first, self._around, levels, self._deviations[rail])

    def _fit(self) -> None:
        """The rows that make value, slopes after and before, and the other rail's value of the regressors, ``(rails * parts, k)``."""
        k = self._gram.shape[0]
        rails = self._scheme.rails
        # above what single precision leaves of a repeating pattern's missing directions
        ridge = np.eye(k) * (1e-6 * np.trace(self._gram) / k + 1e-12)
        right = np.moveaxis(self._cross, 1, 0).reshape(k, -1)
        solution = np.linalg.solve(self._gram + ridge, right).reshape(k, rails, -1)
        a, b, here, d, e = (self._at(solution, step) for step in self._steps)
        step_ui = (self._steps[3] - self._steps[2]) / self._phases
        if self._phases <= 16:
            late = (8.0 * (d - b) - (e - a)) / (12.0 * step_ui)
            early = late
        else:
            late, early = (e - here) / (2.0 * step_ui), (here - a) / (2.0 * step_ui)
        rows = [here, late, early]
        if rails == 2:
            # I at the instants of Q, Q at those of I
            rows.append(np.stack((self._at(solution, -self._half)[:, 1], self._at(solution, self._half)[:, 0]), axis=1))
            rows[3][-1] = 0.0
        for slope in rows[1:3]:
            slope[-1] = 0.0
        self._rows = np.ascontiguousarray(
            np.stack(rows, axis=0).transpose(2, 0, 1).reshape(rails * len(rows), k), np.float32
        )
        self._fitted, self._since = self._known, 0

    def _at(self, solution: NDArray[np.float64], step: int) -> NDArray[np.float64]:
        """Weights of the regressors at ``step`` phases from the decision instant, ``(k, rails)``."""
        symbols, phase = divmod(step, self._phases)
        weights = solution[:, :, self._wanted.index(phase)]
        if symbols == 0:
            return weights.copy()
        # before the instant it is the wave of the symbol before, to which all others stand one nearer
        moved = np.zeros_like(weights)
        moved[-1] = weights[-1]
        for rail in range(self._scheme.rails):
            block = slice(rail * self._lags, (rail + 1) * self._lags)
            moved[block][1:] = weights[block][:-1]
        return moved

    def _spectra(self, sums: ResidualSums, errors: NDArray[np.float32]) -> None:
        line: NDArray[Any] = errors[0] + 1j * errors[1] if errors.shape[0] == 2 else errors[0]
        self._held = np.concatenate((self._held, line))
        whole = self._held.size // FRAME
        if not whole:
            return
        frames = self._held[: whole * FRAME].reshape(whole, FRAME) * self._window
        self._held = self._held[whole * FRAME :].copy()
        spectra = np.fft.fft(frames, axis=1)
        sums.power += np.sum(spectra.real**2 + spectra.imag**2, axis=0)
        sums.frames += whole


def products_of(
    errors: NDArray[np.float32], late: NDArray[np.float32], early: NDArray[np.float32], others: NDArray[np.float32]
) -> NDArray[np.float64]:
    """Sums of products, ``(pairs, 10)``, of neighbouring symbols' residuals.

    With their slopes after and before, and the other rails' values: each ``(rails, n)``.
    """
    rails, count = errors.shape
    result = np.zeros((len(pairs(rails)), 10))
    for row, (a, b, lag) in zip(result, pairs(rails), strict=True):
        to, on = slice(0, count - lag), slice(lag, count)
        kernel.add_products(
            errors[a, to], late[a, to], early[a, to], others[a, to],
            errors[b, on], late[b, on], early[b, on], others[b, on], row,
        )  # fmt: skip
    return result


@dataclass(frozen=True, slots=True)
class Tone:
    """A line in the residual's spectrum: variance in level units squared, frequency in cycles a symbol, -0.5 to 0.5."""

    variance: float
    frequency: float


@dataclass(frozen=True, slots=True)
class Split:
    """What the residual at the decision instant is made of; variances by rail in level units squared, ``(rails,)``.

    Attributes
    ----------
    random, timing, phase
        All that no pattern of symbols explains, and of it what jitter in time and of the carrier's phase makes.
    common, single, turn
        Variances of timing jitter in UI squared, that which all symbols near share and that of each symbol by itself, and of the phase
        jitter in radians squared.
    pattern, deviations
        What a pattern of a rail's own symbols sets beyond the linear response: its variance and its means, ``(rails, patterns)``, drawn
        towards 0 by what chance explains.
    tone
        The strongest line of the spectrum; None if none stands clear. It is part of what is random.
    """

    random: NDArray[np.float64]
    timing: NDArray[np.float64]
    phase: NDArray[np.float64]
    common: float
    single: float
    turn: float
    pattern: NDArray[np.float64]
    deviations: NDArray[np.float64]
    tone: Tone | None


def split(
    sums: ResidualSums,
    scheme: Scheme,
    slopes: NDArray[np.float64],
    *,
    smooth: bool,
    products: NDArray[np.float64] | None = None,
) -> Split | None:
    """Take the residual apart; None for too few symbols.

    ``slopes`` ``(rails, rails * lags)``: of the response at the decision instant, per UI. ``smooth``: no corners, so that each symbol's
    own jitter shows in its neighbours. ``products``: other than those of ``sums``.

    Additive noise is independent of the data; timing jitter grows with the wave's slope, phase jitter with the other rail: least squares of
    the residuals' products on those. Jitter of each symbol by itself leaves no such trace, but a correlation of residuals near each other,
    which is that of the slopes.
    """
    rails = scheme.rails
    own = [pairs(rails).index((rail, rail, 0)) for rail in range(rails)]
    if products is None:
        products = sums.products
    n = float(products[0, 0])
    if n < _LEAST_SPLIT:
        return None
    steepness, others = (products[own, i] / n for i in (1, 2))
    random = products[own, 6] / n
    tone = find_tone(sums.power, sums.frames, real=rails == 1)
    single = _single(products, rails, tone) if smooth else 0.0
    common, turn = _shared(products, scheme, np.sum(slopes**4, axis=1), single)
    # no jitter is more like itself a symbol on than at once: where patterns hide it, it shows there
    turn = max(turn, _turn_kept(products)) if rails == 2 else turn
    deviations, pattern = pattern_means(sums.patterns, sums.square, scheme.levels)
    return Split(
        random, (common + single) * steepness, turn * others, common, single, turn, pattern, deviations, tone
    )  # fmt: skip


def _normal(row: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Normal matrix, right side and response's square, of a row of products."""
    n, x, y, xx, xy, yy, r, rx, ry, rr = row
    return np.array([[n, x, y], [x, xx, xy], [y, xy, yy]]), np.array([r, rx, ry]), rr


def _shared(
    products: NDArray[np.float64], scheme: Scheme, quartic: NDArray[np.float64], single: float
) -> tuple[float, float]:
    """Variances of the jitter in time and in phase that all symbols near share: one least-squares fit to all products at lag 0.

    What jitter of each symbol by itself (of variance ``single``) puts into them is taken out; ``quartic`` ``(rails,)``: sums of the slopes'
    fourth powers.
    """
    matrix, right = np.zeros((2, 2)), np.zeros(2)
    squares = np.square(scheme.rail_levels)
    rails = scheme.rails
    for (a, b, lag), row in zip(pairs(rails), products, strict=True):
        if lag:
            continue
        gram, cross, square = _normal(row)
        alike = squares.var() if a == b else squares.mean() ** 2
        cross[1] -= single * gram[0, 0] * alike * math.sqrt(quartic[a] * quartic[b])
        n = gram[0, 0]
        noise = max(square / n - (cross[0] / n) ** 2, 1e-18)
        # each product has an intercept of its own
        matrix += (gram[1:, 1:] - np.outer(gram[0, 1:], gram[0, 1:]) / n) / noise
        right += (cross[1:] - gram[0, 1:] * cross[0] / n) / noise
    use = np.diag(matrix) > 1e-9 * max(float(matrix.max()), 1e-300)
    use[1] &= rails == 2
    result = np.zeros(2)
    if use.any():
        inner = np.linalg.pinv(matrix[np.ix_(use, use)], hermitian=True)
        estimate = inner @ right[use]
        result[use] = np.maximum(_clear(estimate, np.diag(inner)), 0.0)
    return float(result[0]), float(result[1])


def _turn_kept(products: NDArray[np.float64]) -> float:
    """Covariance of the carrier's phase jitter from symbol to symbol: both rails' least-squares fits at lag 1."""
    weight = total = 0.0
    for row, (a, b, lag) in zip(products, pairs(2), strict=True):
        if lag != 1 or a != b:
            continue
        gram, cross, square = _normal(row)
        inner = np.linalg.pinv(gram + 1e-9 * np.eye(3) * gram[0, 0], hermitian=True)
        noise = max(square / gram[0, 0], 1e-18) * float(inner[2, 2])
        weight += 1.0 / noise
        total += float(inner[2] @ cross) / noise
    return max(float(_clear(np.asarray([total / weight]), np.asarray([1.0 / weight]))[0]), 0.0)


def _single(products: NDArray[np.float64], rails: int, tone: Tone | None) -> float:
    """Variance of the jitter of each symbol by itself: what the residuals of neighbours have in common over what their slopes have."""
    weight = total = 0.0
    for row, (a, b, lag) in zip(products, pairs(rails), strict=True):
        if lag == 0 or a != b:
            continue
        gram, cross, square = _normal(row)
        n = gram[0, 0]
        use = [0, 1, 2] if rails == 2 else [0, 1]
        solved = np.linalg.solve(gram[np.ix_(use, use)] + 1e-9 * np.eye(len(use)) * n, cross[use])
        alike = gram[0, 1] / n
        noise = max(square / n, 1e-18) / n
        line = tone.variance / rails * math.cos(2 * math.pi * tone.frequency * lag) if tone is not None else 0.0
        weight += alike * alike / noise
        total += alike * (float(solved[0]) - line) / noise
    if weight <= 0:
        return 0.0
    return max(float(_clear(np.asarray([total / weight]), np.asarray([1.0 / weight]))[0]), 0.0)


def _clear(estimate: NDArray[np.float64], variance: NDArray[np.float64]) -> NDArray[np.float64]:
    """Estimates less what chance explains of them."""
    return np.asarray(estimate * np.clip(1.0 - 4.0 * variance / np.maximum(estimate**2, 1e-300), 0.0, 1.0))


def pattern_means(
    table: NDArray[np.float64], square: NDArray[np.float64], levels: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Mean residual of each pattern of symbols of so many ``levels``, ``(rails, patterns)``, and their variance, ``(rails,)``.

    Less what is linear in the symbols, which is the response's, and drawn towards 0 by what chance explains. ``table``
    ``(rails, patterns, 2)``: count and sum; ``square`` ``(rails,)``: sum of the residuals' squares. An analysis of variance: 0 where
    the patterns' means differ no more than chance makes them.
    """
    means = np.zeros(table.shape[:2])
    variance = np.zeros(table.shape[0])
    linear = _linear(levels, table.shape[1])
    for rail, (count, total) in enumerate(np.moveaxis(table, 2, 1)):
        n, used = float(count.sum()), int((count > 0).sum()) - linear.shape[1]
        if n < max(2 * used, 1) or used < 1:
            continue
        mean = total / np.maximum(count, 1.0)
        weights = np.linalg.lstsq((linear.T * count) @ linear, linear.T @ total, rcond=1e-9)[0]
        within = max(float(square[rail]) - float(count @ mean**2), 1e-12 * n) / (n - used)
        mean = np.where(count > 0, mean - linear @ weights, 0.0)
        between = float(count @ mean**2) / n - used / n * within
        # three times the sampling error of such a sum of squares
        if between > 3.0 * within * math.sqrt(2.0 * used) / n:
            variance[rail] = between
            means[rail] = mean * between / (between + within / np.maximum(count, 1e-9))
    return means, variance


@lru_cache(maxsize=16)
def _linear(levels: int, patterns: int) -> NDArray[np.float64]:
    """A constant and each symbol of all patterns, ``(patterns, 1 + symbols)``."""
    symbols = round(math.log(patterns) / math.log(levels))
    values = 2.0 * np.indices((levels,) * symbols).reshape(symbols, -1) - (levels - 1.0)
    return np.asarray(np.concatenate((np.ones((1, patterns)), values)).T)


def find_tone(power: NDArray[np.float64], frames: int, *, real: bool) -> Tone | None:
    """The strongest line in the summed spectra of ``frames`` frames, ``(FRAME,)``; None if none stands clear of its floor.

    Source of the threshold: averaged periodogram bins of noise follow a chi-square law of 2 ``frames`` degrees (P. D. Welch, IEEE
    Trans. Audio Electroacoust. 15(2), 1967, from memory).
    """
    if frames < 2:
        return None
    mean = power / frames
    floor = median_filter(mean, 81, mode="wrap") * frames / float(gammaincinv(frames, 0.5))
    limit = 1.3 * float(gammainccinv(frames, 1e-4 / FRAME)) / frames
    bins = np.fft.fftfreq(FRAME, 1.0 / FRAME)
    clear = (mean > limit * floor) & (np.abs(bins) >= 3)
    if not clear.any():
        return None
    top = int(np.argmax(np.where(clear, mean / floor, 0.0)))
    near = np.arange(top - 2, top + 3) % FRAME
    rise = np.maximum(mean[near] - floor[near], 0.0)
    variance = float(rise.sum()) / (FRAME * FRAME * 0.375)
    place = float(bins[top]) + float(rise @ np.arange(-2, 3)) / float(rise.sum())
    return Tone(variance * (2.0 if real else 1.0), abs(place) / FRAME if real else place / FRAME)
