"""From the sums of a window to its reading. Definitions stand beside the code that computes them."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dsp.budget import LinkModel, budget_of, link_model
from dsp.crossings import crossings, rise_of, rise_time
from dsp.diagnosis import Constellation, Diagnosis, JitterSplit
from dsp.equaliser import Equalisers
from dsp.error_rate import Decisions, over_time, phase_error_rate
from dsp.eye import COLUMNS, EyeSums
from dsp.intervals import LEAST_STRETCHES, Estimate, jackknife
from dsp.jitter import periodic_line, sample_response, split_jitter
from dsp.limiter import RATE, Bend, Limiter, compression
from dsp.mixture import Mixture, Spread, fit_mixture, spread, tail_reach
from dsp.openings import (
    Falls,
    between,
    corner,
    falls_of,
    modelled_openings,
    opening_curves,
    peak,
    plateau,
    tail_errors,
    vertex,
    width,
)
from dsp.pattern import CURSOR, Pattern, PatternModel, beyond_chance
from dsp.picture import EyeImage
from dsp.reading import Budget, Equaliser, Eye, Reading
from dsp.residual import Split, pattern_means, products_of, split
from dsp.roll_off import fitting_roll_off
from dsp.tracking import level_units
from dsp.verdict import Evidence, sentences

TAIL = 1e-3  # the share of a level's traces that the opening leaves outside
FULL_CLASS = 10.0 / TAIL  # symbols a level needs for its tail to be counted rather than modelled
LEAST_SYMBOLS = 100
_EARLY_LATE = ("timing_tolerance_early_ui", "timing_tolerance_late_ui")  # names of both ends' estimates
_UNTOLD = 0.5  # of the counts' chance, by which the curve may be off where counts do not contradict the model
_APART = 10.0  # columns beyond which a curve's counts are independent of those at the best instant
_CREST = 2.0  # columns between which a crest is looked for once more
_DECISIONS_RIGHT = 2e-4  # bit error rate below which what decisions hide does not count
_TAIL_WHOLE = 5e-5  # and below which it does not even bend the tail of a level
_QUANTILE_SPREAD = 1.0 / 0.00337  # 1 / the normal density at its TAIL quantile, for the standard error of that quantile


@dataclass(frozen=True, slots=True)
class Context:
    """What the figures need beside the sums: rates, the loop's place, and targets.

    ``sps_ratio`` is the loop's nominal symbol period over the link's; ``offset_ui`` lies from the loop's instant to the decision
    instant; ``late_bias_ui`` is the timing loop's own known lateness; ``carrier_base_hz`` what was taken out before the loops;
    ``receive_filter`` the matched filter at `dsp.limiter.RATE` points a symbol, None where no linear one leads to the samples;
    ``carrier_bandwidth`` and ``timing_bandwidth`` BnT of the loops, 0 where there is none; ``roll_off`` that of the receive filter
    where it is a root raised cosine.
    """

    symbol_rate_hz: float
    sps_ratio: float
    offset_ui: float
    late_bias_ui: float = 0.0
    carrier_base_hz: float | None = None
    frequency_rails: bool = False
    target_ber: float = 1e-6
    receive_filter: NDArray[np.float64] | None = None
    carrier_bandwidth: float = 0.0
    roll_off: float | None = None
    timing_bandwidth: float = 0.0


@dataclass(frozen=True, slots=True)
class Whole:
    """What takes long: the whole reading, the opening with its error, the bend of the amplitude; if asked for what stands behind."""

    reading: Reading
    opening: Estimate | None
    limiter: Limiter | None
    diagnosis: Diagnosis | None = None


def whole_figures(sums: EyeSums, context: Context, diagnose: bool) -> Whole:
    """All of these sums' figures, with their diagnosis if ``diagnose``."""
    figures = Figures(sums, context)
    reading = figures.reading()
    return Whole(
        reading,
        figures.estimates.get("opening_pct"),
        figures._limiter if figures.enough else None,
        figures.diagnosis() if diagnose else None,
    )


@dataclass(frozen=True, slots=True)
class _Settled:
    """How far an opening curve lies higher at its falls than counted, ``(7,)`` and of each eye ``(rails, eyes, 7)``, and its chance."""

    change: NDArray[np.float64]
    each: NDArray[np.float64]
    chance: NDArray[np.float64]


