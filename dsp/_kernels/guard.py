"""What the loops' symbols are watched by. Behind `dsp.chain`; arguments arrive validated."""

from numba import njit, types

_F32_2 = types.Array(types.float32, 2, "A", readonly=True)
_F64 = types.Array(types.float64, 1, "C", readonly=True)
_FAST = {"contract", "nsz", "reassoc"}


@njit(
    types.UniTuple(types.float64, 2)(_F32_2, _F32_2, types.int64, types.int64), nogil=True, cache=True, fastmath=_FAST
)
def powers(values, decided, first, last):
    """Energy of the decided levels ``(2, n)`` from ``first`` to before ``last``, and of what the values are off them."""
    signal = noise = types.float32(0.0)
    for rail in range(2):
        levels, samples = decided[rail, first:last], values[rail, first:last]
        for k in range(last - first):
            off = samples[k] - levels[k]
            signal += levels[k] * levels[k]
            noise += off * off
    return types.float64(signal), types.float64(noise)


@njit(types.int64(_F32_2, types.int64, types.float64, types.int64, types.float64[::1]), nogil=True, cache=True)
def silence(values, rails, quiet, length, powers):
    """Where a silence begins in ``values`` ``(2, n)``, negative before them; n if there is none.

    Silence is ``length`` values in a row whose mean power is below ``quiet``; it begins with the first that is itself below that.
    ``powers`` begins with those of the values before, and gets the new ones behind them.
    """
    n = values.shape[1]
    held = powers.size - n
    here = powers[held:]
    for k in range(n):
        here[k] = values[0, k] * values[0, k]
    if rails == 2:
        for k in range(n):
            here[k] += values[1, k] * values[1, k]
    limit = quiet * length
    total = 0.0
    for k in range(powers.size):
        total += powers[k]
        if k >= length:
            total -= powers[k - length]
        if total < limit and k >= length - 1:
            k -= length - 1
            while powers[k] >= quiet:
                k += 1
            return k - held
    return n


@njit(types.float64(_F64, types.int64, types.int64), nogil=True, cache=True, fastmath=_FAST)
def total_of(values, first, last):
    """Sum of the values from ``first`` to before ``last``."""
    part = values[first:last]
    total = 0.0
    for k in range(part.size):
        total += part[k]
    return total


@njit(
    types.Tuple((types.float64, types.int64))(
        _F32_2, types.int64, types.int64, types.int64, types.int64, types.float64
    ),
    nogil=True, cache=True, fastmath=_FAST,
)  # fmt: skip
def upright(values, first, last, step, symmetry, energy):
    """Sum of `dsp.chain.power_mean` over every ``step``-th value of ``(2, n)`` from ``first`` to before ``last``, and of how many."""
    total = 0.0
    count = 0
    for k in range(first, last, step):
        re, im = types.float64(values[0, k]), types.float64(values[1, k])
        size = re * re + im * im
        weight = min(size / energy, 4.0)
        left = symmetry
        while left > 1:
            re, im = re * re - im * im, 2.0 * re * im
            # kept at length 1
            length = max(size, 1e-24)
            re, im, size = re / length, im / length, 1.0
            left //= 2
        total += re * weight
        count += 1
    return (total if symmetry == 2 else -total), count
