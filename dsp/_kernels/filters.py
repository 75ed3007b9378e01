"""Compiled filters behind `dsp.frontend` and `dsp.matched_filter`; arguments arrive validated.

Slices rather than offsets in the inner loops: they spare the compiler its test for negative indices, and it vectorises.
"""

from numba import njit, types

_F32 = types.Array(types.float32, 1, "C", readonly=True)
_C64 = types.Array(types.complex64, 1, "C", readonly=True)
_OUT = types.float32[::1]
_TILE = 1024


@njit(types.void(_F32, _F32, _OUT), nogil=True, cache=True, fastmath={"contract", "nsz"})
def fir(samples, taps, out):
    """``out[i] = sum_j taps[j] samples[i + j]``; every output is summed in the same order wherever its block began."""
    n_taps = taps.size
    for first in range(0, out.size, _TILE):
        y = out[first : min(first + _TILE, out.size)]
        n = y.size
        for i in range(n):
            y[i] = 0.0
        j = 0
        while j + 8 <= n_taps:
            b = first + j
            x0 = samples[b : b + n]
            x1 = samples[b + 1 : b + 1 + n]
            x2 = samples[b + 2 : b + 2 + n]
            x3 = samples[b + 3 : b + 3 + n]
            x4 = samples[b + 4 : b + 4 + n]
            x5 = samples[b + 5 : b + 5 + n]
            x6 = samples[b + 6 : b + 6 + n]
            x7 = samples[b + 7 : b + 7 + n]
            h0, h1, h2, h3 = taps[j], taps[j + 1], taps[j + 2], taps[j + 3]
            h4, h5, h6, h7 = taps[j + 4], taps[j + 5], taps[j + 6], taps[j + 7]
            for i in range(n):
                y[i] += (h0 * x0[i] + h1 * x1[i] + h2 * x2[i] + h3 * x3[i]) + (
                    h4 * x4[i] + h5 * x5[i] + h6 * x6[i] + h7 * x7[i]
                )
            j += 8
        while j < n_taps:
            h = taps[j]
            x = samples[first + j : first + j + n]
            for i in range(n):
                y[i] += h * x[i]
            j += 1


@njit(types.void(_F32, _F32, types.int64, _OUT), nogil=True, cache=True, fastmath={"contract", "nsz", "reassoc"})
def fir_decimate(samples, taps, factor, out):
    """``out[i] = sum_j taps[j] samples[i factor + j]``."""
    n_taps = taps.size
    for i in range(out.size):
        x = samples[i * factor : i * factor + n_taps]
        total = types.float32(0.0)
        for j in range(n_taps):
            total += taps[j] * x[j]
        out[i] = total


@njit(types.void(_F32, _F32, types.complex64, _C64, _OUT, _OUT), nogil=True, cache=True, fastmath={"contract", "nsz"})
def turn(x_i, x_q, first, turns, out_i, out_q):
    """``out = (x_i + j x_q) first turns[i]``; ``turns`` has at least as many entries."""
    for i in range(x_i.size):
        t = turns[i]
        cr = first.real * t.real - first.imag * t.imag
        ci = first.real * t.imag + first.imag * t.real
        out_i[i] = x_i[i] * cr - x_q[i] * ci
        out_q[i] = x_i[i] * ci + x_q[i] * cr


@njit(types.void(_C64, _OUT, _OUT), nogil=True, cache=True)
def split(samples, out_i, out_q):
    """Split I/Q samples into rails."""
    for i in range(samples.size):
        out_i[i] = samples[i].real
        out_q[i] = samples[i].imag
