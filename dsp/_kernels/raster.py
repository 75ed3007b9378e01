"""From symbol instants to the class raster and the crossings. Behind `dsp.eye`; arguments arrive validated.

A rail's wave is kept symbol by symbol, phase by phase: ``wave[phase, symbol]``, so that every inner loop runs along symbols.
"""

import math

import numpy as np
from numba import njit, types

from dsp._kernels.lanes import turn_over, weigh
from dsp._kernels.tracking import _at

_F32 = types.Array(types.float32, 1, "C", readonly=True)
_F32_2 = types.Array(types.float32, 2, "C", readonly=True)
_F64 = types.Array(types.float64, 1, "C", readonly=True)
_I32 = types.Array(types.int32, 1, "C", readonly=True)
_U64 = types.Array(types.uint64, 1, "C", readonly=True)
_I8 = types.Array(types.int8, 1, "C", readonly=True)
_OUT2 = types.float32[:, ::1]
_FAST = {"contract", "nsz", "reassoc"}
_FINITE = {"contract", "nsz", "reassoc", "nnan", "ninf"}  # samples are finite: sources see to it
_TILE = 512
_NEAR = 256
_COSINE = tuple(np.float32((-1) ** i * (2 * math.pi) ** (2 * i) / math.factorial(2 * i)) for i in range(7))
_SINE = tuple(np.float32((-1) ** i * (2 * math.pi) ** (2 * i + 1) / math.factorial(2 * i + 1)) for i in range(6))


@njit(types.void(_F32, _F32_2, _F64, types.float64, types.float32, types.float32, _OUT2),
      nogil=True, cache=True, fastmath=_FAST)  # fmt: skip
def resample_real(x, table, instants, shift, scale, zero, wave):
    """Put the wave at ``instants[k] + shift`` and between, scaled about ``zero``, into ``wave[:, k]``."""
    n_phases = wave.shape[0]
    for k in range(instants.size - 1):
        t = instants[k] + shift
        step = (instants[k + 1] - instants[k]) / n_phases
        for p in range(n_phases):
            wave[p, k] = (_at(x, t + step * p, table) - zero) * scale


@njit(types.void(_F32, _F32, _F32_2, _F64, types.float64, types.float64, _F32, _F32, _F32, _F32,
                 types.float32, types.float32, types.float32, types.float32, types.boolean, _OUT2, _OUT2),
      nogil=True, cache=True, fastmath=_FAST)  # fmt: skip
def resample_turned(x_i, x_q, table, instants, shift, stagger, cos, sin, step_cos, step_sin,
                    scale_i, scale_q, zero_i, zero_q, both, wave_i, wave_q):  # fmt: skip
    """As `resample_real` for I/Q: each point is turned by the carrier's phase at its own instant.

    ``cos``, ``sin``: of the phase at each instant; ``step_*``: of its advance by one phase step. ``stagger`` samples of
    delay on the Q rail, whose phase advances by half the phases.
    """
    n_phases = wave_i.shape[0]
    half = n_phases // 2
    for k in range(instants.size - 1):
        t = instants[k] + shift
        step = (instants[k + 1] - instants[k]) / n_phases
        c, s = cos[k], sin[k]
        dc, ds = step_cos[k], step_sin[k]
        for p in range(n_phases):
            where = t + step * p
            a = _at(x_i, where, table)
            b = _at(x_q, where, table)
            wave_i[p, k] = (a * c + b * s - zero_i) * scale_i
            if both and stagger == 0.0:
                wave_q[p, k] = (b * c - a * s - zero_q) * scale_q
            c, s = c * dc - s * ds, s * dc + c * ds
        if both and stagger > 0.0:
            c, s = cos[k], sin[k]
            for _ in range(half):
                c, s = c * dc - s * ds, s * dc + c * ds
            for p in range(n_phases):
                where = t + stagger + step * p
                a = _at(x_i, where, table)
                b = _at(x_q, where, table)
                wave_q[p, k] = (b * c - a * s - zero_q) * scale_q
                c, s = c * dc - s * ds, s * dc + c * ds


@njit(nogil=True, cache=True, inline="always", fastmath=_FINITE)
def _turn_of(cycles):
    """Cosine and sine of so many cycles, float32: power series over a quarter turn either way."""
    half_turns = math.floor(2.0 * cycles + 0.5)
    x = types.float32(cycles - 0.5 * half_turns)
    sign = types.float32(1.0 - 2.0 * (half_turns - 2.0 * math.floor(0.5 * half_turns)))
    y = x * x
    c, s = _COSINE, _SINE
    cosine = c[0] + y * (c[1] + y * (c[2] + y * (c[3] + y * (c[4] + y * (c[5] + y * c[6])))))
    sine = x * (s[0] + y * (s[1] + y * (s[2] + y * (s[3] + y * (s[4] + y * s[5])))))
    return sign * cosine, sign * sine


