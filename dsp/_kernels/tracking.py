"""The symbol-rate loop: timing and carrier, one pass, no look-ahead beyond one symbol. Behind `dsp.tracking`.

`state` and `setup` are float64 vectors whose entries the constants below name; `Tracker` in `dsp.tracking` owns both.
"""

import math

import numpy as np
from numba import njit, types

from dsp._kernels.lanes import dot

# state
INSTANT, RATE, PREVIOUS, PHASE, TURN, OLD_I, OLD_Q, MID_I, MID_Q, OLD_A_I, OLD_A_Q = range(11)
N_STATE = 11
# setup
(
    SPS,
    DETECTOR,
    TIMING_K1,
    TIMING_K2,
    CARRIER_K1,
    CARRIER_K2,
    OFFSET,
    STAGGER,
    ROTATION,
    LEVELS,
    SHAPE,
    ENERGY,
    LEVEL_STEP,
    TIMING_BIAS,
    SENSE,
    SLOPE,
) = range(16)
N_SETUP = 16
GARDNER, MUELLER_MULLER, DERIVATIVE, CROSSING = 0.0, 1.0, 2.0, 3.0
PAM, BPSK, QAM, PSK8 = 0.0, 1.0, 2.0, 3.0

TEMPLATE = 16  # taps of the pattern-noise template, for symbols -8 .. +7 about the one in hand
AHEAD = 8
# symbols by which a detector that takes its pattern noise out answers late: the newest decision but one is the last it waits for,
# so that no symbol waits for the one before
LATE = AHEAD + 1

_F32 = types.Array(types.float32, 1, "C", readonly=True)
_TABLE = types.Array(types.float32, 2, "C", readonly=True)
_F64 = types.Array(types.float64, 1, "C", readonly=True)
_OUT32 = types.float32[::1]
_OUT64 = types.float64[::1]
_FAST = {"contract", "nsz", "reassoc", "arcp"}


@njit(types.float32(_F32, types.float64, _TABLE), nogil=True, cache=True, fastmath=_FAST, inline="always")
def _at(samples, instant, table):
    i = int(instant)
    row = types.uint64((instant - i) * 512.0 + 0.5)
    return dot(samples, types.uint64(i - 3), table, types.uint64(8) * row)


@njit(nogil=True, cache=True, inline="always", fastmath=_FAST)
def _pattern(decided, k, older, late_tap, last_tap):
    """What the `TEMPLATE` symbols before the ``k``-th put into the slope of the one `LATE` before it."""
    first = k - types.uint64(TEMPLATE + 2)
    eight = types.uint64(8)
    total = dot(decided, first, older, types.uint64(0)) + dot(decided, first + eight, older, eight)
    return (
        total
        + late_tap * decided[first + types.uint64(TEMPLATE)]
        + last_tap * decided[first + types.uint64(TEMPLATE + 1)]
    )


@njit(nogil=True, cache=True, inline="always")
def _slot(value, means, n):
    index = 0
    for m in range(n - 1):
        if value > 0.5 * (means[m] + means[m + 1]):
            index += 1
    return index


