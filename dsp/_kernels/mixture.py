"""Spreads of a level: a discrete part in Gaussian noise. Behind `dsp.mixture`; arguments arrive validated.

``at`` (rising) and ``share`` ``(n,)``; ``sigma`` ``(n,)`` or ``(1,)``.
"""

import math

from numba import njit, types

_F64 = types.Array(types.float64, 1, "A", readonly=True)
_F64_2 = types.Array(types.float64, 2, "C", readonly=True)
_ROOT_HALF = math.sqrt(0.5)
_DENSITY = 1.0 / math.sqrt(2.0 * math.pi)


@njit(types.float64(_F64, _F64, _F64, types.float64, types.float64[::1], types.float64[::1]), nogil=True, cache=True)
def spread_levels(taps, levels, shares, step, density, other):
    """Density of ``sum(taps * a)``, the a drawn from ``levels`` with ``shares``, on multiples of ``step`` about the middle.

    ``density`` holds 1 in its middle and 0 elsewhere, ``other`` as much room. Returns the variance that splitting between two
    neighbouring multiples has added.
    """
    middle = density.size // 2
    low = high = middle
    added = 0.0
    for tap in taps:
        below = above = 0
        for level in levels:
            shift = math.floor(tap * level / step)
            below = min(below, shift)
            above = max(above, shift + 1)
        for i in range(low + below, high + above + 1):
            other[i] = 0.0
        for j in range(levels.size):
            shift = tap * levels[j] / step
            whole = math.floor(shift)
            part = shift - whole
            added += shares[j] * part * (1.0 - part) * step * step
            left, right = shares[j] * (1.0 - part), shares[j] * part
            for i in range(low, high + 1):
                other[i + whole] += left * density[i]
            for i in range(low, high + 1):
                other[i + whole + 1] += right * density[i]
        low += below
        high += above
        for i in range(low, high + 1):
            density[i] = other[i]
    return added


@njit(types.float64(_F64, _F64, _F64, types.float64), nogil=True, cache=True)
def below(at, share, sigma, limit):
    """Probability of a sample below ``limit``."""
    each = sigma.size > 1
    scale = _ROOT_HALF / sigma[0]
    total = 0.0
    for i in range(at.size):
        if each:
            scale = _ROOT_HALF / sigma[i]
        total += share[i] * 0.5 * math.erfc((at[i] - limit) * scale)
    return total


@njit(types.float64(_F64, _F64, _F64, types.float64, types.float64, types.float64), nogil=True, cache=True)
def quantile(at, share, sigma, target, low, high):
    """The value between ``low`` and ``high`` that a share ``target`` of the samples lies below: Newton's steps on its logarithm."""
    each = sigma.size > 1
    x = low
    wanted = math.log(target)
    x = 0.5 * (low + high)
    for _ in range(200):
        total = slope = 0.0
        scale = _ROOT_HALF / sigma[0]
        for i in range(at.size):
            if each:
                scale = _ROOT_HALF / sigma[i]
            z = (at[i] - x) * scale
            total += share[i] * 0.5 * math.erfc(z)
            slope += share[i] * math.exp(-z * z) * scale
        slope *= _DENSITY / _ROOT_HALF
        if total < target:
            low = x
        else:
            high = x
        next_x = 0.5 * (low + high)
        if total > 0.0 and slope > 0.0:
            step = (math.log(total) - wanted) * total / slope
            if low < x - step < high:
                next_x = x - step
        if abs(next_x - x) <= 1e-9 * (1.0 + abs(x)):
            return next_x
        x = next_x
    return x


@njit(types.void(_F64_2, _F64, _F64, _F64, types.float64, types.float64[::1]), nogil=True, cache=True)
def tail_reach(taps, levels, shares, sigma, log_tail, reach):
    """`dsp.mixture.tail_reach`: the saddlepoint by halving its logarithm, one set of taps after the other; levels about their mean."""
    for n in range(taps.shape[0]):
        # it lies where the Gaussian part alone would have it, or below
        low, high = 1e-3, 10.0 / sigma[n]
        for _ in range(24):
            s = math.sqrt(low * high)
            k0 = 0.5 * (s * sigma[n]) ** 2
            k1 = s * sigma[n] ** 2
            k2 = sigma[n] ** 2
            for tap in taps[n]:
                top = -math.inf
                for level in levels:
                    top = max(top, s * tap * level)
                total = first = second = 0.0
                for i in range(levels.size):
                    moved = tap * levels[i]
                    weight = shares[i] * math.exp(s * moved - top)
                    total += weight
                    first += weight * moved
                    second += weight * moved * moved
                first /= total
                k0 += math.log(total) + top
                k1 += first
                k2 += second / total - first * first
            if k0 - s * k1 - math.log(s * math.sqrt(2.0 * math.pi * k2)) < log_tail:
                high = s
            else:
                low = s
        reach[n] = k1
