"""What the pattern response leaves over, multiplied with what might have caused it. Behind `dsp.residual`; arguments validated."""

import numpy as np
from numba import njit, types

_F32 = types.Array(types.float32, 1, "C", readonly=True)
_I8 = types.Array(types.int8, 1, "A", readonly=True)
_I32 = types.Array(types.int32, 1, "C", readonly=True)
_FAST = {"contract", "nsz", "reassoc", "nnan", "ninf"}
_TILE = 512


@njit(types.void(_F32, _F32, _F32, _F32, _F32, _F32, _F32, _F32, types.float64[::1]),
      nogil=True, cache=True, fastmath=_FAST)  # fmt: skip
def add_products(error_a, late_a, early_a, other_a, error_b, late_b, early_b, other_b, sums):  # fmt: skip
    """Normal equations of ``error_a * error_b`` on 1, the product of the slopes, the product of the other rail's values.

    All arrays ``(n,)``; the slopes after and before the instant count half each. ``sums``: count, sums of the two products, of
    their squares and product, of the response, of the response times each, of its square.
    """
    n = error_a.size
    for tile in range(0, n, _TILE):
        last = min(tile + _TILE, n)
        x_sum = y_sum = xx = xy = yy = r_sum = rx = ry = rr = np.float32(0.0)
        for k in range(tile, last):
            x = np.float32(0.5) * (late_a[k] * late_b[k] + early_a[k] * early_b[k])
            y = other_a[k] * other_b[k]
            r = error_a[k] * error_b[k]
            x_sum += x
            y_sum += y
            xx += x * x
            xy += x * y
            yy += y * y
            r_sum += r
            rx += r * x
            ry += r * y
            rr += r * r
        sums[0] += last - tile
        sums[1] += x_sum
        sums[2] += y_sum
        sums[3] += xx
        sums[4] += xy
        sums[5] += yy
        sums[6] += r_sum
        sums[7] += rx
        sums[8] += ry
        sums[9] += rr


@njit(types.void(_F32, _I8, types.int64, _I32, types.int64, types.float64[:, ::1]), nogil=True, cache=True)
def add_patterns(error, classes, first, around, n_levels, sums):
    """Count and sum of ``error[k]`` by the pattern of ``classes`` at the offsets ``around`` from ``first + k``."""
    for k in range(error.size):
        group = types.uint64(0)
        for offset in around:
            group = group * types.uint64(n_levels) + types.uint64(classes[first + k + offset])
        row = sums[group]
        row[0] += 1.0
        row[1] += error[k]


@njit(types.void(types.float32[::1], _I8, types.int64, _I32, types.int64, _F32), nogil=True, cache=True)
def take_patterns(error, classes, first, around, n_levels, means):
    """Take the pattern's mean out of each ``error[k]``, in place."""
    for k in range(error.size):
        group = types.uint64(0)
        for offset in around:
            group = group * types.uint64(n_levels) + types.uint64(classes[first + k + offset])
        error[k] -= means[group]


@njit(types.void(_F32, _F32, _I8, _I8, types.int64, types.float64[:, ::1]), nogil=True, cache=True)
def add_points(error_i, error_q, class_i, class_q, n_levels, sums):
    """Count and sums of both rails' errors by the point decided, ``class_i * n_levels + class_q``."""
    for k in range(error_i.size):
        row = sums[types.uint64(class_i[k]) * types.uint64(n_levels) + types.uint64(class_q[k])]
        row[0] += 1.0
        row[1] += error_i[k]
        row[2] += error_q[k]


@njit(types.void(_F32, _F32, types.float32, types.float32, types.uint32[:, ::1]),
      nogil=True, cache=True, fastmath=_FAST)  # fmt: skip
def add_constellation(value_i, value_q, scale, zero, counts):
    """Count samples: Q by row, I by column, at ``value * scale + zero``, what lies beyond in the last."""
    top = np.float32(counts.shape[0]) - np.float32(0.5)
    for k in range(value_i.size):
        row = types.uint64(types.int32(min(max(value_q[k] * scale + zero, np.float32(0.0)), top)))
        column = types.uint64(types.int32(min(max(value_i[k] * scale + zero, np.float32(0.0)), top)))
        counts[row, column] += types.uint32(1)
