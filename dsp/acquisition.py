"""Finding a link in a stretch of rails: whether its symbol clock is there at all, and where the loops begin.

Feed-forward throughout: the clock from its spectral line, the carrier from the M-th power's line, the best instant by trying
them all, then one run of the loops themselves over the stretch, whose straight lines give the start.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from dsp._kernels.tracking import AHEAD, TEMPLATE
from dsp.filters import Oscillator
from dsp.frontend import FrontPlan, matched_filter, wants_corners
from dsp.interpolation import BEFORE, PHASES, TAPS
from dsp.link import Link, Scheme
from dsp.tracking import (
    TEMPLATE_LAGS,
    Detector,
    Rails,
    Tracker,
    TrackStart,
    level_units,
    tables_for,
)

CHANCE = 1e-8  # of taking noise for a clock line, an attempt
RATE_SPAN = 2e-3  # the symbol rate is looked for this far to either side, as a fraction
_MOST_DRIFT = 1.2e-5  # of a carrier, cycles a symbol from one to the next
_SCAN = 32  # instants a symbol that are tried

_DRIFT_FIRST = 1024  # symbols among which a drift is looked for, the whole range of it
_SHARPER = 1.3  # power of the line with a drift over that without, from where on there is one
_CLEAR_DRIFT = 3e-7  # cycles a symbol from one to the next; less does no harm to a few thousand symbols
_LEAST_SLOPE = 0.1  # that a detector is taken to have
_LINE_SHARE = 0.08  # of a noise-free carrier's line that must be left
_PATTERN = 0.6  # share of a sequence's energy in a short pattern from which on it is no data

# MER in dB that decisions on Gaussian noise reach by themselves: the distortion of the best quantiser of so many levels.
# Source: J. Max, Quantizing for minimum distortion, IRE Trans. Inf. Theory 6(1), 1960, table I (2, 3, 4, 8 levels).
_NOISE_MER_DB = {2: 4.40, 3: 7.21, 4: 9.30, 8: 14.62}


@dataclass(frozen=True, slots=True)
class Acquired:
    """A link found: where loops begin and how sure that is.

    ``carrier`` is the turn taken out before the matched filter, cycles a rail sample, at the stretch's first sample, and ``drift`` how
    much it grows a sample; ``start.instant`` counts filtered samples from the stretch's first; ``noise_like_db`` is the MER below which
    decisions say nothing; ``fit`` holds the decisions.
    """

    carrier: float
    start: TrackStart
    chance: float
    mer_db: float
    noise_like_db: float
    fit: "Fit"
    drift: float = 0.0


@dataclass(frozen=True, slots=True)
class NotFound:
    """No link in this stretch, and why."""

    reason: str


def interpolate(
    rail: NDArray[np.float32], instants: NDArray[np.float64], table: NDArray[np.float32]
) -> NDArray[np.float32]:
    """Value (or slope) of a rail at fractional ``instants``, any count; instants must lie 4 samples inside."""
    whole = np.floor(instants).astype(np.int64)
    rows = np.rint((instants - whole) * PHASES).astype(np.int64)
    index = whole[:, None] + np.arange(-BEFORE, TAPS - BEFORE)
    return np.asarray(np.einsum("nm,nm->n", rail[index], table[rows]))


@dataclass(frozen=True, slots=True)
class ClockLine:
    """A spectral line at the symbol rate: cycles a sample, the phase of its crest in samples, chance that noise made it."""

    frequency: float
    crest: float
    chance: float


def clock_line(power: NDArray[np.float32], sps: float, span: float = RATE_SPAN) -> ClockLine:
    """The line nearest to the symbol rate in a power-like sequence ``(n,)``.

    Source: M. Oerder and H. Meyr, Digital filter and square timing recovery, IEEE Trans. Commun. 36(5), 1988. The chance
    compares the peak to the floor beside it: ratio of an exponential to the mean of ``k`` others, times the bins searched.
    """
    block = max(round(16 * sps), 1)
    blocks = power.size // block
    if blocks < 12:
        return ClockLine(1.0 / sps, 0.0, 1.0)
    mean = float(np.mean(power[: blocks * block], dtype=np.float64))
    centred = power[: blocks * block] - mean
    if not float(np.abs(centred).max()) > 1e-6 * abs(mean):  # constant, but for rounding
        return ClockLine(1.0 / sps, 0.0, 1.0)
    cycle = np.exp(-2j * np.pi * np.arange(blocks * block) / sps).astype(np.complex64)
    sums = (centred.astype(np.float32) * cycle).reshape(blocks, block).sum(axis=1)
    length = 8 * 2 ** math.ceil(math.log2(blocks))
    level = np.abs(np.fft.fft(sums.astype(np.complex128), length)) ** 2
    per_symbol = np.fft.fftfreq(length) * sps / block  # cycles a symbol off the nominal rate
    reach = max(span, 1.0 / (blocks * block / sps))
    inside = np.abs(per_symbol) <= reach
    peak = int(np.argmax(np.where(inside, level, -1.0)))
    resolution = sps / (blocks * block)
    beside = np.abs(per_symbol - per_symbol[peak]) > 3 * resolution
    floor = (
        float(np.mean(np.sort(level[beside])[: int(0.8 * beside.sum())])) / 0.598
    )  # mean of an exponential's lower 80 %
    independent = max(blocks - 7, 1)
    ratio = level[peak] / max(floor, 1e-300)
    searched = max(2 * reach / resolution, 1.0)
    chance = min(1.0, searched * math.exp(-independent * math.log1p(ratio / independent)))
    left, right = np.sqrt(level[(peak - 1) % length]), np.sqrt(level[(peak + 1) % length])
    middle = math.sqrt(level[peak])
    bend = left - 2 * middle + right
    shift = 0.5 * (left - right) / bend if bend < 0 else 0.0
    offset = float(np.fft.fftfreq(length)[peak]) + shift / length  # cycles a block
    frequency = 1.0 / sps + offset / block
    line = np.sum(sums * np.exp(-2j * np.pi * offset * np.arange(blocks)))
    # within a block the mixing was at nominal rate: its mean phase belongs to the block's middle
    angle = float(np.angle(line)) + math.pi * offset * (block - 1) / block
    return ClockLine(frequency, -angle / (2 * math.pi * frequency), chance)


@dataclass(frozen=True, slots=True)
class Fit:
    """Decisions on ``values`` ``(rails, n)``: level means ``(rails, levels)``, decided levels and classes ``(rails, n)``, MER in dB."""

    values: NDArray[np.float64]
    means: NDArray[np.float64]
    decided: NDArray[np.float64]
    classes: NDArray[np.int64]
    mer_db: float


def fit_levels(values: NDArray[np.floating], scheme: Scheme, rounds: int = 8) -> Fit:
    """Levels of decision values ``(rails, n)`` without knowing the scale: Lloyd's iterations from the values' rms.

    The last three of ``rounds`` leave the levels free, those before keep them evenly placed.

    Source: S. P. Lloyd, Least squares quantization in PCM, IEEE Trans. Inf. Theory 28(2), 1982 (from memory).
    """
    nominal = np.asarray(scheme.rail_levels)
    rails, n = values.shape
    centre = values.mean(axis=1, keepdims=True)
    power = np.mean((values - centre) ** 2, axis=1, keepdims=True)
    scale = np.sqrt(np.maximum(power, 1e-30) / np.mean(nominal**2))
    means = centre + scale * nominal
    classes = np.zeros((rails, n), np.int64)
    for step in range(rounds):
        if scheme.name == "8psk":
            u = (values - centre) / scale
            wide = np.abs(u[0]) > np.abs(u[1])
            classes[0] = np.where(u[0] > 0, np.where(wide, 3, 2), np.where(wide, 0, 1))
            classes[1] = np.where(u[1] > 0, np.where(wide, 2, 3), np.where(wide, 1, 0))
        else:
            for rail in range(rails):
                thresholds = 0.5 * (means[rail, 1:] + means[rail, :-1])
                classes[rail] = np.searchsorted(thresholds, values[rail])
        free = means.copy()
        for rail in range(rails):
            counts = np.bincount(classes[rail], minlength=nominal.size)
            sums = np.bincount(classes[rail], weights=values[rail], minlength=nominal.size)
            free[rail] = np.where(counts > 0, sums / np.maximum(counts, 1), free[rail])
        if step < rounds - 3:
            gain, zero = level_units(free, nominal)
            means = zero[:, None] + gain[:, None] * nominal
        else:
            means = np.sort(free, axis=1)
    decided_values = np.take_along_axis(means, classes, axis=1)
    signal = np.mean((decided_values - decided_values.mean(axis=1, keepdims=True)) ** 2)
    noise = np.mean((values - decided_values) ** 2)
    mer = 10 * math.log10(max(signal, 1e-30) / max(noise, 1e-30 + 1e-12 * signal))
    return Fit(np.asarray(values, dtype=np.float64), means, nominal[classes], classes, mer)


def noise_like_mer_db(scheme: Scheme) -> float:
    """MER that decisions on noise reach by themselves, for the scheme."""
    return 4.4 if scheme.name == "8psk" else _NOISE_MER_DB[scheme.levels]


def _pattern_share(symbols: NDArray[np.complex128]) -> float:
    """How much of a symbol sequence is a short pattern: its eight strongest lines' share, or its likeness to itself a few symbols on."""
    n = symbols.size
    spectrum = np.abs(np.fft.fft(symbols * np.hanning(n))) ** 2
    total = float(spectrum.sum())
    share = 0.0
    for _ in range(8):
        peak = int(np.argmax(spectrum))
        around = np.arange(peak - 2, peak + 3) % n
        share += float(spectrum[around].sum())
        spectrum[around] = 0.0
    energy = float(np.sum(np.abs(symbols) ** 2))
    alike = max(abs(complex(symbols[lag:] @ np.conj(symbols[:-lag]))) for lag in range(2, min(64, n // 4))) / energy
    return max(share / total, alike)


def plausibility_db(fit: Fit, scheme: Scheme) -> float:
    """How far decisions stand out once their neighbours' share is taken out of the values, less what speaks against the scheme.

    ISI splits the levels of a simple scheme into what looks like a richer one; but then its decisions explain their neighbours'
    values, the richer one's depend on each other, and its levels rarely stand evenly.
    """
    lags = range(-6, 11)
    n = fit.values.shape[1]
    if n < 200:
        return fit.mer_db - noise_like_mer_db(scheme)
    columns = [rail[10 - lag : n - 6 - lag] for rail in fit.decided for lag in lags]
    design = np.stack([*columns, np.ones(n - 16)], axis=1)
    target = fit.values[:, 10 : n - 6].T
    solution = np.linalg.lstsq(design, target, rcond=None)[0]
    cursor = [solution[rail * len(lags) + 6, rail] for rail in range(fit.values.shape[0])]
    residual = np.sum((target - design @ solution) ** 2) / max(n - 16 - design.shape[1], 1)
    signal = sum(c * c * float(np.var(rail)) for c, rail in zip(cursor, fit.decided, strict=True))
    snr = 10 * math.log10(max(signal, 1e-30) / max(float(residual), 1e-9 * signal, 1e-30))
    dependence = 0.0
    for rail in fit.decided:
        centred = rail - rail.mean()
        energy = max(float(centred @ centred), 1e-30)
        dependence = max(dependence, *(abs(float(centred[lag:] @ centred[:-lag])) / energy for lag in (1, 2)))
    evenness = 1.0
    if scheme.levels > 2:
        gaps = np.diff(fit.means, axis=1) / np.diff(np.asarray(scheme.rail_levels))
        evenness = float(np.min(gaps.min(axis=1) / gaps.mean(axis=1)))
    return snr - noise_like_mer_db(scheme) - 40.0 * max(dependence - 0.1, 0.0) - 60.0 * max(0.75 - evenness, 0.0)


# of the phases' variance about a line that a parabola must leave at most, to be believed; where a drift is known already
STANDS_OUT, STILL_STANDS_OUT = 0.03, 0.15


def parabola_through(k: NDArray[np.float64], phases: NDArray[np.float64]) -> tuple[float, float, float]:
    """Drift of phases ``(n,)`` over ``k``: twice the parabola's bend, and the squares that a line and the parabola leave."""
    half = 0.5 * float(k[-1] - k[0])
    # each power less what the ones before it explain
    x = (k - k.mean()) / half
    square = x * x
    square -= square.mean() + float(square @ x) / float(x @ x) * x
    rest = phases - phases.mean()
    rest -= float(rest @ x) / float(x @ x) * x
    bend = float(rest @ square) / float(square @ square)
    last = rest - bend * square
    return 2.0 * bend / half**2, float(rest @ rest), float(last @ last)


@dataclass(frozen=True, slots=True)
class CarrierLine:
    """The line of a symbol sequence's power: ``turn`` (cycles a symbol), ``phase`` (cycles), its share of the energy, chance of noise."""

    turn: float
    phase: float
    share: float
    chance: float


def raised_power(values: NDArray[np.complex128], order: int) -> NDArray[np.complex128]:
    """Unit-modulus powers weighted by the magnitude squared: outer points of a QAM carry the phase, none dominates."""
    scaled = np.abs(values) / max(float(np.sqrt(np.mean(np.abs(values) ** 2))), 1e-30)
    return np.asarray(np.exp(1j * order * np.angle(values)) * np.minimum(scaled, 2.0) ** 2)


def power_line(values: NDArray[np.complex128], order: int, searched: float = 1.0) -> CarrierLine:
    """Carrier of symbol values ``(n,)`` from the line of their ``order``-th power.

    The phase is that of the constellation whose points to the power are negative real (order above 2) or positive (order 2).
    Source: A. J. and A. M. Viterbi, IEEE Trans. Inf. Theory 29(4), 1983, with the fourth power itself as its nonlinearity.
    """
    raised = raised_power(values, order)
    length = 4 * 2 ** math.ceil(math.log2(values.size))
    spectrum = np.fft.fft(raised, length)
    level = np.abs(spectrum) ** 2
    frequencies = np.fft.fftfreq(length)
    inside = np.abs(frequencies) <= 0.5 * searched
    peak = int(np.argmax(np.where(inside, level, -1.0)))
    k = values.size
    ratio = level[peak] / max(float(np.mean(np.sort(level)[: int(0.8 * length)])) / 0.598, 1e-300)
    chance = min(1.0, k * math.exp(-k / 4 * math.log1p(4 * ratio / k)))
    left, middle, right = (math.sqrt(level[(peak + d) % length]) for d in (-1, 0, 1))
    bend = left - 2 * middle + right
    frequency = float(frequencies[peak]) + (0.5 * (left - right) / bend if bend < 0 else 0.0) / length
    line = np.sum(raised * np.exp(-2j * np.pi * frequency * np.arange(k)))
    reference = 0.0 if order == 2 else math.pi
    phase = (float(np.angle(line)) - reference) / (2 * math.pi * order)
    share = abs(complex(line)) ** 2 / (k * max(float(np.sum(np.abs(raised) ** 2)), 1e-300))
    return CarrierLine(frequency / order, phase, share, chance)


def line_drift(
    raised: NDArray[np.complex128], most: float, first: int, sharpness: Callable[[NDArray[np.complex128]], float]
) -> tuple[float, float]:
    """How the line in a power of a carrier ``(n,)`` drifts: cycles a value, from one to the next, at most ``most`` either way.

    Also returns how much sharper the line is with the drift taken out. Tried on the ``first`` so many values, then on twice as many and so
    on, each time about what was found.
    """
    found, sharper = 0.0, 1.0
    size, reach = min(first, raised.size), most
    while size >= 64:
        n = np.arange(size, dtype=np.float64)
        # half a step beside the drift the ends of the stretch are out of step by a sixteenth of a turn
        step = 2.0 / size**2
        count = math.ceil(reach / step)
        drifts = found + step * np.arange(-count, count + 1)
        levels = [sharpness(raised[:size] * np.exp(-1j * np.pi * drift * n**2)) for drift in drifts]
        top = int(np.argmax(levels))
        left, right = levels[max(top - 1, 0)], levels[min(top + 1, 2 * count)]
        bend = left + right - 2 * levels[top]
        shift = 0.5 * (left - right) / bend if bend < 0 else 0.0
        if size <= first:
            sharper = levels[top] / max(levels[count], 1e-300)
        found = float(drifts[top]) + step * min(max(shift, -0.5), 0.5)
        if size == raised.size or sharper < _SHARPER:
            break
        size, reach = min(2 * size, raised.size), 1.5 * step
    return found, sharper


def _sharpest(values: NDArray[np.complex128]) -> float:
    """Power of the strongest line."""
    return float(np.max(np.abs(np.fft.fft(values, 2 * 2 ** math.ceil(math.log2(values.size)))))) ** 2


def line_share(scheme: Scheme) -> float:
    """The `power_line` share that a noise-free carrier of this scheme has."""
    if scheme.stagger:
        return 0.08  # of the squared pairs, measured at roll-off 0.35
    points = scheme.points()
    scaled = points / math.sqrt(scheme.symbol_energy())
    raised = np.exp(1j * scheme.symmetry * np.angle(scaled)) * np.minimum(np.abs(scaled), 2.0) ** 2
    return abs(complex(np.mean(raised))) ** 2 / float(np.mean(np.abs(raised) ** 2))


def acquire(
    link: Link,
    front: FrontPlan,
    rails: Rails,
    *,
    detector: Detector | None,
    timing_bandwidth: float,
    carrier_bandwidth: float,
) -> Acquired | NotFound:
    """Look for the link in rails from the front end, one float32 array ``(n,)`` each; needs a few hundred symbols."""
    return _Search(link, front, detector, timing_bandwidth, carrier_bandwidth).run(rails)


class _Search:
    def __init__(
        self, link: Link, front: FrontPlan, detector: Detector | None, timing_bandwidth: float, carrier_bandwidth: float
    ) -> None:
        self._link = link
        self._scheme = link.scheme
        self._front = front
        self._corners = wants_corners(link.scheme, link.pulse)
        self._detector: Detector = detector or ("crossing" if self._corners else "derivative")
        self._detector_given = detector is not None
        self._sense_ui = 0.5
        self._bend = 0.0
        self._drifts = False
        bandwidth = 0.5 * (1 + (link.pulse.number or 1.0)) if link.pulse.family in ("rrc", "rc") else 1.0
        self._tables = tables_for(front.sps, bandwidth)
        self._timing_bandwidth = timing_bandwidth
        self._carrier_bandwidth = carrier_bandwidth

    def run(self, rails: Rails) -> Acquired | NotFound:
        rms = math.sqrt(sum(float(np.mean(rail.astype(np.float64) ** 2)) for rail in rails))
        if not rms > 0.0:
            return NotFound("the samples are all zero")
        # float32 squares and fourth powers of any recording's unit must neither overflow nor vanish
        found = self._run(tuple(np.asarray(rail / rms, dtype=np.float32) for rail in rails))
        if isinstance(found, NotFound):
            return found
        return replace(found, start=replace(found.start, means=found.start.means * rms))

    def _run(self, rails: Rails) -> Acquired | NotFound:
        if self._scheme.kind != "carrier":
            return self._straight(rails)
        drift, sharper = self._drift(rails)
        found: Acquired | NotFound = NotFound("")
        if sharper < _SHARPER:
            found = self._straight(rails)
            bend = self._bend if isinstance(found, Acquired) else 0.0
            if not bend and abs(drift) < _CLEAR_DRIFT:
                return found
            drift = bend or drift
        self._drifts = True
        for _ in range(3):
            # dense constellations tell by their decisions alone
            other = self._straight(_dechirped(rails, drift / self._front.rail_sps**2))
            if isinstance(other, NotFound) or (isinstance(found, Acquired) and other.mer_db < found.mer_db + 0.3):
                break
            found = replace(other, drift=drift / self._front.rail_sps**2)
            if not self._bend:
                break
            drift += self._bend
        return other if isinstance(found, NotFound) else found

    def _drift(self, rails: Rails) -> tuple[float, float]:
        """How the carrier seems to drift, cycles a symbol from one to the next, and how much sharper that makes its power's line."""
        filtered = self._filter(rails, self._coarse_carrier(rails))
        sps = self._front.sps
        if not self._scheme.stagger:
            line = self._clock(rails, filtered)
            instants = self._instants(filtered[0].size, line.crest, 1.0 / line.frequency, self._filter_reach())
            if line.chance > CHANCE or instants.size < 64:
                return 0.0, 1.0
            order = self._scheme.symmetry
            raised = raised_power(self._complex(filtered, instants), order)
            drift, sharper = line_drift(raised, _MOST_DRIFT * order, _DRIFT_FIRST, _sharpest)
            return drift / order, sharper
        # without its carrier the clock is not seen: the square of all samples, with lines beside the carrier's

        def joint(values: NDArray[np.complex128]) -> float:
            n = np.arange(values.size)
            length = 2 * 2 ** math.ceil(math.log2(values.size))
            upper, lower = (np.fft.fft(values * np.exp(sign * 2j * np.pi * n / sps), length) for sign in (-1, 1))
            near = np.abs(np.fft.fftfreq(length)) < 0.2 / sps
            return float(np.max(np.abs(upper[near] * lower[near])))

        z = (filtered[0] + 1j * filtered[1]).astype(np.complex128)
        drift, sharper = line_drift(z * z, 2 * _MOST_DRIFT / sps**2, round(_DRIFT_FIRST * sps), joint)
        return drift / 2 * sps**2, sharper

    def _straight(self, rails: Rails) -> Acquired | NotFound:
        """Look for a link whose carrier stays."""
        carrier = self._coarse_carrier(rails) if self._scheme.kind == "carrier" else 0.0
        filtered = self._filter(rails, carrier)
        line = self._clock(rails, filtered)
        if line.chance > CHANCE:
            return NotFound(f"no clock line at {self._link.symbol_rate_hz:g} Hz")
        sps = 1.0 / line.frequency
        skip = self._filter_reach()
        if self._scheme.kind == "carrier":
            for _ in range(2):
                instants = self._instants(filtered[0].size, line.crest, sps, skip)
                found = self._carrier(filtered, instants)
                carrier += found.turn / self._front.rail_sps
                filtered = self._filter(rails, carrier)
            if found.chance > 1e-4 or found.share < _LINE_SHARE * line_share(self._scheme):
                return NotFound("a clock line, but no carrier that the scheme would have")
            line = replace(self._clock(rails, filtered), frequency=line.frequency)
        instants = self._instants(filtered[0].size, line.crest, sps, skip)
        if instants.size < 64:
            return NotFound("too few symbols")
        turn, phase = (0.0, 0.0)
        if self._scheme.kind == "carrier":
            line_found = self._carrier(filtered, instants)
            turn, phase = line_found.turn, line_found.phase
        phases = phase + turn * np.arange(instants.size, dtype=np.float64)
        best, fit = self._scan(filtered, instants, phases, sps)
        instants = instants + best * sps
        reason = self._doubt(fit, line.chance)
        if reason:
            return NotFound(reason)
        if self._scheme.kind == "carrier":
            turn, phase = self._aided_carrier(filtered, instants, fit, turn)
        start = self._start(filtered, instants, phase, turn, sps, fit)
        if self._detector == "derivative" and not self._detector_given and start.detector_slope == -_LEAST_SLOPE:
            # beside the corner of a square pulse's triangle, where an echo may have put the best instant, its slope does not change
            self._detector = "gardner"
            start = self._start(filtered, instants, phase, turn, sps, fit)
        for _ in range(2):
            refined = self._rehearse(filtered, start, skip)
            if isinstance(refined, NotFound):
                return refined
            start, fit = refined
        reason = self._doubt(fit, line.chance)
        if reason:
            return NotFound(reason)
        self._bend = self._bent(filtered, start, fit) if self._scheme.kind == "carrier" else 0.0
        return Acquired(carrier, start, line.chance, fit.mer_db, noise_like_mer_db(self._scheme), fit)

    def _filter_reach(self) -> float:
        probe = matched_filter(self._link, self._front)
        return 2 * probe.delay * self._front.interpolate + TAPS

    def _filter(self, rails: Rails, carrier: float) -> Rails:
        if self._scheme.kind == "carrier":
            rails = Oscillator(carrier).push(rails)
        return matched_filter(self._link, self._front).push(rails)

    def _coarse_carrier(self, rails: Rails) -> float:
        """Centre of the spectrum's power above its floor, cycles a rail sample; 0 where that is within the noise of saying so."""
        z = rails[0] + 1j * rails[1]
        length = 512
        pieces = z[: z.size // length * length].reshape(-1, length) * np.hanning(length)
        if not pieces.size:
            return 0.0
        density = np.mean(np.abs(np.fft.fft(pieces, axis=1)) ** 2, axis=0)
        excess = np.maximum(density - 2.0 * np.quantile(density, 0.2), 0.0)
        # centroid on the circle, so that a band that wraps is no special case
        centre = float(np.angle(np.sum(excess * np.exp(2j * np.pi * np.fft.fftfreq(length))))) / (2 * math.pi)
        return centre if abs(centre) * self._front.rail_sps > 0.06 else 0.0

    def _clock(self, rails: Rails, filtered: Rails) -> ClockLine:
        lines = []
        if self._scheme.stagger:
            # the rails' lines stand in opposition: their difference carries the clock
            lines.append(self._staggered_line(filtered))
        else:
            lines.append(clock_line(_power(filtered), self._front.sps))
            raw = clock_line(_power(rails), self._front.rail_sps) if self._front.rail_sps > 2.5 else None
            if raw is not None:
                delay = matched_filter(self._link, self._front).delay
                ratio = self._front.interpolate
                lines.append(ClockLine(raw.frequency / ratio, (raw.crest + delay) * ratio, raw.chance))
        if self._scheme.kind != "carrier":
            lag = max(round(self._front.sps / 4), 1)
            sums = np.cumsum(np.concatenate(([0.0], filtered[0].astype(np.float64))))
            steps = sums[2 * lag :] - 2 * sums[lag:-lag] + sums[: -2 * lag]
            edge = clock_line((steps / lag).astype(np.float32) ** 2, self._front.sps)
            lines.append(replace(edge, crest=edge.crest + lag + 0.5 / edge.frequency))
        return min(lines, key=lambda line: line.chance)

    def _staggered_line(self, filtered: Rails) -> ClockLine:
        z = (filtered[0] + 1j * filtered[1]).astype(np.complex128)
        square = z * z
        n = np.arange(z.size)
        sps = self._front.sps
        # lines at twice the carrier plus and minus the rate: the product of the two shifted spectra peaks at twice the carrier
        length = 2 ** math.ceil(math.log2(z.size)) * 8
        upper = np.fft.fft(square * np.exp(-2j * np.pi * n / sps), length)
        lower = np.fft.fft(square * np.exp(2j * np.pi * n / sps), length)
        joint = np.abs(upper * lower)
        frequencies = np.fft.fftfreq(length)
        joint[np.abs(frequencies) > 0.2 / sps] = 0.0
        peak = int(np.argmax(joint))
        turned = (square * np.exp(-2j * np.pi * frequencies[peak] * n)).astype(np.complex64)
        phase = 0.5 * np.angle(upper[peak] * lower[peak])
        real = (turned * np.exp(-1j * phase)).real
        return clock_line(np.ascontiguousarray(real, dtype=np.float32), sps)

    def _instants(self, size: int, crest: float, sps: float, skip: float) -> NDArray[np.float64]:
        first = skip + 1.5 * sps
        count = int((size - first - 3.0 * sps - TAPS) / sps)
        start = crest + math.ceil((first - crest) / sps) * sps
        return np.asarray(start + sps * np.arange(max(count, 0)), dtype=np.float64)

    def _values(
        self,
        filtered: Rails,
        instants: NDArray[np.float64],
        phases: NDArray[np.float64],
        sps: float,
        table: NDArray[np.float32] | None = None,
    ) -> NDArray[np.float64]:
        """Values (or, with the slope's table, slopes) ``(rails, n)`` at instants, turned upright."""
        if self._scheme.kind != "carrier":
            weights = self._tables.value if table is None else table
            return interpolate(filtered[0], instants, weights)[None].astype(np.float64)
        upright = np.exp(-2j * np.pi * (phases + self._rotation(phases.size)))
        z = self._complex(filtered, instants, table) * upright
        if self._scheme.rails == 1:
            return np.asarray(z.real[None])
        if self._scheme.stagger:
            late = self._complex(filtered, instants + self._scheme.stagger * sps, table) * upright
            return np.stack((z.real, late.imag))
        return np.stack((z.real, z.imag))

    def _rotation(self, count: int) -> NDArray[np.float64]:
        return np.asarray(self._scheme.rotation * np.arange(count), dtype=np.float64)

    def _complex(
        self, filtered: Rails, instants: NDArray[np.float64], table: NDArray[np.float32] | None = None
    ) -> NDArray[np.complex128]:
        weights = self._tables.value if table is None else table
        real, imag = (interpolate(rail, instants, weights).astype(np.float64) for rail in filtered)
        return real + 1j * imag

    def _carrier(self, filtered: Rails, instants: NDArray[np.float64]) -> CarrierLine:
        z = self._complex(filtered, instants)
        if self._scheme.stagger:
            sps = float(np.mean(np.diff(instants)))
            late = self._complex(filtered, instants + self._scheme.stagger * sps)
            # upright: I at its instant minus Q's square at its own leaves a part along exp(j 2 theta)
            pairs = z * z - late * late
            line = power_line(pairs, 2)
            # their square is negative on the mean: the rails' products outweigh the squares' difference
            return replace(line, turn=line.turn / 2, phase=line.phase / 2 + 0.125)
        return power_line(z * np.exp(-2j * np.pi * self._rotation(z.size)), self._scheme.symmetry)

    def _scan(
        self, filtered: Rails, instants: NDArray[np.float64], phases: NDArray[np.float64], sps: float
    ) -> tuple[float, Fit]:
        """Try every instant of a symbol; the one with the best decisions, in UI from ``instants``, and its fit."""
        some = slice(0, min(instants.size, 2048 if self._scheme.levels > 2 else 1024))
        offsets = (np.arange(_SCAN) - _SCAN // 2) / _SCAN
        fits = [
            fit_levels(self._values(filtered, instants[some] + o * sps, phases[some], sps), self._scheme, rounds=4)
            for o in offsets
        ]
        mers = np.asarray([fit.mer_db for fit in fits])
        top = int(np.argmax(mers))
        # a plateau (a square pulse has one): take its middle
        near = np.flatnonzero(mers > mers[top] - 0.25)
        run = near[np.abs(near - top) <= _SCAN // 4]
        index = round(float(run.mean()))
        best = float(offsets[index])
        return best, fit_levels(self._values(filtered, instants + best * sps, phases, sps), self._scheme)

    def _doubt(self, fit: Fit, chance: float) -> str | None:
        """Why this may be no link after all; None if nothing speaks against it."""
        decided = fit.decided - fit.decided.mean(axis=1, keepdims=True)
        energy = float(np.sum(decided**2))
        if not energy > 0.0:
            return "all symbols are the same"
        z = decided[0] + (1j * decided[1] if decided.shape[0] == 2 else 0.0)
        pattern = _pattern_share(z)
        if pattern > _PATTERN:
            return "a bare tone, or a pattern that repeats, not data"
        if decided.shape[0] == 2:
            alike = abs(float(np.sum(decided[0] * decided[1]))) / max(
                float(np.sqrt(np.sum(decided[0] ** 2) * np.sum(decided[1] ** 2))), 1e-12
            )
            if alike > 0.5:
                return "both rails carry the same: fewer phases than the scheme has"
        for rail in range(fit.classes.shape[0]):
            shares = np.bincount(fit.classes[rail], minlength=self._scheme.levels) / fit.classes.shape[1]
            if shares.min() < 0.4 / self._scheme.levels:
                return "some of the scheme's levels are hardly used"
        products = np.sum(decided[:, 1:] * decided[:, :-1], axis=0)
        even, odd = float(np.sum(products[0::2])), float(np.sum(products[1::2]))
        # half-bits of a Manchester code come in pairs of opposite sign, and are data
        twice = max(even, odd) - max(min(even, odd), 0.0) if self._scheme.kind == "baseband" else abs(even - odd)
        if twice > 0.3 * energy:
            return "each symbol comes twice: the symbol rate is a multiple of the link's"
        floor = noise_like_mer_db(self._scheme)
        if fit.mer_db < floor + 0.8 and (chance > 1e-14 or plausibility_db(fit, self._scheme) < 6.0):
            return "a clock line, but the levels are not told from noise"
        return None

    def _aided_carrier(
        self, filtered: Rails, instants: NDArray[np.float64], fit: Fit, turn: float
    ) -> tuple[float, float]:
        """Carrier turn and phase once more, from the decisions: slope and intercept of the phase left against them."""
        z = self._complex(filtered, instants)
        n = np.arange(instants.size)
        if self._scheme.stagger:
            # the rails' decisions belong to different instants; the M-th power estimate serves as it is
            found = self._carrier(filtered, instants)
            return found.turn, found.phase
        ideal = fit.decided[0] + (1j * fit.decided[1] if fit.decided.shape[0] == 2 else 0.0)
        product = z * np.conj(ideal) * np.exp(-2j * np.pi * (turn * n + self._rotation(n.size)))
        block = max(n.size // 32, 1)
        sums = product[: n.size // block * block].reshape(-1, block).sum(axis=1)
        angles = np.unwrap(np.angle(sums)) / (2 * math.pi)
        centres = (np.arange(sums.size) + 0.5) * block - 0.5
        slope, intercept = np.polyfit(centres, angles, 1) if sums.size > 2 else (0.0, float(angles.mean()))
        return turn + float(slope), float(intercept)

    def _bent(self, filtered: Rails, start: TrackStart, fit: Fit) -> float:
        """How the carrier still drifts, cycles a symbol from one to the next, by the phases against the decisions; 0: not at all."""
        k = np.arange(fit.values.shape[1], dtype=np.float64)
        instants = start.instant + (start.offset_ui + k) * start.sps
        if self._scheme.rails == 1:
            z = self._complex(filtered, instants) * np.exp(-2j * np.pi * (start.phase + start.turn * k))
            product = z * (fit.decided[0] - fit.decided[0].mean())
        else:
            middle = fit.means.mean(axis=1)
            z = (fit.values[0] - middle[0]) + 1j * (fit.values[1] - middle[1])
            product = z * (fit.decided[0] - 1j * fit.decided[1])
        block = max(k.size // 32, 1)
        count = k.size // block
        phases = np.unwrap(np.angle(product[: count * block].reshape(count, block).sum(axis=1))) / (2 * math.pi)
        drift, line, parabola = parabola_through(block * np.arange(count, dtype=np.float64), phases)
        # of a carrier that is known to drift, less of a bend is believed
        most = STILL_STANDS_OUT if self._drifts else STANDS_OUT
        return drift if parabola < most * line and abs(drift) > _CLEAR_DRIFT else 0.0

    def _start(
        self, filtered: Rails, instants: NDArray[np.float64], phase: float, turn: float, sps: float, fit: Fit
    ) -> TrackStart:
        phases = phase + turn * np.arange(instants.size, dtype=np.float64)
        slope, template = self._detector_facts(filtered, instants, phases, sps, fit)
        return TrackStart(
            float(instants[0]), sps, phase, turn, fit.means, self._detector, slope, 0.0, 0.0, template, self._sense_ui
        )

    def _detector_facts(
        self,
        filtered: Rails,
        instants: NDArray[np.float64],
        phases: NDArray[np.float64],
        sps: float,
        fit: Fit,
    ) -> tuple[float, NDArray[np.float32] | None]:
        """Slope of the detector's mean output by timing, and the pattern template it needs."""
        step = 0.05
        gain, zero = level_units(fit.means, np.asarray(self._scheme.rail_levels))
        if self._detector in ("derivative", "crossing"):
            if self._detector == "crossing":
                self._sense_ui = self._crossing_point(filtered, instants, sps, fit)
            template = _pattern_template(fit.decided, self._sensed(filtered, instants, phases, sps, gain, zero))
            patterns = _patterns(fit.decided, template)
            weight = fit.decided
            if self._detector == "crossing":
                weight = weight - np.roll(weight, 1, axis=1)

            def cleaned(shift: float) -> float:
                sensed = self._sensed(filtered, instants + shift * sps, phases, sps, gain, zero) - patterns
                return float(np.mean(np.sum((weight * sensed)[:, TEMPLATE:-TEMPLATE], axis=0)))

            slope = (cleaned(step) - cleaned(-step)) / (2 * step)
            sign = 1.0 if self._detector == "crossing" else -1.0
            return sign * max(sign * slope, _LEAST_SLOPE), template

        def mean_output(shift: float) -> float:
            at = instants + shift * sps
            here = (self._values(filtered, at, phases, sps) - zero[:, None]) / gain[:, None]
            if self._detector == "mueller-muller":
                error = fit.decided[:, :-1] * here[:, 1:] - fit.decided[:, 1:] * here[:, :-1]
            else:
                half = (self._values(filtered, at[1:] - 0.5 * sps, phases[1:], sps) - zero[:, None]) / gain[:, None]
                error = half * np.diff(here, axis=1)
            return float(np.mean(np.sum(error, axis=0)))

        slope = (mean_output(step) - mean_output(-step)) / (2 * step)
        sign = 1.0 if self._detector == "gardner" else -1.0
        return sign * max(sign * slope, 0.05 * self._scheme.symbol_energy()), None

    def _sensed(
        self,
        filtered: Rails,
        instants: NDArray[np.float64],
        phases: NDArray[np.float64],
        sps: float,
        gain: NDArray[np.float64],
        zero: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """What the pattern-cancelling detectors look at: slope at the instant, or height where transitions cross."""
        if self._detector == "derivative":
            return self._slopes(filtered, instants, phases, sps) / gain[:, None]
        return (self._values(filtered, instants - self._sense_ui * sps, phases, sps) - zero[:, None]) / gain[:, None]

    def _crossing_point(self, filtered: Rails, instants: NDArray[np.float64], sps: float, fit: Fit) -> float:
        """How long before its decision instant a mean transition crosses the middle, UI."""
        step = np.diff(fit.decided[0])
        zero = level_units(fit.means, np.asarray(self._scheme.rail_levels))[1][0]
        offsets = np.arange(1, 32) / 32
        none = np.zeros(instants.size - 1)
        heights = np.asarray(
            [step @ (self._values(filtered, instants[1:] - o * sps, none, sps)[0] - zero) for o in offsets]
        )
        # heights fall from the new level's side to the old one's as the look goes back
        below = np.flatnonzero((heights[:-1] > 0) & (heights[1:] <= 0))
        if below.size == 0:
            return 0.5
        i = int(below[np.argmin(np.abs(offsets[below] - 0.5))])
        return float(offsets[i] + heights[i] / (heights[i] - heights[i + 1]) / 32)

    def _slopes(
        self, filtered: Rails, instants: NDArray[np.float64], phases: NDArray[np.float64], sps: float
    ) -> NDArray[np.float64]:
        return self._values(filtered, instants, phases, sps, self._tables.slope) * sps

    def _rehearse(self, filtered: Rails, start: TrackStart, skip: float) -> tuple[TrackStart, Fit] | NotFound:
        """Run the loops over the stretch, and begin again on the straight lines that they settled on."""
        tracker = Tracker(
            self._scheme,
            start,
            self._tables,
            timing_bandwidth=self._timing_bandwidth,
            carrier_bandwidth=self._carrier_bandwidth,
        )
        track = tracker.push(filtered)
        n = track.instants.size - 1
        settle = min(int(1.5 / self._timing_bandwidth), n // 3)
        k = np.arange(n, dtype=np.float64)
        if n < 64:
            return NotFound("too few symbols")
        sps, first = (float(v) for v in np.polyfit(k[settle:], track.instants[settle:n], 1))
        turn, phase = start.turn, start.phase
        if self._scheme.kind == "carrier":
            turned = track.phases[:n] - self._rotation(n)
            turn, phase = (float(v) for v in np.polyfit(k[settle:], turned[settle:], 1))
        line = first + sps * k
        phases = phase + turn * k
        if not abs(sps / self._front.sps - 1.0) < 5 * RATE_SPAN:
            return NotFound("a clock line, but the timing loop does not settle on it")
        reach = (0.6 + self._sense_ui + self._scheme.stagger) * sps + TAPS
        inside = np.flatnonzero((line > reach) & (line < filtered[0].size - reach))
        if inside.size < 64:
            return NotFound("too few symbols")
        usable = slice(int(inside[0]), int(inside[-1]) + 1)
        best, fit = self._scan(filtered, line[usable], phases[usable], sps)
        first = _first_sound(fit, noise_like_mer_db(self._scheme) + 0.8)
        if first:
            # the stretch opens with something else: noise, or the end of silence
            first += usable.start
            line, phases = line[first:], phases[first:]
            usable = slice(0, usable.stop - first)
            best, fit = self._scan(filtered, line[usable], phases[usable], sps)
        if start.detector in ("derivative", "crossing"):
            line, offset = line + best * sps, 0.0
        else:
            offset = best
        slope, template = self._detector_facts(filtered, line[usable], phases[usable], sps, fit)
        return replace(
            start,
            instant=float(line[0]),
            sps=sps,
            phase=float(phases[0]),
            turn=turn,
            means=fit.means,
            detector_slope=slope,
            offset_ui=offset,
            template=template,
            sense_ui=self._sense_ui,
        ), fit


def _first_sound(fit: Fit, floor_db: float) -> int:
    """How many symbols at the beginning are no better than noise, while the rest is: a multiple of 64, at most half."""
    size = 64
    n = fit.values.shape[1] // size
    decided = np.take_along_axis(fit.means, fit.classes, axis=1)
    noise = np.sum((fit.values - decided) ** 2, axis=0)[: n * size].reshape(n, size).sum(axis=1)
    signal = float(np.sum((decided - decided.mean(axis=1, keepdims=True)) ** 2)) / fit.values.shape[1] * size
    poor = noise > signal * 10 ** (-floor_db / 10)
    if poor[n // 2 :].any() or not poor.any():
        return 0
    return size * (int(np.flatnonzero(poor)[-1]) + 1)


def _dechirped(rails: Rails, drift: float) -> Rails:
    n = np.arange(rails[0].size, dtype=np.float64)
    z = (rails[0] + 1j * rails[1]) * np.exp(-2j * np.pi * np.mod(0.5 * drift * n**2, 1.0))
    return np.ascontiguousarray(z.real, np.float32), np.ascontiguousarray(z.imag, np.float32)


def _power(rails: Rails) -> NDArray[np.float32]:
    total = rails[0] * rails[0]
    return total + rails[1] * rails[1] if len(rails) == 2 else total


def _patterns(decided: NDArray[np.float64], template: NDArray[np.float32]) -> NDArray[np.float64]:
    """What each symbol's decided neighbours put into its slope, shape of ``decided``; wrong within ``TEMPLATE`` of the ends."""
    return np.asarray(
        sum(float(t) * np.roll(decided, int(lag), axis=1) for t, lag in zip(template, TEMPLATE_LAGS, strict=True))
    )


def _pattern_template(decided: NDArray[np.float64], slopes: NDArray[np.float64]) -> NDArray[np.float32]:
    """Least-squares response of the slope to the symbols around it, rails pooled, in the kernel's order of taps."""
    lagged = np.stack([np.roll(decided, int(lag), axis=1)[:, TEMPLATE:-TEMPLATE] for lag in TEMPLATE_LAGS], axis=-1)
    design = lagged.reshape(-1, TEMPLATE)
    target = slopes[:, TEMPLATE:-TEMPLATE].reshape(-1)
    ridge = 1e-3 * np.trace(design.T @ design) / TEMPLATE
    solution = np.linalg.solve(design.T @ design + ridge * np.eye(TEMPLATE), design.T @ target)
    assert AHEAD * 2 == TEMPLATE
    return np.ascontiguousarray(solution, dtype=np.float32)
