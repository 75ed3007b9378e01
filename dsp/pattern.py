"""The link's pattern response: what each symbol puts where, and what is left over.

Least squares over a window's sums, so nothing here depends on the window's length but its precision. Times are in UI about
the decision instant.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp.diagnosis import Response
from dsp.eye import EARLIEST, LAGS, LATEST, EyeSums
from dsp.interpolation import BEFORE, PHASES, TAPS, weights

CURSOR = -EARLIEST  # index of lag 0
DISTANCES = np.abs(np.arange(EARLIEST, LATEST + 1))  # of each lag from the symbol
_SMOOTH_BAND = 0.15  # cycles a phase step that a wave kept at few phases may hold


@dataclass(frozen=True, slots=True)
class PatternModel:
    """The response at one instant: ``wave = constant + sum(taps * symbols) + residual``.

    ``taps`` has shape ``(rails, rails, lags)`` (of rail, to rail's symbols); ``residual`` is a variance, ``(rails,)``.
    """

    taps: NDArray[np.float64]
    residual: NDArray[np.float64]

    def cursor(self, rail: int) -> float:
        """What a rail's own symbol is worth."""
        return float(self.taps[rail, rail, CURSOR])

    def neighbours(self, rail: int) -> NDArray[np.float64]:
        """Everything but the cursor, shape ``(rails * lags,)``."""
        taps = self.taps[rail].copy()
        taps[rail, CURSOR] = 0.0
        return np.asarray(taps.ravel())


def beyond_chance(deviation: NDArray[np.float64], variance: NDArray[np.float64] | float) -> NDArray[np.float64]:
    """Estimated deviations drawn towards 0 by what their own sampling variance explains, any shape.

    Source: the positive-part estimator of W. James and C. Stein, Proc. 4th Berkeley Symp. 1, 1961 (from memory), one by one.
    """
    return np.asarray(deviation * np.clip(1.0 - 2.0 * variance / np.maximum(deviation**2, 1e-300), 0.0, 1.0))


def order(taps: NDArray[np.float64], variance: NDArray[np.float64]) -> int:
    """Symbols on either side up to which the taps ``(..., lags)`` help to predict the wave, each of sampling ``variance``.

    Of nested responses the one whose cross-validated error is least: for nearly white symbols a tap lowers it by its own square and
    raises it by twice its variance. Source: M. Stone, J. R. Statist. Soc. B 39(1), 1977: leaving one out agrees with Akaike's
    criterion (from memory).
    """
    gain = np.sum(taps**2 / np.maximum(variance, 1e-300) - 2.0, axis=tuple(range(taps.ndim - 1)))
    rings = np.bincount(DISTANCES, gain)
    rings[0] = 0.0
    return int(np.argmax(np.cumsum(rings)))


class Pattern:
    """The pattern response of one window's sums, at any instant within a symbol of the decision."""

    def __init__(self, sums: EyeSums) -> None:
        rails, phases, n = sums.scheme.rails, sums.phases, max(sums.symbols, 1)
        self._phases = phases
        self.smooth = phases <= 16  # else the wave may have corners
        self._models: dict[float, PatternModel] = {}
        k = sums.gram.shape[0]
        gram = sums.gram + np.eye(k) * (1e-7 * np.trace(sums.gram) / k + 1e-12)
        right = np.moveaxis(sums.cross, 0, 1).reshape(k, rails * phases)
        solution = np.linalg.solve(gram, right)
        explained = np.sum(solution * (2 * right - sums.gram @ solution), axis=0).reshape(rails, phases)
        self._residual = np.maximum(sums.square - explained, 1e-9 * sums.square) / max(n - k, 1)
        self._solution = np.moveaxis(solution.reshape(k, rails, phases), 1, 0)[:, :-1]
        means = sums.gram[:-1, -1] / n
        middle = sums.cross[:, -1] / n
        rows = np.arange(rails) * LAGS
        self._variance = np.asarray(
            [sums.gram[row + CURSOR, row + CURSOR] / n - means[row + CURSOR] ** 2 for row in rows]
        )
        self._chance = 1.0 / (n * np.maximum(self._variance, 1e-9))  # variance of a tap over that of the residual
        self._common = sums.cross[:, :-1] / n - middle[:, None] * means[None, :, None]
        self._covariance = sums.gram[:LAGS, :LAGS] / n - np.outer(means[:LAGS], means[:LAGS])
        self._total = sums.square / n - middle**2

    def model(self, ui: float) -> PatternModel:
        """The response at ``ui``, -1 to 1."""
        ui = round(ui, 9)  # so that instants a step apart share their models
        if ui not in self._models:
            self._models[ui] = self._model(ui)
        return self._models[ui]

    def _model(self, ui: float) -> PatternModel:
        rails = self._solution.shape[0]
        each = [
            [self._along(self._solution[r, s * LAGS : (s + 1) * LAGS], ui) for s in range(rails)] for r in range(rails)
        ]
        at = ui * self._phases
        left = math.floor(at)
        part = at - left
        here, there = left % self._phases, (left + 1) % self._phases
        residual = (1 - part) * self._residual[:, here] + part * self._residual[:, there]
        taps = np.asarray(each)
        variance = (residual[:, None] * self._chance[None])[..., None]
        settled = beyond_chance(taps, variance)
        settled[:, :, order(taps, variance) < DISTANCES] = 0.0
        for rail in range(rails):
            settled[rail, rail, CURSOR] = taps[rail, rail, CURSOR]
        return PatternModel(settled, residual)

    def course(self, rail: int) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
        """What a rail's own symbol puts at all phases of all lags: times in UI, values, each ``(n,)``, and the variance of one."""
        response = self._solution[rail, rail * LAGS : (rail + 1) * LAGS]
        times = np.arange(EARLIEST, LATEST + 1)[:, None] + np.arange(self._phases) / self._phases
        chance = float(np.mean(self._residual[rail]) * self._chance[rail])
        return times.ravel(), np.asarray(response.ravel()), chance

    def rise(self) -> NDArray[np.float64]:
        """The mean wave from a symbol of the first rail at -1 to the next at 1, other symbols as they came, ``(phases + 1,)``."""
        both = [CURSOR, CURSOR - 1]
        square = self._covariance[np.ix_(both, both)]
        # at the end stands the next symbol's own instant
        right = np.concatenate((self._common[0, both], self._common[0, [CURSOR + 1, CURSOR], :1]), axis=1)
        weights = np.linalg.solve(square + np.eye(2) * 1e-9, right)
        return np.asarray(weights[1] - weights[0])

    def slopes(self, ui: float) -> NDArray[np.float64]:
        """How fast the taps at ``ui`` change, per UI, shape ``(rails, rails, lags)``."""
        step = 0.5 / min(self._phases, 16)
        return np.asarray((self.model(ui + step).taps - self.model(ui - step).taps) / (2.0 * step))

    def flanks(self, ui: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The response's slopes after and before ``ui``, which differ where the wave has corners: per UI, each ``(rails, rails, lags)``."""
        if self.smooth:
            slopes = self.slopes(ui)
            return slopes, slopes
        before, here, after = (self.model(ui + step / 16).taps for step in (-1, 0, 1))
        return 16.0 * (after - here), 16.0 * (here - before)

    def line(self, rate: int) -> NDArray[np.float64]:
        """The response at ``rate`` points a symbol (a divisor of the phases), from the earliest lag on, ``(rails, rails, lags * rate)``."""
        rails = self._solution.shape[0]
        return self._solution[:, :, :: self._phases // rate].reshape(rails, rails, -1)

    def response(self, ui: float) -> Response:
        """The taps at ``ui`` for people to look at: each rail's in units of its cursor."""
        model = self.model(ui)
        cursors = np.asarray([model.cursor(rail) for rail in range(model.taps.shape[0])])
        return Response(np.arange(EARLIEST, LATEST + 1), model.taps / cursors[:, None, None])

    def error(self, ui: float) -> NDArray[np.float64]:
        """Variance of what is not a rail's own symbol after least-squares gain, over that gain squared, shape ``(rails,)``."""
        rails = self._solution.shape[0]
        own = [self._along(self._common[r, r * LAGS : (r + 1) * LAGS], ui)[CURSOR] for r in range(rails)]
        gain = np.maximum(np.abs(own) / self._variance, 1e-9)
        total = self._whole(ui)
        return np.asarray(np.maximum(total - np.square(own) / self._variance, 1e-9 * total) / gain**2)

    def own(self, ui: float) -> NDArray[np.float64]:
        """What a rail's own symbol is worth at ``ui``, other symbols averaged, shape ``(rails,)``."""
        rails = self._solution.shape[0]
        own = [self._along(self._common[r, r * LAGS : (r + 1) * LAGS], ui)[CURSOR] for r in range(rails)]
        return np.asarray(own / self._variance)

    def _along(self, response: NDArray[np.float64], ui: float) -> NDArray[np.float64]:
        """A response ``(lags, phases)``, sampled from lag to lag, at ``ui`` after each lag; 0 beyond its ends."""
        line = np.concatenate((np.zeros(2 * self._phases), response.ravel(), np.zeros(2 * self._phases)))
        at = ui * self._phases
        whole = math.floor(at)
        start = 2 * self._phases + whole + self._phases * np.arange(LAGS)
        if not self.smooth:  # corners are kept finely, and straight lines lie between
            return np.asarray(line[start] + (at - whole) * (line[start + 1] - line[start]))
        row = weights(_SMOOTH_BAND)[round((at - whole) * PHASES)].astype(np.float64)
        return np.asarray(line[start[:, None] + np.arange(-BEFORE, TAPS - BEFORE)] @ row)

    def _whole(self, ui: float) -> NDArray[np.float64]:
        """Variance of the wave, shape ``(rails,)``: it repeats from symbol to symbol."""
        at = ui * self._phases
        left = math.floor(at)
        here, there = left % self._phases, (left + 1) % self._phases
        if not self.smooth:
            return np.asarray((1 - at + left) * self._total[:, here] + (at - left) * self._total[:, there])
        # of a wave within one symbol rate only the first harmonic is not 0, so that the series is exact
        series = np.fft.rfft(self._total, axis=1) / self._phases
        turns = np.exp(2j * np.pi * np.arange(series.shape[1]) * ui)
        scale = np.full(series.shape[1], 2.0)
        scale[0] = scale[-1] = 1.0
        return np.asarray((series * turns).real @ scale)
