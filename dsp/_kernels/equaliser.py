"""Decision feedback, symbol by symbol. Behind `dsp.equaliser`; arguments arrive validated."""

from numba import njit, types

_C128 = types.Array(types.complex128, 1, "C", readonly=True)


@njit(types.void(_C128, _C128, _C128, types.complex128[::1], types.complex128[::1]), nogil=True, cache=True)
def feed_back(forward, feedback, points, past, out):
    """``out[k] = forward[k] - feedback . past``; the nearest of ``points`` then joins ``past``, newest first."""
    n = feedback.size
    for k in range(forward.size):
        value = forward[k]
        for j in range(n):
            value -= feedback[j] * past[j]
        out[k] = value
        nearest = points[0]
        least = abs(value - nearest)
        for i in range(1, points.size):
            distance = abs(value - points[i])
            if distance < least:
                least = distance
                nearest = points[i]
        for j in range(n - 1, 0, -1):
            past[j] = past[j - 1]
        if n > 0:
            past[0] = nearest
