"""Second-order tracking loops: gains for a wanted noise bandwidth, and what a loop makes of noise."""

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from dsp.errors import DspError

DAMPING = 0.7071067811865476


@dataclass(frozen=True, slots=True)
class LoopGains:
    """Proportional and integral gain of a loop that runs once a symbol, the detector's slope taken out."""

    proportional: float
    integral: float


def rice_gains(bandwidth: float, damping: float = DAMPING) -> LoopGains:
    """Gains for a one-sided noise bandwidth of ``bandwidth`` (BnT, per symbol) by the textbook's approximation.

    Source: M. Rice, Digital Communications: A Discrete-Time Approach, 2009, eqs. C.56 and C.57. Raises DspError.
    """
    if not 0.0 < bandwidth <= 0.1:
        raise DspError(f"loop bandwidth BnT must be above 0 and at most 0.1, got {bandwidth!r}")
    theta = bandwidth / (damping + 0.25 / damping)
    divisor = 1.0 + 2.0 * damping * theta + theta * theta
    return LoopGains(4.0 * damping * theta / divisor, 4.0 * theta * theta / divisor)


def noise_bandwidth(gains: LoopGains, delay: int = 0) -> float:
    """One-sided noise bandwidth BnT of the closed loop whose detector answers ``delay`` symbols late.

    Without delay the closed form (2 g1^2 + g1 g2 + 2 g2)/(2 g1 (4 - 2 g1 - g2)), derived here and checked against the impulse
    response; with delay by the integral of the closed loop's response over frequency.
    """
    g1, g2 = gains.proportional, gains.integral
    if delay == 0:
        return (2 * g1 * g1 + g1 * g2 + 2 * g2) / (2 * g1 * (4 - 2 * g1 - g2))
    response = np.abs(transfer(np.geomspace(1e-7, 0.5, 20001), gains, delay)) ** 2
    return float(np.trapezoid(response, np.geomspace(1e-7, 0.5, 20001)))


def transfer(frequency: NDArray[np.float64], gains: LoopGains, delay: int = 0) -> NDArray[np.complex128]:
    """Closed-loop response from input timing to the loop's instant at ``frequency`` cycles a symbol, any shape."""
    z = np.exp(2j * np.pi * np.asarray(frequency))
    # t[k+1] = t[k] + v[k+1] - g1 e[k];  v[k+1] = v[k] - g2 e[k];  e[k] = (t - input)[k - delay]
    forward = (gains.proportional + gains.integral * z / (z - 1.0)) / (z - 1.0) * z ** (-float(delay))
    return np.asarray(forward / (1.0 + forward))


@cache
def exact_gains(bandwidth: float, delay: int = 0, damping: float = DAMPING) -> LoopGains:
    """Gains whose noise bandwidth is ``bandwidth`` (BnT) exactly, detector delay included. Raises DspError."""
    rice_gains(bandwidth, damping)

    def excess(scale: float) -> float:
        return noise_bandwidth(rice_gains(bandwidth * scale, damping), delay) - bandwidth

    # bisection: the bandwidth rises with the scale
    low, high = 0.3, 1.0 if bandwidth * 1.05 > 0.1 else 1.05
    for _ in range(24):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) < 0 else (low, middle)
    return rice_gains(bandwidth * 0.5 * (low + high), damping)
