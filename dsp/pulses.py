"""Pulse shapes of a link and the receive filter that matches each.

Time ``t`` is in symbols (UI) with 0 at the pulse's centre; ``sps`` is samples per symbol.
"""

import math
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf

from dsp.errors import DspError

Family = Literal["rrc", "rc", "rect", "gauss", "none", "taps"]
_NEEDS_NUMBER = {"rrc": "roll-off 0.05 to 1", "rc": "roll-off 0.05 to 1", "gauss": "BT 0.1 to 3"}
_RANGE = {"rrc": (0.05, 1.0), "rc": (0.05, 1.0), "gauss": (0.1, 3.0)}


def raised_cosine(t: ArrayLike, rolloff: float) -> NDArray[np.float64]:
    """Raised-cosine pulse, 1 at ``t`` = 0, any shape.

    Source: Proakis and Salehi, Digital Communications, 5th ed., sec. 9.2-1; at ``t`` = 1/(2 roll-off) the analytic limit.
    """
    t = np.asarray(t, dtype=np.float64)
    denominator = 1.0 - (2.0 * rolloff * t) ** 2
    singular = np.abs(denominator) < 1e-9
    regular = np.sinc(t) * np.cos(np.pi * rolloff * t) / np.where(singular, 1.0, denominator)
    return np.asarray(np.where(singular, np.pi / 4 * np.sinc(t), regular), dtype=np.float64)


def root_raised_cosine(t: ArrayLike, rolloff: float) -> NDArray[np.float64]:
    """Root-raised-cosine pulse of unit energy (per symbol), any shape; convolved with itself it is `raised_cosine`.

    Source: Proakis and Salehi, Digital Communications, 5th ed., sec. 9.2-1; analytic limits at 0 and 1/(4 roll-off).
    """
    t = np.asarray(t, dtype=np.float64)
    a = rolloff
    denominator = np.pi * t * (1.0 - (4.0 * a * t) ** 2)
    at_zero = np.abs(t) < 1e-9
    at_edge = np.abs(np.abs(4.0 * a * t) - 1.0) < 1e-7
    numerator = np.sin(np.pi * t * (1.0 - a)) + 4.0 * a * t * np.cos(np.pi * t * (1.0 + a))
    regular = numerator / np.where(at_zero | at_edge, 1.0, denominator)
    edge = (
        a / math.sqrt(2.0) * ((1 + 2 / np.pi) * math.sin(np.pi / (4 * a)) + (1 - 2 / np.pi) * math.cos(np.pi / (4 * a)))
    )
    return np.where(at_zero, 1.0 - a + 4.0 * a / np.pi, np.where(at_edge, edge, regular))


def rectangle(t: ArrayLike) -> NDArray[np.float64]:
    """Rectangular pulse one symbol wide, 1 inside, one half on its edges."""
    magnitude = np.abs(np.asarray(t, dtype=np.float64))
    return np.where(magnitude < 0.5, 1.0, np.where(magnitude == 0.5, 0.5, 0.0))


def gaussian_rectangle(t: ArrayLike, bt: float) -> NDArray[np.float64]:
    """Rectangular pulse behind a Gaussian low-pass of 3 dB bandwidth ``bt`` per symbol: the frequency pulse of GMSK, area 1.

    Source: K. Murota and K. Hirade, IEEE Trans. Commun. 29(7), 1981 (from memory).
    """
    t = np.asarray(t, dtype=np.float64)
    k = np.pi * bt * math.sqrt(2.0 / math.log(2.0))
    result: NDArray[np.float64] = 0.5 * (erf(k * (t + 0.5)) - erf(k * (t - 0.5)))
    return result


