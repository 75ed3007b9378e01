"""Everything that a stretch of samples tells: its links, strongest first, and the state of the samples themselves."""

import math

import numpy as np
from numpy.typing import NDArray

from dsp.acquisition import NotFound
from dsp.block import Samples
from dsp.identify.findings import Band, Findings, FoundLink, Guess, Wanted
from dsp.identify.search import Found, band_of, find_link
from dsp.identify.spectrum import Spectrum, segments, spectrum_of

# Errors among what is claimed, by evidence, as (those that no evidence rules out, those more without any, scale of the evidence). Roughly
# fitted on 271 random links of tools/identification_grid.py with their signal to noise ratio from 10 dB below the threshold of a bit error
# rate of 1e-3 to 12 dB above: 233 were found, the scheme was wrong in 1, the rate by more than 20 ppm in none, and 1 pulse lost more than 3
# points of opening.
_Errors = tuple[float, float, float]
_RATE: _Errors = (0.005, 0.05, 100.0)  # evidence: height of the clock's line over noise
_SCHEME: _Errors = (0.005, 0.10, 0.1)  # nats a symbol over the next scheme
_PULSE: _Errors = (0.01, 0.06, 0.01)  # of the eye's opening, over the next family
_CARRIER = 0.45  # error where the carrier stands half-way to the next frequency that would serve
_MIRRORED = 0.1  # of a symbol rate, within which a band stands at minus the carrier given


def survey_links(samples: Samples, sample_rate_hz: float, wanted: Wanted | None = None, most: int = 3) -> Findings:
    """Look for links in ``samples`` (float32 or complex64, a few seconds), at most ``most`` of them, strongest first.

    Raises DspError where what was given contradicts itself or the samples.
    """
    wanted = wanted or Wanted()
    spectrum = spectrum_of(samples)
    found: list[Found] = []
    first = find_link(samples, sample_rate_hz, wanted)
    reason = first.reason if isinstance(first, NotFound) else ""
    if isinstance(first, Found) and spectrum is not None:
        found.append(first)
        for part in segments(spectrum):
            if len(found) >= most or spectrum.power(part) < 1e-2 * spectrum.power(band_of(first)):
                break
            if any(_overlap(part, _taken(other)) > 0.2 for other in found):
                continue
            more = find_link(samples, sample_rate_hz, wanted, [part])
            if isinstance(more, Found) and not any(_overlap(band_of(more), band_of(other)) > 0.2 for other in found):
                found.append(more)
    links = [_described(item, spectrum, sample_rate_hz, wanted) for item in found if spectrum is not None]
    links.sort(key=lambda link: -link.level_dbfs)
    peak = max((float(np.max(np.abs(rail))) for rail in _rails(samples) if rail.size), default=0.0)
    return Findings(
        tuple(links[:most]),
        reason,
        samples.size / sample_rate_hz,
        _decibels(float(np.mean(np.abs(samples).astype(np.float64) ** 2)) if samples.size else 0.0),
        _decibels(peak**2),
        complex(np.mean(samples, dtype=np.complex128)) if samples.size else 0j,
        _clipped_pct(samples, peak),
    )


def _overlap(a: Band, b: Band) -> float:
    """Share of the narrower of two bands that lies in the other."""
    common = min(a.centre + a.half, b.centre + b.half) - max(a.centre - a.half, b.centre - b.half)
    return max(common, 0.0) / max(2 * min(a.half, b.half), 1e-12)


def _taken(found: Found) -> Band:
    """The band in which a found link's own side lobes may pass for others: square pulses have many."""
    band, link = band_of(found), found.identified.link
    if link.scheme.kind == "baseband":
        return Band(0.25, 0.25)
    if link.scheme.kind == "carrier" and link.pulse.family == "rect":
        return Band(band.centre, 8 * band.half)
    return band


