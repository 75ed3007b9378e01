"""What closes the eye: how much of the opening each cause takes, by a model of the link with and without it."""

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from dsp.error_rate import Decisions, Modulated, joined, spread_given
from dsp.eye import LAGS
from dsp.limiter import POINT_SHARES, Bend, Limiter
from dsp.link import Scheme
from dsp.mixture import Spread, spread
from dsp.pattern import CURSOR, Pattern
from dsp.reading import Budget
from dsp.residual import Split, pattern_around
from dsp.tracking import Tracker

_PATTERNS_LEFT = (
    0.1  # share of the data's error that a timing detector which cancels patterns still follows, as measured
)
_UNTOLD = 0.03  # of a bend's power, what the wave that is put together from decisions does not tell, as measured
_TONE_POINTS = 24  # places that stand for a sinusoid's amplitudes


@dataclass(frozen=True, slots=True)
class Answers:
    """What the receiver's loops make of each unit of variance that data put beside a symbol, which no noise is to be blamed for.

    ``timing`` in UI squared, ``turn`` in radians squared, ``level`` (of the level unit's wander) in level units squared.
    """

    timing: float
    turn: float
    level: float


@dataclass(frozen=True, slots=True)
class LinkModel:
    """A link at one instant, all in level units of each rail.

    Attributes
    ----------
    levels
        Means of the levels, ``(rails, levels)``; ``compressed``: what a limiter makes of the nominal ones.
    taps, late, early
        Response and its slopes after and before the instant, of cursor 1, ``(rails, rails * lags)``.
    additive
        Variance of noise that no data changes, each symbol's own jitter included, ``(rails,)``.
    noise, tone
        Variances of the noise in ``additive`` and of an interfering tone beside it, ``(rails,)``.
    common, turn
        Variances of timing jitter shared by neighbours, UI squared, and of phase jitter, radians squared.
    deviations
        What patterns of a rail's own symbols add beyond the response where there is no telling why, ``(rails, patterns)``.
    answers
        What of the jitter and noise comes with ISI, imbalance and bend.
    limiter, bend
        A bend of the amplitude and what it does to this link; None if there is none.
    uneven
        Variance of each level's samples beyond the mean of all, ``(rails, levels)``.
    gains, cursors
        One level unit of each rail against the mean of all, and in the wave's level units, ``(rails,)``.
    """

    scheme: Scheme
    shares: NDArray[np.float64]
    levels: NDArray[np.float64]
    compressed: NDArray[np.float64]
    taps: NDArray[np.float64]
    late: NDArray[np.float64]
    early: NDArray[np.float64]
    additive: NDArray[np.float64]
    noise: NDArray[np.float64]
    tone: NDArray[np.float64]
    common: float
    turn: float
    answers: Answers
    deviations: NDArray[np.float64]
    uneven: NDArray[np.float64]
    gains: NDArray[np.float64]
    cursors: NDArray[np.float64]
    limiter: Limiter | None
    bend: Bend | None

    def own(self, rail: int) -> int:
        """Place of a rail's own symbol among the taps."""
        return rail * LAGS + CURSOR

    def opening(self, tail: float) -> float:
        """Least opening of all eyes in per cent when a share ``tail`` of each level's traces may lie outside."""
        return float(self.openings(tail).min())

    def openings(self, tail: float) -> NDArray[np.float64]:
        """The same of every eye, shape ``(rails, levels - 1)``."""
        nominal = np.asarray(self.scheme.rail_levels)
        result = np.empty((self.scheme.rails, nominal.size - 1))
        for rail in range(self.scheme.rails):
            reach = self._reach(rail)
            low = [one.quantile(tail) for one in reach]
            high = [-one.mirrored().quantile(tail) for one in reach]
            if len(reach) == 1:
                low, high = low * nominal.size, high * nominal.size
            result[rail] = self.levels[rail, 1:] + low[1:] - self.levels[rail, :-1] - high[:-1]
        return 100.0 * result / np.diff(nominal)

    def decisions(self, worth: NDArray[np.float64]) -> Decisions:
        """Where samples lie for whoever decides in other level units: of these, ``worth`` ``(rails,)`` is one."""
        rails = range(self.scheme.rails)
        spreads = []
        for rail in rails:
            reach = [one.scaled(float(worth[rail])) for one in self._reach(rail)]
            spreads.append(tuple(reach * (self.scheme.levels // len(reach))))
        nominal = np.asarray(self.scheme.rail_levels)
        return Decisions(self.levels + nominal * (worth[:, None] - 1.0), tuple(spreads), self.scheme.bits)

    def _reach(self, rail: int) -> list[Spread]:
        """How each level's samples are spread about its mean; one for all where that is the same."""
        reach = self._even_reach(rail)
        if self.bend is not None or not self.uneven[rail].any():
            return reach
        each = reach * (self.scheme.levels // len(reach))
        return [one.wider(float(more)) for one, more in zip(each, self.uneven[rail], strict=True)]

    def _even_reach(self, rail: int) -> list[Spread]:
        """The same with noise that is alike at all levels."""
        nominal = np.asarray(self.scheme.rail_levels)
        taps, own = self.taps[rail], self.own(rail)
        jitter = (
            Modulated(0.5 * self.common, self.late[rail]),
            Modulated(0.5 * self.common, self.early[rail]),
            Modulated(self.turn, self._other(rail)),
        )
        if not self.deviations[rail].any():
            level = float(np.sqrt(self.shares @ nominal**2))
            used = tuple(part for part in jitter if part.variance > 0 and part.taps.any())
            whole = spread_given(level, own, taps, max(float(self.additive[rail]), 1e-8), used, nominal, self.shares)
            whole = _with_tone(whole, float(self.tone[rail]))
            if self.bend is None:
                return [whole]
            return [
                _bent(whole, float(slope), points / self.cursors[rail])
                for slope, points in zip(self.bend.slopes[rail], self.bend.points[rail], strict=True)
            ]
        energy = float(self.shares @ nominal**2)
        variance = (
            float(self.additive[rail]) + sum(part.variance * float(part.taps @ part.taps) for part in jitter) * energy
        )
        around = pattern_around(nominal.size)
        symbols = np.indices((nominal.size,) * len(around)).reshape(len(around), -1)
        places = [own - offset for offset in around]
        others = taps.copy()
        others[places] = 0.0
        rest = _with_tone(spread(others, nominal, self.shares, math.sqrt(max(variance, 1e-8))), float(self.tone[rail]))
        middle = around.index(0)
        each = [taps[place] if place != own else 0.0 for place in places]
        shift = np.asarray(each) @ nominal[symbols] + self.deviations[rail]
        share = np.prod(self.shares[symbols], axis=0)
        result = []
        for level in range(nominal.size):
            inside = symbols[middle] == level
            about = float(share[inside] @ self.deviations[rail, inside]) / float(share[inside].sum())
            sigma = np.full(int(inside.sum()), float(np.max(rest.sigma)))
            result.append(joined(shift[inside] - about, share[inside] / share[inside].sum(), sigma, rest))
        return result

    def _other(self, rail: int) -> NDArray[np.float64]:
        """What the other rail shows at this rail's instant, as weights of all symbols."""
        if self.scheme.rails == 1:
            return np.zeros(self.taps.shape[1])
        return np.asarray(self.taps[1 - rail] * float(self.gains[1 - rail] / self.gains[rail]))

    def with_noise(self, factor: float) -> "LinkModel":
        """``factor`` times the variance of noise and tone, jitter as it is."""
        return replace(
            self,
            additive=self.additive - (1.0 - factor) * self.noise,
            noise=factor * self.noise,
            tone=factor * self.tone,
        )

    # -- without one cause ---------------------------------------------------------------------------------------------

    def _disturbed(self) -> tuple[float, float, NDArray[np.float64]]:
        """What the loops would make of the data: jitter in time and phase, and the level unit's wander with what a bend is not told of."""
        others = self.taps.copy()
        for rail in range(self.scheme.rails):
            others[rail, self.own(rail)] = 0.0
        energy = float(self.shares @ np.square(self.scheme.rail_levels))
        bent = np.zeros(self.scheme.rails) if self.bend is None else self.bend.variance / self.cursors**2
        beside = energy * np.sum(others**2, axis=1) + bent
        mean = float(beside.mean())
        return self.answers.timing * mean, self.answers.turn * mean, self.answers.level * beside + _UNTOLD * bent

    def answered(self) -> tuple[float, float, NDArray[np.float64]]:
        """What of ``common``, ``turn`` and ``noise`` comes with the data."""
        timing, turn, level = self._disturbed()
        return min(self.common, timing), min(self.turn, turn), np.minimum(self.noise, level)

    def _without_answers(self, less: "LinkModel") -> "LinkModel":
        """``less``, which is this link without a cause, also without what came with that."""
        had, still = self._disturbed(), less._disturbed()
        common, turn, level = self.answered()
        gone = level * (1.0 - np.minimum(still[2] / np.maximum(had[2], 1e-18), 1.0))
        return replace(
            less,
            common=less.common - common * (1.0 - min(still[0] / max(had[0], 1e-18), 1.0)),
            turn=less.turn - turn * (1.0 - min(still[1] / max(had[1], 1e-18), 1.0)),
            additive=np.maximum(less.additive - gone, 0.0),
            noise=np.maximum(less.noise - gone, 0.0),
        )

    def without_isi(self) -> "LinkModel":
        """Every symbol by itself."""
        places = np.arange(self.scheme.rails) * LAGS + CURSOR
        alone = np.zeros_like(self.taps)
        alone[:, places] = self.taps[:, places]
        quiet = replace(self, deviations=np.zeros_like(self.deviations))
        if self.limiter is None:
            return self._without_answers(replace(quiet, taps=alone))
        matrix = (self.taps * self.cursors[:, None])[:, places]
        return self._without_answers(quiet._meeting(alone, self.limiter.pulses(matrix)))

    def without_random(self) -> "LinkModel":
        """No noise, no tone, no jitter but what other causes make."""
        nothing = np.zeros_like(self.additive)
        common, turn, level = self.answered()
        return replace(
            self,
            additive=level,
            noise=level,
            tone=nothing,
            uneven=np.zeros_like(self.uneven),
            common=common,
            turn=turn,
        )

    def without_tone(self) -> "LinkModel":
        """No interfering tone."""
        return replace(self, tone=np.zeros_like(self.tone))

    def without_imbalance(self) -> "LinkModel":
        """Rails of the same gain, a quarter turn apart."""
        places = np.arange(self.scheme.rails) * LAGS + CURSOR
        met = self.taps * self.gains[:, None]
        mixed = met[:, places]
        # rails that were mixed keep their power
        unit = float(np.linalg.norm(mixed)) / math.sqrt(2.0)
        undo = np.asarray(np.linalg.inv(mixed), dtype=np.float64)
        sent = _unmixed(met, undo, first=True)
        at_first = _widely(sent) <= _widely(_unmixed(met, undo, first=False))
        taps, late, early = (
            _unmixed(part * self.gains[:, None], undo, first=at_first) for part in (self.taps, self.late, self.early)
        )
        scale = np.square(self.gains / unit)
        even = replace(
            self,
            late=late,
            early=early,
            additive=self.additive * scale,
            noise=self.noise * scale,
            tone=self.tone * scale,
            gains=np.ones_like(self.gains),
        )
        if self.limiter is None:
            return self._without_answers(replace(even, taps=taps))
        mixed = (self.taps * self.cursors[:, None])[:, places]
        raw = _unmixed(self.limiter.raw, np.asarray(np.linalg.inv(mixed), dtype=np.float64), first=at_first)
        raw = raw * float(np.linalg.norm(mixed)) / math.sqrt(2.0)
        return self._without_answers(even._meeting(taps, raw))

    def _meeting(self, taps: NDArray[np.float64], raw: NDArray[np.float64] | None) -> "LinkModel":
        """The link of other ``taps``, whose wave ahead of the filter has the response ``raw``."""
        if self.limiter is None or self.bend is None or raw is None:
            return replace(self, taps=taps)
        bend = self.limiter.bend(taps * self.cursors[:, None], raw)
        levels = self.levels + (bend.means - self.bend.means) / self.cursors[:, None]
        return replace(self, taps=taps, bend=bend, levels=levels, compressed=self.compressed + levels - self.levels)

    def without_clipping(self) -> "LinkModel":
        """Levels as the limiter met them, and none of what it made of patterns."""
        nominal = np.asarray(self.scheme.rail_levels)
        even = replace(
            self,
            levels=self.levels - self.compressed + nominal,
            compressed=np.broadcast_to(nominal, self.compressed.shape),
            limiter=None,
            bend=None,
            uneven=np.zeros_like(self.uneven),
        )
        if self.bend is None:
            return self._without_answers(even)
        clean = self.taps - self.bend.taps / self.cursors[:, None]
        for rail in range(self.scheme.rails):
            clean[rail] /= max(float(clean[rail, self.own(rail)]), 0.2)
        return self._without_answers(replace(even, taps=clean))

    def with_even_levels(self) -> "LinkModel":
        """Levels uneven by no more than a limiter makes them."""
        return replace(self, levels=self.compressed)


def link_model(
    scheme: Scheme,
    pattern: Pattern,
    ui: float,
    *,
    shares: NDArray[np.float64],
    levels: NDArray[np.float64],
    noise: NDArray[np.float64],
    uneven: NDArray[np.float64],
    units: NDArray[np.float64],
    split: Split | None,
    limiter: Limiter | None,
    bend: Bend | None,
    symbols: int,
    timing_bandwidth: float,
    carrier_bandwidth: float,
) -> LinkModel:
    """The link at ``ui`` from its pattern response.

    ``shares`` ``(levels,)``: how often each level is sent; ``levels`` ``(rails, levels)`` and ``noise`` ``(rails,)``, all that no linear
    response explains, in level units; ``uneven`` ``(rails, levels)`` what a level has of it beyond the others; ``units`` ``(rails,)``:
    one level unit of each rail in the signal's own unit; ``bend``: what ``limiter`` does, None: to be told of this link;
    ``symbols`` there are; ``timing_bandwidth`` and ``carrier_bandwidth``: BnT of the loops, 0 where there is none.
    """
    rails = scheme.rails
    model = pattern.model(ui)
    cursors = np.asarray([max(abs(model.cursor(rail)), 1e-9) for rail in range(rails)])
    taps, late, early = (part.reshape(rails, -1) / cursors[:, None] for part in (model.taps, *pattern.flanks(ui)))
    gains = units * cursors
    compressed = compressed_levels(levels, scheme)
    deviations, tone, common, turn = np.zeros((rails, 1)), np.zeros(rails), 0.0, 0.0
    if limiter is not None:
        bend = limiter.bend(taps * cursors[:, None]) if bend is None else bend
        noise = noise * limiter.rest / (limiter.rest + bend.variance)
        compressed = np.asarray(scheme.rail_levels) + bend.means / cursors[:, None]
    elif split is not None and split.deviations.any():
        deviations = split.deviations - _level_means(split.deviations, scheme)
        noise = noise * split.random / (split.random + np.mean(deviations**2, axis=1))
        deviations /= cursors[:, None]
    additive = plain = noise
    if split is not None:
        random = np.maximum(split.random, 1e-18)
        common, turn = split.common, split.turn
        if split.tone is not None:
            tone = noise * np.minimum(split.tone.variance / rails / random, 0.98)
        shared = split.timing * common / max(common + split.single, 1e-18)
        additive = np.maximum(noise * (1.0 - (shared + split.phase) / random) - tone, 0.01 * noise)
        plain = np.clip(noise * (1.0 - (split.timing + split.phase) / random) - tone, 0.0, additive)
    energy = float(shares @ np.square(scheme.rail_levels))
    # decision-directed loops average the error that they see, and that of ISI is as good as white
    steepness = energy * float(np.sum(np.square(late)))
    answers = Answers(
        timing=_PATTERNS_LEFT * 2.0 * timing_bandwidth / max(steepness, 1e-9),
        turn=2.0 * carrier_bandwidth / scheme.symbol_energy(),
        level=_unit_wander(symbols),
    )
    return LinkModel(
        scheme, shares, levels, compressed, taps, late, early, additive, plain, tone, common, turn, answers, deviations,
        uneven, gains / np.exp(np.mean(np.log(gains))), cursors, limiter, bend,
    )  # fmt: skip


def _unit_wander(symbols: int) -> float:
    """Variance of gain and middle of the level unit, both averages over all symbols from the first on, over that of a sample."""
    first, most = Tracker.UNIT_FIRST, Tracker.UNIT_SYMBOLS
    n = min(max(symbols, first), most)
    return 2.0 * (1.0 + math.log(n / first)) / n


def _unmixed(response: NDArray[np.float64], undo: NDArray[np.float64], *, first: bool) -> NDArray[np.float64]:
    """A response ``(rails, rails * lags)`` or ``(rails, rails, n)`` with a mixture of the rails undone: ahead of the rest or behind it."""
    each = response.reshape(response.shape[0], response.shape[0], -1)
    clean = np.einsum("rsl,st->rtl" if first else "rtl,sr->stl", each, undo)
    return np.asarray(clean.reshape(response.shape))


def _widely(response: NDArray[np.float64]) -> float:
    """Energy of what a response ``(2, 2 * lags)`` does to the conjugate of its symbols, which only an imbalance makes."""
    each = response.reshape(2, 2, -1)
    return float(np.sum((each[0, 0] - each[1, 1]) ** 2 + (each[0, 1] + each[1, 0]) ** 2))


def _level_means(deviations: NDArray[np.float64], scheme: Scheme) -> NDArray[np.float64]:
    """Mean deviation of each pattern's own level, in its place."""
    around = pattern_around(scheme.levels)
    middle = around.index(0)
    cube = deviations.reshape(-1, *(scheme.levels,) * len(around))
    others = tuple(axis + 1 for axis in range(len(around)) if axis != middle)
    return np.asarray(np.broadcast_to(cube.mean(axis=others, keepdims=True), cube.shape).reshape(deviations.shape))


def compressed_levels(levels: NDArray[np.float64], scheme: Scheme) -> NDArray[np.float64]:
    """What a limiter, which pulls outer levels in alike on both sides, makes of the nominal levels; the nominal ones if there is none."""
    nominal = np.asarray(scheme.rail_levels)
    result = np.broadcast_to(nominal, levels.shape).copy()
    if scheme.levels < 3 or scheme.name == "8psk":
        return result
    for rail, row in enumerate(levels):
        odd = 0.5 * (row - row[::-1])
        spacing = np.diff(odd)
        if spacing[0] < spacing[spacing.size // 2]:
            result[rail] = odd
    return result


def _with_tone(reach: Spread, variance: float) -> Spread:
    """The same with a sinusoid of that variance added."""
    if variance <= 0:
        return reach
    at = math.sqrt(2.0 * variance) * np.cos(math.pi * (np.arange(_TONE_POINTS) + 0.5) / _TONE_POINTS)
    return _added(reach, np.sort(at), np.full(at.size, 1.0 / at.size))


def _bent(reach: Spread, slope: float, points: NDArray[np.float64]) -> Spread:
    """The same behind a bend that adds ``slope`` times the ISI met and, below and above its mean, one of ``points`` ``(2, n)``."""
    moved = reach.at * (1.0 + slope)
    below = reach.at < float(reach.share @ reach.at)
    parts = []
    for side, here in zip(points, (below, ~below), strict=True):
        weight = float(reach.share[here].sum())
        if weight > 0.0:
            sigma = reach.sigma if isinstance(reach.sigma, float) else reach.sigma[here]
            parts.append((_added(Spread(moved[here], reach.share[here] / weight, sigma), side, POINT_SHARES), weight))
    return _together(parts)


def _together(parts: list[tuple[Spread, float]]) -> Spread:
    """One of several spreads, each as likely as its weight."""
    places = np.concatenate([part.at for part, _ in parts])
    shares = np.concatenate([part.share * weight for part, weight in parts])
    sigmas = np.concatenate([np.broadcast_to(part.sigma, part.at.shape) for part, _ in parts])
    order = np.argsort(places)
    return Spread(places[order], shares[order], sigmas[order])


def _added(reach: Spread, at: NDArray[np.float64], share: NDArray[np.float64]) -> Spread:
    """The sum with one of the places ``at``, each as likely as its ``share``."""
    if isinstance(reach.sigma, float):
        return joined(at, share, np.full(at.size, reach.sigma), reach)
    parts = []
    for sigma in np.unique(reach.sigma):
        here = reach.sigma == sigma
        weight = float(reach.share[here].sum())
        part = Spread(reach.at[here], reach.share[here] / weight, float(sigma))
        parts.append((joined(at, share, np.full(at.size, float(sigma)), part), weight))
    return _together(parts)


def budget_of(model: LinkModel, split: Split | None, tail: float, opening_pct: float) -> Budget:
    """Points of opening that each cause takes at ``tail``: the drop between the model with and without it.

    Random causes share theirs in proportion to their variances; an interfering tone counts as noise. With ``opening_pct`` and what is
    unexplained the parts add up to 100.
    """
    whole = model.opening(tail)
    scheme = model.scheme
    random = model.without_random().opening(tail) - whole
    shares = random_shares(split, model)
    timing, phase = random * shares[0], random * shares[1]
    isi = model.without_isi().opening(tail) - whole
    levels = model.with_even_levels().opening(tail) - whole if scheme.levels > 2 else 0.0
    iq = model.without_imbalance().opening(tail) - whole if scheme.rails == 2 and not scheme.stagger else None
    bent = model.bend is not None or not np.allclose(model.compressed, scheme.rail_levels)
    clipping = model.without_clipping().opening(tail) - whole if bent else 0.0
    parts = Budget(
        isi_pct=isi, noise_pct=random - timing - phase, timing_pct=timing, phase_pct=phase if scheme.kind == "carrier" else None,
        levels_pct=levels, iq_pct=iq, clipping_pct=clipping,
    )  # fmt: skip
    known = (isi, random, levels, iq or 0.0, clipping)
    return replace(parts, unexplained_pct=100.0 - opening_pct - sum(known))


def random_shares(split: Split | None, model: LinkModel) -> tuple[float, float]:
    """Of all that is random, the share of timing jitter and that of phase jitter, on the rail that has more of it.

    What loops make of the data is none of them.
    """
    if split is None:
        return 0.0, 0.0
    rail = int(np.argmax(split.random))
    common, turn, level = model.answered()
    timing = float(split.timing[rail]) * (1.0 - min(common / max(split.common + split.single, 1e-18), 1.0))
    phase = float(split.phase[rail]) * (1.0 - min(turn / max(split.turn, 1e-18), 1.0))
    answered = float(split.timing[rail] + split.phase[rail]) - timing - phase
    total = max(float(split.random[rail]) - answered - float(level[rail]), 1e-18)
    scale = 1.0 / max(timing + phase, total)
    return timing * scale, phase * scale