@dataclass(frozen=True)
class Pulse:
    """A pulse family with its one number: roll-off of rrc and rc, BT of gauss; ``taps`` holds a filter of the user's own."""

    family: Family
    number: float | None = None
    taps: tuple[complex, ...] = ()

    def __post_init__(self) -> None:
        if self.family not in get_args(Family):
            raise DspError(
                f"pulse {self.family!r} is not known; take one of rrc:A, rc:A, rect, gauss:BT, none, taps:FILE"
            )
        if self.family in _NEEDS_NUMBER:
            low, high = _RANGE[self.family]
            if self.number is None or not low <= self.number <= high:
                raise DspError(
                    f"pulse {self.family} needs its {_NEEDS_NUMBER[self.family]} behind a colon, got {self.number!r}"
                )
        elif self.number is not None:
            raise DspError(f"pulse {self.family} takes no number, got {self.number!r}")
        if (self.family == "taps") != bool(self.taps):
            raise DspError("pulse taps needs at least one tap, and only taps takes any")

    @classmethod
    def parse(cls, text: str) -> "Pulse":
        """Read ``rrc:0.35``, ``rc:0.25``, ``gauss:0.5``, ``rect`` or ``none``; raises DspError for anything else."""
        family, colon, number = text.partition(":")
        try:
            value = float(number) if colon else None
        except ValueError:
            raise DspError(f"pulse {text!r}: {number!r} is not a number") from None
        return cls(family, value)  # type: ignore[arg-type]  # refused at run time by __post_init__

    def __str__(self) -> str:
        if self.family == "taps":
            return f"taps:{len(self.taps)}"
        return self.family if self.number is None else f"{self.family}:{self.number:g}"

    @property
    def band_limited(self) -> bool:
        """Whether the received pulse dies out by one symbol rate, so that a few samples per symbol hold all of it."""
        return self.family in ("rrc", "rc") or (self.family == "gauss" and (self.number or 0.0) <= 0.5)

    def received(self, t: ArrayLike) -> NDArray[np.float64]:
        """The pulse behind its receive filter, 1 at 0, any shape; raises DspError for none and taps, whose channel is unknown."""
        if self.family in ("rrc", "rc"):
            return raised_cosine(t, self.number or 0.0)
        if self.family == "rect":
            return np.maximum(0.0, 1.0 - np.abs(np.asarray(t, dtype=np.float64)))
        raise DspError(f"the received pulse of {self} is not known")


def receive_filter(pulse: Pulse, sps: float) -> NDArray[np.float64] | NDArray[np.complex128]:
    """Taps of the filter matched to ``pulse`` at ``sps`` samples per symbol, odd count, centre tap in the middle, gain 1.

    Gain 1 means that the received pulse of a unit symbol peaks at 1 for rrc (transmit pulse of unit energy per symbol
    scaled by the channel), rect and gauss (transmit amplitude 1). rc and none need none: one tap of 1.
    """
    if not sps >= 2.0:
        raise DspError(f"sps must be 2 or more, got {sps!r}")
    if pulse.family in ("rc", "none"):
        return np.ones(1)
    if pulse.family == "taps":
        taps = np.asarray(pulse.taps)
        return taps if np.iscomplexobj(taps) and np.any(taps.imag) else np.ascontiguousarray(taps.real)
    if pulse.family == "rect":
        half = math.ceil(sps / 2.0 - 0.5)
        n = np.arange(-half, half + 1, dtype=np.float64)
        inside = np.clip(sps / 2.0 + 0.5 - np.abs(n), 0.0, 1.0)
        return np.asarray(inside / sps)
    number = pulse.number or 0.0
    if pulse.family == "gauss":
        # the Gaussian part alone: matching the rectangle too would leave a GMSK eye closed
        half = math.ceil(sps * 0.75 / number)
        t = np.arange(-half, half + 1) / sps
        taps = np.exp(-2.0 * (np.pi * number * t) ** 2 / math.log(2.0))
        return np.asarray(taps / taps.sum())
    span = rrc_half_span(number)
    half = math.ceil(span * sps)
    t = np.arange(-half, half + 1) / sps
    window = np.cos(np.pi / 2 * np.clip((np.abs(t) / span - 0.6) / 0.4, 0.0, 1.0)) ** 2
    return np.asarray(root_raised_cosine(t, number) * window / sps)


def rrc_half_span(rolloff: float) -> float:
    """Symbols on each side that an RRC receive filter needs so that its truncation leaves ISI below -50 dB (measured)."""
    return min(max(4.0 / rolloff, 6.0), 24.0)
