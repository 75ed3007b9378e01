"""From a spectrum to what the link may be: symbol rates from lines, then each scheme's agreement with the symbols at that rate."""

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from dsp.acquisition import interpolate, power_line
from dsp.identify.likelihood import Agreement, agreement, decide, no_structure, repetition, surprise
from dsp.identify.lines import Line
from dsp.identify.shape import PHASES, Response, Shape, best_pulse, response_of, spectrum_shapes, trimmed_solution
from dsp.identify.spectrum import Spectrum, spectrum_of
from dsp.interpolation import BEFORE, TAPS
from dsp.link import Scheme, find_scheme
from dsp.pulses import Pulse, gaussian_rectangle, receive_filter, rectangle, root_raised_cosine
from dsp.tracking import tables_for

_SYMBOLS = 4096  # that are looked at
_JUDGED = 1536  # of them, by which likelihoods are compared
_SCAN = 32
_REACH = 64  # symbols, beyond which no receive filter reaches
_CARRIER_FAMILIES = ("rrc", "rc", "rect")
_LEAST = 200  # symbols, below which nothing is claimed
_CLEAN_LAGS = (-6, 10)
_SURPRISE = 0.4
_REPETITION = 0.6
_BIT_ERRORS = 0.012
_CHANCE = 1e-8
# cycles a symbol: on one of its tones, a quarter of the symbol rate from the middle of its spectrum, minimum shift keying is a two-phase
# carrier. Source: F. Amoroso and J. A. Kivett, Simplified MSK signaling technique, IEEE Trans. Commun. 25(4), 1977 (from memory)
_QUARTER = 0.2

Values = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Candidate:
    """One answer with its evidence.

    ``rate`` in symbols a sample, ``centre`` in cycles a sample; ``line`` is the clock's; ``excess`` the log-likelihood of a symbol
    over that of no structure, ``margin`` over that of the ``rival`` scheme (nats), from ``symbols`` of them; ``index`` the modulation
    index; ``snr_db`` symbol energy over noise at the decisions; ``pulse_margin`` what the ``other_pulse`` loses of the opening.
    ``off_centre``: the carrier's distance from the spectrum's middle as a share of that at which a neighbouring answer would serve
    as well; ``half_bits``: symbols come in pairs of opposite sign. ``doubt`` says why this may be none; empty if nothing does.
    """

    scheme: Scheme
    rate: float
    pulse: Pulse
    centre: float
    line: Line
    symbols: int
    excess: float
    margin: float
    rival: Scheme | None
    snr_db: float
    doubt: str = ""
    index: float | None = None
    other_pulse: Pulse | None = None
    pulse_margin: float = 0.0
    response: Response | None = None
    off_centre: float = 0.0
    half_bits: bool = False


@dataclass(frozen=True, slots=True)
class Wave:
    """A wave at some 4.6 to 9 samples a symbol with the instants of its busiest stretch: ``tau`` in samples, ``count`` symbols."""

    samples: NDArray[np.complex128]
    sps: float
    rate: float
    half: float  # band in symbol rates
    start: int = 0  # place of the first sample in the whole wave


def _filtered(wave: Wave, pulse: Pulse) -> NDArray[np.complex128]:
    from scipy import signal  # slow to import; a link that is given needs it not

    taps = receive_filter(pulse, wave.sps)
    if taps.size == 1:
        return wave.samples
    return np.asarray(signal.oaconvolve(wave.samples, taps, mode="same"))


def value_at(
    wave: Wave, instants: NDArray[np.float64], samples: NDArray[np.complex128] | None = None
) -> NDArray[np.complex128]:
    """The wave at any instants; ``samples``: what a filter made of it."""
    samples = wave.samples if samples is None else samples
    if not instants.size:
        return np.zeros(0, np.complex128)
    first = max(math.floor(float(instants.min())) - BEFORE, 0)
    part = samples[first : math.ceil(float(instants.max())) + TAPS]
    table = tables_for(wave.sps, min(wave.half, 0.4 * wave.sps)).value
    real = interpolate(np.ascontiguousarray(part.real, np.float32), instants - first, table).astype(np.float64)
    if not np.any(part.imag):
        return np.asarray(real, dtype=np.complex128)
    imag = interpolate(np.ascontiguousarray(part.imag, np.float32), instants - first, table)
    return np.asarray(real + 1j * imag, dtype=np.complex128)


