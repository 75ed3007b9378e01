"""Compiled filters behind `dsp.frontend` and `dsp.matched_filter`; arguments arrive validated.

Slices rather than offsets in the inner loops: they spare the compiler its test for negative indices, and it vectorises.
"""

import math

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


@njit(types.void(_F32, _F32, types.float64, types.int64, _C64, _OUT, _OUT), nogil=True, cache=True,
      fastmath={"contract", "nsz"})  # fmt: skip
def turn(x_i, x_q, frequency, position, turns, out_i, out_q):
    """``out = (x_i + j x_q) exp(-2 pi j frequency (position + i))``; ``turns`` holds the first such factors.

    Runs begin at whole multiples of ``turns.size``, so that rounding does not depend on where a stream is cut.
    """
    at = 0
    while at < x_i.size:
        offset = (position + at) % turns.size
        n = min(turns.size - offset, x_i.size - at)
        cycles = (frequency * (position + at - offset)) % 1.0
        first_i = types.float32(math.cos(2 * math.pi * cycles))
        first_q = types.float32(-math.sin(2 * math.pi * cycles))
        near = turns[offset : offset + n]
        from_i, from_q, to_i, to_q = x_i[at : at + n], x_q[at : at + n], out_i[at : at + n], out_q[at : at + n]
        for i in range(n):
            c = first_i * near[i].real - first_q * near[i].imag
            s = first_i * near[i].imag + first_q * near[i].real
            to_i[i] = from_i[i] * c - from_q[i] * s
            to_q[i] = from_i[i] * s + from_q[i] * c
        at += n


@njit(types.void(_F32, _F32, _C64, _OUT, _OUT), nogil=True, cache=True, fastmath={"contract", "nsz"})
def turn_each(x_i, x_q, turns, out_i, out_q):
    """``out = (x_i + j x_q) turns[i]``."""
    for i in range(x_i.size):
        t = turns[i]
        out_i[i] = x_i[i] * t.real - x_q[i] * t.imag
        out_q[i] = x_i[i] * t.imag + x_q[i] * t.real


@njit(types.void(_C64, _OUT, _OUT), nogil=True, cache=True)
def split(samples, out_i, out_q):
    """Split I/Q samples into rails."""
    for i in range(samples.size):
        out_i[i] = samples[i].real
        out_q[i] = samples[i].imag
