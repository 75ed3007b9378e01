"""From the sums of a window to its reading. Definitions stand beside the code that computes them."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp.eye import COLUMNS, CROSSING_BINS, EARLIEST, LAGS, EyeSums
from dsp.mixture import Mixture, Spread, fit_mixture, spread
from dsp.picture import EyeImage
from dsp.reading import Eye, Reading
from dsp.tracking import level_units

TAIL = 1e-3  # the share of a level's traces that the opening leaves outside
FULL_CLASS = 10.0 / TAIL  # symbols a level needs for its tail to be counted rather than modelled
LEAST_SYMBOLS = 100
_CURSOR = -EARLIEST  # index of lag 0


@dataclass(frozen=True, slots=True)
class Context:
    """What the figures need beside the sums: rates, the loop's place, and targets.

    ``clock_offset`` is the measured-from rate of the loop against the link's symbol rate given, as a fraction of the symbol period;
    ``late_bias_ui`` the timing loop's own known lateness; ``carrier_base_hz`` what was taken out before the loops.
    """

    symbol_rate_hz: float
    sps_ratio: float
    offset_ui: float
    late_bias_ui: float = 0.0
    carrier_base_hz: float | None = None
    frequency_rails: bool = False
    target_ber: float = 1e-6


@dataclass(frozen=True, slots=True)
class PatternModel:
    """Least-squares pattern response at one instant: ``wave = constant + sum(taps * symbols) + residual``.

    ``taps`` has shape ``(rails, rails, lags)`` (of rail, to rail's symbols), ``residual`` and ``constant`` ``(rails,)``.
    """

    taps: NDArray[np.float64]
    constant: NDArray[np.float64]
    residual: NDArray[np.float64]
    total: NDArray[np.float64]


class Figures:
    """Figures of one `EyeSums`; heavier ones are computed when `reading` asks."""

    def __init__(self, sums: EyeSums, context: Context) -> None:
        self._sums = sums
        self._context = context
        self._scheme = sums.scheme
        self._nominal = np.asarray(sums.scheme.rail_levels)
        self._spacing = np.diff(self._nominal)
        self._histogram = sums.histogram()
        self._column_ui = (np.arange(2 * COLUMNS) - COLUMNS) / COLUMNS
        self._gain, self._zero = self._scale_at_decision()
        self._models: dict[int, PatternModel] = {}
        self._curves = self._opening_curves()
        self._best = self._best_column()

    def _scale_at_decision(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        counts, totals, _ = np.moveaxis(self._sums.level_sums, 2, 0)
        means = np.where(counts > 0, totals / np.maximum(counts, 1), self._nominal)
        return level_units(means, self._nominal)

    # -- the pattern model ---------------------------------------------------------------------------------------------

    def model(self, phase: int) -> PatternModel:
        """The model at one of the wave's phases (0: the decision instant; negative: before it)."""
        if phase not in self._models:
            self._models[phase] = self._fit(phase)
        return self._models[phase]

    def _fit(self, phase: int) -> PatternModel:
        sums, rails = self._sums, self._scheme.rails
        n = sums.symbols
        k = sums.gram.shape[0]
        # an instant of the symbol before belongs to that symbol's regressors: shift the lags by one
        wrapped, back = phase % sums.phases, phase < 0
        gram = sums.gram + np.eye(k) * (1e-7 * np.trace(sums.gram) / k)
        cross = sums.cross[:, :, wrapped]
        solution = np.linalg.solve(gram, cross.T).T
        explained = 2 * np.einsum("rk,rk->r", solution, cross) - np.einsum("rk,kj,rj->r", solution, sums.gram, solution)
        total = sums.square[:, wrapped]
        residual = np.maximum(total - explained, 1e-9 * total) / max(n - k, 1)
        taps = solution[:, :-1].reshape(rails, rails, LAGS)
        if back:
            taps = np.concatenate((np.zeros((rails, rails, 1)), taps[:, :, :-1]), axis=2)
        mean = total / n
        return PatternModel(taps, solution[:, -1], residual, mean)

    def _column_phase(self, column: int) -> int:
        """The wave's phase nearest to a raster column."""
        return round((column - COLUMNS) * self._sums.phases / COLUMNS)

    def _isi(self, rail: int, phase: int, sigma: float) -> Spread:
        """Spread of one rail's samples about its level, by its own and the other rail's neighbours."""
        model = self.model(phase)
        taps = model.taps[rail].copy()
        taps[rail, _CURSOR] = 0.0
        shares = self._sums.level_sums[:, :, 0].sum(axis=0)
        return spread(taps.ravel() / self._gain[rail], self._nominal, shares / shares.sum(), sigma)

    # -- the opening ---------------------------------------------------------------------------------------------------

    def _opening_curves(self) -> NDArray[np.float64]:
        """Opening of every eye at every column, per cent of its nominal spacing, shape ``(rails, eyes, columns)``."""
        histogram = self._histogram
        counts = histogram.sum(axis=3)
        cumulative = np.cumsum(histogram, axis=3)
        low = _quantile(cumulative, histogram, counts, TAIL)
        high = _quantile(cumulative, histogram, counts, 1.0 - TAIL)
        rows = self._sums.rows
        gain = self._gain[:, None, None]
        zero = self._zero[:, None, None]
        low = ((low - rows.zero) / rows.scale - zero) / gain
        high = ((high - rows.zero) / rows.scale - zero) / gain
        return np.asarray(100.0 * (low[:, 1:] - high[:, :-1]) / self._spacing[None, :, None])

    def _best_column(self) -> float:
        """Best instant in columns: where the least opening is greatest; on a plateau, where levels are thinnest."""
        least = self._curves.min(axis=(0, 1))
        inside = slice(COLUMNS // 2, COLUMNS + COLUMNS // 2 + 1)
        section = least[inside]
        if not np.isfinite(section).any():
            return float(COLUMNS)
        top = int(np.nanargmax(section))
        tolerance = 100.0 * self._sums.rows.height / self._spacing.min()
        flat = section > section[top] - tolerance
        first, last = top, top
        while first > 0 and flat[first - 1]:
            first -= 1
        while last < section.size - 1 and flat[last + 1]:
            last += 1
        start = COLUMNS // 2
        if last - first < 2:
            return start + top + _vertex(section, top)
        columns = np.arange(first, last + 1)
        thin = -self._thickness(start + columns)
        peak = int(np.argmax(thin))
        level = np.flatnonzero(thin >= thin[peak] + 1e-4 * thin[peak])
        if level.size > 1 and np.all(np.diff(level) == 1) and level.size > 2:
            return start + first + float(level.mean())
        return start + first + peak + _vertex(thin, peak)

    def _thickness(self, columns: NDArray[np.int64]) -> NDArray[np.float64]:
        """Rms of what is not the cursor over the cursor, the worst rail's, at raster columns (between phases: linear)."""
        sums = self._sums
        n = sums.symbols
        phases = np.arange(-sums.phases // 2, sums.phases // 2 + 1)
        worst = np.zeros(phases.size)
        for rail in range(self._scheme.rails):
            row = rail * LAGS + _CURSOR
            for i, phase in enumerate(phases):
                wrapped = phase % sums.phases
                index = row - 1 if phase < 0 else row
                c = sums.cross[rail, index, wrapped] / n
                m = sums.cross[rail, -1, wrapped] / n
                a = sums.gram[index, -1] / n
                cov = c - m * a
                var_a = sums.gram[index, index] / n - a * a
                var_y = sums.square[rail, wrapped] / n - m * m
                rest = max(var_y - cov * cov / var_a, 0.0)
                worst[i] = max(worst[i], math.sqrt(rest) / max(abs(cov) / var_a, 1e-9))
        at = (columns - COLUMNS) * sums.phases / COLUMNS
        return np.interp(at, phases, worst)

    # -- the reading ---------------------------------------------------------------------------------------------------

    def opening_pct(self) -> float | None:
        """The least opening of all eyes at the best instant."""
        openings = self._openings_at_best()
        return None if openings is None else float(openings.min())

    def _openings_at_best(self) -> NDArray[np.float64] | None:
        """Per cent by rail and eye: counted where every level has enough traces for its tail, modelled otherwise."""
        sums = self._sums
        if sums.symbols < LEAST_SYMBOLS or sums.level_sums[:, :, 0].min() < 3:
            return None
        column = round(self._best)
        rails, eyes = self._scheme.rails, self._spacing.size
        if sums.drawn / max(sums.symbols, 1) * sums.level_sums[:, :, 0].min() >= FULL_CLASS:
            counted = self._curves
            left = min(int(self._best), 2 * COLUMNS - 2)
            part = self._best - left
            return np.asarray((1 - part) * counted[:, :, left] + part * counted[:, :, left + 1])
        return self._modelled_opening(column, TAIL).reshape(rails, eyes)

    def _modelled_opening(self, column: int, tail: float) -> NDArray[np.float64]:
        phase = self._column_phase(column)
        model = self.model(phase)
        result = np.empty((self._scheme.rails, self._spacing.size))
        for rail in range(self._scheme.rails):
            sigma = self._residual_sigma(rail, phase)
            reach = self._isi(rail, phase, sigma)
            low, high = reach.quantile(tail), -_mirrored(reach).quantile(tail)
            means = self._level_means(rail, model)
            result[rail] = 100.0 * (means[1:] + low - (means[:-1] + high)) / self._spacing
        return result

    def _level_means(self, rail: int, model: PatternModel) -> NDArray[np.float64]:
        """Level means in scaled units: as met at the decision instant, times what the cursor is worth at the model's."""
        counts, totals, _ = self._sums.level_sums[rail].T
        means = (totals / np.maximum(counts, 1) - self._zero[rail]) / self._gain[rail]
        cursor = model.taps[rail, rail, _CURSOR] / max(self.model(0).taps[rail, rail, _CURSOR], 1e-9)
        return np.asarray(means * cursor)

    def _residual_sigma(self, rail: int, phase: int) -> float:
        return math.sqrt(float(self.model(phase).residual[rail])) / float(self._gain[rail])

    def reading(self) -> Reading:
        """Every figure that can be known from these sums."""
        sums = self._sums
        openings = self._openings_at_best()
        if openings is None:
            return Reading(symbols=sums.symbols)
        opening = float(openings.min())
        worst_eye = int(np.unravel_index(int(np.argmin(openings)), openings.shape)[1])
        least = self._curves.min(axis=(0, 1))
        phase = self._column_phase(round(self._best))
        noise = self._noise(phase)
        sigma = float(np.sqrt(noise.max()))
        slope, tolerance = _slopes(least, self._best, opening)
        eyes = []
        for rail in range(self._scheme.rails):
            for eye in range(self._spacing.size):
                each = _width(self._curves[rail, eye], self._best)
                middle = 0.5 * (self._nominal[eye] + self._nominal[eye + 1])
                eyes.append(
                    Eye(
                        float(openings[rail, eye]),
                        float(openings[rail, eye] / 100.0 * self._spacing[eye]),
                        each[1] - each[0] if each else None,
                        self._loop_ui(0.5 * (each[0] + each[1])) if each else None,
                        float(middle),
                    )
                )
        widths = [eye.width_ui for eye in eyes]
        counts, totals, squares = np.moveaxis(sums.level_sums, 2, 0)
        means = totals / np.maximum(counts, 1)
        sigmas = np.sqrt(np.maximum(squares / np.maximum(counts, 1) - means**2, 0.0))
        q = np.diff(means, axis=1) / np.maximum(sigmas[:, 1:] + sigmas[:, :-1], 1e-9)
        thickness = float(np.sqrt(np.mean(sigmas**2))) / float(self._gain.mean()) / float(self._spacing.min())
        mer = self._mer_db(phase)
        energy = self._scheme.symbol_energy()
        total_noise = float(noise.sum()) if self._scheme.rails == 2 else float(noise[0]) + self._idle_noise()
        snr = 10 * math.log10(energy / total_noise) if mer is not None else None
        ber = self._ber(phase, noise)
        margin = 20 * math.log10(opening / 100.0 * float(self._spacing[worst_eye]) / 2 / sigma) if opening > 0 else None
        at_ber = float(self._modelled_opening(round(self._best), self._context.target_ber).min())
        return Reading(
            symbols=sums.symbols,
            opening_pct=opening,
            closure_db=20 * math.log10(100.0 / opening) if opening > 0 else None,
            eyes=tuple(eyes),
            width_ui=min((w for w in widths if w is not None), default=None) if None not in widths else None,
            best_instant_ui=self._loop_ui((self._best - COLUMNS) / COLUMNS),
            timing_slope_pct_per_ui=slope,
            timing_tolerance_ui=tolerance,
            noise_margin_db=margin,
            level_rms_pct=100.0 * thickness,
            **self._crossing_figures(),
            rise_20_80_ui=self._rise(),
            level_linearity=self._linearity(means),
            q=float(q.min()),
            snr_db=snr,
            mer_db=mer,
            evm_pct=100.0 * 10 ** (-mer / 20) if mer is not None else None,
            ber=ber,
            opening_at_ber_pct=at_ber,
            **self._clock_figures(),
            **self._carrier_figures(),
            **self._iq_figures(phase),
        )

    def _loop_ui(self, ui: float) -> float:
        """From UI about the decision instant to UI about the loop's instant, its known lateness taken out."""
        return ui + self._context.offset_ui + self._context.late_bias_ui

    def image(self) -> EyeImage:
        """The eye for a painter."""
        column = min(max(round(self._best), 0), 2 * COLUMNS - 1)
        return EyeImage(
            ("",) if self._scheme.rails == 1 else ("I", "Q"),
            self._histogram.sum(axis=1).astype(np.uint32),
            self._column_ui,
            self._sums.rows.centres(),
            self._curves.min(axis=(0, 1)),
            np.ascontiguousarray(self._histogram[:, :, column]).astype(np.uint32),
            self._nominal,
            (self._best - COLUMNS) / COLUMNS if self._sums.symbols else None,
            self._sums.drawn,
        )

    # -- noise, MER, error rate ----------------------------------------------------------------------------------------

    def _mixtures(self) -> list[Mixture] | None:
        """Decision-free fit of every rail at the best instant; None where decisions are right nearly always."""
        worst = 0.0
        first = []
        for rail in range(self._scheme.rails):
            counts, totals, squares = self._sums.level_sums[rail].T
            spread_ = math.sqrt(max(float(np.sum(squares - totals**2 / np.maximum(counts, 1)) / counts.sum()), 1e-12))
            first.append(Mixture(float(self._gain[rail]), float(self._zero[rail]), spread_))
            worst = max(worst, spread_ / float(self._gain[rail]) / float(self._spacing.min()))
        if worst < 0.16:  # thresholds more than 3 sigma away
            return None
        column = round(self._best)
        centres = self._sums.rows.centres()
        return [
            fit_mixture(centres, self._histogram[rail, :, column].sum(axis=0), self._nominal, first[rail])
            for rail in range(self._scheme.rails)
        ]

    def _noise(self, phase: int) -> NDArray[np.float64]:
        """Additive noise variance by rail, level units squared, ISI not counted, wrong decisions allowed for."""
        model = self.model(phase)
        mixtures = self._mixtures()
        variance = np.empty(self._scheme.rails)
        for rail in range(self._scheme.rails):
            cursor = float(model.taps[rail, rail, _CURSOR])
            if mixtures is None:
                variance[rail] = float(model.residual[rail]) / cursor**2
                continue
            mixture = mixtures[rail]
            isi = self._isi_variance(rail, model) / cursor**2
            variance[rail] = max((mixture.sigma / mixture.gain) ** 2 - isi, 0.1 * (mixture.sigma / mixture.gain) ** 2)
        return variance

    def _isi_variance(self, rail: int, model: PatternModel) -> float:
        """Of one rail by its neighbours and the other rail, in the wave's unit squared."""
        taps = model.taps[rail].copy()
        taps[rail, _CURSOR] = 0.0
        error = (
            float(model.residual[rail]) / max(self._sums.symbols, 1) * taps.size
        )  # what noise alone puts into the taps
        return max(float(np.sum(taps**2)) * self._rail_energy() - error, 0.0)

    def _rail_energy(self) -> float:
        return self._scheme.symbol_energy() / self._scheme.rails

    def _idle_noise(self) -> float:
        """Noise of the rail that a one-railed carrier leaves idle, level units squared; 0 for real links."""
        if self._scheme.kind != "carrier":
            return 0.0
        return self._sums.across / max(self._sums.symbols, 1) / float(self._gain[0]) ** 2

    def _mer_db(self, phase: int) -> float | None:
        """Symbol energy over the mean square of what is not the ideal point, after least-squares gain; ISI included."""
        sums, rails = self._sums, self._scheme.rails
        mixtures = self._mixtures()
        energy = self._scheme.symbol_energy()
        error = self._idle_noise()
        wrapped, back = phase % sums.phases, phase < 0
        for rail in range(rails):
            if mixtures is not None:
                error += (mixtures[rail].sigma / mixtures[rail].gain) ** 2
                continue
            index = rail * LAGS + _CURSOR - (1 if back else 0)
            n = sums.symbols
            a, m = sums.gram[index, -1] / n, sums.cross[rail, -1, wrapped] / n
            cov = sums.cross[rail, index, wrapped] / n - m * a
            var_a = sums.gram[index, index] / n - a * a
            var_y = sums.square[rail, wrapped] / n - m * m
            error += max(var_y - cov * cov / var_a, 1e-9 * var_y) / (cov / var_a) ** 2
        mer = 10 * math.log10(energy / error)
        # below this the mixture's levels melt into one and no estimate without known data holds
        return mer if error / energy * (self._nominal[-1] ** 2) < 12.0 else None

    def _ber(self, phase: int, noise: NDArray[np.float64]) -> float | None:
        """Semi-analytic: noise-free distances to the thresholds by the pattern model, Gaussian tails, Gray mapping."""
        scheme = self._scheme
        if scheme.name == "8psk":
            radius = math.sqrt(scheme.symbol_energy())
            sigma = math.sqrt(float(noise.mean()))
            reach = self._isi(0, phase, sigma)
            return min(2.0 / scheme.bits * reach.below(-radius * math.sin(math.pi / 8)), 0.5)
        model = self.model(phase)
        bits = 0.0
        for rail in range(scheme.rails):
            reach = self._isi(rail, phase, math.sqrt(float(noise[rail])))
            mirrored = _mirrored(reach)
            means = self._level_means(rail, model)
            thresholds = 0.5 * (means[1:] + means[:-1])
            for m, mean in enumerate(means):
                # each threshold crossed turns one bit of a Gray code
                for t, threshold in enumerate(thresholds):
                    tail = mirrored.below(mean - threshold) if t >= m else reach.below(threshold - mean)
                    bits += tail / scheme.levels
        return min(bits / scheme.bits, 0.5)

    # -- crossings, levels, clock, carrier -----------------------------------------------------------------------------

    def _crossing_figures(self) -> dict[str, float | None]:
        nothing: dict[str, float | None] = dict.fromkeys(
            ("crossing_rms_ui", "crossing_pp_ui", "crossing_pattern_pp_ui", "crossing_random_rms_ui", "dcd_ui")
        )
        worst = dict(nothing)
        for rail in range(self._scheme.rails):
            groups = self._sums.crossing_groups[rail]
            total = float(groups[:, 0].sum())
            if total < 50:
                return nothing
            mean = float(groups[:, 1].sum()) / total
            rms = math.sqrt(max(float(groups[:, 2].sum()) / total - mean**2, 0.0))
            bins = self._sums.crossing_bins[rail]
            cumulative = np.cumsum(bins)[None]
            low, high = (float(_quantile(cumulative, bins[None], cumulative[:, -1], s)[0]) for s in (TAIL, 1 - TAIL))
            pattern, random = _pattern_part(groups, mean)
            rail_figures: dict[str, float | None] = {
                "crossing_rms_ui": rms,
                "crossing_pp_ui": (high - low) / CROSSING_BINS,
                "crossing_pattern_pp_ui": pattern,
                "crossing_random_rms_ui": random,
            }
            for name, value in rail_figures.items():
                if value is not None:
                    worst[name] = max(worst[name] or 0.0, value)
        if self._scheme.levels == 2 and self._scheme.kind != "carrier":
            (falls, fall_sum), (rises, rise_sum) = self._sums.crossing_edges[0]
            if min(falls, rises) > 10:
                worst["dcd_ui"] = float(fall_sum / falls - rise_sum / rises)
        return worst

    def _rise(self) -> float | None:
        """From 20 to 80 % of the mean transition, mean of rising and falling; two-level baseband only."""
        if self._scheme.levels != 2 or self._scheme.kind == "carrier":
            return None
        pairs = self._sums.left[0].reshape(COLUMNS, 2, 2, -1).astype(np.float64)
        if min(pairs[0, 0, 1].sum(), pairs[0, 1, 0].sum()) < 10:
            return None
        centres = self._sums.rows.centres()
        times = []
        for left, right, sign in ((0, 1, 1.0), (1, 0, -1.0)):
            trace = sign * (pairs[:, left, right] @ centres) / pairs[:, left, right].sum(axis=1)
            low, high = trace.min(), trace.max()
            at = []
            for share in (0.2, 0.8):
                level = low + share * (high - low)
                index = int(np.argmax(trace > level))
                if index == 0:
                    return None
                at.append(index - 1 + (level - trace[index - 1]) / (trace[index] - trace[index - 1]))
            times.append((at[1] - at[0]) / COLUMNS)
        return float(np.mean(times))

    def _linearity(self, means: NDArray[np.float64]) -> float | None:
        """Level separation mismatch ratio. Four levels: IEEE 802.3 Annex 120D.3.1.2 (from memory); more: least over mean spacing."""
        if self._scheme.levels < 3 or self._scheme.name == "8psk":
            return None
        worst = math.inf
        for level in means:
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

    def _clock_figures(self) -> dict[str, float | None]:
        line = self._sums.clock.line()
        if line is None:
            return {}
        slope, _, rms = line
        # period = nominal * ratio * (1 + slope); the clock is its inverse
        period = self._context.sps_ratio * (1.0 + slope)
        return {"clock_ppm": (1.0 / period - 1.0) * 1e6, "jitter_rms_ui": rms}

    def _carrier_figures(self) -> dict[str, float | None]:
        base = self._context.carrier_base_hz
        if base is None:
            return {}
        units = self._sums.unit_sums
        if self._context.frequency_rails:
            middle = units[1, 0] / max(units[2, 0], 1) + self._zero[0] * units[0, 0] / max(units[2, 0], 1)
            return {"carrier_hz": base + float(middle) * self._context.symbol_rate_hz}
        line = self._sums.carrier.line()
        if line is None:
            return {}
        slope, _, rms = line
        return {"carrier_hz": base + slope * self._context.symbol_rate_hz, "phase_rms_deg": 360.0 * rms}

    def _iq_figures(self, phase: int) -> dict[str, float | None]:
        """Gain and skew of y_I = x_I, y_Q = g (x_Q cos s + x_I sin s), a common turn taken out; offset over the rms point."""
        units = self._sums.unit_sums
        rms = math.sqrt(self._scheme.symbol_energy())
        if self._context.frequency_rails:
            return {}
        offsets = (units[1] / np.maximum(units[0], 1e-12))[: self._scheme.rails] + self._zero
        figures: dict[str, float | None] = {"dc_pct": 100.0 * float(np.hypot.reduce(offsets)) / rms}
        if self._scheme.rails == 2 and self._scheme.stagger == 0.0:
            weight = units[0] / np.maximum(units[2], 1)
            matrix = self.model(phase).taps[:, :, _CURSOR] * weight[:, None]
            turn = math.atan2(-matrix[0, 1], matrix[1, 1])
            c, s = math.cos(turn), math.sin(turn)
            upright = np.array([[c, s], [-s, c]]) @ matrix
            gain = math.hypot(upright[1, 0], upright[1, 1]) / max(abs(upright[0, 0]), 1e-12)
            figures["iq_gain_db"] = 20 * math.log10(max(gain, 1e-12))
            figures["iq_skew_deg"] = math.degrees(math.atan2(upright[1, 0], upright[1, 1]))
        return figures


def window_opening(sums: EyeSums, context: Context) -> float | None:
    """The least opening of a window, without the rest of its figures: counted near the decision instant where that is sound."""
    scheme = sums.scheme
    counts = sums.level_sums[:, :, 0]
    if sums.symbols < LEAST_SYMBOLS or counts.min() < 3:
        return None
    if sums.drawn / sums.symbols * counts.min() < FULL_CLASS:
        return Figures(sums, context).opening_pct()
    totals = sums.level_sums[:, :, 1]
    nominal = np.asarray(scheme.rail_levels)
    gain, _ = level_units(totals / counts, nominal)
    near = sums.histogram(range(COLUMNS - 4, COLUMNS + 5))
    per_class = near.sum(axis=3)
    cumulative = np.cumsum(near, axis=3)
    low = _quantile(cumulative, near, per_class, TAIL)
    high = _quantile(cumulative, near, per_class, 1.0 - TAIL)
    height = (low[:, 1:] - high[:, :-1]) / sums.rows.scale / gain[:, None, None]
    return float(np.max(np.min(100.0 * height / np.diff(nominal)[None, :, None], axis=(0, 1))))


def _mirrored(reach: Spread) -> Spread:
    return Spread(-reach.at[::-1], reach.share[::-1], reach.sigma)


def _quantile(
    cumulative: NDArray[np.int64], histogram: NDArray[np.int64], counts: NDArray[np.int64], share: float
) -> NDArray[np.float64]:
    """Row position below which a share lies, linear within its row; NaN where there are no counts. Last axis: rows."""
    wanted = share * counts
    index = np.minimum(np.sum(cumulative < wanted[..., None], axis=-1), histogram.shape[-1] - 1)
    here = np.take_along_axis(histogram, index[..., None], axis=-1)[..., 0]
    below = np.take_along_axis(cumulative, index[..., None], axis=-1)[..., 0] - here
    part = (wanted - below) / np.maximum(here, 1)
    return np.where(counts > 0, index + np.clip(part, 0.0, 1.0), np.nan)


def _vertex(values: NDArray[np.float64], top: int) -> float:
    """Offset of a parabola's crest from the greatest of three neighbouring values."""
    if not 0 < top < values.size - 1:
        return 0.0
    left, middle, right = values[top - 1 : top + 2]
    bend = left - 2 * middle + right
    return float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend < 0 else 0.0


def _width(curve: NDArray[np.float64], best: float) -> tuple[float, float] | None:
    """UI, about the decision instant, between which the curve is above 0 around ``best`` (columns); at most one UI; None if closed."""
    start = round(best)
    if not curve[start] > 0:
        return None
    left = start
    while left > 0 and curve[left - 1] > 0 and start - left < COLUMNS:
        left -= 1
    right = start
    while right < curve.size - 1 and curve[right + 1] > 0 and right - start < COLUMNS:
        right += 1
    first = left - curve[left] / (curve[left] - curve[left - 1]) if left > 0 and curve[left - 1] <= 0 else float(left)
    last = (
        right + curve[right] / (curve[right] - curve[right + 1])
        if right + 1 < curve.size and curve[right + 1] <= 0
        else float(right)
    )
    if last - first > COLUMNS:
        middle = 0.5 * (first + last)
        first, last = middle - COLUMNS / 2, middle + COLUMNS / 2
    return (float(first) - COLUMNS) / COLUMNS, (float(last) - COLUMNS) / COLUMNS


def _fall(curve: NDArray[np.float64], best: float, level: float, step: int) -> float | None:
    """Distance in UI from ``best`` to where the curve has fallen to ``level``, going by ``step``; None if it never does."""
    at = round(best)
    while 0 <= at + step < curve.size:
        if curve[at + step] <= level:
            part = (curve[at] - level) / max(curve[at] - curve[at + step], 1e-12)
            return float(abs(at + step * min(max(part, 0.0), 1.0) - best)) / COLUMNS
        at += step
    return None


def _slopes(curve: NDArray[np.float64], best: float, opening: float) -> tuple[float | None, tuple[float, float] | None]:
    """Timing slope (the steeper mean rate down to half the opening) and tolerance (noise margin 1 dB down)."""
    if opening <= 0:
        return None, None
    top = min(float(curve[round(best)]), opening) if curve[round(best)] > 0 else opening
    halves = [_fall(curve, best, 0.5 * top, step) for step in (-1, 1)]
    rates = [0.5 * top / distance for distance in halves if distance]
    decibel = [_fall(curve, best, top * 10 ** (-1 / 20), step) for step in (-1, 1)]
    early, late = decibel
    tolerance = (-early, late) if early is not None and late is not None else None
    return (max(rates) if rates else None), tolerance


def _pattern_part(groups: NDArray[np.float64], mean: float) -> tuple[float | None, float | None]:
    """Spread of the pattern groups' mean crossing times (0.1 to 99.9 % of the crossings), and the rms within groups.

    Group means carry noise of their own: each is drawn towards the common mean by what an analysis of variance makes of it.
    """
    some = groups[:, 0] >= 2
    n, total, square = groups[some].T
    count = n.sum()
    if count <= some.sum():
        return None, None
    means = total / n
    within = max(float(np.sum(square - n * means**2)), 0.0) / (count - n.size)
    between = 0.0
    if n.size > 1:
        spare = (count - np.sum(n**2) / count) / (n.size - 1)
        between = max((float(np.sum(n * (means - mean) ** 2)) / (n.size - 1) - within) / spare, 0.0)
    shrunk = mean + (means - mean) * (between / (between + within / n) if between > 0 else 0.0)
    order = np.argsort(shrunk)
    share = np.cumsum(n[order]) / count
    low = shrunk[order][int(np.searchsorted(share, TAIL))]
    high = shrunk[order][min(int(np.searchsorted(share, 1 - TAIL)), n.size - 1)]
    return float(high - low), math.sqrt(within)