def _busiest(samples: NDArray[np.complex128], sps: float) -> tuple[float, int]:
    """First instant and count of the stretch to look at: the first that is nearly as strong as any."""
    margin = BEFORE + TAPS + 2 * sps
    count = int((samples.size - 2 * margin) / sps)
    if count <= _SYMBOLS:
        return margin, max(count, 0)
    block = int(_SYMBOLS / 8 * sps)
    blocks = samples.size // block
    power = np.mean(np.abs(samples[: blocks * block].reshape(blocks, block)) ** 2, axis=1)
    runs = np.convolve(power, np.ones(8), mode="valid")
    first = int(np.argmax(runs > 0.9 * runs.max()))
    return max(first * block, margin), min(_SYMBOLS, int((samples.size - margin - first * block) / sps) - 2)


def _looked_at(wave: Wave) -> Wave:
    """The part of a wave that is looked at, and what filters reach beyond it."""
    start, count = _busiest(wave.samples, wave.sps)
    reach = _REACH * wave.sps
    if wave.samples.size < (count + 3 * _REACH) * wave.sps:
        return wave
    first = max(int(start - reach), 0)
    return replace(wave, samples=wave.samples[first : int(start + count * wave.sps + reach)], start=first)


def _timed(samples: NDArray[np.complex128], wave: Wave, stagger: bool = False) -> Values:
    """Instants of the symbols: where the values' spread of power is least, as it is for every constellation but not between."""
    start, count = _busiest(samples, wave.sps)
    if count < _LEAST:
        return np.zeros(0)
    some = start + wave.sps * np.arange(min(count, 1024), dtype=np.float64)
    table = []
    for k in range(_SCAN):
        power = np.abs(value_at(wave, some + k / _SCAN * wave.sps, samples)) ** 2
        table.append(float(np.mean(power**2)) / max(float(np.mean(power)) ** 2, 1e-30))
    kurtosis = np.asarray(table)
    top = int(np.argmin(kurtosis))
    # a plateau (square pulses have one): its middle
    near = kurtosis < kurtosis[top] + 0.02 * (kurtosis.max() - kurtosis[top])
    low = high = 0
    while near[(top - low - 1) % _SCAN] and low < _SCAN // 2:
        low += 1
    while near[(top + high + 1) % _SCAN] and high < _SCAN // 2:
        high += 1
    place = top + 0.5 * (high - low)
    if low == high == 0:
        left, right = kurtosis[(top - 1) % _SCAN], kurtosis[(top + 1) % _SCAN]
        bend = left + right - 2 * kurtosis[top]
        place += 0.5 * (left - right) / bend if bend > 0 else 0.0
    return np.asarray(start + (place / _SCAN) % 1.0 * wave.sps + wave.sps * np.arange(max(count - 1, 0)))


