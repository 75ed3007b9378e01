"""Which roll-off was sent, told from the pattern response behind a root raised cosine of another one."""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from dsp.openings import vertex

_BINS = 256  # of the band from 0 to one symbol rate
_STEPS = np.linspace(0.05, 1.0, 96)
_LATE = np.linspace(-0.12, 0.12, 13)  # UI
_DIFFERENT = 0.03  # roll-offs nearer than that are one
_REACH = 6  # symbols on either side that are looked at
_CLEAR = 20.0  # times the chance of the taps that the misfit must fall by


def spectrum(frequency: NDArray[np.float64], roll_off: float) -> NDArray[np.float64]:
    """Root raised cosine in frequency, ``frequency`` in symbol rates, any shape; 1 at 0.

    Source: J. G. Proakis and M. Salehi, Digital Communications, 5th ed., eqs. 9.2-26 and 9.2-29 (numbers from memory).
    """
    edge = np.clip((np.abs(frequency) - 0.5 * (1 - roll_off)) / roll_off, 0.0, 1.0)
    return np.asarray(np.cos(0.5 * np.pi * edge))


def fitting_roll_off(
    times: NDArray[np.float64], response: NDArray[np.float64], variance: float, received: float
) -> float | None:
    """The roll-off that the transmitter seems to have, where that of the receive filter, ``received``, is not the one.

    ``response`` ``(n,)``: what a symbol puts at ``times`` (UI from its instant), each with the sampling ``variance``. None where
    another roll-off does not explain most of what is off, or what is off is no more than chance.
    """
    near = np.abs(times) <= _REACH
    response = response[near]
    shapes = _shapes(times[near].tobytes(), received)
    misfit = float(response @ response) - (shapes @ response) ** 2
    of_each = np.asarray([_least(row) for row in misfit[:-1]])
    best = int(np.argmin(of_each))
    roll_off = float(_STEPS[best] + vertex(-of_each, best) * (_STEPS[1] - _STEPS[0]))
    least = _least(misfit[-1])
    explained = least - _least(of_each)
    if abs(roll_off - received) < _DIFFERENT or explained < 0.6 * least or explained < _CLEAR * variance:
        return None
    return roll_off


@lru_cache(maxsize=8)
def _shapes(times: bytes, received: float) -> NDArray[np.float64]:
    """Responses behind a filter of roll-off ``received``, of energy 1: of `_STEPS` and last of that filter's own, each late by `_LATE`.

    ``times``: the bytes of ``(n,)`` times in UI. Shape ``(96 + 1, lates, n)``.
    """
    at = np.frombuffer(times)
    frequency = (np.arange(_BINS) + 0.5) / _BINS
    behind = spectrum(frequency, received)
    spectra = np.asarray([spectrum(frequency, roll_off) * behind for roll_off in (*_STEPS.tolist(), received)])
    shapes = np.stack([spectra @ np.cos(2 * np.pi * np.outer(frequency, at - late)) for late in _LATE], axis=1)
    return np.asarray(shapes / np.linalg.norm(shapes, axis=2, keepdims=True))


def _least(values: NDArray[np.float64]) -> float:
    """Of a curve, between its points, by a parabola through the three that are least."""
    top = int(np.argmin(values))
    if not 0 < top < values.size - 1:
        return float(values[top])
    left, middle, right = (float(value) for value in values[top - 1 : top + 2])
    bend = left - 2.0 * middle + right
    return middle - 0.125 * (left - right) ** 2 / bend if bend > 0.0 else middle
