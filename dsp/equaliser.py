"""What an equaliser would make of a link: fitted on the first half of what was kept, measured on the second.

Nothing here is predicted: the opening is that of samples which the equaliser has passed and was not fitted on.
"""

import math
from dataclasses import dataclass
from functools import cached_property
from typing import Literal

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from dsp._kernels import equaliser as kernel
from dsp.diagnosis import EqualiserTrial
from dsp.errors import DspError
from dsp.eye import HALO, LAGS, LATEST
from dsp.frontend import plan
from dsp.link import Link, Scheme
from dsp.mixture import spread
from dsp.openings import modelled_openings
from dsp.pattern import CURSOR, beyond_chance
from dsp.pulses import Pulse, receive_filter
from dsp.stretches import Stretches

TAPS = (3, 5, 7, 9, 11, 15, 21, 31)
_SPAN = TAPS[-1]
_MIDDLE = _SPAN // 2
_EDGE = _MIDDLE // 2 + 1  # symbols at either end of a stretch that the longest equaliser cannot reach
_FORWARD, _FEEDBACK = 15, 6
_LEAST = 300  # symbols without which a half says nothing
_WORTH = 1.0  # points of opening that more taps must bring
_SINC = 16  # samples on either side of a tap between two samples

Points = NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class _Part:
    """Neighbouring symbols: ``samples`` ``(n, 31)`` about each, ``symbols`` ``(n,)``, and ``inner`` those that have all neighbours."""

    samples: Points
    symbols: Points
    inner: slice


