"""How well symbol values agree with each constellation, none of them, or a bare ring; and whether the decisions are data at all."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfc

from dsp.link import Scheme

Values = NDArray[np.float64]

_RING_POINTS = 48
_ROUNDS = 20
_NONE = -1e9  # log-likelihood of anything in values that are all 0
_RAIL_FLOOR = 1e-3  # of the power of both, that each rail is taken to have
_STRAY = 0.02  # share of symbols that may be anything: gaps, the first of a burst


@dataclass(frozen=True, slots=True)
class Agreement:
    """Values ``(rails, n)`` under equally likely points in Gaussian noise: mean log-likelihood of a symbol (nats), scale, noise.

    ``gain`` is a level unit in the unit of the values, ``sigma`` the noise's standard deviation on a rail, ``error_rate`` that of a
    bit among such points.
    """

    log_likelihood: float
    gain: float
    sigma: float
    error_rate: float


def _rail_points(scheme: Scheme) -> tuple[Values, ...] | None:
    """Levels of each rail where rails are independent; None for a ring of points."""
    if scheme.name == "8psk":
        return None
    levels = np.asarray(scheme.rail_levels)
    if scheme.rails == 2:
        return levels, levels
    return (levels, np.zeros(1)) if scheme.kind == "carrier" else (levels,)


def agreement(values: Values, scheme: Scheme, weights: Values | None = None) -> Agreement:
    """Maximum-likelihood gain and noise of a scheme's points for ``values`` (centred; a rail for real schemes, two for a carrier).

    Source: the average likelihood ratio test of W. Wei and J. M. Mendel, IEEE Trans. Commun. 48(2), 2000 (from memory), with gain and
    noise fitted by expectation and maximisation.
    """
    rails = _rail_points(scheme)
    if rails is None:
        return _ring(values, 8, scheme)
    power = float(np.mean(np.sum(values**2, axis=0)))
    if not power > 0:
        return Agreement(_NONE, 1.0, 1.0, 0.5)
    energy = float(sum(np.mean(points**2) for points in rails))
    best: tuple[float, float, float] | None = None
    for start_db in (10.0, 24.0):
        share = 1.0 / (1.0 + 10 ** (-start_db / 10))
        gain, sigma = math.sqrt(power * share / energy), math.sqrt(power * (1 - share) / len(rails))
        total = -math.inf
        for _ in range(_ROUNDS):
            cross = own = square = count = total_now = 0.0
            for rail, points in zip(values, rails, strict=True):
                prior = np.full(points.size, 1.0 / points.size) if weights is None or points.size == 1 else weights
                part, responsibility = _expect(
                    rail[:, None], gain * points, sigma, prior, math.sqrt(power / len(rails))
                )
                total_now += part
                cross += float(np.sum(responsibility * rail[:, None] * points))
                own += float(np.sum(responsibility * points**2))
                taken = responsibility.sum(axis=1)
                square += float(taken @ rail**2)
                count += float(taken.sum())
            gain = max(cross / max(own, 1e-30), 1e-15)
            residual = square - 2 * gain * cross + gain**2 * own
            sigma = math.sqrt(max(residual / max(count, 1.0), 1e-12 * power))
            if abs(total_now - total) < 1e-4 * values.shape[1]:
                total = total_now
                break
            total = total_now
        if best is None or total > best[0]:
            best = total, gain, sigma
    assert best is not None
    total, gain, sigma = best
    return Agreement(total / values.shape[1], gain, sigma, _bit_errors(scheme, gain / sigma))


def _expect(values: Values, points: Values, sigma: float, prior: Values, spread: float) -> tuple[float, Values]:
    """Log-likelihood of all values, and each point's share in each; a few values may be of no point, spread as the whole is."""
    exponent = -0.5 * ((values - points) / sigma) ** 2 + np.log(np.maximum(prior, 1e-12))
    top = exponent.max(axis=1, keepdims=True)
    weight = np.exp(exponent - top)
    mass = weight.sum(axis=1, keepdims=True)
    known = (top + np.log(mass))[:, 0] - math.log(sigma) + math.log(1 - _STRAY)
    stray = -0.5 * (values[:, 0] / spread) ** 2 - math.log(spread) + math.log(_STRAY)
    both = np.logaddexp(known, stray)
    share = np.exp(known - both)[:, None] / mass
    return float(np.sum(both)) - values.shape[0] * 0.5 * math.log(2 * math.pi), weight * share