@njit(types.void(_F32, _F32, _F32, _F64, types.float64, _F64, types.float64, types.boolean, types.float32, types.float32,
                 types.float32, types.float32, _OUT2, _OUT2),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def resample_eight(x_i, x_q, weights, instants, shift, phases, ahead, turned, scale_i, scale_q, zero_i, zero_q,
                   wave_i, wave_q):  # fmt: skip
    """Put eight points a symbol from ``instants[k] + shift`` on into ``wave[:, k]``, scaled about zero, by `spread_weights`.

    ``turned``: by the carrier, ``phases`` in cycles, whose phase ``ahead`` of a symbol after the instant is that of the first point.
    A real rail is given twice.
    """
    n = instants.size - 1
    lines_i, lines_q = np.empty(64, np.float32), np.empty(64, np.float32)
    cos, sin = np.empty(_NEAR, np.float32), np.empty(_NEAR, np.float32)
    step_cos, step_sin = np.empty(_NEAR, np.float32), np.empty(_NEAR, np.float32)
    for tile in range(0, n, _NEAR):
        size = min(_NEAR, n - tile)
        for at in range(tile, tile + size, 8):
            some = min(8, tile + size - at)
            for m in range(some):
                t = instants[at + m] + shift
                i = int(t)
                row = types.uint64((t - i) * 512.0 + 0.5)
                weigh(x_i, x_q, types.uint64(i - 3), weights, row, lines_i, lines_q, types.uint64(8 * m))
            if some == 8:
                turn_over(lines_i, wave_i, at)
                turn_over(lines_q, wave_q, at)
            else:
                for m in range(some):
                    for p in range(8):
                        wave_i[p, at + m] = lines_i[8 * m + p]
                        wave_q[p, at + m] = lines_q[8 * m + p]
        if turned:
            here = phases[tile : tile + size + 1]
            for m in range(size):
                step = here[m + 1] - here[m]
                cos[m], sin[m] = _turn_of(here[m] + step * ahead)
                step_cos[m], step_sin[m] = _turn_of(0.125 * step)
        for p in range(8):
            to_i, to_q = wave_i[p, tile : tile + size], wave_q[p, tile : tile + size]
            if not turned:
                for m in range(size):
                    to_i[m] = (to_i[m] - zero_i) * scale_i
                continue
            for m in range(size):
                a, b, c, s = to_i[m], to_q[m], cos[m], sin[m]
                to_i[m] = (a * c + b * s - zero_i) * scale_i
                to_q[m] = (b * c - a * s - zero_q) * scale_q
                cos[m] = c * step_cos[m] - s * step_sin[m]
                sin[m] = s * step_cos[m] + c * step_sin[m]


@njit(types.void(_F32_2, types.int64, types.int64, _F32_2, _U64, _U64, types.boolean, types.int64, types.float32,
                 types.float32, types.uint32[:, ::1], types.uint32[:, ::1]),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def fill(wave, first, count, expand, base_left, base_right, both, n_rows, row_scale, row_zero, left, right):
    """Count the traces of symbols ``first .. first + count`` of ``wave`` column by column.

    Between two phases of the wave ``expand`` puts its points. ``left[column, base_left[k] + row]`` counts the trace from
    symbol k to k + 1; if ``both``, ``right[column, base_right[k] + row]`` does too.
    """
    n_phases = wave.shape[0]
    factor = expand.shape[0]
    line = np.empty(_TILE, np.uint64)
    top = types.float32(n_rows) - types.float32(0.5)
    for tile in range(0, count, _TILE):
        n = min(_TILE, count - tile)
        at = first + tile
        for q in range(n_phases):
            x0 = wave[(q - 3) % n_phases, at + (q - 3) // n_phases : at + (q - 3) // n_phases + n]
            x1 = wave[(q - 2) % n_phases, at + (q - 2) // n_phases : at + (q - 2) // n_phases + n]
            x2 = wave[(q - 1) % n_phases, at + (q - 1) // n_phases : at + (q - 1) // n_phases + n]
            x3 = wave[q, at : at + n]
            x4 = wave[(q + 1) % n_phases, at + (q + 1) // n_phases : at + (q + 1) // n_phases + n]
            x5 = wave[(q + 2) % n_phases, at + (q + 2) // n_phases : at + (q + 2) // n_phases + n]
            x6 = wave[(q + 3) % n_phases, at + (q + 3) // n_phases : at + (q + 3) // n_phases + n]
            x7 = wave[(q + 4) % n_phases, at + (q + 4) // n_phases : at + (q + 4) // n_phases + n]
            for s in range(factor):
                w = expand[s]
                for k in range(n):
                    v = (w[0] * x0[k] + w[1] * x1[k] + w[2] * x2[k] + w[3] * x3[k]) + (
                        w[4] * x4[k] + w[5] * x5[k] + w[6] * x6[k] + w[7] * x7[k]
                    )
                    line[k] = types.uint64(types.int32(min(max(v * row_scale + row_zero, types.float32(0.0)), top)))
                column = q * factor + s
                counts = left[column]
                bl = base_left[tile : tile + n]
                # unsigned sums: an index that may be negative costs a test each
                if both:
                    br = base_right[tile : tile + n]
                    others = right[column]
                    for k in range(n):
                        counts[bl[k] + line[k]] += types.uint32(1)
                        others[br[k] + line[k]] += types.uint32(1)
                else:
                    for k in range(n):
                        counts[bl[k] + line[k]] += types.uint32(1)


@njit(nogil=True, cache=True, inline="always", fastmath=_FAST)
def _crossing(wave, k, p, n_phases):
    """Time in UI at which the cubic through four phases of symbol ``k`` crosses 0 after phase ``p``: Newton from the chord."""
    y0 = wave[p - 1, k] if p > 0 else wave[n_phases - 1, k - 1]
    y1 = wave[p, k]
    y2 = wave[p + 1, k] if p + 1 < n_phases else wave[0, k + 1]
    y3 = wave[p + 2, k] if p + 2 < n_phases else wave[p + 2 - n_phases, k + 1]
    c0 = y1
    c1 = y2 - types.float32(1 / 3) * y0 - types.float32(0.5) * y1 - types.float32(1 / 6) * y3
    c2 = types.float32(0.5) * (y0 + y2) - y1
    c3 = types.float32(1 / 6) * (y3 - y0) + types.float32(0.5) * (y1 - y2)
    u = y1 / (y1 - y2)
    for _ in range(3):
        slope = c1 + u * (types.float32(2.0) * c2 + types.float32(3.0) * u * c3)
        # a step must go on crossing in the direction of the chord
        if slope * (y2 - y1) <= types.float32(0.0):
            break
        u = min(max(u - (c0 + u * (c1 + u * (c2 + u * c3))) / slope, types.float32(0.0)), types.float32(1.0))
    return (p + u) / n_phases


@njit(types.int64(_F32_2, types.int64, types.int64, _I8, _I32, types.int64, types.float64, types.int64[::1],
                  types.float64[:, ::1], types.float64[:, ::1]),
      nogil=True, cache=True)  # fmt: skip
def crossings(wave, first, count, classes, around, n_levels, origin, bins, groups, edges):  # fmt: skip
    """Times at which traces between mirror-image levels cross 0, in UI from the left symbol; return how many.

    Looks at the symbols ``first .. first + count``.
    ``classes`` is aligned with the columns of ``wave``. ``bins`` counts times over one UI; ``groups[g]`` = count, sum, sum of squares
    (about ``origin``) for the pattern of classes at the offsets ``around``; ``edges[rising]`` = count, sum.
    """
    n_phases = wave.shape[0]
    n_bins = bins.size
    found = 0
    for k in range(first, first + count):
        left = classes[k]
        if left + classes[k + 1] != n_levels - 1 or left == classes[k + 1]:
            continue
        low = -1
        high = -1
        before = wave[0, k]
        for p in range(n_phases):
            after = wave[p + 1, k] if p + 1 < n_phases else wave[0, k + 1]
            if (before > 0.0) != (after > 0.0):
                if low < 0:
                    low = p
                high = p
            before = after
        if low < 0:
            continue
        time = _crossing(wave, k, low, n_phases)
        if high != low:
            time = 0.5 * (time + _crossing(wave, k, high, n_phases))
        bins[min(max(int(time * n_bins), 0), n_bins - 1)] += 1
        group = 0
        for offset in around:
            group = group * n_levels + classes[k + offset]
        about = time - origin
        groups[group, 0] += 1.0
        groups[group, 1] += about
        groups[group, 2] += about * about
        rising = 1 if classes[k + 1] > left else 0
        edges[rising, 0] += 1.0
        edges[rising, 1] += time
        found += 1
    return found


@njit(types.void(_F32, _F32, types.int64, types.int64, types.int64, types.int64, types.boolean, types.float64[:, :]),
      nogil=True, cache=True, fastmath=_FAST)  # fmt: skip
def add_gram(a, b, first, last, earliest, n_lags, same, gram):
    """``gram[i, j] += sum over k in first .. last of a[k - lag i] b[k - lag j]``; both rails carry ``n_lags`` beyond either end.

    Each diagonal follows from its first entry: stepping both lags by one moves the sum's ends by one symbol.
    """
    n = last - first
    for border in range(2 * n_lags - 1):
        # first row, then the rest of the first column
        i = 0 if border < n_lags else border - n_lags + 1
        j = border if border < n_lags else 0
        if same and border >= n_lags:
            break
        x = a[first - earliest - i : first - earliest - i + n]
        y = b[first - earliest - j : first - earliest - j + n]
        total = types.float32(0.0)
        for k in range(n):
            total += x[k] * y[k]
        value = types.float64(total)
        for step in range(n_lags - max(i, j)):
            gram[i + step, j + step] += value
            if same and i + step != j + step:
                gram[j + step, i + step] += value
            lag_i, lag_j = earliest + i + step, earliest + j + step
            value += a[first - 1 - lag_i] * b[first - 1 - lag_j] - a[last - 1 - lag_i] * b[last - 1 - lag_j]


@njit(types.void(_F32, _I8, types.float64[:, ::1]), nogil=True, cache=True)
def add_levels(values, classes, sums):
    """Count, sum and sum of squares of ``values`` by class into ``sums[class]``."""
    for k in range(values.size):
        row = sums[types.uint64(classes[k])]
        value = types.float64(values[k])
        row[0] += 1.0
        row[1] += value
        row[2] += value * value
