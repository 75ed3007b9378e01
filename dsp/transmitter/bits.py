"""Bits to send and their mapping to symbols."""

from functools import cache

import numpy as np
from numpy.typing import NDArray

from dsp.errors import DspError
from dsp.link import Scheme

PRBS_TAPS = {7: (7, 6), 9: (9, 5), 15: (15, 14), 23: (23, 18)}
_INVERTED = (15, 23)


@cache
def _period(order: int) -> NDArray[np.uint8]:
    length, tap = PRBS_TAPS[order]
    wanted = 2**order - 1
    sequence = np.ones(order, dtype=np.uint8)
    while sequence.size < wanted:
        # squaring the polynomial keeps the recurrence true and doubles its reach
        stretch = 1
        while length * stretch * 2 <= sequence.size:
            stretch *= 2
        start = sequence.size
        older = sequence[start - length * stretch :]
        newer = sequence[start - tap * stretch :]
        count = min(tap * stretch, wanted - start)
        sequence = np.concatenate((sequence, older[:count] ^ newer[:count]))
    if order in _INVERTED:
        sequence = sequence ^ np.uint8(1)
    sequence.setflags(write=False)
    return sequence


def prbs(order: int, count: int, start: int = 0) -> NDArray[np.uint8]:
    """``count`` bits of the pseudo-random sequence of period 2**order - 1, from bit ``start`` on (negative too), uint8.

    Order 7, 9, 15 or 23; bit 0 is the first that leaves the shift register filled with ones. Raises DspError for
    another order. Source: ITU-T O.150, which sends 2**15 - 1 and 2**23 - 1 inverted (polynomials and inversion from
    memory).
    """
    if order not in PRBS_TAPS:
        raise DspError(f"order must be one of {sorted(PRBS_TAPS)}, got {order!r}")
    period = _period(order)
    return period[np.arange(start, start + count, dtype=np.int64) % period.size]


def from_gray(code: NDArray[np.int64]) -> NDArray[np.int64]:
    """Place on the axis of each Gray code word, so that neighbours differ in one bit; same shape."""
    place = code.copy()
    for shift in (1, 2, 4):
        place ^= place >> shift
    return place


def map_bits(bits: NDArray[np.uint8], scheme: Scheme) -> NDArray[np.int64]:
    """Index into ``scheme.points()`` of each symbol, from ``scheme.bits`` Gray coded bits each, most significant first.

    QAM and QPSK: the first half of the bits chooses I, the second Q. pi4dqpsk: the *change* of the point, in quarter
    turns
    (0 1 3 2 for 00 01 10 11); `accumulate` adds them up. Source of the latter: ETSI EN 300 392-2, sec. 5 (from memory).
    """
    groups = bits.reshape(-1, scheme.bits).astype(np.int64)
    code = groups @ (1 << np.arange(scheme.bits - 1, -1, -1, dtype=np.int64))
    if scheme.rails == 1 or scheme.name in ("8psk", "pi4dqpsk"):
        return from_gray(code)
    half = scheme.bits // 2
    return from_gray(code >> half) * scheme.levels + from_gray(code & ((1 << half) - 1))


def accumulate(turns: NDArray[np.int64], quadrant: int) -> tuple[NDArray[np.int64], int]:
    """Index into the QPSK points after each of the ``turns`` (quarter turns) from ``quadrant``; and the last quadrant.

    Quadrants count counter-clockwise from 1+1j.
    """
    quadrants = (np.cumsum(turns) + quadrant) % 4
    last = int(quadrants[-1]) if quadrants.size else quadrant
    return np.array([3, 1, 0, 2])[quadrants], last