def _ring(values: Values, count: int, scheme: Scheme | None) -> Agreement:
    z = values[0] + 1j * values[1]
    power = float(np.mean(np.abs(z) ** 2))
    if not power > 0:
        return Agreement(_NONE, 1.0, 1.0, 0.5)
    points = np.exp(2j * np.pi * (np.arange(count) + 0.5) / count)
    spread = float(np.var(np.abs(z) ** 2)) / power**2
    noise = 1.0 - math.sqrt(max(1.0 - spread, 1e-6)) if spread < 1 else 0.9
    radius, sigma = math.sqrt(power * (1 - noise)), math.sqrt(max(power * noise / 2, 1e-9 * power))
    total = -math.inf
    for _ in range(_ROUNDS):
        exponent = -0.5 * np.abs(z[:, None] - radius * points) ** 2 / sigma**2
        top = exponent.max(axis=1, keepdims=True)
        weight = np.exp(exponent - top)
        mass = weight.sum(axis=1, keepdims=True)
        known = (top + np.log(mass / count))[:, 0] - 2 * math.log(sigma) + math.log(1 - _STRAY)
        stray = -(np.abs(z) ** 2) / power - math.log(power / 2) + math.log(_STRAY)
        both = np.logaddexp(known, stray)
        now = float(np.sum(both)) - z.size * math.log(2 * math.pi)
        weight *= np.exp(known - both)[:, None] / mass
        taken = max(float(weight.sum()), 1.0)
        radius = max(float(np.sum(weight * (z[:, None] * np.conj(points)).real)) / taken, 1e-15)
        residual = float(np.sum(weight * np.abs(z[:, None] - radius * points) ** 2)) / taken
        sigma = math.sqrt(max(residual / 2, 1e-12 * power))
        if abs(now - total) < 1e-4 * z.size:
            break
        total = now
    ratio = radius / sigma
    errors = erfc(ratio * math.sin(math.pi / 8) / math.sqrt(2)) / 3
    unit = radius / math.sqrt(scheme.symbol_energy()) if scheme is not None else radius
    return Agreement(now / z.size, unit, sigma, float(errors))


def no_structure(values: Values) -> float:
    """Mean log-likelihood of a symbol (nats) under the best of what is no constellation: Gaussian rails, or a ring without phase."""
    rails, _ = values.shape
    variances = np.mean(values**2, axis=1)
    # a rail without noise is no sign of anything
    variances = np.maximum(variances, max(_RAIL_FLOOR * float(np.mean(variances)), 1e-30))
    pooled = float(np.mean(variances))
    gaussian = float(-0.5 * rails * (math.log(2 * math.pi * pooled) + 1.0))
    if rails == 1:
        return gaussian
    separate = -0.5 * float(np.sum(np.log(2 * math.pi * variances) + 1.0))
    return max(gaussian, separate, _ring(values, _RING_POINTS, None).log_likelihood)


def _bit_errors(scheme: Scheme, ratio: float) -> float:
    """Bit error rate of Gray-mapped points a ratio of level unit to noise apart: Proakis and Salehi, 5th ed., sec. 4.3."""
    levels = scheme.levels
    distance = 0.5 * (scheme.rail_levels[1] - scheme.rail_levels[0]) * ratio
    symbol = 2 * (1 - 1 / levels) * 0.5 * float(erfc(distance / math.sqrt(2)))
    return symbol / max(math.log2(levels), 1.0)


def decide(values: Values, scheme: Scheme, gain: float) -> tuple[Values, NDArray[np.int64]]:
    """Nearest points of ``values`` ``(rails, n)`` in level units, and their number among the scheme's points."""
    if scheme.name == "8psk":
        index = np.floor((np.angle(values[0] + 1j * values[1]) / (2 * np.pi) * 8) % 8).astype(np.int64)
        points = math.sqrt(scheme.symbol_energy()) * np.exp(2j * np.pi * (index + 0.5) / 8)
        return np.stack((points.real, points.imag)), index
    levels = np.asarray(scheme.rail_levels)
    edges = gain * 0.5 * (levels[1:] + levels[:-1])
    some = values[: scheme.rails]
    classes = np.stack([np.searchsorted(edges, rail) for rail in some])
    number = classes[0] if scheme.rails == 1 else classes[0] * scheme.levels + classes[1]
    return levels[classes], number


def surprise(numbers: NDArray[np.int64], points: int) -> float:
    """Entropy of a symbol given those before it, as a share of the most there can be; low for patterns and for smooth waves.

    The least over contexts of one to some symbols, as many as there is data to tell; counted half on one part of the sequence and
    scored on the other, so that chance agreement does not lower it.
    """
    n = numbers.size
    worst = 1.0
    order = 1
    while points ** (order + 1) <= n / 8 and order <= 6:
        context = np.zeros(n - order, np.int64)
        for lag in range(1, order + 1):
            context = context * points + numbers[order - lag : n - lag]
        now = numbers[order:]
        half = now.size // 2
        counts = np.full((points**order, points), 0.5 / points)
        np.add.at(counts, (context[:half], now[:half]), 1.0)
        share = counts / counts.sum(axis=1, keepdims=True)
        bits = -float(np.mean(np.log2(share[context[half:], now[half:]])))
        worst = min(worst, bits / math.log2(points))
        order += 1
    return worst


def repetition(decided: Values) -> float:
    """Greatest likeness of a centred symbol sequence to itself at any distance up to half its length, leaving out what white data repeats.

    A sequence that repeats exactly but is white otherwise (a test pattern) gives 0: its spectrum has lines of equal height.
    """
    z = decided[0] + (1j * decided[1] if decided.shape[0] == 2 else 0.0)
    z = z - z.mean()
    n = z.size
    energy = float(np.sum(np.abs(z) ** 2))
    if not energy > 0:
        return 1.0
    spectrum = np.abs(np.fft.fft(z, 2 * n)) ** 2
    alike = np.abs(np.fft.ifft(spectrum))[1 : n // 2] / energy
    return float(np.max(alike[: min(64, alike.size)])) if alike.size else 1.0