def _described(found: Found, spectrum: Spectrum, rate: float, wanted: Wanted) -> FoundLink:
    candidate, link = found.candidate, found.identified.link
    line = _confidence(candidate.line.ratio, _RATE)
    # of few symbols chance alone may make as much
    scheme = _confidence(candidate.margin, _SCHEME) - 0.5 * math.exp(
        -max(candidate.margin, 0.0) * candidate.symbols / 4
    )
    carrier = None
    mirrored = None
    if link.scheme.kind != "baseband":
        value = candidate.centre * rate
        # the M-th power does not tell a carrier from one that stands 1/M of the symbol rate beside it: the spectrum's middle does
        step = link.symbol_rate_hz / (link.scheme.symmetry or 1)
        other = None if link.scheme.kind == "frequency" else value - math.copysign(step, value)
        carrier = Guess(value, 1.0 - _SCHEME[0] - _CARRIER * candidate.off_centre**4, other)
        if wanted.carrier_hz is not None:
            carrier = Guess(wanted.carrier_hz, 1.0)
            mirrored = _mirrored(spectrum, wanted.carrier_hz, link.symbol_rate_hz, rate)
    band = band_of(found)
    low, high = _occupied(spectrum, band)
    power = spectrum.total(band) * (2 if spectrum.is_real else 1) / spectrum.size**2
    return FoundLink(
        found.identified,
        Guess(link.symbol_rate_hz, 1.0 if wanted.symbol_rate_hz is not None else line),
        Guess(link.scheme, 1.0) if wanted.scheme is not None else Guess(link.scheme, max(scheme, 0.0), candidate.rival),
        Guess(link.pulse, 1.0)
        if wanted.pulse is not None
        else Guess(link.pulse, _confidence(candidate.pulse_margin, _PULSE), candidate.other_pulse),
        carrier,
        candidate.snr_db,
        0.5 * (low + high) * rate,
        (high - low) * rate,
        _decibels(power) or -300.0,
        candidate.index,
        mirrored,
        _notes(found),
    )


def _confidence(evidence: float, errors: _Errors) -> float:
    least, without, scale = errors
    return 1.0 - least - without * math.exp(-max(evidence, 0.0) / scale)


def _notes(found: Found) -> tuple[str, ...]:
    name = found.identified.link.scheme.name
    notes = []
    if name in ("msk", "fsk2") and found.candidate.index is not None and abs(found.candidate.index - 0.5) < 0.04:
        notes.append("msk and fsk2 of modulation index 0.5 are the same wave")
    if name in ("gmsk", "gfsk") and found.candidate.index is not None and abs(found.candidate.index - 0.5) < 0.04:
        notes.append("gmsk and gfsk of modulation index 0.5 are the same wave")
    if found.candidate.half_bits:
        notes.append(
            "each symbol is two half-bits of opposite sign: a Manchester (biphase) line code of half this rate"
        )
    return tuple(notes)


def _mirrored(spectrum: Spectrum, carrier_hz: float, symbol_rate_hz: float, rate: float) -> bool | None:
    """Whether the power stands at minus the carrier given rather than at it; None where the two are too near to tell."""
    if spectrum.is_real or abs(carrier_hz) < 0.5 * symbol_rate_hz:
        return None
    half = 0.5 * symbol_rate_hz / rate
    here, there = (spectrum.power(Band(sign * carrier_hz / rate, half)) for sign in (1, -1))
    return there > 10 * here


def _occupied(spectrum: Spectrum, band: Band) -> tuple[float, float]:
    """Edges of the band that holds 99 % of a link's power above the floor, cycles a sample."""
    frequencies = spectrum.frequencies
    inside = np.abs(frequencies - band.centre) < 1.3 * band.half
    share = np.cumsum(np.maximum(spectrum.density[inside] - spectrum.floor, 0.0))
    if not share.size or not share[-1] > 0:
        return band.centre - band.half, band.centre + band.half
    low, high = (float(np.interp(s * share[-1], share, frequencies[inside])) for s in (0.005, 0.995))
    return (0.0 if spectrum.is_real and low < 0.1 * high else low), high


def _decibels(power: float) -> float | None:
    return 10 * math.log10(power) if power > 0 else None


def _rails(samples: Samples) -> tuple[NDArray[np.floating], ...]:
    return (np.real(samples), np.imag(samples)) if np.iscomplexobj(samples) else (np.real(samples),)


def _clipped_pct(samples: Samples, peak: float) -> float:
    """Samples whose rail is at the greatest value reached, where runs of them stand together as a limiter leaves them."""
    if not peak > 0:
        return 0.0
    touched = np.zeros(samples.size, bool)
    runs = 0
    for rail in _rails(samples):
        at_peak = np.abs(rail) >= peak * (1 - 1e-6)
        runs += int(np.sum(at_peak[1:] & at_peak[:-1]))
        touched |= at_peak
    return 100.0 * float(np.mean(touched)) if runs >= 3 else 0.0