def _cleaned(values: NDArray[np.complex128], decided: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """The values less what their decided neighbours put into them."""
    low, high = _CLEAN_LAGS
    lags = [lag for lag in range(low, high + 1) if lag]
    n = values.size
    rows = np.arange(high, n + low)
    if rows.size < 8 * len(lags):
        return values
    design = np.stack([decided[rows - lag] for lag in (0, *lags)] + [np.ones(rows.size, complex)], axis=1)
    solution, _ = trimmed_solution(design, values[rows, None])
    return np.asarray(values[rows] - design[:, 1:] @ solution[1:, 0])


# -- real waves: baseband, and the frequency behind a discriminator ------------------------------------------------------------


def _real_wave(spectrum: Spectrum, rate: float, pulse: Pulse) -> Wave:
    top = (2.6 if pulse.family in ("rect", "none") else 1.15) * rate
    per_symbol = 12.0 if pulse.family in ("rect", "none") else 4.6
    length = fft.next_fast_len(max(math.ceil(per_symbol * rate * spectrum.size), 64))
    length += length % 2
    top = min(top, 0.5)
    samples = spectrum.real_wave(top, length)
    return Wave(samples.astype(np.complex128), length / (rate * spectrum.size), rate, top / rate)


_WEIGHTS = {"pam3": (None, np.array([0.25, 0.5, 0.25]))}


def _pam_agreement(values: Values, scheme: Scheme) -> Agreement:
    return max(
        (agreement(values, scheme, weights) for weights in _WEIGHTS.get(scheme.name, (None,))),
        key=lambda a: a.log_likelihood,
    )


def pam_candidate(
    spectrum: Spectrum,
    line: Line,
    schemes: tuple[Scheme, ...],
    pulses: tuple[Pulse, ...] | None,
    families: tuple[str, ...],
) -> Candidate | None:
    """The scheme of a real wave at a symbol rate, of those given; ``pulses`` None: sought."""
    rate = line.frequency
    tries = pulses
    shapes: list[Shape] = []
    if tries is None:
        shapes = spectrum_shapes(spectrum, rate, None)
        tries = tuple(dict.fromkeys([*(shape.pulse for shape in shapes[:1]), Pulse("rect"), Pulse("none")]))
    best: tuple[float, Pulse] | None = None
    for pulse in tries:
        wave = _looked_at(_real_wave(spectrum, rate, pulse))
        filtered = _filtered(wave, pulse)
        instants = _timed(filtered, wave)
        if instants.size < _LEAST:
            return None
        values = value_at(wave, instants[:1024], filtered).real[None]
        values = values - values.mean()
        merit = max(_pam_agreement(values, scheme).log_likelihood for scheme in schemes) - no_structure(values)
        if best is None or merit > best[0] + 0.05:
            best = merit, pulse
    assert best is not None
    pulse = best[1]
    result: Candidate | None = None
    for last in (False, True):
        wave = _looked_at(_real_wave(spectrum, rate, pulse))
        filtered = _filtered(wave, pulse)
        instants = _timed(filtered, wave)
        values = value_at(wave, instants, filtered).real[None]
        values = values - values.mean()
        ranked = _ranked(values[0] + 0j, schemes)
        scheme, agreed, decided, excess, n = ranked[0]
        ranking: list[tuple[Pulse, float]] = [(pulse, 0.0)]
        response = None
        if agreed.error_rate < 0.1:
            raw = _real_wave(spectrum, rate, Pulse("none"))
            scale = raw.sps / wave.sps
            sampled = np.stack(
                [value_at(raw, (instants + wave.start + (p / PHASES - 0.5) * wave.sps) * scale) for p in range(PHASES)]
            )
            response = response_of(sampled, decided[0] + 0j, min(raw.half, 0.5 * PHASES))
            ranking = (
                best_pulse(response, scheme, families, tuple(shape.pulse for shape in shapes))
                if pulses is None
                else [(pulse, 0.0)]
            )
        rival = ranked[1] if len(ranked) > 1 else None
        result = Candidate(
            scheme, rate, pulse, 0.0, line, n, excess, excess - rival[3] if rival else excess, rival[0] if rival else None,
            _snr_db(agreed, scheme), _doubts(decided, scheme, agreed, excess, n, line), None,
            ranking[1][0] if len(ranking) > 1 else None, ranking[0][1] - ranking[1][1] if len(ranking) > 1 else 0.0, response,
            half_bits=scheme.levels == 2 and min(pair_products(decided)) < -0.9,
        )  # fmt: skip
        if last or ranking[0][0] == pulse:
            break
        pulse = ranking[0][0]
    return result


_Ranked = tuple[Scheme, Agreement, Values, float, int]


def _ranked(values: NDArray[np.complex128], schemes: tuple[Scheme, ...]) -> list[_Ranked]:
    """Schemes by their excess over no structure, best first, with decisions ``(rails, n)`` in level units."""
    found: list[_Ranked] = []
    some = values[:_JUDGED]
    for scheme in schemes:
        agreed = _pam_agreement(_rows(some, scheme), scheme)
        judged = some
        if agreed.error_rate < 0.15:
            judged = _cleaned(some, _joined(decide(_rows(some, scheme), scheme, agreed.gain)[0]))
            agreed = _pam_agreement(_rows(judged, scheme), scheme)
        decided = decide(_rows(values, scheme), scheme, agreed.gain)[0]
        rows = _rows(judged, scheme)
        found.append((scheme, agreed, decided, agreed.log_likelihood - no_structure(rows), rows.shape[1]))
    # likelihoods of differently cleaned values are compared by what is left unexplained
    return sorted(found, key=lambda item: -item[1].log_likelihood)


def _rows(values: NDArray[np.complex128], scheme: Scheme) -> Values:
    return np.stack((values.real, values.imag)) if scheme.kind == "carrier" else np.asarray(values.real[None])


def _joined(decided: Values) -> NDArray[np.complex128]:
    return np.asarray(decided[0] + (1j * decided[1] if decided.shape[0] == 2 else 0j))


def _snr_db(agreed: Agreement, scheme: Scheme) -> float:
    per_rail = 2 if scheme.kind == "carrier" else 1
    return 10 * math.log10(max(scheme.symbol_energy() * agreed.gain**2 / (per_rail * agreed.sigma**2), 1e-9))


def pair_products(decided: Values) -> tuple[float, float]:
    """Mean product of each symbol with the next, over pairs that begin at even and at odd symbols, as a share of the energy.

    1 where each symbol comes twice; -1 where half-bits of opposite sign make a symbol (Manchester).
    """
    centred = decided - decided.mean(axis=1, keepdims=True)
    energy = max(float(np.mean(np.sum(centred**2, axis=0))), 1e-30)
    size = decided.shape[1] // 2 * 2 - 2
    pairs = np.sum(centred[:, :-1] * centred[:, 1:], axis=0)[:size] / energy
    return float(np.mean(pairs[0::2])), float(np.mean(pairs[1::2]))


def _doubts(decided: Values, scheme: Scheme, agreed: Agreement, excess: float, n: int, line: Line) -> str:
    if line.chance > _CHANCE:
        return "no line in the spectrum that a symbol clock would have"
    if excess * n < -math.log(_CHANCE):
        return "a clock line, but the levels are not told from noise"
    if agreed.error_rate > _BIT_ERRORS:
        return "a clock line, but the levels are not told from noise"
    levels = np.asarray(scheme.rail_levels)
    classes = np.stack([np.argmin(np.abs(rail[:, None] - levels), axis=1) for rail in decided])
    for rail in classes:
        if np.bincount(rail, minlength=levels.size).min() < 0.35 / levels.size * rail.size:
            return "some of the scheme's levels are hardly used"
    if max(pair_products(decided)) > 0.5:
        return "each symbol comes twice: the symbol rate is a multiple of the link's"
    number = classes[0] if classes.shape[0] == 1 else classes[0] * levels.size + classes[1]
    points = levels.size ** classes.shape[0]
    if scheme.name == "8psk":
        number = np.floor(np.angle(decided[0] + 1j * decided[1]) / (2 * np.pi) * 8 % 8).astype(np.int64)
        points = 8
    if surprise(number, points) < _SURPRISE:
        return "a bare tone, or a pattern that repeats, not data"
    if repetition(decided) > _REPETITION:
        return "a bare tone, or a pattern that repeats, not data"
    return ""


# -- carriers ------------------------------------------------------------------------------------------------------------------


def _carrier_wave(spectrum: Spectrum, rate: float, centre: float, pulse: Pulse) -> Wave:
    half, per_symbol = (3.6, 12.0) if pulse.family in ("rect", "none") else (1.1, 4.6)
    half *= rate
    length = fft.next_fast_len(max(math.ceil(per_symbol * rate * spectrum.size), 64))
    samples = spectrum.wave(centre, half, length)
    return Wave(samples.astype(np.complex128), length / (rate * spectrum.size), rate, half / rate)


def _upright(z: NDArray[np.complex128], order: int, turn: float) -> NDArray[np.complex128]:
    """Symbol values turned by the phase that their power shows, stretch by stretch."""
    n = np.arange(z.size)
    z = z * np.exp(-2j * np.pi * turn * n)
    scaled = np.abs(z) / max(math.sqrt(float(np.mean(np.abs(z) ** 2))), 1e-30)
    raised = np.exp(1j * order * np.angle(z)) * np.minimum(scaled, 2.0) ** 2
    if order > 2:
        raised = -raised
    block = min(512, max(z.size // 2, 1))
    sums = np.convolve(raised, np.ones(block), mode="same")
    angle = np.unwrap(np.angle(sums)) / order
    return np.asarray(z * np.exp(-1j * angle))


def _followed(z: NDArray[np.complex128], decided: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Values turned by the mean phase against their decisions over 129 symbols."""
    product = np.convolve(z * np.conj(decided), np.ones(min(129, z.size // 2)), mode="same")
    return np.asarray(z * np.exp(-1j * np.angle(product)))


def carrier_candidates(
    spectrum: Spectrum,
    line: Line,
    within: tuple[float, float],
    schemes: tuple[Scheme, ...],
    pulses: tuple[Pulse, ...] | None,
) -> Candidate | None:
    """The scheme of a carrier ``within`` two frequencies at a symbol rate."""
    rate = line.frequency
    shapes = spectrum_shapes(spectrum, rate, spectrum.densest(rate, *within))
    if not shapes:
        return None
    centre = spectrum.nearest(shapes[0].centre)
    pulse = pulses[0] if pulses is not None else shapes[0].pulse
    result: Candidate | None = None
    for last in (False, True):
        wave = _looked_at(_carrier_wave(spectrum, rate, centre, pulse))
        filtered = _filtered(wave, pulse)
        instants = _timed(filtered, wave)
        if instants.size < _LEAST:
            return None
        z = value_at(wave, instants, filtered)
        z = z / max(math.sqrt(float(np.mean(np.abs(z) ** 2))), 1e-30)
        found: list[tuple[_Ranked, NDArray[np.complex128], float, float]] = []
        for order, names in ((2, ("bpsk",)), (4, ("qpsk", "pi4dqpsk", "16qam", "64qam")), (8, ("8psk",))):
            some = tuple(s for s in schemes if s.name in names)
            if not some:
                continue
            carrier = power_line(z, order)
            if carrier.chance > 1e-6:
                continue
            turn = carrier.turn
            if order == 4:
                rotated = abs(turn) > 1 / 16
                some = tuple(s for s in some if (s.name == "pi4dqpsk") == rotated or len(schemes) == 1)
            upright = _upright(z, order, turn)
            for item in _ranked(upright, some):
                decided = _joined(item[2])
                if item[1].error_rate < 0.1:
                    upright_now = _followed(upright, decided)
                    item = _ranked(upright_now, (item[0],))[0]
                else:
                    upright_now = upright
                true_turn = (
                    turn - math.copysign(0.125, turn) if item[0].name == "pi4dqpsk" and abs(turn) > 1 / 16 else turn
                )
                found.append((item, upright_now, turn, true_turn))
        if not found:
            return None
        found.sort(key=lambda entry: -entry[0][1].log_likelihood)
        (scheme, agreed, decided_rails, excess, n), upright, first_turn, turn = found[0]
        response = None
        ranking: list[tuple[Pulse, float]] = [(pulse, 0.0)]
        if agreed.error_rate < 0.1:
            decided = _joined(decided_rails)
            # the turn that made the values upright undoes the carrier between the symbols too, but for what is the scheme's own
            own = np.exp(2j * np.pi * (first_turn - turn) * np.arange(z.size))
            decided = decided * own
            rotation = upright * np.conj(z) * own
            rotation /= np.maximum(np.abs(rotation), 1e-12)
            slope = np.angle(np.sum(rotation[1:] * np.conj(rotation[:-1])))
            sampled = []
            for p in range(PHASES):
                lead = p / PHASES - 0.5
                sampled.append(value_at(wave, instants + lead * wave.sps) * rotation * np.exp(1j * slope * lead))
            response = response_of(np.stack(sampled), decided, wave.half)
            if pulses is None:
                ranking = best_pulse(response, scheme, _CARRIER_FAMILIES, tuple(shape.pulse for shape in shapes))
        rival = found[1][0] if len(found) > 1 else None
        doubt = _doubts(decided_rails, scheme, agreed, excess, n, line)
        if scheme.name == "bpsk" and abs(turn) > _QUARTER and len(schemes) > 1:
            doubt = doubt or "a shift by half the symbol rate, as msk has, too faint to be told by its frequency"
        result = Candidate(
            scheme, rate, pulse, centre + turn * rate, line, n, excess,
            agreed.log_likelihood - rival[1].log_likelihood if rival else excess, rival[0] if rival else None,
            _snr_db(agreed, scheme), doubt, None,
            ranking[1][0] if len(ranking) > 1 else None, ranking[0][1] - ranking[1][1] if len(ranking) > 1 else 0.0, response,
            min(abs(turn) * 2 * scheme.symmetry, 1.0),
        )  # fmt: skip
        if last or ranking[0][0] == pulse:
            break
        pulse = ranking[0][0]
    return result


def staggered_candidate(
    spectrum: Spectrum, pair: tuple[Line, Line], scheme: Scheme, pulses: tuple[Pulse, ...] | None
) -> Candidate | None:
    """OQPSK from the two lines of its square, at twice the carrier less and plus the symbol rate."""
    low, high = sorted(pair, key=lambda line: line.frequency)
    rate, centre = 0.5 * (high.frequency - low.frequency), 0.25 * (high.frequency + low.frequency)
    if not 1 / 2000 < rate < 0.5:
        return None
    weaker = max(pair, key=lambda line: line.chance)
    line = Line(rate, min(low.ratio, high.ratio), weaker.chance)
    shapes = spectrum_shapes(spectrum, rate, centre)
    if not shapes:
        return None
    pulse = pulses[0] if pulses is not None else shapes[0].pulse
    result: Candidate | None = None
    for last in (False, True):
        wave = _carrier_wave(spectrum, rate, centre, pulse)
        filtered = _filtered(wave, pulse)
        start, count = _busiest(filtered, wave.sps)
        count -= 2
        if count < _LEAST:
            return None
        stretch = np.arange(int(start), int(start + count * wave.sps))
        square = filtered[stretch] ** 2
        turn = np.exp(-2j * np.pi * stretch / wave.sps)
        upper, lower = np.angle(np.sum(square * turn)), np.angle(np.sum(square * np.conj(turn)))
        theta, tau = 0.25 * (upper + lower), (lower - upper) / (4 * np.pi) * wave.sps
        instants = start + (tau - start) % wave.sps + wave.sps * np.arange(count)
        early = value_at(wave, instants, filtered) * np.exp(-1j * theta)
        late = value_at(wave, instants + 0.5 * wave.sps, filtered) * np.exp(-1j * theta)
        z = early.real + 1j * late.imag
        z = z / max(math.sqrt(float(np.mean(np.abs(z) ** 2))), 1e-30)
        scheme_, agreed, decided_rails, excess, n = _ranked(z, (scheme,))[0]
        ranking: list[tuple[Pulse, float]] = [(pulse, 0.0)]
        response = None
        if agreed.error_rate < 0.1:
            sampled = [
                (value_at(wave, instants + (p / PHASES - 0.5) * wave.sps) * np.exp(-1j * theta)).real
                for p in range(PHASES)
            ]
            response = response_of(np.stack(sampled) + 0j, decided_rails[0] + 0j, wave.half)
            if pulses is None:
                ranking = best_pulse(response, scheme, _CARRIER_FAMILIES, tuple(shape.pulse for shape in shapes))
        result = Candidate(
            scheme_, rate, pulse, centre, line, n, excess, excess, None, _snr_db(agreed, scheme),
            _doubts(decided_rails, scheme, agreed, excess, n, line), None,
            ranking[1][0] if len(ranking) > 1 else None, ranking[0][1] - ranking[1][1] if len(ranking) > 1 else 0.0, response,
        )  # fmt: skip
        if last or ranking[0][0] == pulse:
            break
        pulse = ranking[0][0]
    return result


def symbol_wave(spectrum: Spectrum, candidate: Candidate) -> tuple[Wave, NDArray[np.complex128], Values]:
    """The wave of a candidate that has no stagger, the same behind its receive filter, and the first of its instants there."""
    if candidate.scheme.kind == "carrier":
        wave = _carrier_wave(spectrum, candidate.rate, candidate.centre, candidate.pulse)
    else:
        wave = _real_wave(spectrum, candidate.rate, candidate.pulse)
    filtered = _filtered(wave, candidate.pulse)
    return wave, filtered, _timed(filtered, wave)


# -- frequency -----------------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class FrequencyRail:
    """The frequency of a band over time as a spectrum of its own; ``step`` output samples an input sample."""

    spectrum: Spectrum
    step: float
    centre: float
    middle: float
    half: float


def frequency_rail(spectrum: Spectrum, centre: float, half: float) -> FrequencyRail | None:
    """Instantaneous frequency (cycles an input sample, from ``centre``) of the band."""
    length = fft.next_fast_len(max(math.ceil(6.0 * half * spectrum.size), 1024))
    z = spectrum.wave(centre, half, length)
    step = length / spectrum.size
    frequency = np.angle(z[1:] * np.conj(z[:-1])) * np.float32(step / (2 * math.pi))
    frequency = np.clip(frequency, -1.3 * half, 1.3 * half)
    middle = float(np.mean(frequency))
    found = spectrum_of(np.asarray(frequency - middle, np.float32))
    return None if found is None else FrequencyRail(found, step, centre, centre + middle, half)


def frequency_candidate(
    rail: FrequencyRail, line: Line, schemes: tuple[Scheme, ...], pulses: tuple[Pulse, ...] | None
) -> Candidate | None:
    """Two or four frequencies at a symbol rate (``line``, cycles a sample of the rail)."""
    levels = {s.levels for s in schemes}
    tries = tuple(s for s in (find_scheme("pam2"), find_scheme("pam4")) if s.levels in levels)
    found = pam_candidate(rail.spectrum, line, tries, pulses, ("rect", "gauss", "rrc"))
    if found is None:
        return None
    rate = line.frequency * rail.step
    found = replace(found, rate=rate, centre=rail.middle)
    if found.response is None:
        return replace(found, scheme=next(s for s in schemes if s.levels == found.scheme.levels))
    # a long run of one symbol rests at the sum of all responses
    total = np.sum(found.response.wave.reshape(-1, PHASES), axis=0).real
    index = abs(2 * float(np.mean(total)) / rate)
    pulse, other = found.pulse, found.other_pulse
    if _width(found.response) < _NARROWEST:
        return replace(found, doubt="the frequency has steps of phase, not shifts", index=index)
    if pulses is None and not found.doubt:
        pulse, other = _frequency_pulse(
            found.response, found.scheme, index, rail.half / rate, (rail.middle - rail.centre) / rate
        )
    half_index = abs(index - 0.5) < 0.04
    if found.scheme.levels == 4:
        name = "fsk4"
    elif pulse.family == "gauss":
        name = "gmsk" if half_index else "gfsk"
    else:
        name = "msk" if half_index and pulse.family == "rect" else "fsk2"
    scheme = find_scheme(name)
    if scheme not in schemes:
        scheme = next(s for s in schemes if s.levels == found.scheme.levels)
    return replace(
        found, scheme=scheme, pulse=pulse, other_pulse=other, index=index, centre=rail.middle + found.response.zero
    )


def _width(response: Response) -> float:
    """Width of a response at half its height, in symbols."""
    wave = np.abs(response.wave)
    return float(np.sum(wave > 0.5 * wave.max())) / PHASES


_NARROWEST = 0.65  # symbols: a frequency pulse is one symbol wide at half its height, or wider; that of a phase step is far narrower
_TIME_BANDWIDTHS = (0.2, 0.25, 0.3, 0.35, 0.4, 0.45, 0.5, 0.6, 0.7, 0.85, 1.0, 1.2)
_AS_GOOD_AS_SQUARE = 1.02  # a Gaussian filter this wide leaves no trace behind the channel's own
_FREQUENCY_ROLLOFFS = (0.2, 0.35, 0.5, 0.75, 1.0)


def _frequency_pulse(
    response: Response, scheme: Scheme, index: float, half: float, offset: float
) -> tuple[Pulse, Pulse]:
    """The pulse whose wave, behind the same band and discriminator, answers as the one received, and the next best.

    ``half`` and ``offset`` in symbol rates: of the band, and of its centre from the mean frequency.
    """
    rng = np.random.default_rng(1)  # symbols to try with: any will do, the same serve every time
    sps = 2 ** math.ceil(math.log2(min(max(PHASES, 6.0 * half), 128.0)))
    symbols = np.asarray(scheme.rail_levels)[rng.integers(0, scheme.levels, 512)]
    scored: list[tuple[float, Pulse]] = []
    for pulse in (
        Pulse("rect"), *(Pulse("gauss", bt) for bt in _TIME_BANDWIDTHS), *(Pulse("rrc", a) for a in _FREQUENCY_ROLLOFFS),
    ):  # fmt: skip
        model = _modelled(pulse, symbols, index, half, offset, sps, response.band)
        scored.append((_distance(response.wave.real, model), pulse))
    scored.sort(key=lambda item: item[0])
    best = scored[0][1]
    if best.family == "gauss":
        # between the bandwidths tried: the vertex of a parabola through three distances
        by_number = {pulse.number: distance for distance, pulse in scored if pulse.family == "gauss"}
        place = _TIME_BANDWIDTHS.index(best.number or 0.0)
        if 0 < place < len(_TIME_BANDWIDTHS) - 1:
            near = _TIME_BANDWIDTHS[place - 1 : place + 2]
            bend, slope, _ = np.polyfit([1 / b for b in near], [by_number[b] for b in near], 2)
            if bend > 0:
                best = Pulse("gauss", round(float(1 / np.clip(-slope / (2 * bend), 1 / near[2], 1 / near[0])), 4))
    if best.family == "gauss" and (best.number or 0.0) > _AS_GOOD_AS_SQUARE:
        best = Pulse("rect")
    other = next(pulse for _, pulse in scored if pulse.family != best.family)
    return best, other


def _modelled(pulse: Pulse, symbols: Values, index: float, half: float, offset: float, sps: int, band: float) -> Values:
    from scipy import signal  # slow to import; a link that is given needs it not

    reach = 8
    t = np.arange(-reach * sps, reach * sps + 1) / sps
    number = pulse.number or 0.0
    shape = {
        "rect": lambda: rectangle(t),
        "gauss": lambda: gaussian_rectangle(t, number),
        "rrc": lambda: root_raised_cosine(t, number),
    }[pulse.family]()
    impulses = np.zeros(symbols.size * sps)
    impulses[::sps] = symbols
    frequency = signal.oaconvolve(impulses, shape / shape.sum(), mode="same") * sps * index / 2
    z = np.exp(2j * np.pi * np.cumsum(frequency) / sps)
    f = np.fft.fftfreq(z.size, 1 / sps)
    z = np.fft.ifft(np.fft.fft(z) * (np.abs(f + offset) < half))
    found = np.angle(np.roll(z, -1) * np.conj(z)) * sps / (2 * np.pi)
    f = np.fft.rfftfreq(found.size, 1 / sps)
    found = np.fft.irfft(np.fft.rfft(found) * (f < band), found.size)
    step = sps // PHASES
    # found[i] lies between samples i and i + 1: half a sample late
    place = np.arange(symbols.size - 1)[None, :] * sps + (np.arange(PHASES) * step - sps // 2)[:, None]
    inside = slice(_EDGE, symbols.size - _EDGE)
    sampled = found[np.clip(place[:, inside], 0, found.size - 1)]
    return np.asarray(response_of(sampled.astype(np.complex128), symbols[inside].astype(np.complex128), band).wave.real)


_EDGE = 16


def _distance(measured: Values, model: Values) -> float:
    """Share of the measured response's energy that the best delay and multiple of the model leave unexplained."""
    size = 4 * measured.size
    a, b = np.fft.rfft(measured, size), np.fft.rfft(model, size)
    alike = np.fft.irfft(a * np.conj(b), 8 * size) * 8
    return 1.0 - float(alike.max()) ** 2 / max(float(measured @ measured) * float(model @ model), 1e-30)