@njit(
    types.int64(
        _F32,
        _F32,
        types.boolean,
        _TABLE,
        _TABLE,
        _F64,
        types.float64[:, ::1],
        _F64,
        _F64,
        _F64,
        _F32,
        _OUT64,
        types.int64,
        _OUT64,
        _OUT64,
        types.float32[:, ::1],
        types.float32[:, ::1],
        types.float32[:, ::1],
        types.int8[:, ::1],
    ),
    nogil=True,
    cache=True,
    fastmath=_FAST,
)
def track(
    x_i, x_q, complex_in, table, slope_table, setup, means, gain, zero, nominal, template,
    state, history, instants, phases, decided, slopes, values, classes,
):  # fmt: skip
    """Run until the samples are used up; return how many symbols came out.

    ``instants`` and ``phases`` (unwrapped, cycles) get one entry a symbol; ``decided``, ``slopes`` (level units, per UI),
    ``values`` (level units) and ``classes`` get theirs behind ``history`` entries of the symbols before.
    """
    sps = setup[SPS]
    detector = setup[DETECTOR]
    k1, k2 = setup[TIMING_K1], setup[TIMING_K2]
    c1, c2 = setup[CARRIER_K1], setup[CARRIER_K2]
    offset = setup[OFFSET] * sps
    stagger = setup[STAGGER] * sps
    rotation = setup[ROTATION]
    n_levels = int(setup[LEVELS])
    shape = setup[SHAPE]
    level_step = setup[LEVEL_STEP]
    bias = setup[TIMING_BIAS]
    sense = setup[SENSE] * sps
    slope = setup[SLOPE]
    # a template that ends three symbols back: what has just been stored is slow to load with what stands before it
    older = np.zeros(TEMPLATE, np.float32)
    older[2:] = template[:-2]
    late_tap, last_tap = template[TEMPLATE - 2], template[TEMPLATE - 1]
    pair = n_levels == 2
    low_i, high_i, low_q, high_q = means[0, 0], means[0, 1], means[1, 0], means[1, 1]
    bottom, top = nominal[0], nominal[1]
    sense_slope = 1.0 / slope
    # nor move a level by more than a neighbour's distance counts
    far_i, far_q = 2.0 * gain[0], 2.0 * gain[1]
    t, rate, t_old = state[INSTANT], state[RATE], state[PREVIOUS]
    phase, freq = state[PHASE], state[TURN]
    old_i, old_q = state[OLD_I], state[OLD_Q]
    mid_i_old, mid_q_old = state[MID_I], state[MID_Q]
    a_old_i, a_old_q = state[OLD_A_I], state[OLD_A_Q]
    cos, sin = math.cos(2 * math.pi * phase), math.sin(2 * math.pi * phase)
    rot_c, rot_s = math.cos(2 * math.pi * rotation), math.sin(2 * math.pi * rotation)
    half_c, half_s = math.cos(math.pi * rotation), math.sin(math.pi * rotation)
    scale_i, scale_q = 1.0 / gain[0], 1.0 / gain[1]
    carrier_scale = 1.0 / setup[ENERGY]
    last = x_i.size - 6.0 - 2.0 * sps - abs(offset)
    room = instants.size
    decided_i, decided_q = decided[0], decided[1]
    slopes_i, slopes_q = slopes[0], slopes[1]
    values_i, values_q = values[0], values[1]
    classes_i, classes_q = classes[0], classes[1]
    n = 0
    while t < last and n < room:
        k = types.uint64(history + n)
        # the sample that is decided, turned upright
        where = t + offset
        y_i = _at(x_i, where, table)
        z_q = 0.0
        if complex_in:
            y_q = _at(x_q, where, table)
            z_i = y_i * cos + y_q * sin
            cross_q = y_q * cos - y_i * sin
            z_q = cross_q
            cross_i = z_i
            if stagger > 0.0:
                y_i = _at(x_i, where + stagger, table)
                y_q = _at(x_q, where + stagger, table)
                z_q = y_q * cos - y_i * sin
                cross_i = y_i * cos + y_q * sin
        else:
            z_i = y_i

        m_q = 0
        a_q = 0.0
        if pair:
            # as below, with nothing to look up
            up_i = z_i > 0.5 * (low_i + high_i)
            m_i = 1 if up_i else 0
            a_i = top if up_i else bottom
            move = level_step * min(max(z_i - (high_i if up_i else low_i), -far_i), far_i)
            high_i += move if up_i else 0.0
            low_i += 0.0 if up_i else move
            if shape == QAM:
                up_q = z_q > 0.5 * (low_q + high_q)
                m_q = 1 if up_q else 0
                a_q = top if up_q else bottom
                move = level_step * min(max(z_q - (high_q if up_q else low_q), -far_q), far_q)
                high_q += move if up_q else 0.0
                low_q += 0.0 if up_q else move
        else:
            m_i = _slot(z_i, means[0], n_levels)
            a_i = nominal[m_i]
            if shape == QAM:
                m_q = _slot(z_q, means[1], n_levels)
                a_q = nominal[m_q]
            elif shape == PSK8:
                wide = abs(z_i * scale_i) > abs(z_q * scale_q)
                m_i = (3 if wide else 2) if z_i > 0 else (0 if wide else 1)
                m_q = (2 if wide else 3) if z_q > 0 else (1 if wide else 0)
                a_i, a_q = nominal[m_i], nominal[m_q]
            means[0, m_i] += level_step * min(max(z_i - means[0, m_i], -far_i), far_i)
            if shape >= QAM:
                means[1, m_q] += level_step * min(max(z_q - means[1, m_q], -far_q), far_q)

        # timing error, late positive once the slope is taken out
        error = 0.0
        d_i = 0.0
        d_q = 0.0
        if detector == GARDNER:
            here_i, here_q = z_i, z_q
            if offset != 0.0 or stagger > 0.0:
                here_i = _at(x_i, t, table)
                if complex_in:
                    y_q = _at(x_q, t, table)
                    here_q = y_q * cos - here_i * sin
                    here_i = here_i * cos + y_q * sin
            middle = 0.5 * (t + t_old)
            mid_i = _at(x_i, middle, table)
            mid_q = 0.0
            if complex_in:
                y_q = _at(x_q, middle, table)
                back_c, back_s = cos * half_c + sin * half_s, sin * half_c - cos * half_s
                mid_q = y_q * back_c - mid_i * back_s
                mid_i = mid_i * back_c + y_q * back_s
            if stagger > 0.0:
                error = mid_i * (here_i - old_i) * scale_i * scale_i
                error += old_q * (mid_q - mid_q_old) * scale_q * scale_q
            else:
                error = mid_i * (here_i - old_i) * scale_i * scale_i
                if shape >= QAM:
                    error += mid_q * (here_q - old_q) * scale_q * scale_q
            old_i, old_q = here_i, here_q
            mid_i_old, mid_q_old = mid_i, mid_q
        elif detector == MUELLER_MULLER:
            here_i, here_q = z_i, z_q
            if offset != 0.0:
                here_i = _at(x_i, t, table)
                if complex_in:
                    y_q = _at(x_q, t, table)
                    here_q = y_q * cos - here_i * sin
                    here_i = here_i * cos + y_q * sin
                    if stagger > 0.0:
                        y_i = _at(x_i, t + stagger, table)
                        y_q = _at(x_q, t + stagger, table)
                        here_q = y_q * cos - y_i * sin
            error = (a_old_i * here_i - a_i * old_i) * scale_i
            if shape >= QAM:
                error += (a_old_q * here_q - a_q * old_q) * scale_q
            old_i, old_q = here_i, here_q
            a_old_i, a_old_q = a_i, a_q
        elif detector == CROSSING:
            slopes_i[k] = (_at(x_i, t - sense, table) - zero[0]) * scale_i
            # a transition's height where it crosses, less what its decided neighbours put there
            centre = k - types.uint64(LATE)
            total = _pattern(decided_i, k, older, late_tap, last_tap)
            error = (decided_i[centre] - decided_i[centre - types.uint64(1)]) * (slopes_i[centre] - total)
        else:
            d_i = _at(x_i, t, slope_table)
            if complex_in:
                y_q = _at(x_q, t, slope_table)
                d_q = y_q * cos - d_i * sin
                d_i = d_i * cos + y_q * sin
                if stagger > 0.0:
                    y_i = _at(x_i, t + stagger, slope_table)
                    y_q = _at(x_q, t + stagger, slope_table)
                    d_q = y_q * cos - y_i * sin
            slopes_i[k] = d_i * scale_i * sps
            slopes_q[k] = d_q * scale_q * sps
            # pattern noise of a symbol some time back: everything that its decided neighbours put into its slope
            centre = k - types.uint64(LATE)
            error = decided_i[centre] * (slopes_i[centre] - _pattern(decided_i, k, older, late_tap, last_tap))
            if shape >= QAM:
                error += decided_q[centre] * (slopes_q[centre] - _pattern(decided_q, k, older, late_tap, last_tap))
        # an impulse must not throw the clock: what a detector may say is bounded, in UI
        error = min(max((error - bias) * sense_slope, -2.0), 2.0)
        decided_i[k] = a_i
        decided_q[k] = a_q
        values_i[k] = (z_i - zero[0]) * scale_i
        values_q[k] = (z_q - zero[1]) * scale_q
        classes_i[k] = m_i
        classes_q[k] = m_q
        instants[n] = t
        phases[n] = phase

        rate = min(max(rate - k2 * error, -0.02), 0.02)
        t_old = t
        t += sps * (1.0 + rate - k1 * error)

        if complex_in:
            twist = a_i * cross_q * scale_q - a_q * cross_i * scale_i
            twist = min(max(twist * carrier_scale, -1.0), 1.0)
            freq += c2 * twist
            step = freq + c1 * twist
            phase += step + rotation
            d = 2 * math.pi * step
            d2 = d * d
            dc = 1.0 - d2 * (0.5 - d2 * (1.0 / 24 - d2 * (1.0 / 720)))
            ds = d * (1.0 - d2 * (1.0 / 6 - d2 * (1.0 / 120 - d2 * (1.0 / 5040))))
            if rotation != 0.0:
                cos, sin = cos * rot_c - sin * rot_s, sin * rot_c + cos * rot_s
            cos, sin = cos * dc - sin * ds, sin * dc + cos * ds
        n += 1
    if pair:
        means[0, 0], means[0, 1], means[1, 0], means[1, 1] = low_i, high_i, low_q, high_q
    state[INSTANT], state[RATE], state[PREVIOUS] = t, rate, t_old
    state[PHASE], state[TURN] = phase, freq
    state[OLD_I], state[OLD_Q] = old_i, old_q
    state[MID_I], state[MID_Q] = mid_i_old, mid_q_old
    state[OLD_A_I], state[OLD_A_Q] = a_old_i, a_old_q
    return n
