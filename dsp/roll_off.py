"""Which roll-off was sent, told from the pattern response behind a root raised cosine of another one."""

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize

_BINS = 256  # of the band from 0 to one symbol rate
_STEPS = np.arange(0.05, 1.001, 0.05)
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
    times, response = times[near], response[near]
    frequency = (np.arange(_BINS) + 0.5) / _BINS
    behind = spectrum(frequency, received)

    def misfit(roll_off: float, late: float) -> float:
        return misfits(np.asarray([roll_off]), late)[0]

    def misfits(roll_offs: NDArray[np.float64], late: float) -> list[float]:
        pulse = np.cos(2 * np.pi * np.outer(times - late, frequency))
        result = []
        for roll_off in roll_offs.tolist():
            shape = pulse @ (spectrum(frequency, roll_off) * behind)
            scale = float(shape @ response) / float(shape @ shape)
            result.append(float(np.sum((response - scale * shape) ** 2)))
        return result

    rough = np.min([misfits(_STEPS, late) for late in np.linspace(-0.1, 0.1, 5).tolist()], axis=0)
    start = np.asarray([_STEPS[int(np.argmin(rough))], 0.0])

    def other(x: NDArray[np.float64]) -> float:
        return misfit(min(max(float(x[0]), 0.05), 1.0), float(x[1]))

    def same(x: NDArray[np.float64]) -> float:
        return misfit(received, float(x[0]))

    found = minimize(other, start, method="Nelder-Mead")
    least = float(minimize(same, np.zeros(1), method="Nelder-Mead").fun)
    roll_off = float(np.clip(found.x[0], 0.05, 1.0))
    explained = least - float(found.fun)
    if abs(roll_off - received) < _DIFFERENT or explained < 0.6 * least or explained < _CLEAR * variance:
        return None
    return roll_off