class Equalisers:
    """Equalisers of one window, tried on the stretches that were kept of it."""

    def __init__(self, stretches: Stretches, scheme: Scheme, tail: float) -> None:
        self._scheme = scheme
        self._tail = tail
        self._nominal = np.asarray(scheme.rail_levels)
        # rails whose symbols fall at different instants are equalised each by itself
        self._apart = scheme.rails == 2 and scheme.stagger > 0.0
        self._joint = scheme.rails == 2 and not self._apart
        self._points = scheme.points() if self._joint else self._nominal + 0j
        kept = list(stretches)
        half = len(kept) // 2
        self._fit, self._test = (
            [
                part
                for stretch in some
                for part in self._parts([wave.T.ravel() for wave in stretch.waves], list(stretch.decided))
            ]
            for some in (kept[:half], kept[half:])
        )
        self.enough = min(_inner_size(self._fit), _inner_size(self._test)) >= _LEAST
        if self.enough:
            self._decide_anew()

    def _parts(self, waves: list[NDArray[np.float32]], decided: list[NDArray[np.float32]]) -> list[_Part]:
        if self._joint:
            waves, decided = [waves[0] + 1j * waves[1]], [decided[0] + 1j * decided[1]]
        parts = []
        for wave, symbols in zip(waves, decided, strict=True):
            # a window of samples has its middle at its symbol's instant
            windows = sliding_window_view(wave.astype(np.complex128), _SPAN)[2 * _EDGE - _MIDDLE :: 2]
            n = symbols.size - 2 * _EDGE
            reach = HALO - _EDGE
            # a copy: products of overlapping views are slow
            parts.append(_Part(windows[:n].copy(), symbols.astype(np.complex128), slice(reach, n - reach)))
        return parts

    def _decide_anew(self) -> None:
        """Take the decisions behind the longest equaliser where they are the surer ones: behind a closed eye many are wrong."""
        taps = self._solve(*self._moments(self._fit), slice(0, _SPAN))[0]
        plain = np.zeros(_SPAN, np.complex128)
        plain[_MIDDLE] = 1.0
        if self._doubt(taps) >= self._doubt(plain):
            return
        for part in (*self._fit, *self._test):
            part.symbols[_EDGE:-_EDGE] = self._nearest(part.samples @ taps)

    def _nearest(self, values: Points) -> Points:
        return np.asarray(self._points[np.argmin(np.abs(values[:, None] - self._points), axis=1)])

    def _doubt(self, taps: Points) -> float:
        """Mean square distance from the nearest points, of the half that was fitted."""
        values = np.concatenate([part.samples @ taps for part in self._fit])
        return float(np.mean(np.abs(values - self._nearest(values)) ** 2))

    # -- fitting -------------------------------------------------------------------------------------------------------

    def _moments(self, parts: list[_Part], feedback: int = 0) -> tuple[Points, Points, float]:
        """Normal equations of symbols by samples (and by earlier symbols), and the symbols' mean energy."""
        size = _SPAN + feedback
        gram, right, energy, count = np.zeros((size, size), np.complex128), np.zeros(size, np.complex128), 0.0, 0
        for part in parts:
            rows = part.samples[part.inner]
            start = _EDGE + part.inner.start
            wanted = part.symbols[start : start + len(rows)]
            if feedback:
                past = sliding_window_view(part.symbols, feedback)[start - feedback :][: len(rows), ::-1]
                rows = np.concatenate((rows, -past), axis=1)
            gram += rows.conj().T @ rows
            right += rows.conj().T @ wanted
            energy += float(np.vdot(wanted, wanted).real)
            count += len(rows)
        return gram / count, right / count, energy / count

    def _solve(self, gram: Points, right: Points, energy: float, used: slice) -> tuple[Points, float]:
        """Weights of least error over the whole span, zero outside ``used`` (feedback always used), and that error's energy.

        Scaled so that a symbol is worth itself behind them.
        """
        index = np.r_[np.arange(_SPAN)[used], np.arange(_SPAN, right.size)]
        square = gram[np.ix_(index, index)]
        square = square + np.eye(index.size) * (1e-7 * float(np.trace(square).real) / index.size)
        weights = np.zeros(right.size, np.complex128)
        weights[index] = np.linalg.solve(square, right[index])
        worth = float(np.vdot(right[index], weights[index]).real)
        return weights * (energy / max(worth, 1e-9 * energy)), energy - worth

    def _best_place(self, moments: tuple[Points, Points, float], count: int) -> tuple[Points, slice]:
        """The ``count`` neighbouring taps, the symbol's own sample among them, that leave the least error."""
        best: tuple[float, Points, slice] | None = None
        for first in range(max(_MIDDLE - count + 1, 0), min(_MIDDLE, _SPAN - count) + 1):
            used = slice(first, first + count)
            weights, error = self._solve(*moments, used)
            if best is None or error < best[0]:
                best = error, weights, used
        assert best is not None
        return best[1], best[2]

    # -- measuring -----------------------------------------------------------------------------------------------------

    @cached_property
    def _regressors(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Of the half that is measured: symbols about each one, ``(n, k)``, with a constant; their gram; its inverse."""
        blocks = []
        for part in self._test:
            start = _EDGE + part.inner.start
            n = part.inner.stop - part.inner.start
            blocks.append(sliding_window_view(part.symbols, LAGS)[start - LATEST :][:n, ::-1])
        lagged = np.concatenate(blocks)
        columns = [lagged.real, lagged.imag] if self._joint else [lagged.real]
        rows = np.concatenate((*columns, np.ones((len(lagged), 1))), axis=1)
        gram = rows.T @ rows
        gram += np.eye(gram.shape[0]) * (1e-7 * np.trace(gram) / gram.shape[0])
        return rows, gram, np.linalg.inv(gram)

    def _opening(self, values: Points) -> float:
        """Least opening in per cent of decision samples ``(n,)`` of the half that is measured, by their own pattern response and noise."""
        rows, _, inverse = self._regressors
        rails = [values.real, values.imag] if self._joint else [values.real]
        own = [CURSOR + rail * LAGS for rail in range(len(rails))]
        openings = []
        for value, cursor in zip(rails, own, strict=True):
            solution = inverse @ (rows.T @ value)
            rest = value - rows @ solution
            noise = float(rest @ rest) / max(rest.size - solution.size, 1)
            worth = max(float(solution[cursor]), 1e-9)
            taps = beyond_chance(solution[:-1], noise * np.diag(inverse)[:-1]) / worth
            taps[cursor] = 0.0
            place = np.argmin(np.abs(rows[:, cursor, None] - self._nominal), axis=1)
            counts = np.bincount(place, minlength=self._nominal.size).astype(np.float64)
            # what a level's mean is off its line; its own traces say how far to trust that
            off = np.bincount(place, weights=rest, minlength=self._nominal.size) / np.maximum(counts, 1.0)
            levels = self._nominal + beyond_chance(off / worth, noise / worth**2 / np.maximum(counts, 1.0))
            reach = spread(taps, self._nominal, counts / counts.sum(), math.sqrt(noise) / worth)
            openings.append(modelled_openings(levels, reach, np.diff(self._nominal), self._tail).min())
        return float(min(openings))

    def _linear_values(self, weights: Points) -> Points:
        return np.concatenate([part.samples[part.inner] @ weights for part in self._test])

    def _trial(
        self,
        kind: Literal["linear", "decision-feedback"],
        weights: Points,
        used: slice,
        values: Points,
        feedback: Points,
    ) -> EqualiserTrial:
        return EqualiserTrial(
            kind, weights[used].copy(), feedback, 0.5, _MIDDLE - used.start, self.before_pct, self._opening(values)
        )

    @cached_property
    def before_pct(self) -> float:
        """Opening of the same samples without an equaliser, per cent."""
        plain = np.zeros(_SPAN, np.complex128)
        plain[_MIDDLE] = 1.0
        return self._opening(self._linear_values(plain))

    @cached_property
    def linear(self) -> tuple[EqualiserTrial, ...]:
        """One for each count of `TAPS`: least mean square error, two taps a symbol.

        Source: J. G. Proakis, Digital Communications, 4th ed., sec. 10.2-2 and 10.2-4 (from memory).
        """
        moments = self._moments(self._fit)
        trials = []
        for count in TAPS:
            weights, used = self._best_place(moments, count)
            trials.append(
                self._trial("linear", weights, used, self._linear_values(weights), np.zeros(0, np.complex128))
            )
        return tuple(trials)

    @cached_property
    def chosen(self) -> EqualiserTrial | None:
        """The shortest linear one within a point of the best; None for too few symbols."""
        if not self.enough:
            return None
        best = max(trial.opening_pct for trial in self.linear)
        return next(trial for trial in self.linear if trial.opening_pct >= best - _WORTH)

    @cached_property
    def with_feedback(self) -> EqualiserTrial:
        """15 taps ahead and 6 decisions fed back, its own wrong ones among them.

        Source: J. G. Proakis, Digital Communications, 4th ed., sec. 10.3-1 (from memory).
        """
        weights, used = self._best_place(self._moments(self._fit, _FEEDBACK), _FORWARD)
        forward, feedback = weights[:_SPAN], weights[_SPAN:]
        values = []
        for part in self._test:
            start = _EDGE + part.inner.start
            ahead = part.samples[part.inner] @ forward
            past = part.symbols[start - _FEEDBACK : start][::-1].copy()
            out = np.empty_like(ahead)
            kernel.feed_back(ahead, feedback, self._points, past, out)
            values.append(out)
        return self._trial("decision-feedback", forward, used, np.concatenate(values), feedback.copy())

    def trials(self) -> tuple[EqualiserTrial, ...]:
        """All of them, the linear ones first; empty for too few symbols."""
        return (*self.linear, self.with_feedback) if self.enough else ()


def _inner_size(parts: list[_Part]) -> int:
    return sum(part.inner.stop - part.inner.start for part in parts)


def receive_taps(
    trial: EqualiserTrial, link: Link, *, complex_in: bool
) -> tuple[NDArray[np.float64] | NDArray[np.complex128], float]:
    """The link's receive filter and a linear equaliser as one filter for a link whose pulse is ``taps``: ``(n,)``, and taps a symbol.

    At the rate at which such a link is filtered. Real where the trial's taps are. Raises DspError where the samples are too few a
    symbol.
    """
    own = Link(link.scheme, link.sample_rate_hz, link.symbol_rate_hz, Pulse("taps", taps=(1.0,)), link.carrier_hz)
    front = plan(own, complex_in=complex_in)
    if front.interpolate > 1:
        raise DspError(
            f"taps need 4 or more samples a symbol, and the recording has {link.samples_per_symbol:.3g}; record it faster"
        )
    # the sample that a tap weighs came as much later as the tap stands behind the cursor
    shifts = -(np.arange(trial.taps.size) - trial.cursor) * trial.spacing_ui * front.sps
    half = math.ceil(float(np.abs(shifts).max())) + _SINC
    n = np.arange(-half, half + 1)
    distance = n[None, :] - shifts[:, None]
    window = np.where(np.abs(distance) < _SINC, np.cos(np.pi / 2 * distance / _SINC) ** 2, 0.0)
    equaliser = trial.taps @ (np.sinc(distance) * window)
    taps = np.convolve(receive_filter(link.pulse, front.sps), equaliser)
    imaginary = np.iscomplexobj(taps) and np.abs(taps.imag).max() > 1e-9 * np.abs(taps).max()
    return (taps if imaginary else np.asarray(taps.real)), front.sps
