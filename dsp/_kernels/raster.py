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
_PIECES = types.Array(types.int64, 2, "C", readonly=True)
_I8 = types.Array(types.int8, 1, "C", readonly=True)
_OUT2 = types.float32[:, ::1]
_FAST = {"contract", "nsz", "reassoc"}
_FINITE = {"contract", "nsz", "reassoc", "nnan", "ninf"}  # samples are finite: sources see to it
_TILE = 512  # symbols of a piece
_NEAR = 256
_NEARER = 1024
_SLAB = 4096
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


@njit(nogil=True, cache=True, inline="always")
def _count(places, n, counts):
    """Count the first ``n`` places, from both halves in turn: neighbours often meet in one counter and would wait for it."""
    half = n // 2
    near, far = places[:half], places[half : 2 * half]
    for k in range(half):
        counts[types.uint64(near[k])] += types.uint32(1)
        counts[types.uint64(far[k])] += types.uint32(1)
    if 2 * half < n:
        counts[types.uint64(places[n - 1])] += types.uint32(1)


@njit(types.void(_F32_2, _PIECES, _I8, types.int64, types.boolean, _F32_2, types.int64, types.float32,
                 types.float32, types.uint32[:, ::1], types.uint32[:, ::1]),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def fill(wave, pieces, classes, n_levels, pairs, expand, n_rows, row_scale, row_zero, left, right):
    """Count the traces from each symbol of the ``pieces`` (first symbol, how many: at most 512) to the next, column by column.

    Between two phases of the wave ``expand`` puts its points. ``classes`` is aligned with the columns of ``wave``.
    ``left[column, class * n_rows + row]`` counts traces by the pair of classes that they join where ``pairs``, else by the class
    that they leave; then ``right`` counts them by the one they come to.
    """
    n_phases = wave.shape[0]
    factor = expand.shape[0]
    # a column's counters stay near while a whole slab is counted into them
    places, others = np.empty((factor, _SLAB), np.uint16), np.empty((0 if pairs else factor, _SLAB), np.uint16)
    base_left, base_right = np.empty(_SLAB, np.int32), np.empty(_SLAB, np.int32)
    top = types.float32(n_rows) - types.float32(0.5)
    nought = types.float32(0.0)
    rows, levels = types.int32(n_rows), types.int32(n_levels)
    done = 0
    while done < pieces.shape[0]:
        last, whole = done, 0
        while last < pieces.shape[0] and whole + pieces[last, 1] <= _SLAB:
            first, n = pieces[last]
            here, after = classes[first : first + n], classes[first + 1 : first + 1 + n]
            bl, br = base_left[whole : whole + n], base_right[whole : whole + n]
            for k in range(n):
                bl[k] = (here[k] * levels + after[k]) * rows if pairs else here[k] * rows
                br[k] = after[k] * rows
            whole += n
            last += 1
        for q in range(n_phases):
            to_first = 0
            for piece in range(done, last):
                at, n = pieces[piece]
                x0 = wave[(q - 2) % n_phases, at + (q - 2) // n_phases : at + (q - 2) // n_phases + n]
                x1 = wave[(q - 1) % n_phases, at + (q - 1) // n_phases : at + (q - 1) // n_phases + n]
                x2 = wave[q, at : at + n]
                x3 = wave[(q + 1) % n_phases, at + (q + 1) // n_phases : at + (q + 1) // n_phases + n]
                x4 = wave[(q + 2) % n_phases, at + (q + 2) // n_phases : at + (q + 2) // n_phases + n]
                x5 = wave[(q + 3) % n_phases, at + (q + 3) // n_phases : at + (q + 3) // n_phases + n]
                bl, br = base_left[to_first : to_first + n], base_right[to_first : to_first + n]
                for s in range(factor):
                    w = expand[s]
                    w0, w1, w2 = w[0] * row_scale, w[1] * row_scale, w[2] * row_scale
                    w3, w4, w5 = w[3] * row_scale, w[4] * row_scale, w[5] * row_scale
                    to = places[s, to_first : to_first + n]
                    if not pairs:
                        too = others[s, to_first : to_first + n]
                        for k in range(n):
                            v = (
                                row_zero
                                + (w0 * x0[k] + w1 * x1[k] + w2 * x2[k])
                                + (w3 * x3[k] + w4 * x4[k] + w5 * x5[k])
                            )
                            row = types.int32(min(max(v, nought), top))
                            to[k] = types.uint16(row + bl[k])
                            too[k] = types.uint16(row + br[k])
                    elif factor == 1:
                        for k in range(n):
                            v = row_zero + row_scale * x2[k]
                            to[k] = types.uint16(types.int32(min(max(v, nought), top)) + bl[k])
                    else:
                        for k in range(n):
                            v = (
                                row_zero
                                + (w0 * x0[k] + w1 * x1[k] + w2 * x2[k])
                                + (w3 * x3[k] + w4 * x4[k] + w5 * x5[k])
                            )
                            to[k] = types.uint16(types.int32(min(max(v, nought), top)) + bl[k])
                to_first += n
            for s in range(factor):
                _count(places[s], whole, left[q * factor + s])
                if not pairs:
                    _count(others[s], whole, right[q * factor + s])
        done = last


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


@njit(types.int64(_F32_2, _PIECES, _I8, _I32, types.int64, types.float64, types.int64[::1],
                  types.float64[:, ::1], types.float64[:, ::1]),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def crossings(wave, pieces, classes, around, n_levels, origin, bins, groups, edges):  # fmt: skip
    """Times at which traces between mirror-image levels cross 0, in UI from the left symbol; return how many.

    Looks at the symbols of the ``pieces`` (first symbol, how many: at most 512). ``wave`` has at least 4 phases.
    ``classes`` is aligned with the columns of ``wave``. ``bins`` counts times over one UI; ``groups[g]`` = count, sum, sum of squares
    (about ``origin``) for the pattern of classes at the offsets ``around``; ``edges[rising]`` = count, sum.
    """
    n_phases = wave.shape[0]
    n_bins = bins.size
    lowest, highest = np.empty(_TILE, np.int32), np.empty(_TILE, np.int32)
    pattern, chosen = np.empty(_TILE, np.int32), np.empty(_TILE, np.int32)
    y = np.empty((4, _TILE), np.float32)
    y0, y1, y2, y3 = y[0], y[1], y[2], y[3]
    time = np.empty(_TILE, np.float32)
    found = 0
    nought, one, two, three = types.float32(0.0), types.float32(1.0), types.float32(2.0), types.float32(3.0)
    half, third, sixth = types.float32(0.5), types.float32(1 / 3), types.float32(1 / 6)
    n_rises, rises, n_falls, falls = 0, 0.0, 0, 0.0
    for piece in range(pieces.shape[0]):
        tile, n = pieces[piece]
        low, high = lowest[:n], highest[:n]
        low[:] = n_phases
        high[:] = -1
        for p in range(n_phases):
            last = p + 1 == n_phases
            before = wave[p, tile : tile + n]
            after = wave[0, tile + 1 : tile + 1 + n] if last else wave[p + 1, tile : tile + n]
            place = types.int32(p)
            for k in range(n):
                crossed = (before[k] > nought) != (after[k] > nought)
                low[k] = min(low[k], place) if crossed else low[k]
                high[k] = place if crossed else high[k]
        codes = pattern[:n]
        codes[:] = 0
        for offset in around:
            there = classes[tile + offset : tile + offset + n]
            for k in range(n):
                codes[k] = codes[k] * types.int32(n_levels) + types.int32(there[k])
        left, right = classes[tile : tile + n], classes[tile + 1 : tile + 1 + n]
        some = 0
        for k in range(n):
            chosen[some] = k
            mirrored = (types.int64(left[k]) + right[k] == n_levels - 1) & (left[k] != right[k])
            some += types.int64(mirrored & (low[k] < n_phases))
        for m in range(some):
            k = chosen[m]
            at = low[k]
            # the phase before may be the last of the symbol before, those after the first of the next
            y0[m] = wave[at - 1, tile + k] if at > 0 else wave[n_phases - 1, tile + k - 1]
            y1[m] = wave[at, tile + k]
            y2[m] = wave[at + 1, tile + k] if at + 1 < n_phases else wave[0, tile + k + 1]
            y3[m] = wave[at + 2, tile + k] if at + 2 < n_phases else wave[at + 2 - n_phases, tile + k + 1]
        for m in range(some):
            c1 = y2[m] - third * y0[m] - half * y1[m] - sixth * y3[m]
            c2 = half * (y0[m] + y2[m]) - y1[m]
            c3 = sixth * (y3[m] - y0[m]) + half * (y1[m] - y2[m])
            chord = y2[m] - y1[m]
            u = -y1[m] / chord
            for _ in range(3):
                slope = c1 + u * (two * c2 + three * u * c3)
                step = (y1[m] + u * (c1 + u * (c2 + u * c3))) / slope
                nearer = min(max(u - step, nought), one)
                # a step must go on crossing in the direction of the chord
                u = nearer if slope * chord > nought else u
            time[m] = u
        for m in range(some):
            k = chosen[m]
            at = (low[k] + types.float64(time[m])) / n_phases
            if high[k] != low[k]:
                at = 0.5 * (at + _crossing(wave, tile + k, high[k], n_phases))
            bins[types.uint64(min(max(types.int64(at * n_bins), 0), n_bins - 1))] += 1
            about = at - origin
            row = groups[types.uint64(codes[k])]
            row[0] += 1.0
            row[1] += about
            row[2] += about * about
            if right[k] > left[k]:
                n_rises += 1
                rises += at
            else:
                n_falls += 1
                falls += at
        found += some
    edges[0, 0] += n_falls
    edges[0, 1] += falls
    edges[1, 0] += n_rises
    edges[1, 1] += rises
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


@njit(types.void(_F32_2, _F32, types.int64, types.int64, types.int64, types.int64, types.float64[:, :]),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def add_cross(wave, levels, first, last, earliest, n_lags, cross):
    """``cross[i, p] += sum over k in first .. last of levels[k - lag i] wave[p, k]``; ``levels`` has all lags beyond either end.

    A multiple of 3 lags and of 4 phases: so many sums at once need fewest reads.
    """
    for tile in range(first, last, _NEARER):
        n = min(_NEARER, last - tile)
        for p in range(0, wave.shape[0], 4):
            w0, w1 = wave[p, tile : tile + n], wave[p + 1, tile : tile + n]
            w2, w3 = wave[p + 2, tile : tile + n], wave[p + 3, tile : tile + n]
            for i in range(0, n_lags, 3):
                at = tile - earliest - i
                a, b, c = levels[at : at + n], levels[at - 1 : at - 1 + n], levels[at - 2 : at - 2 + n]
                a0 = a1 = a2 = a3 = b0 = b1 = b2 = b3 = c0 = c1 = c2 = c3 = types.float32(0.0)
                for k in range(n):
                    a0 += a[k] * w0[k]
                    a1 += a[k] * w1[k]
                    a2 += a[k] * w2[k]
                    a3 += a[k] * w3[k]
                    b0 += b[k] * w0[k]
                    b1 += b[k] * w1[k]
                    b2 += b[k] * w2[k]
                    b3 += b[k] * w3[k]
                    c0 += c[k] * w0[k]
                    c1 += c[k] * w1[k]
                    c2 += c[k] * w2[k]
                    c3 += c[k] * w3[k]
                for row, (s0, s1, s2, s3) in (
                    (i, (a0, a1, a2, a3)),
                    (i + 1, (b0, b1, b2, b3)),
                    (i + 2, (c0, c1, c2, c3)),
                ):
                    cross[row, p] += s0
                    cross[row, p + 1] += s1
                    cross[row, p + 2] += s2
                    cross[row, p + 3] += s3


@njit(types.void(_F32_2, types.int64, types.int64, types.float64[:], types.float64[:]),
      nogil=True, cache=True, fastmath=_FINITE)  # fmt: skip
def add_means(wave, first, last, sums, squares):
    """Sum and sum of squares of each phase over the symbols from ``first`` to before ``last``."""
    for tile in range(first, last, _NEARER):
        n = min(_NEARER, last - tile)
        for p in range(wave.shape[0]):
            w = wave[p, tile : tile + n]
            total = square = types.float32(0.0)
            for k in range(n):
                total += w[k]
                square += w[k] * w[k]
            sums[p] += total
            squares[p] += square


@njit(types.void(_F32, types.int64, types.int64, types.int64, types.float64[:]), nogil=True, cache=True, fastmath=_FAST)
def add_lagged(levels, first, last, earliest, sums):
    """``sums[i] += sum over k in first .. last of levels[k - lag i]``: the first in full, each later one a symbol on."""
    begin, end = first - earliest, last - earliest
    total = 0.0
    for value in levels[begin:end]:
        total += value
    for i in range(sums.size):
        sums[i] += total
        total += types.float64(levels[begin - 1 - i]) - levels[end - 1 - i]


@njit(types.void(_F32, _I8, types.float64[:, ::1]), nogil=True, cache=True)
def add_levels(values, classes, sums):
    """Count, sum and sum of squares of ``values`` by class into ``sums[class]``."""
    for k in range(values.size):
        row = sums[types.uint64(classes[k])]
        value = types.float64(values[k])
        row[0] += 1.0
        row[1] += value
        row[2] += value * value


@njit(types.void(types.Array(types.int64, 2, "C", readonly=True), _F64, types.float64[:, ::1]), nogil=True, cache=True)
def quantiles(histograms, shares, places):
    """Row positions below which each of ``shares`` of the counts lies, ``(shares, n)``, of ``histograms`` ``(n, rows)``."""
    n_rows = histograms.shape[1]
    for h in range(histograms.shape[0]):
        counts = histograms[h]
        total = 0
        for row in range(n_rows):
            total += counts[row]
        for s in range(shares.size):
            if total == 0:
                places[s, h] = np.nan
                continue
            wanted = shares[s] * total
            row = 0
            below = 0
            while row < n_rows - 1 and below + counts[row] < wanted:
                below += counts[row]
                row += 1
            here = counts[row]
            part = min(max((wanted - below) / max(here, 1), 0.0), 1.0)
            tail = max(min(shares[s], 1.0 - shares[s]) * total, 1.0)
            narrow = min(max((here / tail - 2.0) / 8.0, 0.0), 1.0)
            places[s, h] = row + part + (0.5 - part) * narrow
