"""One rail of a transmission: the exact sum of its pulses at any instants.

Time is the transmitter's own, in symbols: symbol ``k`` is due at ``k``. Pulses come from tables of `POINTS` a symbol,
read linearly (error below -90 dB); rectangular pulses from their closed form.
"""

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf

from dsp.pulses import Pulse, gaussian_rectangle, raised_cosine, root_raised_cosine
from dsp.transmitter.spec import TransmitSpec

POINTS = 512
_FORGOTTEN = 17.0  # exp(-17) is -148 dB: where a one-pole tail is cut

Floats = NDArray[np.float64]
Way = Literal["regular", "pulse", "step", "ramp", "phase", "held"]


def half_span(pulse: Pulse) -> float:
    """Symbols on each side of a transmit pulse beyond which lies less than -80 dB of the energy of an rrc or rc pulse.

    From the tails ``1/(4 pi a t**2)`` and ``1/(4 pi a**2 t**3)`` of the two (derived); gauss: where erfc is below 3e-9.
    """
    number = pulse.number or 0.0
    if pulse.family == "rrc":
        return float(math.ceil((1e8 / (48 * math.pi**2 * number**2)) ** (1 / 3)))
    if pulse.family == "rc":
        return float(max(8, math.ceil((1e8 / (160 * math.pi**2 * number**4)) ** (1 / 5))))
    return 0.5 if pulse.family == "rect" else 0.5 + 4.2 / _steepness(pulse)


def pulse_energy(pulse: Pulse) -> float:
    """Integral of the squared transmit pulse, in UI: 1 for rrc (unit energy) and rect, ``1 - a/4`` for rc."""
    if pulse.family == "gauss":
        t = np.linspace(-half_span(pulse), half_span(pulse), 4001)
        return float(np.sum(gaussian_rectangle(t, pulse.number or 0.0) ** 2) * (t[1] - t[0]))
    return 1.0 - (pulse.number or 0.0) / 4.0 if pulse.family == "rc" else 1.0


def _steepness(pulse: Pulse) -> float:
    return math.pi * (pulse.number or 0.0) * math.sqrt(2.0 / math.log(2.0))


def _table(pulse: Pulse, way: Way) -> tuple[Floats, int, float]:
    """Values at `POINTS` a symbol, the whole symbol they start at, and the slope past their end."""
    reach = math.ceil(half_span(pulse))
    t = np.arange(-reach * POINTS, reach * POINTS + 1) / POINTS
    if way in ("step", "ramp"):
        if pulse.family == "rect":
            return np.maximum(t, 0.0), -reach, 1.0
        steep = _steepness(pulse)
        if way == "step":
            return 0.5 + 0.5 * erf(steep * t), -reach, 0.0
        ramp = 0.5 * (t + t * erf(steep * t) + np.exp(-((steep * t) ** 2)) / (steep * math.sqrt(math.pi)))
        return ramp, -reach, 1.0
    number = pulse.number or 0.0
    shape = {"rrc": root_raised_cosine, "rc": raised_cosine, "gauss": gaussian_rectangle}[pulse.family](t, number)
    if way != "phase":
        shape[-1] = 0.0  # where it stays
        return shape, -reach, 0.0
    area = np.concatenate(([0.0], np.cumsum(0.5 * (shape[1:] + shape[:-1]))))
    return area / area[-1], -reach, 0.0


def low_pass(table: Floats, points: float, ratio: float, end_slope: float) -> Floats:
    """``table`` behind a one-pole low-pass of T/tau = ``ratio``, longer by the tail; exact for lines between points.

    The line before the table is taken as constant, the one past it as of ``end_slope`` a symbol.
    """
    from scipy.signal import lfilter

    tail = np.arange(1, math.ceil(_FORGOTTEN / ratio) * int(points) + 1) / points
    longer = np.concatenate((table, table[-1] + end_slope * tail)) - table[0]
    rh = ratio / points
    decay = math.exp(-rh)
    mean = -math.expm1(-rh) / rh
    return np.asarray(lfilter([1.0 - mean, mean - decay], [1.0, -decay], longer), dtype=np.float64) + float(table[0])


@dataclass(frozen=True)
class Shape:
    """How the symbols of a rail become its waveform.

    ``after`` and ``before`` symbols on either side of an instant take part; ``overshoot`` is the greatest value that
    symbols of +-1 can reach.
    """

    way: Way
    table: Floats
    low: int
    end_slope: float
    reach: int
    ratio: float
    overshoot: float

    @classmethod
    def of(cls, spec: TransmitSpec) -> "Shape":
        """The shape that a specification asks for."""
        ratio = spec.t_over_tau or 0.0
        frequency = spec.link_scheme.kind == "frequency"
        reach = 1 + math.ceil(spec.jitter_sine_ui + 8 * spec.jitter_rms_ui) if spec.jittered else 1
        family = spec.pulse.family
        way: Way
        if family in ("rrc", "rc"):
            way = "phase" if frequency else "pulse" if spec.jittered else "regular"
        elif frequency:
            way = "ramp"
        else:
            way = "held" if family == "rect" else "step" if spec.jittered else "regular"
        if way == "held":
            return cls(way, np.zeros(1), -1, 0.0, reach, ratio, 1.0)
        table, low, slope = _table(spec.pulse, way)
        if ratio:
            table = low_pass(table, POINTS, ratio, slope)
        overshoot = 1.0
        if way in ("regular", "pulse"):
            overshoot = float(np.abs(_folded(table, low)).sum(axis=1).max())
        if way == "regular":
            table = _folded(table, low)
        return cls(way, np.ascontiguousarray(table), low, slope, reach, ratio, overshoot)

    @property
    def after(self) -> int:
        """Symbols before an instant that are still heard at it."""
        if self.way == "regular":
            return int(self.table.shape[1]) - 1 + self.low
        if self.way == "held":
            return self.reach + 1 + (math.ceil(2 * _FORGOTTEN / self.ratio) if self.ratio else 0)
        return math.ceil(self.low + (self.table.size - 1) / POINTS) + self.reach

    @property
    def before(self) -> int:
        """Symbols past an instant that are already heard at it."""
        return -self.low if self.way == "regular" else -self.low + self.reach


