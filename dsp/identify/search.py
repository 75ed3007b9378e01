"""One link from its samples: lines, then trials of the few likely answers."""

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from dsp.acquisition import Acquired, NotFound, acquire, plausibility_db
from dsp.block import Samples
from dsp.errors import DspError
from dsp.frontend import FrontEnd, plan
from dsp.identify.findings import Band, Identified, Wanted
from dsp.link import Link, Scheme, find_scheme
from dsp.pulses import Pulse

_TRIAL_SYMBOLS = 2000
_REAL = ("pam2", "pam4")
_CARRIER = ("bpsk", "qpsk", "16qam")
# those up to the bar decide on scheme and rate, the others refine the pulse
_PULSES = {
    "baseband": (("none", "rrc:0.35"), ("rect", "rrc:0.2", "rrc:0.25", "rrc:0.5", "rrc:1")),
    "carrier": (("rrc:0.35",), ("rrc:0.2", "rrc:0.25", "rrc:0.5", "rrc:1", "none", "rect")),
    "frequency": (("rect", "none"), ()),
}


@dataclass(frozen=True, slots=True)
class _Trial:
    """An answer tried: its MER judges the pulse, its plausibility the scheme and the rate."""

    identified: Identified
    mer_db: float
    plausibility_db: float


def occupied_band(samples: Samples) -> Band | None:
    """The band that holds 99 % of the power above the spectrum's floor; None for silence."""
    if samples.size < 256:
        return None
    length = 4096 if samples.size >= 8192 else samples.size // 8
    pieces = samples[: samples.size // length * length].reshape(-1, length)
    if not pieces.size:
        return None
    density = np.zeros(length)
    window = np.hanning(length)
    for piece in pieces[:256]:
        density += np.abs(np.fft.fft(piece * window)) ** 2
    if not density.sum() > 0:
        return None
    if np.isrealobj(samples):
        density = density[: length // 2]
        frequency = np.arange(length // 2) / length
    else:
        density = np.fft.fftshift(density)
        frequency = np.fft.fftshift(np.fft.fftfreq(length))
    smooth = np.convolve(density, np.ones(9) / 9, mode="same")
    floor = np.quantile(smooth, 0.2)
    excess = np.where(smooth > 4 * floor, density - floor, 0.0)
    if not excess.sum() > 0:
        excess = density
    share = np.cumsum(np.maximum(excess, 0.0))
    share /= share[-1]
    low, high = (float(np.interp(s, share, frequency)) for s in (0.005, 0.995))
    return Band(0.5 * (low + high), max(0.5 * (high - low), 2.0 / length))


def rate_lines(sequence: NDArray[np.float64], highest: float = 0.5, most: int = 6) -> list[tuple[float, float]]:
    """Spectral lines of a power-like sequence ``(n,)``: frequency (cycles a sample) and height over the floor, highest first.

    Source: the square-law line of M. Oerder and H. Meyr, IEEE Trans. Commun. 36(5), 1988, over all frequencies.
    """
    n = sequence.size
    if n < 256:
        return []
    spectrum = np.abs(np.fft.rfft((sequence - sequence.mean()) * np.hanning(n))) ** 2
    width = max(n // 400, 16)
    # floor: the mean of the lower part of each stretch of the spectrum
    blocks = spectrum[: spectrum.size // width * width].reshape(-1, width)
    floor = np.repeat(np.sort(blocks, axis=1)[:, : int(0.7 * width)].mean(axis=1) / 0.45, width)
    ratio = spectrum[: floor.size] / np.maximum(floor, 1e-300)
    ratio[: max(4, n // 4096)] = 0.0
    ratio[int(highest * n) + 1 :] = 0.0
    found: list[tuple[float, float]] = []
    threshold = math.log(spectrum.size) + 10.0
    for _ in range(most):
        peak = int(np.argmax(ratio))
        if ratio[peak] < threshold:
            break
        left, middle, right = (math.sqrt(spectrum[min(max(peak + d, 0), spectrum.size - 1)]) for d in (-1, 0, 1))
        bend = left - 2 * middle + right
        found.append(((peak + (0.5 * (left - right) / bend if bend < 0 else 0.0)) / n, float(ratio[peak])))
        ratio[max(peak - 4, 0) : peak + 5] = 0.0
    return found


def identify(samples: Samples, sample_rate_hz: float, wanted: Wanted) -> Identified | NotFound:
    """Fill in what is not given, by trying the likely answers on ``samples`` (a few thousand symbols or more).

    Raises DspError where what was given contradicts itself or the samples.
    """
    if not np.any(samples):
        return NotFound("the samples are all zero")
    samples = _at_unit_power(samples)
    is_complex = bool(np.iscomplexobj(samples))
    if wanted.scheme is not None and wanted.scheme.kind == "baseband" and is_complex:
        raise DspError(
            f"scheme {wanted.scheme.name} is a real baseband, but the samples are I/Q; take bpsk, or one channel"
        )
    band = occupied_band(samples)
    if band is None:
        return NotFound("too few samples")
    schemes = [wanted.scheme] if wanted.scheme is not None else _likely_schemes(samples, band)
    best: _Trial | None = None
    reason = "no line in the spectrum that a symbol clock would have"
    for rate_hz in _likely_rates(samples, sample_rate_hz, band, schemes[0], wanted):
        for scheme in schemes:
            first = _PULSES[scheme.kind][0]
            outcome = _try_pulses(samples, sample_rate_hz, band, scheme, rate_hz, wanted, first)
            if isinstance(outcome, NotFound):
                reason = outcome.reason
                continue
            if best is None or outcome.plausibility_db > best.plausibility_db:
                best = outcome
        if best is not None and best.plausibility_db > 15.0:
            break
    if best is None:
        return NotFound(reason)
    if wanted.pulse is None:
        link = best.identified.link
        others = _PULSES[link.scheme.kind][1]
        refined = _try_pulses(samples, sample_rate_hz, band, link.scheme, link.symbol_rate_hz, wanted, others)
        if not isinstance(refined, NotFound) and refined.mer_db > best.mer_db + 0.05:
            best = refined
    return best.identified


def _at_unit_power(samples: Samples) -> Samples:
    rms = math.sqrt(float(np.mean(np.abs(samples).astype(np.float64) ** 2)))
    if np.iscomplexobj(samples):
        return np.asarray(samples / rms, dtype=np.complex64)
    return np.asarray(samples / rms, dtype=np.float32)


def _likely_schemes(samples: Samples, band: Band) -> list[Scheme]:
    if np.iscomplexobj(samples):
        return [find_scheme(name) for name in _CARRIER]
    if band.centre - band.half > 0.3 * band.half:
        return [find_scheme("fsk2")]
    return [find_scheme(name) for name in _REAL]


def _likely_rates(samples: Samples, rate: float, band: Band, scheme: Scheme, wanted: Wanted) -> list[float]:
    if wanted.symbol_rate_hz is not None:
        return [wanted.symbol_rate_hz]
    some = samples[: 1 << 18]
    lines: list[tuple[float, float]] = []
    if scheme.kind == "frequency" or (np.isrealobj(some) and scheme.kind == "carrier"):
        # a first guess of the symbol rate that only sets the filters: the band's width
        guess = Link(scheme, rate, min(max(band.half * rate, rate / 2000), rate / 2), Pulse("none"))
        front = FrontEnd(
            guess, plan(guess, complex_in=bool(np.iscomplexobj(some)), centre=band.centre, half_band=band.half * 1.2)
        )
        rails = front.push(some)
        factor = front.decimate
    else:
        rails = (np.real(some), np.imag(some)) if np.iscomplexobj(some) else (np.real(some),)
        factor = 1
    # no symbol rate lies far above the band that it fills: lines up there are harmonics, or a resampler's images
    widest = 2.6 * band.half if scheme.kind == "carrier" else 3.0 * (band.centre + band.half)
    if scheme.kind == "frequency":
        widest = 6.0 * band.half
    power = np.sum([rail.astype(np.float64) ** 2 for rail in rails], axis=0)
    for sequence in (power, _edges(rails, band.half * factor)):
        found = rate_lines(sequence, widest * factor)
        lines += [(line / factor * rate, strength / found[0][1]) for line, strength in found]
    # a clock's line has harmonics above it, and the frames of its data may put weaker ones below
    clear = sorted(hz for hz, strength in lines if strength > 0.03)
    rest = [hz for hz, _ in lines]
    result: list[float] = []
    for hz in (*clear, *rest, *(hz / divisor for divisor in (2, 3) for hz in clear)):
        if 2.0 <= rate / hz <= 2000.0 and all(abs(hz / known - 1) > 1e-3 for known in result):
            result.append(hz)
    return result[:8]


def _edges(rails: tuple[NDArray[np.floating], ...], half: float) -> NDArray[np.float64]:
    """Squared differences over a quarter of the band's inverse: lines where steps are, for waves of constant power."""
    lag = max(round(0.25 / max(half, 1e-4)), 1)
    total = np.zeros(max(rails[0].size - 2 * lag + 1, 0))
    for rail in rails:
        sums = np.cumsum(np.concatenate(([0.0], rail.astype(np.float64))))
        step = sums[2 * lag :] - 2 * sums[lag:-lag] + sums[: -2 * lag]
        total += step[: total.size] ** 2
    return total


def _try_pulses(
    samples: Samples,
    rate: float,
    band: Band,
    scheme: Scheme,
    rate_hz: float,
    wanted: Wanted,
    names: tuple[str, ...],
) -> _Trial | NotFound:
    """The pulse that gives a scheme at a rate its best MER."""
    pulses = [wanted.pulse] if wanted.pulse is not None else [Pulse.parse(name) for name in names]
    best: _Trial | None = None
    reason = "nothing tried"
    for pulse in pulses:
        link = Link(scheme, rate, rate_hz, pulse, wanted.carrier_hz, wanted.name)
        centre, half = placement(link, band, is_complex=bool(np.iscomplexobj(samples)))
        front_plan = plan(link, complex_in=bool(np.iscomplexobj(samples)), centre=centre, half_band=half)
        need = int(_TRIAL_SYMBOLS * link.samples_per_symbol)
        start = _busiest(samples, need)
        rails = FrontEnd(link, front_plan).push(samples[start : start + need])
        outcome = acquire(link, front_plan, rails, detector=None, timing_bandwidth=0.005, carrier_bandwidth=0.005)
        if not isinstance(outcome, Acquired):
            reason = outcome.reason
            continue
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
        # what the loops found of the rate is finer than the line
        exact = rate_hz if wanted.symbol_rate_hz is not None else rate_hz * front_plan.sps / outcome.start.sps
        candidate = Identified(
            replace(link, symbol_rate_hz=exact),
            centre * rate,
            None if half is None else half * rate,
            found,
        )
        if best is None or outcome.mer_db > best.mer_db + 0.05:
            best = _Trial(candidate, outcome.mer_db, plausibility_db(outcome.fit, scheme))
    return best if best is not None else NotFound(reason)


def placement(link: Link, band: Band, *, is_complex: bool) -> tuple[float, float | None]:
    """Centre and half band of the front end, cycles a sample, for a link in that band; (0, None) where its defaults serve."""
    carrier = None if link.carrier_hz is None else link.carrier_hz / link.sample_rate_hz
    if link.scheme.kind == "baseband":
        return 0.0, None
    if link.scheme.kind == "frequency":
        centre = band.centre if carrier is None else carrier
        return centre, min(band.half * 1.2 + 0.35 / link.samples_per_symbol, 0.45)
    if is_complex:
        return carrier or 0.0, None
    return band.centre if carrier is None else carrier, None


def _busiest(samples: Samples, need: int) -> int:
    """Where the stretch of ``need`` samples with the most power begins: a recording may open with silence."""
    if samples.size <= need:
        return 0
    block = max(need // 4, 1)
    energy = np.add.reduceat(np.abs(samples) ** 2, np.arange(0, samples.size // block * block, block))
    runs = np.convolve(energy, np.ones(4), mode="valid")
    # the first stretch that is near the busiest, so that a steady link is met at its start
    return int(np.argmax(runs > 0.9 * runs.max())) * block
