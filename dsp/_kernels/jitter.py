"""Timing error symbol by symbol. Behind `dsp.jitter`; arguments arrive validated.

Both add to ``product`` and ``square``: the sum of the first over the mean of the second is how late the wave is, in UI, with
the weight that its slope gives it.
"""

from numba import njit, types

from dsp._kernels.raster import _crossing

_F32 = types.Array(types.float32, 1, "A", readonly=True)
_F32_2 = types.Array(types.float32, 2, "C", readonly=True)
_OUT = types.float64[:]
_FAST = {"contract", "nsz", "reassoc"}


@njit(types.void(_F32_2, _F32, types.int64, types.int64, _OUT, _OUT), nogil=True, cache=True, fastmath=_FAST)
def sample_errors(wave, levels, first, last, product, square):
    """From the decided samples' errors: a late wave stands where it stood a little before."""
    n_phases = wave.shape[0]
    w1, w2 = wave[1], wave[2]
    b1, b2 = wave[n_phases - 1], wave[n_phases - 2]
    scale = types.float32(n_phases / 12.0)
    for k in range(first, last):
        slope = scale * (types.float32(8.0) * (w1[k] - b1[k - 1]) - (w2[k] - b2[k - 1]))
        product[k - first] -= (wave[0, k] - levels[k]) * slope
        square[k - first] += slope * slope


@njit(types.void(_F32_2, _F32, types.int64, types.int64, _OUT, _OUT), nogil=True, cache=True)
def crossing_errors(wave, levels, first, last, product, square):
    """From the first time at which a trace between mirror-image levels crosses 0."""
    n_phases = wave.shape[0]
    for k in range(first, last):
        if levels[k] + levels[k + 1] != 0.0 or levels[k] == 0.0:
            continue
        before = wave[0, k]
        for p in range(n_phases):
            after = wave[p + 1, k] if p + 1 < n_phases else wave[0, k + 1]
            if (before > 0.0) != (after > 0.0):
                product[k - first] += _crossing(wave, k, p, n_phases) - 0.5
                square[k - first] += 1.0
                break
            before = after