def _folded(table: Floats, low: int) -> Floats:
    after = math.ceil(low + (table.size - 1) / POINTS)
    taps = after - low + 1
    padded = np.zeros((taps + 1) * POINTS + 1)
    padded[: table.size] = table
    row = np.arange(POINTS + 1)[:, None]
    return np.ascontiguousarray(padded[row + (after - np.arange(taps)[None, :] - low) * POINTS])


class Rail:
    """One rail being sent: takes symbols in order, gives the waveform at any instants that they cover."""

    def __init__(self, shape: Shape, first: int) -> None:
        """``first``: index of the first symbol that `extend` will bring."""
        self._shape = shape
        self._first = first
        empty = np.zeros(0)
        self._values, self._moves, self._weights = empty, empty, empty
        self._settled, self._slopes, self._edges, self._state = empty, empty, empty, empty
        self._total = 0.0

    def extend(self, values: Floats, moves: Floats) -> None:
        """Append symbols: their values, and how much later than due each one is, in UI; both of shape ``(n,)``."""
        start = self._values.size
        way = self._shape.way
        self._values = np.concatenate((self._values, values))
        if way == "regular":
            return
        due = self._first + np.arange(start, self._values.size, dtype=np.float64)
        if way in ("pulse", "phase"):
            self._moves = np.concatenate((self._moves, moves))
            self._weights = self._values
            running = np.zeros(values.size)
            if way == "phase":
                running = np.cumsum(np.concatenate(([self._total], values)))[1:]
                running -= 0.0 if start else running[-1]  # phase 0 where the first batch ends, however long it is
                self._total = float(running[-1])
            self._settled = np.concatenate((self._settled, running))
            self._slopes = np.zeros(self._values.size)
            return
        edges = np.concatenate((self._edges, due + moves - 0.5))
        # an edge that jitter would put ahead of the one before it comes together with that one
        self._edges = np.maximum.accumulate(edges)
        if way == "held":
            self._settle(start)
            return
        self._moves = np.concatenate((self._moves, self._edges[start:] - due))
        self._weights = np.diff(self._values, prepend=self._values[:1])
        if way == "step":
            self._settled, self._slopes = self._values, np.zeros(self._values.size)
            return
        self._add_areas(start)

    def _settle(self, start: int) -> None:
        from dsp._kernels.transmit import settle

        if self._shape.ratio == 0.0:
            return
        state = np.empty(self._values.size)
        keep = max(start - 1, 0)
        state[: keep + 1] = self._state[: keep + 1] if start else self._values[0]
        settle(self._values[keep:], self._edges[keep:], self._shape.ratio, state[keep:])
        self._state = state

    def _add_areas(self, start: int) -> None:
        # the phase that a rectangular drive has reached at each edge; its low-passed forms lag by `late`
        keep = max(start - 1, 0)
        steps = self._values[keep:-1] * np.diff(self._edges[keep:])
        areas = np.cumsum(np.concatenate(([self._total], steps)))
        areas -= 0.0 if start else areas[-1]  # phase 0 at the last edge of the first batch, however long it is
        self._total = float(areas[-1])
        table = self._shape.table
        late = self._shape.low + (table.size - 1) / POINTS - float(table[-1])
        fresh = areas[start - keep :] - self._values[start:] * (late + self._moves[start:])
        self._settled = np.concatenate((self._settled, fresh))
        self._slopes = self._values

    def drop(self, first: int) -> None:
        """Forget the symbols before index ``first``."""
        count = first - self._first
        if count <= 0:
            return
        self._first = first
        for name in ("_values", "_moves", "_settled", "_slopes", "_edges", "_state", "_weights"):
            setattr(self, name, getattr(self, name)[count:].copy())

    @property
    def total(self) -> float:
        """What the rail of a frequency scheme has added up to at its last symbol; 0 for others."""
        return self._total

    def lift(self, amount: float) -> None:
        """Add a constant to all that the rail of a frequency scheme gives."""
        self._total += amount
        self._settled = self._settled + amount

    def rename(self, earlier: int) -> None:
        """Count symbols and time from ``earlier`` symbols later on, so that long streams keep their precision."""
        self._first -= earlier
        self._edges = self._edges - earlier

    def at(self, u: Floats) -> Floats:
        """The waveform at the instants ``u``, shape ``(n,)``, in symbols of the transmitter's clock; same shape."""
        from dsp._kernels.transmit import sum_held, sum_moved, sum_regular

        shape = self._shape
        out = np.empty(u.size)
        if shape.way == "regular":
            sum_regular(u, self._values, self._first, shape.table, shape.after, out)
        elif shape.way == "held":
            state = self._state if shape.ratio else np.zeros(1)
            sum_held(u, self._values, self._edges, state, self._first, shape.reach, shape.ratio, out)
        else:
            sum_moved(
                u,
                self._weights,
                self._moves,
                self._settled,
                self._slopes,
                self._first,
                shape.table,
                float(shape.low),
                float(POINTS),
                shape.end_slope,
                shape.after,
                shape.before,
                out,
            )
        return out
