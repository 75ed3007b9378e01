"""Sample formats by their SigMF datatype names, and the way from their bytes to float32 and complex64.

Scaling: a signed integer of n bits is divided by 2^(n-1); an unsigned one is x - 2^(n-1) over 2^(n-1). SigMF leaves
the scaling open. With this choice the middle code (128 of ``cu8``) is exactly 0, as in 8-bit WAV; taking the middle
of the range instead, (x - 127.5)/127.5, differs by a constant of half a step, which the removal of the DC offset
takes out anyway.

Clipped samples are those at an end stop. Signed integers count the lowest code and its neighbour -(2^(n-1) - 1),
where symmetric converters stop, and the highest; unsigned ones the lowest and the highest; floats exactly -1 and +1.
"""

from dataclasses import dataclass
from typing import Any, Final, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from dsp.block import Samples
from monitor.errors import InputError

ByteBuffer = bytes | bytearray | memoryview | NDArray[np.uint8]

_WIDTHS: Final = ("f64", "f32", "i32", "u32", "i16", "u16", "i8", "u8")
DATATYPES: Final = tuple(
    domain + width + order
    for domain in "cr"
    for width in _WIDTHS
    for order in (("",) if width.endswith("8") else ("_le", "_be"))
)
_FLOAT32_LIMIT: Final = float(np.finfo(np.float32).max)


class Decoded(NamedTuple):
    """Finite samples, shape ``(n,)``, float32 or complex64; how many were clipped; how many not finite and set to 0."""

    samples: Samples
    clipped: int
    nonfinite: int


@dataclass(frozen=True, slots=True)
class SampleFormat:
    """One of the SigMF datatypes, taken apart.

    Attributes
    ----------
    name
        Canonical SigMF name.
    complex_samples
        I and Q interleaved, I first.
    kind
        ``f`` float, ``i`` signed, ``u`` unsigned integer.
    bits
        Of one real number.
    big_endian
        Byte order; False for 8 bits.
    """

    name: str
    complex_samples: bool
    kind: Literal["f", "i", "u"]
    bits: int
    big_endian: bool

    @property
    def bytes_per_sample(self) -> int:
        """Bytes of one sample: of the I/Q pair if complex."""
        return self.bits // 8 * (2 if self.complex_samples else 1)

    def as_complex(self) -> "SampleFormat":
        """Return the complex format of the same numbers."""
        return parse_datatype("c" + self.name[1:])

    def decode(self, data: ByteBuffer) -> Decoded:
        """Turn bytes into samples.

        Parameters
        ----------
        data
            A whole number of samples, any alignment. The samples may be a view of it (f32 in the machine's byte
            order), so it must not change afterwards.

        Raises
        ------
        ValueError
            The length is not a whole number of samples.
        """
        n_bytes = data.nbytes if isinstance(data, (np.ndarray, memoryview)) else len(data)
        if n_bytes % self.bytes_per_sample:
            raise ValueError(f"{n_bytes} bytes are not a whole number of {self.name} samples")
        stored = np.dtype(f"{'>' if self.big_endian else '<'}{self.kind}{self.bits // 8}")
        values: NDArray[Any] = np.frombuffer(data, stored)
        if not stored.isnative or not values.flags.aligned:
            values = values.astype(stored.newbyteorder("="))
        if self.kind == "f":
            return from_floats(values, self.complex_samples)
        half = 1 << (self.bits - 1)
        if self.kind == "i":
            return from_integers(values, self.complex_samples, low=1 - half, high=half - 1, full_scale=half)
        # flipping the top bit subtracts half the range: exact, and faster than arithmetic in a wider type
        signed = (values ^ values.dtype.type(half)).view(f"i{self.bits // 8}")
        return from_integers(signed, self.complex_samples, low=-half, high=half - 1, full_scale=half)


def parse_datatype(name: str) -> SampleFormat:
    """Return the format of a SigMF datatype name; raise InputError, listing the legal names, for any other.

    A multi-byte name without byte order means little-endian. 8-bit names may carry one, as the schema's pattern allows
    (SigMF 1.2.6, core:datatype), though it says nothing.
    """
    bare, _, order = name.partition("_")
    if bare[1:] in _WIDTHS and bare[:1] in ("c", "r") and (order in ("le", "be") or name == bare):
        kind, bits = bare[1], int(bare[2:])
        multi_byte = bits > 8
        return SampleFormat(
            name=f"{bare}_{order or 'le'}" if multi_byte else bare,
            complex_samples=bare[0] == "c",
            kind="f" if kind == "f" else "i" if kind == "i" else "u",
            bits=bits,
            big_endian=multi_byte and order == "be",
        )
    raise InputError(
        f"unknown sample format '{name}'; legal are c (I/Q) or r (real), then f32 f64 i16 i32 u16 u32 "
        "with _le or _be, or i8 u8: cf32_le, ri16_be, cu8"
    )


def from_integers(
    values: NDArray[np.signedinteger[Any]], complex_samples: bool, *, low: int, high: int, full_scale: int
) -> Decoded:
    """Scale signed integers, shape ``(n,)`` (``(2n,)`` interleaved if complex), by 1/``full_scale``, a power of two.

    Samples (of a complex one: either part) at or below ``low`` or at or above ``high`` count as clipped.
    """
    scaled: NDArray[np.float32] = values.astype(np.float32)
    scaled *= np.float32(1.0 / full_scale)
    clipped = 0
    if values.size and (values.min() <= low or values.max() >= high):
        clipped = _count((values <= low) | (values >= high), complex_samples)
    samples = _paired(scaled, complex_samples)
    return Decoded(samples, clipped, 0)


def from_floats(values: NDArray[np.floating[Any]], complex_samples: bool) -> Decoded:
    """Take float32 or float64, shape ``(n,)`` (``(2n,)`` interleaved if complex), as they are.

    NaN, infinities and what float32 cannot hold are not finite: such a sample (of a complex one: both parts) is set
    to 0 and counted. The result is a view of ``values`` if they are float32 and finite.
    """
    if not values.size:
        return Decoded(_paired(np.zeros(0, np.float32), complex_samples), 0, 0)
    with np.errstate(all="ignore"):
        least, most = float(values.min()), float(values.max())  # NaN if any is
        narrow = values.astype(np.float32, copy=False)
    samples = _paired(narrow, complex_samples)
    nonfinite = 0
    bad: NDArray[np.bool_] | None = None
    if not (least >= -_FLOAT32_LIMIT and most <= _FLOAT32_LIMIT):  # false for NaN
        bad = ~np.isfinite(samples)
        nonfinite = int(np.count_nonzero(bad))
        if nonfinite:
            samples = samples.copy()
            samples[bad] = 0
    clipped = 0
    if not (least > -1.0 and most < 1.0):
        hits = (values == 1.0) | (values == -1.0)
        if bad is not None:
            hits &= ~(np.repeat(bad, 2) if complex_samples else bad)
        clipped = _count(hits, complex_samples)
    return Decoded(samples, clipped, nonfinite)


def _paired(values: NDArray[np.float32], complex_samples: bool) -> Samples:
    samples: Samples = values
    if complex_samples:
        samples = values.view(np.complex64)
    return samples


def _count(hits: NDArray[np.bool_], complex_samples: bool) -> int:
    # two neighbouring flags read as one 16-bit number are non-zero if either part hit
    return int(np.count_nonzero(hits.view(np.uint16) if complex_samples else hits))
