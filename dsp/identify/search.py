"""The search for one link: which band, which stretch, which candidate, and whether the loops hold it."""

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from dsp.acquisition import Acquired, NotFound, acquire
from dsp.block import Samples
from dsp.errors import DspError
from dsp.frontend import FrontEnd, plan
from dsp.identify.candidates import (
    Candidate,
    carrier_candidates,
    frequency_candidate,
    frequency_rail,
    pam_candidate,
    staggered_candidate,
)
from dsp.identify.findings import Band, Identified, Wanted
from dsp.identify.lines import Line, Products, clock_lines
from dsp.identify.refining import refined
from dsp.identify.spectrum import Spectrum, segments, spectrum_of
from dsp.link import SCHEMES, Link, Scheme
from dsp.pulses import Pulse

_WHOLE = 1 << 22  # samples whose spectrum is looked at as a whole
_STRETCH = 2e5  # independent samples of a band that are searched for lines
_TRIAL_SYMBOLS = 3000
# spread of the envelope (`Spectrum.envelope_spread`): up to 0.05 for frequency schemes, from 0.09 for band-limited carriers (measured)
_CONSTANT, _NOT_CONSTANT = 0.07, 0.2
_STEADY = 0.02  # staggered phases at roll-off 1 have 0.028, minimum shift keying up to 0.015 (measured)
_RATES_AGREE = (
    1e-5  # of line and loops; beyond it the line is another's, or the clock wanders, and the loops are nearer
)
_NO_LINE = "no line in the spectrum that a symbol clock would have"
_RAIL_DEPTHS = (0.03, 0.15)  # a discriminator's noise rises outwards: what is faint there is noise
_AT_ZERO = 0.2  # of the greatest density
_FAMILIES = ("rrc", "rc", "rect", "none")


@dataclass(frozen=True, slots=True)
class Found:
    """A link that the loops hold, its evidence, and the band it was found in (cycles a sample)."""

    identified: Identified
    candidate: Candidate
    acquired: Acquired
    band: Band


def identify(samples: Samples, sample_rate_hz: float, wanted: Wanted) -> Identified | NotFound:
    """Fill in what is not given, from ``samples`` (a few thousand symbols or more).

    Raises DspError where what was given contradicts itself or the samples.
    """
    found = find_link(samples, sample_rate_hz, wanted)
    return found if isinstance(found, NotFound) else found.identified


def find_link(
    samples: Samples, sample_rate_hz: float, wanted: Wanted, bands: list[Band] | None = None
) -> Found | NotFound:
    """The strongest link in ``samples``, with its evidence; ``bands``: look only there."""
    if not np.any(samples):
        return NotFound("the samples are all zero")
    if wanted.scheme is not None and wanted.scheme.kind == "baseband" and np.iscomplexobj(samples):
        raise DspError(
            f"scheme {wanted.scheme.name} is a real baseband, but the samples are I/Q; take bpsk, or one channel"
        )
    samples = _at_unit_power(samples)
    if bands is None:
        whole = spectrum_of(samples[:_WHOLE])
        if whole is None:
            return NotFound("too few samples")
        bands = scopes(whole)
    reason = _NO_LINE
    for band in bands:
        steady: bool | None = None  # of the envelope, as the longest stretch tells best
        for stretch in _stretches(samples, band):
            spectrum = spectrum_of(stretch)
            if spectrum is None:
                continue
            spread = spectrum.envelope_spread(band.centre, 1.15 * band.half)
            steady = spread < _STEADY if steady is None else steady
            outcome = _in_band(samples, spectrum, band, sample_rate_hz, wanted, _Envelope(spread, steady))
            if isinstance(outcome, Found):
                return outcome
            if reason == _NO_LINE:
                reason = outcome.reason
    return NotFound(reason)


