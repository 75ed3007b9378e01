"""Jitter taken apart: deterministic and random part of the crossings' spread, and a periodic part in the timing error.

All times are in UI.
"""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import median_filter
from scipy.special import gammainccinv, gammaincinv, ndtri

from dsp._kernels import jitter as kernel
from dsp.diagnosis import JitterSplit

BLOCK = 2048  # symbols of one spectrum
_EAGER, _OFTEN = 8, 4  # blocks of a run that are all taken; after them one of so many
_LEAST_CROSSINGS = 2000
_SHALLOW = 0.01  # share of the crossings beyond which they make up the tail
_LEAST_TAIL = 20  # crossings beyond a place that is fitted
_LOWEST_BIN = 3  # below it the straight line that was taken out has taken the jitter with it
_NEAR = 40  # bins on either side that make a bin's floor
_APART = 6  # bins beside a line that hold nothing of it: those 4 to 6 off
_CHANCE = 1e-4  # that a whole spectrum without a line shows one
_COMB = 5  # lines; more of them are a repeating pattern's


def split_jitter(counts: NDArray[np.int64], random_rms_ui: float | None, ber: float) -> JitterSplit | None:
    """Dual-Dirac split of crossing times counted in equal bins over one UI, ``(bins,)``; None for too few crossings.

    The random part is the slope of both tails on the scale of the normal quantile, at most ``random_rms_ui``, the rms that is
    left when each data pattern's own crossing time is taken out; the deterministic part is what the measured tails are wider
    than that. Source: INCITS, Fibre Channel - Methodologies for Jitter and Signal Quality Specification, dual-Dirac model
    (from memory).
    """
    total = int(counts.sum())
    if total < _LEAST_CROSSINGS:
        return None
    tails = [_tail(side, total) for side in (counts, counts[::-1])]
    known = [0.5 * (tails[0] + tails[1])] if tails[0] is not None and tails[1] is not None else []
    known += [random_rms_ui] if random_rms_ui is not None else []
    if not known:
        return None
    sigma = min(known)
    # both tails seen from their own end: what is not between them is the spread
    deepest = min(_SHALLOW, 3.0 * _LEAST_TAIL / total)
    ends = [_place(side, deepest * total) for side in (counts, counts[::-1])]
    spread = 1.0 - sum(ends) / counts.size
    deterministic = max(spread + 2.0 * float(ndtri(deepest)) * sigma, 0.0)
    return JitterSplit(deterministic, sigma, deterministic - 2.0 * float(ndtri(ber)) * sigma, ber)


def _place(counts: NDArray[np.int64], wanted: float) -> float:
    """Bins from the lower end below which ``wanted`` of the counts lie, linear within its bin."""
    cumulative = np.cumsum(counts)
    index = int(np.searchsorted(cumulative, wanted))
    before = float(cumulative[index - 1]) if index else 0.0
    return index + (wanted - before) / max(float(counts[index]), 1.0)


def _tail(counts: NDArray[np.int64], total: int) -> float | None:
    """Standard deviation of the Gaussian that the lower tail follows; None if too little of it was met."""
    deepest = _LEAST_TAIL / total
    n = int(math.log(_SHALLOW / deepest) / math.log(1.5)) + 1 if deepest < _SHALLOW else 0
    if n < 4:
        return None
    shares = np.geomspace(deepest, _SHALLOW, n)
    places = np.asarray([_place(counts, share * total) for share in shares]) / counts.size
    scale = ndtri(shares)
    # a share's own sampling error, brought onto the quantile's scale
    weight = total * np.exp(-(scale**2)) / shares
    x = scale - np.average(scale, weights=weight)
    slope = float(np.sum(weight * x * places) / np.sum(weight * x * x))
    return max(slope, 0.0)


@dataclass(frozen=True, slots=True)
class Line:
    """A periodic timing error: its peak in UI and its frequency in cycles a symbol."""

    peak_ui: float
    frequency: float


