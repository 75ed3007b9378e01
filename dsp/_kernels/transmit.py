"""Compiled loops behind `dsp.transmitter`; arguments arrive already validated, every index in range."""

import math

from numba import njit, types

_LINE = types.Array(types.float64, 1, "C", readonly=True)
_TABLE = types.Array(types.float64, 2, "C", readonly=True)
_OUT = types.Array(types.float64, 1, "C")


@njit(
    types.void(_LINE, _LINE, types.int64, _TABLE, types.int64, _OUT),
    nogil=True,
    cache=True,
    fastmath={"reassoc", "contract"},
)
def sum_regular(u, values, first, table, after, out):
    """``out[i] = sum_k values[k - first] g(u[i] - k)``: the pulses of symbols on a regular grid.

    ``table[p, m] = g(p / phases + after - m)``, read linearly between rows.
    """
    phases = table.shape[0] - 1
    taps = table.shape[1]
    for i in range(u.size):
        whole = math.floor(u[i])
        place = (u[i] - whole) * phases
        row = min(int(place), phases - 1)
        share = place - row
        lower = table[row]
        upper = table[row + 1]
        base = int(whole) - after - first
        near = values[base : base + taps]
        low = 0.0
        high = 0.0
        for m in range(taps):
            low += near[m] * lower[m]
            high += near[m] * upper[m]
        out[i] = low + share * (high - low)


@njit(
    types.void(
        _LINE,
        _LINE,
        _LINE,
        _LINE,
        _LINE,
        types.int64,
        _LINE,
        types.float64,
        types.float64,
        types.float64,
        types.int64,
        types.int64,
        _OUT,
    ),
    nogil=True,
    cache=True,
)
def sum_moved(u, weights, moves, settled, slopes, first, table, low, points, end_slope, after, before, out):
    """Sum of ``weights[k] f(u - k - moves[k])`` for symbols each at an instant of its own.

    ``f`` is 0 below ``low``, ``table`` at ``points`` a UI from there on, and a line of slope ``end_slope`` past its
    end. All symbols up to ``floor(u) - after`` have ended: together they give ``settled + slopes * (u - k)`` of the
    last of them.
    """
    last = table.size - 1
    for i in range(u.size):
        whole = math.floor(u[i])
        oldest = whole - after - first
        total = settled[oldest] + slopes[oldest] * (u[i] - (whole - after))
        for j in range(oldest + 1, whole + before - first + 1):
            place = (u[i] - (j + first) - moves[j] - low) * points
            if place >= last:
                total += weights[j] * (table[last] + end_slope * (place - last) / points)
            elif place > 0.0:
                cell = int(place)
                total += weights[j] * (table[cell] + (place - cell) * (table[cell + 1] - table[cell]))
        out[i] = total


@njit(types.void(_LINE, _LINE, types.float64, _OUT), nogil=True, cache=True)
def settle(values, edges, ratio, state):
    """One-pole low-pass (T/tau = ``ratio``) at each edge: ``state[k]`` at ``edges[k]``; ``state[0]`` is given."""
    for k in range(values.size - 1):
        state[k + 1] = values[k] + (state[k] - values[k]) * math.exp(-(edges[k + 1] - edges[k]) * ratio)


@njit(types.void(_LINE, _LINE, _LINE, _LINE, types.int64, types.int64, types.float64, _OUT), nogil=True, cache=True)
def sum_held(u, values, edges, state, first, reach, ratio, out):
    """Symbols held from edge to edge, behind a one-pole low-pass if ``ratio`` (T/tau) > 0; half-way on an edge."""
    for i in range(u.size):
        k = math.floor(u[i] + 0.5) + reach - first
        while edges[k] > u[i]:
            k -= 1
        if ratio > 0.0:
            out[i] = values[k] + (state[k] - values[k]) * math.exp(-(u[i] - edges[k]) * ratio)
        elif edges[k] == u[i]:
            out[i] = 0.5 * (values[k] + values[k - 1])
        else:
            out[i] = values[k]
