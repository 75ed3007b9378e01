"""From counts to pixels. Behind `dsp.picture`; arguments arrive validated."""

import numpy as np
from numba import njit, types

_U32_2 = types.Array(types.uint32, 2, "C", readonly=True)
_F32_2 = types.Array(types.float32, 2, "C", readonly=True)
_F64 = types.Array(types.float64, 1, "C", readonly=True)
_F32 = types.Array(types.float32, 1, "C", readonly=True)
_I64 = types.Array(types.int64, 1, "C", readonly=True)


@njit(types.void(_U32_2, _F64, types.float64[:, ::1]), nogil=True, cache=True)
def share_rows(counts, edges, pixels):
    """Share out the rows of each line of counts: ``pixels[line, j]`` gets what lies between row positions ``edges[j]`` and the next."""
    rows = counts.shape[1]
    for line in range(counts.shape[0]):
        row = 0
        below = 0.0  # counts of all rows before ``row``
        last = 0.0
        for j in range(edges.size):
            at = edges[j]
            whole = min(int(at), rows - 1)
            while row < whole:
                below += counts[line, row]
                row += 1
            now = below + counts[line, row] * (at - row)
            if j > 0:
                pixels[line, j - 1] = now - last
            last = now


@njit(types.void(types.float32[:, ::1], types.int64, types.int64, types.float32, types.float32), nogil=True, cache=True)
def _raise(drawn, row, pixel, part, value):
    above = min(row, drawn.shape[0] - 1)
    below = min(row + 1, drawn.shape[0] - 1)
    drawn[above, pixel] = max(drawn[above, pixel], value * (np.float32(1.0) - part))
    drawn[below, pixel] = max(drawn[below, pixel], value * part)


@njit(types.void(_F32_2, types.int64, types.int64[::1]), nogil=True, cache=True)
def _nearest(tone, column, nearest):
    """For every row that of the nearest tone above 0 in this column; far outside where there is none. Of two as near, the one before."""
    rows = tone.shape[0]
    before = -4 * rows
    for row in range(rows):
        if tone[row, column] > 0:
            before = row
        nearest[row] = before
    after = 4 * rows
    for row in range(rows - 1, -1, -1):
        if tone[row, column] > 0:
            after = row
        if row - nearest[row] > after - row:
            nearest[row] = after


@njit(types.void(_F32_2, _F32, _I64, types.int64, types.float32[:, ::1]), nogil=True, cache=True)
def between(tone, weight, first, reach, drawn):
    """`dsp.picture.between_columns`; pair j of columns is drawn on pixels ``first[j]`` to ``first[j + 1]``."""
    rows, columns = tone.shape
    nearest = np.empty(rows, np.int64)
    one = np.float32(1.0)
    for j in range(columns - 1):
        begin, end = first[j], first[j + 1]
        if begin == end:
            continue
        for row in range(rows):
            a, b = tone[row, j], tone[row, j + 1]
            for pixel in range(begin, end):
                drawn[row, pixel] = a + (b - a) * weight[pixel]
        for here in range(2):
            mine, other = j + here, j + 1 - here
            _nearest(tone, other, nearest)
            for row in range(rows):
                own = tone[row, mine]
                if own > 0 and tone[row, other] == 0 and abs(nearest[row] - row) <= reach:
                    # it is a moved trace's, not a fading one's
                    for pixel in range(begin, end):
                        drawn[row, pixel] = 0.0
        for here in range(2):
            mine, other = j + here, j + 1 - here
            _nearest(tone, other, nearest)
            for row in range(rows):
                own = tone[row, mine]
                target = nearest[row]
                if own > 0 and tone[row, other] == 0 and abs(target - row) <= reach:
                    there = tone[target, other]
                    for pixel in range(begin, end):
                        share = weight[pixel] if here == 0 else one - weight[pixel]
                        at = row + (target - row) * share
                        above = int(at)
                        _raise(drawn, above, pixel, np.float32(at - above), own + (there - own) * share)