def periodic_line(power: NDArray[np.float64], blocks: int) -> Line | None:
    """The strongest line in the summed spectra of ``blocks`` blocks, ``(BLOCK // 2 + 1,)``; None if none stands clear of its floor.

    Many lines at once are the comb of data that repeat themselves, and no jitter. Source of the threshold: averaged periodogram
    bins of noise follow a chi-square law of 2 ``blocks`` degrees (P. D. Welch, IEEE Trans. Audio Electroacoust. 15(2), 1967, from
    memory).
    """
    if blocks < 2:
        return None
    mean = power / blocks
    floor = median_filter(mean, 2 * _NEAR + 1, mode="nearest") * blocks / float(gammaincinv(blocks, 0.5))
    # where a loop's wander makes the spectrum steep, the nearer bins on either side tell more than the median
    beside = np.convolve(np.pad(mean[1:], (_APART + 1, _APART), mode="edge"), np.full(3, 1.0 / 3.0), mode="valid")
    floor = np.maximum(floor, np.maximum(beside[: mean.size], beside[-mean.size :]))
    # neighbouring bins of the window overlap, and the floor is itself measured
    limit = 1.3 * float(gammainccinv(blocks, _CHANCE / mean.size)) / blocks
    clear = mean > limit * floor
    clear[:_LOWEST_BIN] = False
    clear[-2:] = False
    if not clear.any() or int(np.sum(clear[1:] & ~clear[:-1])) > _COMB:
        return None
    top = int(np.argmax(np.where(clear, mean / floor, 0.0)))
    near = np.arange(top - 2, top + 3)
    rise = np.maximum(mean[near] - floor[near], 0.0)
    # all of a line's energy under a Hann window, wherever between two bins it lies
    peak = math.sqrt(float(rise.sum()) / 1.5) * 4.0 / BLOCK
    return Line(peak, float(rise @ near / rise.sum()) / BLOCK)


def sample_response(slopes: NDArray[np.float64], own: int, frequency: float) -> float:
    """What the decided samples' errors show of a jitter of the symbols at ``frequency`` cycles a symbol, as a share of it.

    Symbols that are sent early or late move their own pulses, and a sample shows the movement of its neighbours': ``slopes``
    ``(lags,)`` is the pulse's slope from lag to lag, ``own`` the place of the symbol itself. Derived here: the least-squares
    estimate of a shift weighs them by slope squared.
    """
    weight = slopes**2
    return float(
        weight @ np.cos(2 * np.pi * frequency * (np.arange(slopes.size) - own)) / max(float(weight.sum()), 1e-30)
    )


class TimingSpectrum:
    """Spectrum of the timing error of an unbroken run of symbols, the loop's response undone.

    The link's timing is the loop's instant plus what the wave says the loop is off: what the loop follows is in the one, what it
    does not in the other. Where waves are smooth it is told from the error of the decided sample by the wave's slope; where
    they have corners, from the time at which they cross the middle.
    """

    def __init__(self, phases: int, corners: bool) -> None:
        self._phases = phases
        self._corners = corners
        self._window = np.hanning(BLOCK + 1)[:-1]
        line = np.linspace(-1.0, 1.0, BLOCK)
        self._line = line / math.sqrt(float(line @ line))
        self.restart()

    def restart(self) -> None:
        """A new run of symbols begins."""
        self._held = np.zeros((3, BLOCK))
        self._fill = 0
        self._blocks = 0
        self._before: list[NDArray[np.float32]] = []

    def push(
        self,
        late: NDArray[np.float64],
        waves: tuple[NDArray[np.float32], ...],
        decided: NDArray[np.float32],
    ) -> list[NDArray[np.float64]]:
        """Take the next symbols; returns the power spectra, ``(BLOCK // 2 + 1,)``, of the blocks that they complete.

        ``late`` ``(n,)``: the loop's instants against a straight line; ``waves``: each rail's, ``(phases, n)``; ``decided``
        ``(rails, n)``.
        """
        done = []
        at, size = 0, late.size
        while at < size:
            n = min(BLOCK - self._fill, size - at)
            if self._wanted():
                place = slice(self._fill, self._fill + n)
                self._held[0, place] = late[at : at + n]
                for wave, levels in zip(waves, decided, strict=True):
                    self._measure(wave, levels, at, n, self._held[1:, place])
            self._fill += n
            at += n
            if self._fill == BLOCK:
                if self._wanted():
                    done.append(self._spectrum())
                self._blocks += 1
                self._fill = 0
                self._held[:] = 0.0
        return done

    def _wanted(self) -> bool:
        return self._blocks < _EAGER or self._blocks % _OFTEN == 0

    def _measure(
        self, wave: NDArray[np.float32], levels: NDArray[np.float32], at: int, n: int, sums: NDArray[np.float64]
    ) -> None:
        # the last symbol's wave has no neighbour yet, nor has the first: they go without
        first, last = max(at, 1), min(at + n, wave.shape[1] - 1)
        if last > first:
            measure = kernel.crossing_errors if self._corners else kernel.sample_errors
            measure(wave, levels, first, last, sums[0, first - at : last - at], sums[1, first - at : last - at])

    def _spectrum(self) -> NDArray[np.float64]:
        late, product, square = self._held
        error = late + product / max(float(square.mean()), 1e-12)
        error -= error.mean()
        error -= self._line * float(self._line @ error)
        spectrum = np.fft.rfft(error * self._window)
        return np.asarray(spectrum.real**2 + spectrum.imag**2)