def scopes(spectrum: Spectrum) -> list[Band]:
    """Bands to look for a link in: each stretch that stands out, and all of them together, as a wide frequency shift has gaps."""
    parts = segments(spectrum)
    if not parts:
        return [Band(0.25, 0.25) if spectrum.is_real else Band(0.0, 0.5)]
    if len(parts) == 1:
        return parts
    strong = [b for b in parts if spectrum.power(b) > 0.05 * spectrum.power(parts[0])]
    if len(strong) == 1:
        return parts[:3]
    low, high = min(b.centre - b.half for b in strong), max(b.centre + b.half for b in strong)
    return [Band(0.5 * (low + high), 0.5 * (high - low)), *parts[:3]]


def _at_unit_power(samples: Samples) -> Samples:
    rms = math.sqrt(float(np.mean(np.abs(samples).astype(np.float64) ** 2)))
    if np.iscomplexobj(samples):
        return np.asarray(samples / rms, dtype=np.complex64)
    return np.asarray(samples / rms, dtype=np.float32)


def _stretches(samples: Samples, band: Band) -> Iterator[Samples]:
    """What to search for lines: a long stretch, then shorter ones where the power is (bursts; clocks that wander)."""
    size = min(int(_STRETCH / (2 * band.half)), samples.size)
    while True:
        start = busiest(samples, size)
        yield samples[start : start + size]
        size //= 4
        if size < 1024 or size * 2 * band.half < 800:
            return