class Figures:
    """Figures of one `EyeSums`; the heavier ones are computed when `reading` asks.

    ``like``: taken at the same instant and by the same ways as those figures; sums without a raster need it. ``after``: with
    the bend of the amplitude that those of the link shortly before have found.
    """

    def __init__(
        self, sums: EyeSums, context: Context, *, like: "Figures | None" = None, after: "Whole | None" = None
    ) -> None:
        self._sums = sums
        self._context = context
        self._scheme = sums.scheme
        self._nominal = np.asarray(sums.scheme.rail_levels)
        self._spacing = np.diff(self._nominal)
        self._pattern = Pattern(sums)
        counts, totals, squares = np.moveaxis(sums.level_sums, 2, 0)
        self._counts = counts
        self._means = np.where(counts > 0, totals / np.maximum(counts, 1), self._nominal)
        self._sigmas = np.sqrt(np.maximum(squares / np.maximum(counts, 1) - self._means**2, 0.0))
        self._gain, self._zero = level_units(self._means, self._nominal)
        self._mixtures: list[Mixture] | None = None
        self._mixture_isi = np.zeros(sums.scheme.rails)
        self.enough = sums.symbols >= LEAST_SYMBOLS and float(counts.min()) >= 3
        self._drawn = sums.drawn / max(sums.symbols, 1) * float(counts.min())  # traces of the rarest level
        if after is not None:
            self._limiter = after.limiter
        self._tails_counted = False
        self._best: float = COLUMNS
        self._corner: float | None = None
        self._bent_products: NDArray[np.float64] | None = None  # of what is left behind response and bend
        self._met_bend: Bend | None = None  # at the best instant
        if not self.enough:
            return
        if like is not None:
            self._limiter = like._limiter
            self._met_bend = like._link.bend
            self._bent_products = like._bent_products
            self._tails_counted = like._tails_counted
            if like._mixtures is not None:
                self._fit_mixtures()
            self._best, self._corner = like._best, like._corner
            if self._corner is not None:
                self._corner = self._corner_near(self._corner)
            elif self._pattern.smooth:
                self._best += self._crest(self._best)
            return
        errors = self._rough_error_rate()
        self._tails_counted = self._drawn >= FULL_CLASS and errors < _TAIL_WHOLE
        if errors > _DECISIONS_RIGHT:
            self._fit_mixtures()
        self._best, self._corner = self._best_column()

    # -- scale, noise and levels ---------------------------------------------------------------------------------------

    def _fit_mixtures(self) -> None:
        """Where decisions are often wrong: scale and noise from the levels' mixture, which knows nothing of decisions."""
        centres = self._sums.rows.centres()
        column = self._sums.at_decision().sum(axis=1).astype(np.float64)
        model = self._pattern.model(0.0)
        mixtures, isi = [], []
        for rail, counts in enumerate(column):
            noise = max(math.sqrt(float(model.residual[rail])), 1e-3 * float(self._gain[rail]))
            reach = self._isi(rail, model, noise / max(model.cursor(rail), 1e-9))
            isi.append(max(reach.variance(), 0.0))  # rounding may leave it below
            # as many points as keep their distance below half the noise's deviation
            points = min(math.ceil(6.0 * math.sqrt(isi[-1]) * float(self._gain[rail]) / noise), 24)
            shift, share = reach.grouped(points) if points > 1 else (None, None)
            first = Mixture(float(self._gain[rail]), float(self._zero[rail]), noise)
            mixtures.append(fit_mixture(centres, counts, self._nominal, first, shift, share))
            if points <= 1:
                isi[-1] = 0.0
        self._mixtures, self._mixture_isi = mixtures, np.asarray(isi)
        self._gain = np.asarray([mixture.gain for mixture in mixtures])
        self._zero = np.asarray([mixture.zero for mixture in mixtures])

    def _noise(self, model: PatternModel) -> NDArray[np.float64]:
        """Additive noise variance by rail, level units squared: ISI not counted, wrong decisions allowed for."""
        cursors = np.maximum([abs(model.cursor(rail)) for rail in range(self._scheme.rails)], 1e-9)
        if self._mixtures is None:
            noise = np.asarray(model.residual / cursors**2)
            bend = self._bend()
            if np.any(bend > 0.2 * noise):
                # uneven levels are no noise, but what they leave over is only known where their means are: at the decision instant
                first = self._pattern.model(0.0)
                noise = first.residual / np.square([first.cursor(rail) for rail in range(self._scheme.rails)])
            noise = np.maximum(noise - bend, 0.02 * noise)
        else:
            noise = np.asarray([(mixture.sigma / mixture.gain) ** 2 for mixture in self._mixtures])
        mean = noise.mean()
        return np.asarray(mean + beyond_chance(noise - mean, mean**2 / self._sums.symbols))

    def _bend(self) -> NDArray[np.float64]:
        """Variance of the levels about the line that the pattern response fits to them, of its cursor 1, shape ``(rails,)``."""
        model = self._pattern.model(0.0)
        bends = np.empty(self._scheme.rails)
        for rail, (means, deviations, counts) in enumerate(zip(self._means, self._sigmas, self._counts, strict=True)):
            shares = counts / counts.sum()
            off = self._nominal - shares @ self._nominal
            rest = means - shares @ means
            rest = rest - off * (shares @ (rest * off)) / (shares @ off**2)
            rest = beyond_chance(rest, deviations**2 / np.maximum(counts, 1.0))
            bends[rail] = shares @ rest**2 / max(model.cursor(rail) ** 2, 1e-18)
        return bends

    def _idle_noise(self) -> float:
        """Noise of the rail that a one-railed carrier leaves idle, level units squared; 0 for others."""
        if self._scheme.kind != "carrier" or self._scheme.rails == 2:
            return 0.0
        return self._sums.across / max(self._sums.symbols, 1) / float(self._gain[0]) ** 2

    def _isi(self, rail: int, model: PatternModel, sigma: float) -> Spread:
        """Spread of one rail's samples about its level, cursor 1, by its own and the other rail's neighbours."""
        shares = self._counts.sum(axis=0)
        taps = model.neighbours(rail) / max(model.cursor(rail), 1e-9)
        return spread(taps, self._nominal, shares / shares.sum(), sigma)

    def _levels(self, rail: int) -> NDArray[np.float64]:
        """Level means in level units; the nominal ones where decisions are too often wrong to tell."""
        if not self._levels_told:
            return self._nominal
        levels = (self._means[rail] - self._zero[rail]) / self._gain[rail]
        variance = (self._sigmas[rail] / self._gain[rail]) ** 2 / np.maximum(self._counts[rail], 1.0)
        return self._nominal + beyond_chance(levels - self._nominal, variance)

    @cached_property
    def _levels_told(self) -> bool:
        """Whether decisions are right often enough to say where each level lies and how wide it is."""
        if self._mixtures is None:
            return True
        half = 0.5 * float(self._spacing.min())
        widest = max(
            math.hypot(m.sigma / m.gain, math.sqrt(i)) for m, i in zip(self._mixtures, self._mixture_isi, strict=True)
        )
        return half > 2.3 * widest

    def _uneven_noise(self, rail: int) -> NDArray[np.float64]:
        """Variance that a level has beyond the mean of all, level units squared, ``(levels,)``; what decisions cut off allowed for."""
        if self._scheme.levels < 3 or not self._levels_told:
            return np.zeros(self._scheme.levels)
        variance = (self._sigmas[rail] / self._gain[rail]) ** 2
        gaps = np.concatenate(([np.inf], 0.5 * self._spacing, [np.inf])) / np.sqrt(variance.mean())
        cut = [z * math.exp(-0.5 * z * z) / math.sqrt(2.0 * math.pi) if np.isfinite(z) else 0.0 for z in gaps.tolist()]
        variance = variance / (1.0 - np.asarray(cut[1:]) - np.asarray(cut[:-1]))
        shares = self._counts[rail] / self._counts[rail].sum()
        return beyond_chance(variance - shares @ variance, 2.0 * variance**2 / np.maximum(self._counts[rail], 1.0))

    # -- the opening ---------------------------------------------------------------------------------------------------

    def _best_column(self) -> tuple[float, float | None]:
        """Best instant in columns: where the least opening is greatest; where chance decides that, where levels are thinnest.

        Then the place of the wave's corner, if the opening falls off from one there.
        """
        start, stop = COLUMNS // 2, COLUMNS + COLUMNS // 2 + 1
        noise = float(self._noise(self._pattern.model(0.0)).max())
        if self._counts_instant:
            section = self._ragged.min(axis=(0, 1))[start:stop]
            chance = max(self._tail_chance(), self._sums.rows.height)
        else:
            if self._sums.phases < COLUMNS:
                # a smooth wave has one peak: no need to look everywhere finely
                coarse = range(start, stop, 4)
                near = coarse[int(np.argmax(self._course(coarse)))]
                start, stop = max(near - 5, start), min(near + 6, stop)
                section = self._course(range(start, stop))
                chance = 1e-4  # the model's course is flat where it is flat
            else:
                section = np.asarray([self._worst_case(_ui(column)) for column in range(start, stop)])
                chance = 3.0 * math.sqrt(noise / self._sums.symbols)
        top = int(np.argmax(section))
        first, last = plateau(section, top, 100.0 * chance / float(self._spacing.min()))
        sharp = corner(section, last) if last - first <= 4 else None
        sharp = None if sharp is None else start + sharp
        if last - first < 2:
            # a smooth wave's opening has a true peak there; a corner that sampling rounded is better judged where the raster shows it
            if sharp is not None and self._sums.phases < COLUMNS:
                return sharp, sharp
            return start + top + vertex(section, top), sharp
        squares = np.asarray(
            [float(self._pattern.error(_ui(start + column)).max()) for column in range(first, last + 1)]
        )
        thin = int(np.argmin(squares))
        tolerance = 1e-4 * squares[thin] + 3.0 * math.sqrt(2.0 / self._sums.symbols) * noise
        left, right = plateau(-squares, thin, tolerance)
        if right - left < 2:
            return start + first + thin + vertex(-squares, thin), sharp
        return start + first + 0.5 * (left + right), sharp

    def _crest(self, near: float) -> float:
        """How far from the column ``near`` a smooth wave's opening is greatest, by the pattern model."""
        return _CREST * vertex(self._course([near - _CREST, near, near + _CREST]), 1)

    def _corner_near(self, near: float) -> float:
        """The corner about the column ``near``, by the pattern model; there itself if the model shows none."""
        start = round(near) - 7
        columns = range(start, start + 15)
        smooth = self._sums.phases < COLUMNS
        section = self._course(columns) if smooth else np.asarray([self._worst_case(_ui(c)) for c in columns])
        found = corner(section, 7)
        return near if found is None else start + found

    def _course(self, columns: Sequence[float]) -> NDArray[np.float64]:
        """The opening's course over ``columns`` of a smooth wave, per cent, by the pattern model: near enough to find its peak."""
        shares = self._counts.sum(axis=0) / self._counts.sum()
        models = [self._pattern.model(_ui(column)) for column in columns]
        at_decision = self._pattern.model(0.0)
        noise = self._noise(at_decision)
        least = np.full(len(models), math.inf)
        for rail in range(self._scheme.rails):
            unit = max(at_decision.cursor(rail), 1e-9)
            taps = np.asarray([model.neighbours(rail) for model in models]) / unit
            # what is nowhere worth a hundredth of the noise's deviation cannot move the peak
            taps = taps[:, np.abs(taps).max(axis=0) > 0.01 * math.sqrt(noise[rail])]
            sigma = np.full(len(models), math.sqrt(noise[rail]))
            reach = tail_reach(taps, self._nominal, shares, sigma, TAIL)
            cursor = np.asarray([model.cursor(rail) for model in models]) / unit
            least = np.minimum(least, cursor - 2.0 * reach / float(self._spacing.min()))
        return 100.0 * least

    @cached_property
    def _counts_instant(self) -> bool:
        """Whether the best instant is read off the raster: of a smooth wave the model knows it better than ragged tails do."""
        return self._tails_counted and self._sums.phases == COLUMNS

    def _tail_chance(self) -> float:
        """Standard error of an opening whose tails are counted, level units."""
        noise = float(self._noise(self._pattern.model(0.0)).max())
        return _QUANTILE_SPREAD * math.sqrt(2.0 * TAIL * noise / self._drawn)

    def _worst_case(self, ui: float) -> float:
        """Opening in per cent by peak distortion: its course over time is that of the opening, and not ragged."""
        model, at_decision = self._pattern.model(ui), self._pattern.model(0.0)
        outer = float(self._nominal[-1])
        least = math.inf
        for rail in range(self._scheme.rails):
            # near a corner what is left over is not noise but what sampling made of the corner
            lost = 2.0 * outer * float(np.abs(model.neighbours(rail)).sum())
            opening = (model.cursor(rail) - lost / float(self._spacing.min())) / max(at_decision.cursor(rail), 1e-9)
            least = min(least, opening)
        return 100.0 * least

    @cached_property
    def _histogram(self) -> NDArray[np.int64]:
        return self._sums.histogram()

    @cached_property
    def _ragged(self) -> NDArray[np.float64]:
        """Opening curves as counted, ``(rails, eyes, columns)``, in level units of the decision instant."""
        return opening_curves(self._histogram, self._sums.rows, self._gain, self._spacing, TAIL)

    @cached_property
    def _openings(self) -> NDArray[np.float64]:
        """Of every eye at the best instant: counted where every level has enough traces for its tail, modelled otherwise."""
        modelled = self._decisions.openings(self._nominal, TAIL)
        if not self._tails_counted:
            return modelled
        best, column = _ui(self._best), round(self._best)
        if not self._sums.raster:
            column = COLUMNS
            middle = self._sums.at_decision()[:, :, None]
            counted = opening_curves(middle, self._sums.rows, self._gain, self._spacing, TAIL)[:, :, 0]
        else:
            counted = self._ragged[:, :, column]
        # the curve may have its peak between two columns: the model tells what lies there
        counted = counted * self._scale() + self._modelled(best, TAIL) - self._modelled(_ui(column), TAIL)
        # ten traces beyond a level's tail make it ragged: where they do not contradict the model, they are not told from it
        chance = 100.0 * self._tail_chance() / self._spacing
        return modelled + beyond_chance(counted - modelled, chance**2)

    @cached_property
    def _curves(self) -> NDArray[np.float64]:
        """Opening curves that agree with the openings."""
        if not self.enough:
            return self._ragged
        curves = self._ragged * self._scale()[..., None]
        # the curve of few traces is too open by as much as their extremes fall short of the tail
        return curves + (self._openings - between(curves, self._best))[:, :, None]

    @cached_property
    def _falls(self) -> Falls | None:
        """Where the least opening's curve falls off from the best instant."""
        falls = falls_of(self._curves.min(axis=(0, 1)), self._best)
        if falls is None or not self._pattern.smooth:
            return falls
        # few traces make a ragged curve: the model knows its slopes
        beside = np.concatenate((falls.places()[1:] - _CREST, falls.places()[1:] + _CREST))
        before, after = self._course(beside.tolist()).reshape(2, 3, 2)
        rate = (after - before) / (2.0 * _CREST)
        return replace(falls, rate=np.where(rate * falls.rate > 0, rate, falls.rate))

    @cached_property
    def _settled(self) -> _Settled:
        """The curve at its falls, counted and modelled as `_openings` is: how much higher it lies than `_curves`."""
        falls = self._falls
        assert falls is not None
        places = falls.places()
        columns = np.clip(np.rint(places).astype(np.int64), 0, 2 * COLUMNS - 1)
        chance = tail_errors(self._histogram[:, :, columns], self._sums.rows, self._gain, self._spacing, TAIL)
        drawn = np.stack([between(self._curves, place) for place in places.tolist()], axis=2)
        if not self._pattern.smooth:
            least = np.argmin(drawn.reshape(-1, places.size), axis=0)
            still = chance.reshape(-1, places.size)[least, np.arange(places.size)]
            still[0] = 0.0
            return _Settled(np.zeros(places.size), np.zeros_like(drawn), still)
        modelled = np.stack(
            [self._modelled(_ui(place), TAIL) * self._worth(_ui(place))[:, None] for place in places.tolist()], axis=2
        )
        modelled += self._openings[..., None] - modelled[..., :1]
        kept = beyond_chance(drawn - modelled, chance**2)
        settled = (modelled + kept).reshape(-1, places.size)
        least = np.argmin(settled, axis=0)
        every = np.arange(places.size)
        # what counts cannot tell from the model may still be there; near the best instant both move alike
        share = np.maximum(np.abs(kept) / np.maximum(np.abs(drawn - modelled), 1e-12), _UNTOLD)
        share *= np.sqrt(np.minimum(np.abs(places - places[0]) / _APART, 1.0))
        still = (share * chance).reshape(-1, places.size)[least, every]
        change = settled[least, every] - drawn.min(axis=(0, 1))
        change[0], still[0] = 0.0, 0.0
        return _Settled(change, (modelled + kept) - drawn, still)

    def _scale(self) -> NDArray[np.float64]:
        """From level units of the decision instant to those of the best instant, shape ``(rails, 1)``."""
        scale = self._pattern.own(0.0) / np.maximum(self._pattern.own(_ui(self._best)), 1e-9)
        return np.asarray(np.clip(scale, 0.5, 2.0)[:, None])

    def _modelled(self, ui: float, tail: float) -> NDArray[np.float64]:
        """Openings by the pattern model with Gaussian noise, per cent, shape ``(rails, eyes)``."""
        model = self._pattern.model(ui)
        sigmas = np.sqrt(self._noise(model))
        result = np.empty((self._scheme.rails, self._spacing.size))
        for rail, sigma in enumerate(sigmas):
            reach = self._isi(rail, model, float(sigma))
            result[rail] = modelled_openings(self._levels(rail), reach, self._spacing, tail)
        return result

    def opening_pct(self) -> float | None:
        """The least opening of all eyes at the best instant."""
        return float(self._openings.min()) if self.enough else None

    # -- what closes it ------------------------------------------------------------------------------------------------

    @cached_property
    def _limiter(self) -> Limiter | None:
        """What a bend of the amplitude ahead of the receive filter does; looked for where patterns or points tell of one."""
        matched, residual = self._context.receive_filter, self._sums.residual
        if matched is None or self._mixtures is not None:
            return None
        told = bool(pattern_means(residual.patterns, residual.square, self._scheme.levels)[1].any())
        if self._scheme.rails == 2 and not told:
            table = np.stack([residual.points[:, [0, 1 + rail]] for rail in range(2)])
            told = bool(pattern_means(table, residual.square, self._scheme.levels)[1].any())
        if not told:
            return None
        limiter = Limiter(self._sums.stretches, self._scheme, self._pattern.line(RATE), matched)
        return limiter if limiter.found else None

    @cached_property
    def _split(self) -> Split | None:
        rails, limiter = self._scheme.rails, self._limiter
        late, early = (slope.reshape(rails, -1) for slope in self._pattern.flanks(0.0))
        if limiter is not None and self._bent_products is None:
            value = self._pattern.model(0.0).taps.reshape(rails, -1)
            other = np.stack((-value[1], value[0])) if rails == 2 and not self._scheme.stagger else np.zeros_like(value)
            rows = [part.astype(np.float32) for part in (late, early, other)]
            self._bent_products = np.sum(
                [products_of(one.errors, *(part @ one.symbols for part in rows)) for one in limiter.residuals()],
                axis=0,
            )
        return split(
            self._sums.residual, self._scheme, 0.5 * (late + early),
            smooth=self._pattern.smooth, products=self._bent_products,
        )  # fmt: skip

    @cached_property
    def _link(self) -> LinkModel:
        """The link at the best instant."""
        link = self._link_at(_ui(self._best))
        self._met_bend = link.bend
        return link

    def budget(self) -> Budget:
        """What closes the eye, in points of opening at the target error rate."""
        target = self._context.target_ber
        return budget_of(self._link, self._split, target, self._numbers["opening_at_ber_pct"])

    @cached_property
    def _evidence(self) -> Evidence:
        split, link, context = self._split, self._link, self._context
        tone = split.tone if split is not None else None
        bent = self._compression()
        return Evidence(
            context.target_ber,
            context.symbol_rate_hz,
            response=self._pattern.response(_ui(self._best)),
            timing_rms_ui=math.sqrt(split.common + split.single)
            if split is not None and self._pattern.smooth
            else None,
            phase_rms_deg=math.degrees(math.sqrt(split.turn)) if split is not None else None,
            tone_hz=tone.frequency * context.symbol_rate_hz if tone is not None else None,
            tone_pct=link.without_tone().opening(context.target_ber) - link.opening(context.target_ber)
            if tone is not None
            else None,
            compression_db=bent[0] if bent is not None else None,
            opening_with_3db_more_pct=self._opening_with(10**-0.3),
        )

    def _compression(self) -> tuple[float, float] | None:
        """Loss of gain, dB, and turn, degrees, at the greatest amplitude against the smallest; None where none is met or known."""
        if self._mixtures is not None or self._context.frequency_rails or self._split is None:
            return None
        noise = float(self._split.random.sum())
        if self._scheme.rails == 1:
            points = np.asarray(self._nominal, dtype=np.complex128)
            off = np.asarray(self._levels(0) - self._nominal, dtype=np.complex128)
            return compression(points, off, self._counts[0], noise)
        counts, in_phase, across = self._sums.residual.points.T
        grid = (self._nominal[:, None] + 1j * self._nominal[None, :]).ravel()
        met = counts > 0
        shifts = np.asarray((in_phase[met] + 1j * across[met]) / counts[met], dtype=np.complex128)
        return compression(grid[met], shifts, counts[met], noise) if met.any() else None

    def _link_at(self, ui: float) -> LinkModel:
        """The link at an instant, with the noise that there is at the best one."""
        counts = self._counts.sum(axis=0)
        units = self._sums.unit_sums[0, : self._scheme.rails] / np.maximum(
            self._sums.unit_sums[2, : self._scheme.rails], 1.0
        )
        # near a corner what is left over is not noise but what sampling made of the corner
        noise = self._noise(self._pattern.model(_ui(self._best) if self._pattern.smooth else 0.0))
        return link_model(
            self._scheme, self._pattern, ui, shares=counts / counts.sum(),
            levels=np.asarray([self._levels(rail) for rail in range(self._scheme.rails)]),
            noise=noise / self._worth(ui) ** 2,
            uneven=np.asarray([self._uneven_noise(rail) for rail in range(self._scheme.rails)]) / self._worth(ui)[:, None] ** 2,
            units=units, split=self._split, limiter=self._limiter, bend=self._met_bend,
            symbols=self._sums.symbols, timing_bandwidth=self._context.timing_bandwidth,
            carrier_bandwidth=self._context.carrier_bandwidth,
        )  # fmt: skip

    def _worth(self, ui: float) -> NDArray[np.float64]:
        """What a symbol is worth at ``ui`` over what it is worth at the best instant, shape ``(rails,)``."""
        model, best = self._pattern.model(ui), self._pattern.model(_ui(self._best))
        rails = range(self._scheme.rails)
        return np.asarray([max(abs(model.cursor(r)), 1e-9) / max(abs(best.cursor(r)), 1e-9) for r in rails])

    # -- the reading ---------------------------------------------------------------------------------------------------

    def reading(self, *, whole: bool = True) -> Reading:
        """Every figure that can be known from these sums; without ``whole`` less what takes long: equaliser, intervals, budget."""
        return self._whole if whole else self._short()

    def _short(self) -> Reading:
        opening = self.opening_pct()
        if opening is None:
            return Reading(symbols=self._sums.symbols)
        eyes = self._eyes()
        widths = [eye.width_ui for eye in eyes if eye.width_ui is not None]
        falls = self._falls
        read = {} if falls is None or opening <= 0 else falls.figures(self._settled.change, 0.0)
        early, late = (read.get(key) for key in _EARLY_LATE)
        return Reading(
            symbols=self._sums.symbols,
            eyes=eyes,
            width_ui=min(widths) if len(widths) == len(eyes) else None,
            timing_slope_pct_per_ui=read.get("timing_slope_pct_per_ui"),
            timing_tolerance_ui=None if early is None or late is None else (early, late),
            rise_20_80_ui=rise_time(self._sums),
            **self._numbers,
        )

    @cached_property
    def _whole(self) -> Reading:
        reading = self._short()
        if reading.opening_pct is None:
            return reading
        reading = replace(reading, budget=self.budget(), equaliser=self._equaliser())
        told = sentences(reading, self._evidence)
        opening_range, ber_range = (self.interval(key) or (None, None) for key in ("opening_pct", "ber"))
        return replace(
            reading,
            opening_low_pct=opening_range[0],
            opening_high_pct=opening_range[1],
            ber_low=ber_range[0],
            ber_high=ber_range[1],
            verdict=told[0] if told else None,
        )

    @cached_property
    def _numbers(self) -> dict[str, Any]:
        """The figures that small sums tell, by their names in a reading."""
        opening = float(self._openings.min())
        best = _ui(self._best)
        model = self._pattern.model(best)
        noise = self._link.noise + self._link.tone
        worst_eye = int(np.unravel_index(int(np.argmin(self._openings)), self._openings.shape)[1])
        half_height = opening / 100.0 * float(self._spacing[worst_eye]) / 2
        mer = self._mer_db(best)
        snr = 10 * math.log10(self._scheme.symbol_energy() / max(float(noise.sum()) + self._idle_noise(), 1e-12))
        crossing = crossings(self._sums)
        clock_ppm, jitter = self._clock()
        carrier, phase_rms = self._carrier()
        iq_gain, iq_skew = self._iq(model)
        periodic_ui, periodic_hz = self._periodic_jitter()
        return {
            "opening_pct": opening,
            "closure_db": 20 * math.log10(100.0 / opening) if opening > 0 else None,
            "noise_margin_db": 20 * math.log10(half_height / math.sqrt(max(float(noise.max()), 1e-12)))
            if opening > 0
            else None,
            "level_rms_pct": self._thickness_pct(best),
            "crossing_rms_ui": crossing.rms,
            "crossing_pp_ui": crossing.pp,
            "crossing_pattern_pp_ui": crossing.pattern_pp,
            "dcd_ui": self._duty(crossing.dcd),
            "level_linearity": self._linearity(),
            "periodic_jitter_ui": periodic_ui,
            "periodic_jitter_hz": periodic_hz,
            "best_instant_ui": self._loop_ui(_ui(self._best if self._corner is None else self._corner)),
            "crossing_random_rms_ui": crossing.random_rms,
            "q": self._q(best),
            "snr_db": snr if mer is not None else None,
            "mer_db": mer,
            "evm_pct": 100.0 * 10 ** (-mer / 20) if mer is not None else None,
            "ber": self._error_rate(),
            "opening_at_ber_pct": float(self._decisions.openings(self._nominal, self._context.target_ber).min()),
            "clock_ppm": clock_ppm,
            "jitter_rms_ui": jitter,
            "carrier_hz": carrier,
            "phase_rms_deg": phase_rms,
            "iq_gain_db": iq_gain,
            "iq_skew_deg": iq_skew,
            "dc_pct": self._dc_pct(),
        }

    @cached_property
    def estimates(self) -> dict[str, Estimate]:
        """Figures by their names in a reading with their errors; of those that small sums tell, and none for too few symbols."""
        parts = self._sums.apart()
        if not self.enough or len(parts) < LEAST_STRETCHES:
            return {}
        without = [Figures(self._sums.without(part), self._context, like=self) for part in parts]
        if not all(figures.enough for figures in without):
            return {}
        whole = Figures(self._sums.small(), self._context, like=self)
        falls = self._falls
        first = None if falls is None else whole._course(falls.places().tolist())
        numbers = [figures._smooth_numbers(falls, first, whole._best) for figures in (whole, *without)]
        found = jackknife(numbers[0], numbers[1:], [part.symbols for part in parts])
        if falls is not None:
            found = self._with_counts(found, falls)
        self._without_vain(found)
        reading = self._short()
        known = {key: getattr(reading, key) for key in found if key not in _EARLY_LATE}
        if reading.timing_tolerance_ui is not None:
            ends = zip(_EARLY_LATE, reading.timing_tolerance_ui, strict=True)
            known |= {key: value for key, value in ends if key in found}
        # what does not move at all is held by a plateau, of whose ends small sums do not tell
        return {
            key: found[key].about(value) for key, value in known.items() if value is not None and found[key].error > 0
        }

    def _duty(self, dcd: float | None) -> float | None:
        """Duty-cycle distortion about the middle of the levels as they are: the tracked one lags behind."""
        rise = rise_of(self._pattern.rise(), self._sums.phases) if dcd is not None else None
        if dcd is None or rise is None:
            return dcd
        # what the middle is off moves rising and falling crossings apart, by the transition's mean slope of 1.2 level units a rise
        return dcd - 2.0 * float(self._zero[0] / self._gain[0]) * rise / 1.2

    def _without_vain(self, found: dict[str, Estimate]) -> None:
        """Logarithms of what may as well be nothing have no error that can be told."""
        if "opening_pct" in found and found["opening_pct"].interval()[0] <= 0.0:
            for key in ("closure_db", "noise_margin_db"):
                found.pop(key, None)

    def _smooth_numbers(
        self, falls: Falls | None, first: NDArray[np.float64] | None, best: float
    ) -> dict[str, float | None]:
        """The figures that small sums tell, and those read off the opening's curve by how it changes at its ``falls``.

        ``first``: the curve there by the pattern model of all symbols, whose ``best`` instant it is.
        """
        numbers = self._numbers
        if self._sums.scheme.levels == 2 and self._sums.scheme.kind != "carrier":
            numbers = numbers | {"rise_20_80_ui": rise_of(self._pattern.rise(), self._sums.phases)}
        if falls is None or first is None:
            return numbers
        return numbers | falls.figures(self._course(falls.places().tolist()) - first, self._best - best)

    def _with_counts(self, found: dict[str, Estimate], falls: Falls) -> dict[str, Estimate]:
        """What is read off the curve as far as it is counted, with the chance of the counts in it."""
        chance = self._settled.chance
        still = falls.figures(np.zeros(chance.size), 0.0)
        moved = [falls.figures(row, 0.0) for row in np.diag(chance)]
        for key, value in still.items():
            if key in found and value is not None:
                others = [one[key] for one in moved]
                variance = sum((other - value) ** 2 for other in others if other is not None)
                found[key] = found[key].with_more(variance)
        return found

    def interval(self, key: str) -> tuple[float, float] | None:
        """The 95 % interval of the figure of that name; None where it cannot be told."""
        estimate = self.estimates.get(key)
        return None if estimate is None else estimate.interval()

    def intervals(self) -> dict[str, tuple[float, float]]:
        """The 95 % intervals of the figures by their names; without those that cannot be told."""
        return {key: estimate.interval() for key, estimate in self.estimates.items()}

    def remarks(self) -> tuple[str, ...]:
        """Sentences on second causes, at most two."""
        return sentences(self.reading(), self._evidence)[1:] if self.enough else ()

    def diagnosis(self) -> Diagnosis:
        """What stands behind the reading's budget and error rate; costs more than the reading does."""
        if not self.enough:
            return Diagnosis()
        best = _ui(self._best)
        rail, eye = np.unravel_index(int(np.argmin(self._openings)), self._openings.shape)
        circle = self._scheme.name == "8psk"  # whose rails are not decided one by one
        evidence, residual = self._evidence, self._sums.residual
        bent = self._compression()
        return Diagnosis(
            response=evidence.response,
            intervals=self.intervals(),
            over_time=over_time(self._errors_at, best),
            over_threshold=None if circle else self._decisions.over_threshold(int(rail), int(eye)),
            jitter=self._jitter_split(),
            equalisers=self._equalisers.trials(),
            best_thresholds=() if circle else tuple(self._decisions.best_thresholds().ravel().tolist()),
            fitting_roll_off=self._fitting_roll_off(),
            opening_pct=self.opening_pct(),
            opening_with_3db_more_pct=evidence.opening_with_3db_more_pct,
            constellation=Constellation(residual.constellation.copy(), residual.reach)
            if self._scheme.rails == 2
            else None,
            tone_hz=evidence.tone_hz,
            compression_db=bent[0] if bent is not None else None,
            am_pm_deg=bent[1] if bent is not None and self._scheme.rails == 2 else None,
            remarks=self.remarks(),
        )

    def _fitting_roll_off(self) -> float | None:
        """Roll-off that was sent, where it is not the receive filter's, mean of the rails that tell it."""
        if self._context.roll_off is None:
            return None
        each = [
            fitting_roll_off(*self._pattern.course(rail), self._context.roll_off) for rail in range(self._scheme.rails)
        ]
        known = [roll_off for roll_off in each if roll_off is not None]
        return float(np.mean(known)) if len(known) == len(each) else None

    def _opening_with(self, noise: float) -> float:
        """The least opening that there would be with ``noise`` times the noise variance, all else as it is."""
        change = self._link.with_noise(noise).opening(TAIL) - self._link.opening(TAIL)
        return float(self._openings.min()) + change

    def _jitter_split(self) -> JitterSplit | None:
        """Of the rail whose crossings are spread most at the target error rate."""
        random = crossings(self._sums).random_rms
        each = [split_jitter(counts, random, self._context.target_ber) for counts in self._sums.crossing_bins]
        return max((split for split in each if split is not None), key=lambda split: split.total_pp_ui, default=None)

    @cached_property
    def _equalisers(self) -> Equalisers:
        return Equalisers(self._sums.stretches, self._scheme, TAIL)

    def _equaliser(self) -> Equaliser | None:
        chosen = self._equalisers.chosen
        return None if chosen is None else Equaliser(chosen.taps.size, chosen.opening_pct)

    def _eyes(self) -> tuple[Eye, ...]:
        eyes = []
        for rail in range(self._scheme.rails):
            for eye, spacing in enumerate(self._spacing):
                opening = float(self._openings[rail, eye])
                ends = self._ends(rail, eye) if opening > 0 else None
                eyes.append(
                    Eye(
                        opening,
                        opening / 100.0 * float(spacing),
                        ends[1] - ends[0] if ends else None,
                        self._loop_ui(0.5 * (ends[0] + ends[1])) if ends else None,
                        float(0.5 * (self._nominal[eye] + self._nominal[eye + 1])),
                    )
                )
        return tuple(eyes)

    def _ends(self, rail: int, eye: int) -> tuple[float, float] | None:
        """Where one eye's curve falls to nothing, in UI about the decision instant."""
        ends = width(self._curves[rail, eye], self._best)
        if ends is None or self._falls is None or not np.isfinite(self._falls.at[0]).all():
            return ends
        early, late = -self._settled.each[rail, eye, 1:3] / self._falls.rate[0] / COLUMNS
        return ends[0] + float(early), ends[1] + float(late)

    def _loop_ui(self, ui: float) -> float:
        """From UI about the decision instant to UI about the loop's instant, its known lateness taken out."""
        return ui + self._context.offset_ui + self._context.late_bias_ui

    def image(self) -> EyeImage:
        """The eye for a painter."""
        column = min(max(round(self._best), 0), 2 * COLUMNS - 1)
        return EyeImage(
            ("",) if self._scheme.rails == 1 else ("I", "Q"),
            np.concatenate([self._sums.density()] * 2, axis=1),
            (np.arange(2 * COLUMNS) - COLUMNS) / COLUMNS,
            self._sums.rows.centres(),
            self._curves.min(axis=(0, 1)),
            np.ascontiguousarray(self._histogram[:, :, column]).astype(np.uint32),
            self._nominal,
            _ui(self._best) if self._sums.symbols else None,
            self._sums.drawn,
        )

    # -- levels and errors ---------------------------------------------------------------------------------------------

    def _deviations(self, ui: float) -> NDArray[np.float64]:
        """Standard deviation of each level's traces, level units, shape ``(rails, levels)``."""
        if self._mixtures is not None:
            rails = [
                math.hypot(m.sigma / m.gain, math.sqrt(isi))
                for m, isi in zip(self._mixtures, self._mixture_isi, strict=True)
            ]
            return np.repeat(np.asarray(rails)[:, None], self._scheme.levels, axis=1)
        squares = (self._sigmas / self._gain[:, None]) ** 2
        # as met at the decision instant, and what more or less there is of everything but the cursor at this one
        squares += (self._pattern.error(ui) - self._pattern.error(0.0))[:, None]
        return np.asarray(np.sqrt(np.maximum(squares, 1e-12)))

    def _thickness_pct(self, ui: float) -> float:
        """Rms thickness of the levels over the spacing."""
        return 100.0 * math.sqrt(float(np.mean(self._deviations(ui) ** 2))) / float(self._spacing.min())

    def _q(self, ui: float) -> float:
        """Distance of neighbouring levels over the sum of their deviations, the worst eye's."""
        deviations = self._deviations(ui)
        levels = np.asarray([self._levels(rail) for rail in range(self._scheme.rails)])
        return float((np.diff(levels, axis=1) / (deviations[:, 1:] + deviations[:, :-1])).min())

    def _mer_db(self, ui: float) -> float | None:
        """Symbol energy over the mean square of what is not the ideal point, after one least-squares gain for all rails.

        ISI counts, and so does an imbalance of I and Q; an offset does not.
        """
        energy = self._scheme.symbol_energy()
        if self._mixtures is None:
            errors = self._pattern.error(ui)
            worth = self._gain * self._pattern.own(ui) / np.maximum(self._pattern.own(0.0), 1e-9)
        else:
            errors = np.asarray([(mixture.sigma / mixture.gain) ** 2 for mixture in self._mixtures]) + self._mixture_isi
            worth = self._gain
        units = self._sums.unit_sums[0, : self._scheme.rails]
        relative = worth * units / np.mean(worth * units)
        error = float(np.sum(relative**2 * errors + (relative - 1.0) ** 2 * energy / self._scheme.rails))
        error += self._idle_noise()
        # above this the mixture's levels melt into one and no estimate without known data holds
        return 10 * math.log10(energy / error) if error / energy * float(self._nominal[-1]) ** 2 < 12.0 else None

    def _error_rate(self) -> float:
        """Semi-analytic error rate at the best instant, thresholds half-way between the levels."""
        if self._scheme.name == "8psk":
            return self._circle_errors(_ui(self._best))
        return self._decisions.error_rate(self._decisions.midpoints())

    def _errors_at(self, ui: float) -> float:
        """Error rate at ``ui`` of a receiver whose thresholds stay as they are at the best instant."""
        if self._scheme.name == "8psk":
            return self._circle_errors(ui)
        return self._link_at(ui).decisions(self._worth(ui)).error_rate(self._decisions.midpoints())

    def _circle_errors(self, ui: float) -> float:
        """Error rate of points on a circle at ``ui``."""
        model = self._pattern.model(ui)
        return phase_error_rate(self._scheme, self._isi(0, model, math.sqrt(float(self._noise(model).mean()))))

    @cached_property
    def _decisions(self) -> Decisions:
        """Where samples lie at the best instant."""
        return self._link.decisions(np.ones(self._scheme.rails))

    def _rough_error_rate(self) -> float:
        """Error rate at the decision instant with all that is not ISI taken for additive noise."""
        if self._scheme.name == "8psk":
            return self._circle_errors(0.0)
        model = self._pattern.model(0.0)
        sigmas = np.sqrt(self._noise(model))
        rails = range(self._scheme.rails)
        decisions = Decisions(
            np.asarray([self._levels(rail) for rail in rails]),
            tuple((self._isi(rail, model, float(sigmas[rail])),) * self._scheme.levels for rail in rails),
            self._scheme.bits,
        )
        return decisions.error_rate(decisions.midpoints())

    def _linearity(self) -> float | None:
        """Level separation mismatch ratio. Four levels: IEEE 802.3 Annex 120D.3.1.2 (from memory); more: least over mean spacing."""
        if self._scheme.levels < 3 or self._scheme.name == "8psk":
            return None
        worst = math.inf
        for level in self._means:
            if level.size == 4:
                middle = 0.5 * (level[0] + level[3])
                es1 = (level[1] - middle) / (level[0] - middle)
                es2 = (level[2] - middle) / (level[3] - middle)
                ratio = min(3 * es1, 3 * es2, 2 - 3 * es1, 2 - 3 * es2)
            else:
                gaps = np.diff(level)
                ratio = gaps.min() / gaps.mean()
            worst = min(worst, float(ratio))
        return worst

    # -- clock, carrier, I/Q -------------------------------------------------------------------------------------------

    def _clock(self) -> tuple[float | None, float | None]:
        """Clock error in ppm and jitter rms in UI."""
        line = self._sums.clock.line()
        if line is None:
            return None, None
        slope, _, rms = line
        # period = nominal * ratio * (1 + slope); the clock is its inverse
        period = self._context.sps_ratio * (1.0 + slope)
        return (1.0 / period - 1.0) * 1e6, rms

    def _periodic_jitter(self) -> tuple[float | None, float | None]:
        """Peak in UI and frequency in Hz of a line in the timing error."""
        line = periodic_line(self._sums.timing_power, self._sums.timing_blocks)
        if line is None:
            return None, None
        shown = 1.0
        if self._sums.phases < COLUMNS:
            slopes = self._pattern.slopes(0.0)
            each = [sample_response(slopes[rail, rail], CURSOR, line.frequency) for rail in range(len(slopes))]
            shown = float(np.mean(each))
        # what symbols hide from their samples nearly whole has no size that can be told
        peak = line.peak_ui / shown if shown > 0.2 else None
        return peak, line.frequency * self._context.symbol_rate_hz

    def _carrier(self) -> tuple[float | None, float | None]:
        """Carrier in Hz and rms of its phase in degrees."""
        base = self._context.carrier_base_hz
        if base is None:
            return None, None
        gain, zero = self._sums.unit_sums[:2, 0] / max(float(self._sums.unit_sums[2, 0]), 1.0)
        if self._context.frequency_rails:
            return base + float(zero + self._zero[0] * gain) * self._context.symbol_rate_hz, None
        line = self._sums.carrier.line()
        if line is None:
            return None, None
        slope, _, rms = line
        slope += self._sums.steered / max(float(self._sums.unit_sums[2, 0]), 1.0)
        return base + slope * self._context.symbol_rate_hz, 360.0 * rms

    def _dc_pct(self) -> float | None:
        """Offset of the middle of the levels over the rms point."""
        if self._context.frequency_rails:
            return None
        units = self._sums.unit_sums
        offsets = (units[1] / np.maximum(units[0], 1e-12))[: self._scheme.rails] + self._zero
        return 100.0 * float(np.hypot.reduce(offsets)) / math.sqrt(self._scheme.symbol_energy())

    def _iq(self, model: PatternModel) -> tuple[float | None, float | None]:
        """Gain in dB and skew in degrees of y_I = x_I, y_Q = g (x_Q cos s + x_I sin s), a common turn taken out.

        I and Q are as the carrier was recovered: a quarter turn swaps them, and with that both signs.
        """
        if self._scheme.rails == 1 or self._scheme.stagger:
            return None, None
        units = self._sums.unit_sums
        matrix = model.taps[:, :, CURSOR] * (units[0] / np.maximum(units[2], 1.0))[:, None]
        turn = math.atan2(-matrix[0, 1], matrix[1, 1])
        c, s = math.cos(turn), math.sin(turn)
        upright = np.array([[c, s], [-s, c]]) @ matrix
        gain = math.hypot(upright[1, 0], upright[1, 1]) / max(abs(upright[0, 0]), 1e-12)
        return 20 * math.log10(max(gain, 1e-12)), math.degrees(math.atan2(upright[1, 0], upright[1, 1]))


def _ui(column: float) -> float:
    """UI about the decision instant."""
    return (column - COLUMNS) / COLUMNS


def window_opening(sums: EyeSums, context: Context) -> float | None:
    """The least opening of a window, without the rest of its figures: counted near the decision instant where that is sound."""
    counts = sums.level_sums[:, :, 0]
    if sums.symbols < LEAST_SYMBOLS or counts.min() < 3:
        return None
    if sums.drawn / sums.symbols * counts.min() < FULL_CLASS:
        return Figures(sums, context).opening_pct()
    nominal = np.asarray(sums.scheme.rail_levels)
    gain, _ = level_units(sums.level_sums[:, :, 1] / counts, nominal)
    near = sums.histogram(range(COLUMNS - 4, COLUMNS + 5))
    least = opening_curves(near, sums.rows, gain, np.diff(nominal), TAIL).min(axis=(0, 1))
    if least.max() < 20.0:
        # decisions that may be wrong bend the tails: leave it to the model
        return Figures(sums, context).opening_pct()
    return peak(least)
