"""What a link is: its scheme, symbol rate, pulse and carrier."""

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from dsp.errors import DspError
from dsp.pulses import Pulse

Kind = Literal["baseband", "carrier", "frequency"]
_PSK8_RADIUS = 2.0 * (math.cos(math.pi / 8) * 3 + math.sin(math.pi / 8)) / 2.0


@dataclass(frozen=True, slots=True)
class Scheme:
    """A modulation as the eye sees it.

    Attributes
    ----------
    name
        As typed by the user.
    kind
        ``baseband``: one real rail as it is; ``carrier``: I/Q behind a carrier loop; ``frequency``: the discriminator's output.
    rail_levels
        Nominal levels of a rail, rising, in level units.
    rails
        1 or 2.
    bits
        Bits a symbol.
    rotation
        Turn of the constellation's frame from one symbol to the next, in cycles (pi/4-DQPSK: 1/8).
    stagger
        Delay of the Q rail, in symbols (OQPSK: 0.5).
    symmetry
        Carrier phase ambiguity: the constellation repeats after 1/symmetry of a turn; 0 where there is no carrier.
    """

    name: str
    kind: Kind
    rail_levels: tuple[float, ...]
    rails: int
    bits: int
    rotation: float = 0.0
    stagger: float = 0.0
    symmetry: int = 0

    @property
    def levels(self) -> int:
        """Levels a rail."""
        return len(self.rail_levels)

    def points(self) -> NDArray[np.complex128]:
        """All constellation points (real schemes: imaginary part 0), shape ``(2**bits,)``, in level units."""
        if self.rails == 1:
            return np.asarray(self.rail_levels, dtype=np.complex128)
        if self.name == "8psk":
            return np.asarray(_PSK8_RADIUS * np.exp(2j * np.pi * (np.arange(8) + 0.5) / 8))
        axis = np.asarray(self.rail_levels)
        return np.asarray((axis[:, None] + 1j * axis[None, :]).ravel())

    def symbol_energy(self) -> float:
        """Mean of ``|a|**2`` over `points`, in level units squared."""
        return float(np.mean(np.abs(self.points()) ** 2))


def _pam(levels: int) -> tuple[float, ...]:
    return tuple(float(2 * i - levels + 1) for i in range(levels))


_PSK8_RAIL = tuple(
    _PSK8_RADIUS * value
    for value in (-math.cos(math.pi / 8), -math.sin(math.pi / 8), math.sin(math.pi / 8), math.cos(math.pi / 8))
)

SCHEMES: dict[str, Scheme] = {
    scheme.name: scheme
    for scheme in (
        Scheme("pam2", "baseband", _pam(2), 1, 1),
        Scheme("pam3", "baseband", (-2.0, 0.0, 2.0), 1, 1),
        Scheme("pam4", "baseband", _pam(4), 1, 2),
        Scheme("pam8", "baseband", _pam(8), 1, 3),
        Scheme("bpsk", "carrier", _pam(2), 1, 1, symmetry=2),
        Scheme("qpsk", "carrier", _pam(2), 2, 2, symmetry=4),
        Scheme("oqpsk", "carrier", _pam(2), 2, 2, stagger=0.5, symmetry=4),
        Scheme("pi4dqpsk", "carrier", _pam(2), 2, 2, rotation=0.125, symmetry=4),
        Scheme("8psk", "carrier", _PSK8_RAIL, 2, 3, symmetry=8),
        Scheme("16qam", "carrier", _pam(4), 2, 4, symmetry=4),
        Scheme("64qam", "carrier", _pam(8), 2, 6, symmetry=4),
        Scheme("fsk2", "frequency", _pam(2), 1, 1),
        Scheme("fsk4", "frequency", _pam(4), 1, 2),
        Scheme("gfsk", "frequency", _pam(2), 1, 1),
        Scheme("msk", "frequency", _pam(2), 1, 1),
        Scheme("gmsk", "frequency", _pam(2), 1, 1),
    )
}


def find_scheme(name: str) -> Scheme:
    """The scheme of that name (``nrz`` is pam2); raises DspError with the list of names."""
    try:
        return SCHEMES["pam2" if name == "nrz" else name]
    except KeyError:
        raise DspError(f"scheme {name!r} is not known; take one of {' '.join(SCHEMES)}") from None


@dataclass(frozen=True, slots=True)
class Link:
    """One link in one stream.

    Attributes
    ----------
    sample_rate_hz, symbol_rate_hz
        Of the stream and of the link; at least 2 samples a symbol, at most 2000.
    carrier_hz
        Offset of the carrier from the centre of the recording (0 Hz); None: found by acquisition.
    name
        What the user calls the link; empty if nothing.
    """

    scheme: Scheme
    sample_rate_hz: float
    symbol_rate_hz: float
    pulse: Pulse
    carrier_hz: float | None = None
    name: str = ""

    def __post_init__(self) -> None:
        if not 0 < self.sample_rate_hz <= 1e12:  # false for NaN too
            raise DspError(f"sample rate must be above 0 and at most 1e12 Hz, got {self.sample_rate_hz!r}")
        if not (math.isfinite(self.symbol_rate_hz) and self.symbol_rate_hz > 0):
            raise DspError(f"symbol rate must be above 0 Hz, got {self.symbol_rate_hz!r}")
        if not 2.0 <= self.samples_per_symbol <= 2000.0:
            raise DspError(
                f"symbol rate {self.symbol_rate_hz:g} Hz gives {self.samples_per_symbol:.4g} samples a symbol "
                f"at {self.sample_rate_hz:g} Hz; 2 to 2000 can be measured"
            )

    @property
    def samples_per_symbol(self) -> float:
        """Sample rate over symbol rate."""
        return self.sample_rate_hz / self.symbol_rate_hz
