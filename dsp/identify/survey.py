"""Everything that a stretch of samples tells: its links, strongest first, and the state of the samples themselves."""

import math

import numpy as np
from numpy.typing import NDArray

from dsp.acquisition import NotFound
from dsp.block import Samples
from dsp.identify.findings import Findings, FoundLink, Guess, Identified, Wanted
from dsp.identify.search import identify
from dsp.identify.spectrum import occupied_band


def survey_links(samples: Samples, sample_rate_hz: float, wanted: Wanted | None = None, most: int = 3) -> Findings:
    """Look for links in ``samples`` (float32 or complex64, a few seconds), at most ``most`` of them.

    Raises DspError where what was given contradicts itself or the samples.
    """
    wanted = wanted or Wanted()
    outcome = identify(samples, sample_rate_hz, wanted)
    links: tuple[FoundLink, ...] = ()
    reason = ""
    if isinstance(outcome, NotFound):
        reason = outcome.reason
    else:
        links = (_described(samples, sample_rate_hz, outcome),)
    level, peak = _level_dbfs(samples), _peak(samples)
    return Findings(
        links[:most],
        reason,
        samples.size / sample_rate_hz,
        level,
        20 * math.log10(peak) if peak > 0 else None,
        complex(np.mean(samples, dtype=np.complex128)) if samples.size else 0j,
        _clipped_pct(samples, peak),
    )


def _described(samples: Samples, rate: float, found: Identified) -> FoundLink:
    link = found.link
    band = occupied_band(samples)
    assert band is not None  # else nothing was found
    carrier = None if link.scheme.kind == "baseband" else Guess(link.carrier_hz or found.centre_hz, 0.5)
    return FoundLink(
        found,
        Guess(link.symbol_rate_hz, 0.5),
        Guess(link.scheme, 0.5),
        Guess(link.pulse, 0.5),
        carrier,
        None,
        band.centre * rate,
        2 * band.half * rate,
        _level_dbfs(samples) or 0.0,
    )


def _level_dbfs(samples: Samples) -> float | None:
    power = float(np.mean(np.abs(samples).astype(np.float64) ** 2)) if samples.size else 0.0
    return 10 * math.log10(power) if power > 0 else None


def _rails(samples: Samples) -> tuple[NDArray[np.floating], ...]:
    return (np.real(samples), np.imag(samples)) if np.iscomplexobj(samples) else (np.real(samples),)


def _peak(samples: Samples) -> float:
    return max((float(np.max(np.abs(rail))) for rail in _rails(samples) if rail.size), default=0.0)


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
