"""Levels in noise: what decisions hide at low SNR, and how ISI and noise spread a level."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from dsp._kernels import mixture as kernel

_FINEST = 2048  # steps that a spread's reach is at most parted into


@dataclass(frozen=True, slots=True)
class Mixture:
    """Equally likely levels ``gain * nominal + zero`` in Gaussian noise of standard deviation ``sigma``."""

    gain: float
    zero: float
    sigma: float


def fit_mixture(
    values: NDArray[np.float64],
    counts: NDArray[np.float64],
    nominal: NDArray[np.float64],
    first: Mixture,
    shift: NDArray[np.float64] | None = None,
    share: NDArray[np.float64] | None = None,
) -> Mixture:
    """Maximum-likelihood mixture for a histogram (``values`` of the bins, their ``counts``), by expectation-maximisation.

    ``shift`` and ``share`` ``(n,)``: where ISI moves each level, in nominal units, and how often. Knows nothing of decisions, so
    it is not biased by wrong ones. Source: A. P. Dempster, N. M. Laird, D. B. Rubin, J. R. Statist. Soc. B 39(1), 1977 (from
    memory); levels tied to one gain and one offset.
    """
    gain, zero, sigma = first.gain, first.zero, first.sigma
    if shift is None or share is None:
        shift, share = np.zeros(1), np.ones(1)
    points = (nominal[:, None] + shift).ravel()
    prior = np.broadcast_to(share, (nominal.size, share.size)).ravel()
    some = counts > 0
    y, n = values[some], counts[some].astype(np.float64)
    total = n.sum()
    for _ in range(400 if points.size <= 8 else 150):
        distance = (y[:, None] - gain * points - zero) / sigma
        weight = prior * np.exp(-0.5 * (distance**2 - np.min(distance**2, axis=1, keepdims=True)))
        weight *= (n / weight.sum(axis=1))[:, None]
        by_point = weight.sum(axis=0)
        mean_a = by_point @ points / total
        mean_y = n @ y / total
        cov = float((y - mean_y) @ weight @ (points - mean_a))
        new_gain = cov / float(by_point @ (points - mean_a) ** 2)
        new_zero = mean_y - new_gain * mean_a
        spread = float(np.sum(weight * (y[:, None] - new_gain * points - new_zero) ** 2) / total)
        new_sigma = math.sqrt(max(spread, 1e-12))
        done = abs(new_sigma - sigma) < 1e-5 * sigma and abs(new_gain - gain) < 1e-5 * gain
        gain, zero, sigma = new_gain, new_zero, new_sigma
        if done:
            break
    return Mixture(gain, zero, sigma)


@dataclass(frozen=True, slots=True)
class Spread:
    """How a level's samples are spread by ISI from data that are independent: a discrete part and Gaussian ``sigma``.

    ``at`` (rising) and ``share`` have shape ``(n,)``; shares sum to 1. ``sigma`` may differ from place to place, ``(n,)``.
    """

    at: NDArray[np.float64]
    share: NDArray[np.float64]
    sigma: float | NDArray[np.float64]

    def mirrored(self) -> "Spread":
        """The same spread towards the other side."""
        sigma = self.sigma if isinstance(self.sigma, float) else self.sigma[::-1]
        return Spread(-self.at[::-1], self.share[::-1], sigma)

    def scaled(self, factor: float) -> "Spread":
        """The same spread in units ``factor`` times smaller."""
        return Spread(self.at * factor, self.share, self.sigma * factor)

    def wider(self, variance: float) -> "Spread":
        """The same with so much more variance in its Gaussian part, or less; a tenth of it stays."""
        square = np.square(self.sigma)
        sigma = np.sqrt(np.maximum(square + variance, 0.1 * square))
        return Spread(self.at, self.share, float(sigma) if isinstance(self.sigma, float) else sigma)

    def below(self, limit: float) -> float:
        """Probability of a sample below ``limit``; exact in the far tail."""
        return float(kernel.below(self.at, self.share, self._sigmas(), limit))

    def above(self, limit: float) -> float:
        """Probability of a sample above ``limit``; exact in the far tail."""
        return self.mirrored().below(-limit)

    def _sigmas(self) -> NDArray[np.float64]:
        """``(n,)`` or ``(1,)``."""
        return np.atleast_1d(np.asarray(self.sigma, dtype=np.float64))

    def variance(self) -> float:
        """Of the discrete part."""
        return max(float(self.share @ self.at**2) - float(self.share @ self.at) ** 2, 0.0)

    def grouped(self, count: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """The discrete part as ``count`` points or fewer of about equal share: values and shares, each ``(m,)``."""
        group = np.minimum((np.cumsum(self.share) - 0.5 * self.share) * count, count - 1e-9).astype(np.int64)
        share = np.bincount(group, weights=self.share, minlength=count)
        some = share > 0
        at = np.bincount(group, weights=self.share * self.at, minlength=count)[some] / share[some]
        return np.asarray(at, dtype=np.float64), np.asarray(share[some], dtype=np.float64)

    def quantile(self, share: float) -> float:
        """The value that a ``share`` of the samples lies below."""
        sigma = self._sigmas()
        reach = (1.0 - float(ndtri(share))) * float(sigma.max())
        low, high = float(self.at[0]) - reach, float(self.at[-1]) + reach
        return float(kernel.quantile(self.at, self.share, sigma, share, low, high))


def spread(taps: NDArray[np.float64], levels: NDArray[np.float64], shares: NDArray[np.float64], sigma: float) -> Spread:
    """Spread of ``sum(taps * a)`` plus noise ``sigma``, the a drawn independently from ``levels`` with ``shares``.

    Taps ``(n,)`` too small to matter one by one join the Gaussian part.
    """
    outer = float(np.max(np.abs(levels)))
    mean = float(shares @ levels)
    variance = float(shares @ levels**2) - mean**2
    order = np.argsort(-np.abs(taps))
    sigma = max(sigma, 1e-4)
    big = [float(taps[i]) for i in order[:24] if abs(taps[i]) * outer > max(0.1 * sigma, 2e-3)]
    small = np.asarray([float(taps[i]) for i in order[len(big) :]])
    rest = math.sqrt(sigma**2 + variance * float(small @ small))
    reach = sum(abs(t) for t in big) * outer
    # fine against the noise, which then hides the grid
    step = max(reach / _FINEST, min(rest / 16.0, max(reach / 16.0, 1e-9)), 1e-9)
    half = math.ceil(reach / step) + len(big) + 1
    density = np.zeros(2 * half + 1)
    density[half] = 1.0
    added = kernel.spread_levels(np.asarray(big), levels, shares, step, density, np.empty_like(density))
    some = density > 1e-18
    at = np.asarray((np.flatnonzero(some) - half) * step + mean * float(small.sum()), dtype=np.float64)
    share = density[some]
    return Spread(at, share / share.sum(), math.sqrt(max(rest**2 - added, 0.5 * rest**2)))


def tail_reach(
    taps: NDArray[np.float64],
    levels: NDArray[np.float64],
    shares: NDArray[np.float64],
    sigma: NDArray[np.float64],
    tail: float,
) -> NDArray[np.float64]:
    """How far beyond its level a share ``tail`` of the samples lies, for many sets of ``taps`` ``(n, k)`` and ``sigma`` ``(n,)`` at once.

    The leading term of the saddlepoint approximation, a few per cent off: good to compare sets by. Source: H. E. Daniels, Annals
    of Mathematical Statistics 25, 1954 (from memory).
    """
    reach = np.empty(sigma.size)
    about = levels - float(shares @ levels)
    kernel.tail_reach(np.ascontiguousarray(taps), about, shares, np.maximum(sigma, 1e-3), math.log(tail), reach)
    return reach
