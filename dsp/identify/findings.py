"""What identification is asked and what it answers: immutable values."""

from dataclasses import dataclass
from typing import Generic, TypeVar

from dsp.link import Link, Scheme
from dsp.pulses import Pulse

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Band:
    """Where a signal's power lies: centre and half width in cycles a sample; complex samples may lie below 0."""

    centre: float
    half: float


@dataclass(frozen=True, slots=True)
class Wanted:
    """What the user said of the link; None: find it."""

    scheme: Scheme | None = None
    symbol_rate_hz: float | None = None
    pulse: Pulse | None = None
    carrier_hz: float | None = None
    name: str = ""


@dataclass(frozen=True, slots=True)
class Identified:
    """A link with what the chain needs to be told, and which of its parts were found rather than given."""

    link: Link
    centre_hz: float
    half_band_hz: float | None
    found: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Guess(Generic[T]):
    """One part of an answer: its value, how sure that is (0 to 1; 1 where it was given), and the next best; None: no other came near.

    The confidence is the share of answers with such evidence that were right among random links in white noise with an echo: the scheme by
    name, the symbol rate within 20 ppm, the pulse within 3 points of opening of the transmitter's own, the carrier not another that the
    constellation would allow. A link unlike these, such as one beside strong interference, is told more surely than it should be.
    """

    value: T
    confidence: float
    runner_up: T | None = None


@dataclass(frozen=True, slots=True)
class FoundLink:
    """One link that was found in samples.

    Attributes
    ----------
    identified
        The link and its place, as `dsp.chain.Chain` takes them; ``link.carrier_hz`` is None unless it was given.
    symbol_rate_hz, scheme, pulse, carrier_hz
        Its parts with their confidence. ``carrier_hz`` counts from the centre of the recording (real recordings: from 0 Hz); for
        frequency schemes it is the mean of the outer tones; None for baseband.
    snr_db
        Symbol energy over noise variance at the decisions, neighbours' share taken out, as the reading's ``snr_db``.
    centre_hz, occupied_hz
        Middle and width of the band that holds 99 % of the link's power.
    level_dbfs
        Power of the link's band, dB of a full-scale constant (1.0).
    modulation_index
        Of frequency schemes: distance of neighbouring tones over the symbol rate.
    mirrored
        Whether I and Q look swapped (or the spectrum inverted): the band stands at minus the carrier that was given. None: it cannot be
        told.
    notes
        What else there is to say, a plain sentence each.
    """

    identified: Identified
    symbol_rate_hz: Guess[float]
    scheme: Guess[Scheme]
    pulse: Guess[Pulse]
    carrier_hz: Guess[float] | None
    snr_db: float | None
    centre_hz: float
    occupied_hz: float
    level_dbfs: float
    modulation_index: float | None = None
    mirrored: bool | None = None
    notes: tuple[str, ...] = ()

    @property
    def link(self) -> Link:
        """What was identified."""
        return self.identified.link


@dataclass(frozen=True, slots=True)
class Findings:
    """All that a stretch of samples tells.

    Attributes
    ----------
    links
        The links found, strongest first; may be empty.
    reason
        Why there is no link; empty if there is one.
    seconds
        Length of what was looked at.
    level_dbfs, peak_dbfs
        Power and greatest sample (of the greater rail, for I/Q), dB of full scale (1.0); None for silence.
    dc
        Mean of the samples, in full scale; complex for I/Q.
    clipped_pct
        Share of the samples, in per cent, that sit at the greatest value that any rail reaches; 0 where that is no more than chance does.
    """

    links: tuple[FoundLink, ...]
    reason: str
    seconds: float
    level_dbfs: float | None
    peak_dbfs: float | None
    dc: complex
    clipped_pct: float