def busiest(samples: Samples, need: int) -> int:
    """Where the stretch of ``need`` samples with the most power begins: a recording may open with silence."""
    if samples.size <= need:
        return 0
    block = max(need // 4, 1)
    energy = np.add.reduceat(np.abs(samples) ** 2, np.arange(0, samples.size // block * block, block))
    runs = np.convolve(energy, np.ones(4), mode="valid")
    # the first stretch that is near the busiest, so that a steady link is met at its start
    return int(np.argmax(runs > 0.9 * runs.max())) * block


@dataclass(frozen=True, slots=True)
class _Envelope:
    """A band's `Spectrum.envelope_spread`, and whether it is more constant than that of staggered phases with any roll-off.

    (Minimum shift keying is a kind of these.)
    """

    spread: float
    steady: bool


def _in_band(
    samples: Samples, spectrum: Spectrum, band: Band, rate: float, wanted: Wanted, envelope: _Envelope
) -> Found | NotFound:
    reason = _NO_LINE
    for candidate in _candidates(spectrum, band, rate, wanted, envelope):
        if candidate.doubt:
            if candidate.line.chance < 1e-8 and reason == _NO_LINE:
                reason = candidate.doubt
            continue
        outcome = _held(samples, candidate, band, spectrum, rate, wanted)
        if isinstance(outcome, Found):
            return outcome
        reason = outcome.reason
    return NotFound(reason)


def _kinds(spectrum: Spectrum, band: Band, wanted: Wanted, spread: float) -> list[str]:
    if wanted.scheme is not None:
        return [wanted.scheme.kind]
    low = band.centre - band.half
    kinds = (
        ["carrier"]
        if spread > _NOT_CONSTANT
        else ["frequency", "carrier"]
        if spread < _CONSTANT
        else ["carrier", "frequency"]
    )
    if spectrum.is_real and low < 0.5 * band.half:
        if low < 0.02 * band.half:
            # side lobes of a square pulse about a carrier reach down to 0, but stand far below what is about the carrier
            return ["baseband"] if _rests_on_zero(spectrum, band) else ["baseband", *kinds]
        kinds.insert(1 if spread < _CONSTANT else 0, "baseband")
    return kinds


def _rests_on_zero(spectrum: Spectrum, band: Band) -> bool:
    """Whether a real band is at its strongest near 0 rather than some way up."""
    inside = spectrum.frequencies < band.centre + band.half
    density = np.convolve(spectrum.density[inside], np.ones(3) / 3, mode="same")
    return bool(density.size < 8 or density[1 : 2 + density.size // 50].max() > _AT_ZERO * density.max())


def _candidates(
    spectrum: Spectrum, band: Band, rate: float, wanted: Wanted, envelope: _Envelope
) -> Iterator[Candidate]:
    """Candidates in the order in which they should be believed."""
    pulses = None if wanted.pulse is None else (wanted.pulse,)
    given = None if wanted.symbol_rate_hz is None else wanted.symbol_rate_hz / rate
    low, high = band.centre - 1.1 * band.half, band.centre + 1.1 * band.half

    def schemes(kind: str) -> tuple[Scheme, ...]:
        return (wanted.scheme,) if wanted.scheme is not None else tuple(s for s in SCHEMES.values() if s.kind == kind)

    def clocks(lines: list[Line], step: float = 1.0) -> list[Line]:
        if given is not None:
            near = [line for line in lines if abs(line.frequency * step / given - 1) < 2e-3]
            return near[:1] or [Line(given / step, 0.0, 1.0)]
        usable = [line for line in lines if 1 / 2000 <= line.frequency * step <= 0.5]
        # of a square pulse the harmonics may be the stronger lines
        clear = [line for line in usable if line.ratio > 0.03 * usable[0].ratio]
        lowest = min(clear, key=lambda line: line.frequency, default=None)
        return list(dict.fromkeys([line for line in (lowest, *usable[:3]) if line is not None]))

    for kind in _kinds(spectrum, band, wanted, envelope.spread):
        if kind == "baseband":
            lines = clock_lines(spectrum, 0.0, high, 1 / 2100, 0.5)
            found = [
                c
                for line in clocks(lines)
                if (c := pam_candidate(spectrum, line, schemes(kind), pulses, _FAMILIES)) is not None
            ]
            yield from _by_belief(found + _half_bits(spectrum, found, schemes(kind), pulses, given))
        elif kind == "frequency":
            rail = frequency_rail(spectrum, band.centre, 1.15 * band.half)
            if rail is None:
                continue
            top = min(2.4 * band.half / rail.step, 0.5)
            lines = clock_lines(rail.spectrum, 0.0, top, 1 / 2100 / rail.step, top, _RAIL_DEPTHS)
            found = [
                c
                for line in clocks(lines, rail.step)
                if (c := frequency_candidate(rail, line, schemes(kind), pulses)) is not None
            ]
            yield from _by_belief(found)
        else:
            edge = max(low, 1e-9) if spectrum.is_real else low
            found = []
            plain = tuple(s for s in schemes(kind) if not s.stagger)
            within = (low, high)
            if wanted.carrier_hz is not None:
                within = (wanted.carrier_hz / rate - 0.1 * band.half, wanted.carrier_hz / rate + 0.1 * band.half)
            if plain:
                lines = clock_lines(spectrum, edge, high, 1 / 2100, 2.1 * band.half)
                found = [
                    c
                    for line in clocks(lines)
                    if (c := carrier_candidates(spectrum, line, within, plain, pulses)) is not None
                ]
            staggered = next((s for s in schemes(kind) if s.stagger), None)
            if staggered is not None and not any(not c.doubt for c in found):
                squares = Products(spectrum, edge, high).square_lines()
                if len(squares) >= 2 and squares[1].ratio > 0.1 * squares[0].ratio:
                    c = staggered_candidate(spectrum, (squares[0], squares[1]), staggered, pulses)
                    if c is not None and wanted.scheme is None and not c.doubt and envelope.steady:
                        c = replace(c, doubt="a frequency shift, as msk has, too faint to be told by its frequency")
                    found += [c] if c is not None else []
            yield from _by_belief(found)


def _by_belief(found: list[Candidate]) -> list[Candidate]:
    """Sound ones first, of those a Manchester code's half-bits, then the one that explains most a sample."""
    return sorted(found, key=lambda c: (bool(c.doubt), not c.half_bits, -c.excess * c.rate))


def _half_bits(
    spectrum: Spectrum,
    found: list[Candidate],
    schemes: tuple[Scheme, ...],
    pulses: tuple[Pulse, ...] | None,
    given: float | None,
) -> list[Candidate]:
    """What was found again at twice its rate, if it then shows half-bits: a Manchester code's line is that of its bits."""
    sound = [c for c in found if not c.doubt]
    if given is not None or not sound:
        return []
    line = sound[0].line
    twice = replace(line, frequency=2 * line.frequency)
    if twice.frequency > 0.5:
        return []
    again = pam_candidate(spectrum, twice, schemes, pulses, _FAMILIES)
    return [again] if again is not None and again.half_bits else []


def _held(
    samples: Samples, candidate: Candidate, band: Band, spectrum: Spectrum, rate: float, wanted: Wanted
) -> Found | NotFound:
    """Whether the loops hold the candidate over its first symbols."""
    symbol_rate = candidate.rate * rate if wanted.symbol_rate_hz is None else wanted.symbol_rate_hz
    scheme = candidate.scheme
    try:
        link = Link(scheme, rate, symbol_rate, wanted.pulse or candidate.pulse, wanted.carrier_hz, wanted.name)
    except DspError as error:
        return NotFound(str(error))
    # a frequency discriminator suffers from all noise that it is given
    is_complex = bool(np.iscomplexobj(samples))
    own = spectrum.holding(band) if scheme.kind == "frequency" else band
    centre, half = place_of(candidate, link, own, is_complex=is_complex)
    front = plan(link, complex_in=is_complex, centre=centre, half_band=half)
    need = int(_TRIAL_SYMBOLS * link.samples_per_symbol)
    start = busiest(samples, need)
    rails = FrontEnd(link, front).push(samples[start : start + need])
    outcome = acquire(link, front, rails, detector=None, timing_bandwidth=0.005, carrier_bandwidth=0.005)
    if not isinstance(outcome, Acquired):
        return outcome
    if wanted.symbol_rate_hz is None:
        looped = symbol_rate * front.sps / outcome.start.sps
        if abs(looped / symbol_rate - 1.0) > _RATES_AGREE:
            link = replace(link, symbol_rate_hz=looped)
        else:
            candidate = refined(spectrum, candidate)
            link = replace(link, symbol_rate_hz=candidate.rate * rate)
            if link.scheme.kind == "carrier" and link.carrier_hz is None:
                centre = candidate.centre
    found = tuple(
        key
        for key, value in (
            ("scheme", wanted.scheme),
            ("symbol_rate_hz", wanted.symbol_rate_hz),
            ("pulse", wanted.pulse),
            ("carrier_hz", wanted.carrier_hz),
        )
        if value is None and not (key == "carrier_hz" and scheme.kind == "baseband")
    )
    identified = Identified(link, centre * rate, None if half is None else half * rate, found)
    return Found(identified, candidate, outcome, band)


def place_of(candidate: Candidate, link: Link, band: Band, *, is_complex: bool) -> tuple[float, float | None]:
    """Centre and half band of the front end, cycles a sample, for a candidate."""
    if link.scheme.kind == "carrier" and link.carrier_hz is None:
        return candidate.centre, None
    return placement(link, band, is_complex=is_complex or link.scheme.kind == "carrier")


def placement(link: Link, band: Band, *, is_complex: bool) -> tuple[float, float | None]:
    """Centre and half band of the front end, cycles a sample, for a link in that band; (0, None) where its defaults serve."""
    carrier = None if link.carrier_hz is None else link.carrier_hz / link.sample_rate_hz
    if link.scheme.kind == "baseband":
        return 0.0, None
    if link.scheme.kind == "frequency":
        centre = band.centre if carrier is None else carrier
        half = min(band.half * 1.2 + 0.35 / link.samples_per_symbol, 0.45)
        if not is_complex:
            # beyond 0 and half the sample rate lies the mirror image of a real wave, its faint edge first
            half = min(half, max(min(centre, 0.5 - centre) + 0.25 / link.samples_per_symbol, band.half))
        return centre, half
    if is_complex:
        return carrier or 0.0, None
    return band.centre if carrier is None else carrier, None


def band_of(found: Found) -> Band:
    """Where a found link's own power lies."""
    link, candidate = found.identified.link, found.candidate
    if link.scheme.kind == "frequency":
        return found.band
    width = (1 + (link.pulse.number or 1.0)) / 2 if link.pulse.family in ("rrc", "rc") else 1.0
    half = width / link.samples_per_symbol
    return Band(0.5 * half, 0.5 * half) if link.scheme.kind == "baseband" else Band(candidate.centre, half)
