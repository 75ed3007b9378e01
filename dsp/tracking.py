"""Timing and carrier loops: from filtered rails to symbol instants, decisions and the carrier's phase."""

from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import tracking as kernel
from dsp.interpolation import BEFORE, TAPS, cubic_slope_weights, cubic_weights, slope_weights, weights
from dsp.link import Scheme
from dsp.loops import exact_gains

Detector = Literal["gardner", "mueller-muller", "derivative", "crossing"]
_DETECTOR = {
    "gardner": kernel.GARDNER,
    "mueller-muller": kernel.MUELLER_MULLER,
    "derivative": kernel.DERIVATIVE,
    "crossing": kernel.CROSSING,
}
HISTORY = 2 * kernel.TEMPLATE
TEMPLATE_LAGS = kernel.AHEAD - 1 - np.arange(kernel.TEMPLATE)  # symbol k - lag stands at each tap of the template
MAX_LEVELS = 8
CORNER_SPS = 16.0  # from here on waves may have corners, and short local interpolation serves them better

Rails = tuple[NDArray[np.float32], ...]


@dataclass(frozen=True, slots=True)
class Tables:
    """Interpolation weights for one working rate: value, slope, and the band they were made for (0: local cubic)."""

    value: NDArray[np.float32]
    slope: NDArray[np.float32]
    band: float


def tables_for(sps: float, bandwidth: float) -> Tables:
    """Weights for ``sps`` samples a symbol and a rail of one-sided ``bandwidth`` symbol rates."""
    if sps >= CORNER_SPS:
        return Tables(cubic_weights(), cubic_slope_weights(), 0.0)
    band = round(min(bandwidth / sps * 1.05, 0.42), 4)
    return Tables(weights(band), slope_weights(band), band)


@dataclass(frozen=True, slots=True)
class TrackStart:
    """Where a tracker begins: the outcome of acquisition.

    Attributes
    ----------
    instant
        Of the first symbol, in samples of the filtered rails.
    sps
        Samples a symbol, as nearly as acquisition knows; the loop's rate is told against it.
    phase, turn
        Carrier phase in cycles at the first instant and its advance a symbol.
    means
        Level means, shape ``(rails, levels)``, in the rails' own unit.
    detector_slope
        Of the detector's mean output by timing, per UI; ``bias`` is its output at the wanted instant.
    offset_ui
        From the loop's instant to where decisions are taken.
    template
        Pattern-noise template of the derivative detector (per UI) or the crossing detector, shape ``(16,)``.
    sense_ui
        How long before the instant the crossing detector looks.
    """

    instant: float
    sps: float
    phase: float
    turn: float
    means: NDArray[np.float64]
    detector: Detector
    detector_slope: float
    bias: float = 0.0
    offset_ui: float = 0.0
    template: NDArray[np.float32] | None = None
    sense_ui: float = 0.5


@dataclass(frozen=True, slots=True)
class Track:
    """Consecutive symbols as the loops left them.

    Attributes
    ----------
    instants
        Shape ``(n + 1,)``, samples of `samples` (fractional): the loop's instants; the last is the next symbol's.
    phases
        Shape ``(n + 1,)``, cycles, unwrapped.
    values, decided
        Shape ``(2, n)``, level units: the samples decided and the levels decided for them.
    slopes
        Shape ``(2, n)``, level units per UI at the instants; zeros but for the derivative detector.
    classes
        Shape ``(2, n)``, int8: which level, lowest 0.
    gain, zero
        Shape ``(2,)``: one level unit and the middle of the levels in the rails' own unit.
    samples
        The filtered rails that the instants point into.
    base
        Stream position of ``samples[.][0]``, in filtered samples.
    steered
        Shape ``(n,)``, cycles a symbol: how much of the carrier's turn was taken out on the way because it drifts; None: nothing.
    """

    instants: NDArray[np.float64]
    phases: NDArray[np.float64]
    values: NDArray[np.float32]
    decided: NDArray[np.float32]
    slopes: NDArray[np.float32]
    classes: NDArray[np.int8]
    gain: NDArray[np.float64]
    zero: NDArray[np.float64]
    samples: Rails
    base: int
    steered: NDArray[np.float64] | None = None

    def head(self, count: int) -> "Track":
        """Its first ``count`` symbols."""
        return replace(
            self,
            instants=self.instants[: count + 1],
            phases=self.phases[: count + 1],
            values=self.values[:, :count],
            decided=self.decided[:, :count],
            slopes=self.slopes[:, :count],
            classes=self.classes[:, :count],
            steered=None if self.steered is None else self.steered[:count],
        )


def decision_shape(scheme: Scheme) -> float:
    """The kernel's word for how a scheme is decided."""
    if scheme.name == "8psk":
        return kernel.PSK8
    if scheme.rails == 2:
        return kernel.QAM
    return kernel.BPSK if scheme.kind == "carrier" else kernel.PAM


class Tracker:
    """Runs the loops over filtered rails as they come; how they are cut into blocks decides only the latency.

    Level means follow the signal with a time constant of ``2 / LEVEL_STEP`` symbols and more, and decide. One level unit is
    fitted at each push to their average over ``UNIT_SYMBOLS``: ISI makes the means themselves wander, and would spread the levels.
    """

    LEVEL_STEP = 1.0 / 1024.0
    UNIT_FIRST, UNIT_SYMBOLS = 512, 32768

    def __init__(
        self,
        scheme: Scheme,
        start: TrackStart,
        tables: Tables,
        *,
        timing_bandwidth: float,
        carrier_bandwidth: float,
    ) -> None:
        delay = kernel.LATE if start.detector in ("derivative", "crossing") else 0
        timing = exact_gains(timing_bandwidth, delay)
        carrier = exact_gains(carrier_bandwidth)
        self._complex = scheme.kind == "carrier"
        self._scheme = scheme
        self._tables = tables
        setup = np.zeros(kernel.N_SETUP)
        setup[kernel.SPS] = start.sps
        setup[kernel.DETECTOR] = _DETECTOR[start.detector]
        setup[kernel.TIMING_K1] = timing.proportional
        setup[kernel.TIMING_K2] = timing.integral
        setup[kernel.SLOPE] = start.detector_slope
        setup[kernel.CARRIER_K1] = carrier.proportional / (2 * np.pi)
        setup[kernel.CARRIER_K2] = carrier.integral / (2 * np.pi)
        setup[kernel.OFFSET] = start.offset_ui
        setup[kernel.STAGGER] = scheme.stagger
        setup[kernel.ROTATION] = scheme.rotation
        setup[kernel.LEVELS] = scheme.levels
        setup[kernel.SHAPE] = decision_shape(scheme)
        setup[kernel.ENERGY] = scheme.symbol_energy()
        setup[kernel.LEVEL_STEP] = self.LEVEL_STEP
        setup[kernel.TIMING_BIAS] = start.bias
        setup[kernel.SENSE] = start.sense_ui
        self._setup = setup
        self._nominal = np.zeros(MAX_LEVELS)
        self._nominal[: scheme.levels] = scheme.rail_levels
        self._means = np.zeros((2, MAX_LEVELS))
        self._means[: start.means.shape[0], : scheme.levels] = start.means
        if start.means.shape[0] == 1:
            self._means[1] = self._means[0]
        self._slow = self._means.copy()
        self._seen = self.UNIT_FIRST
        self._template = np.zeros(kernel.TEMPLATE, np.float32) if start.template is None else start.template
        self._state = np.zeros(kernel.N_STATE)
        self._state[kernel.INSTANT] = start.instant
        self._state[kernel.PREVIOUS] = start.instant - start.sps
        self._state[kernel.PHASE] = start.phase
        self._state[kernel.TURN] = start.turn
        self._past: tuple[NDArray[Any], ...] = tuple(
            np.zeros((2, HISTORY), dtype) for dtype in (np.float32, np.float32, np.float32, np.int8)
        )
        self._rest: Rails = tuple(np.zeros(0, np.float32) for _ in range(2 if self._complex else 1))
        self._base = 0

    def push(self, rails: Rails) -> Track:
        """Take the next filtered samples, one float32 array ``(m,)`` a rail, and return the symbols they complete."""
        samples = tuple(np.concatenate((rest, new)) for rest, new in zip(self._rest, rails, strict=True))
        room = int(samples[0].size / self._setup[kernel.SPS] * 1.2) + 2
        instants, phases = np.empty(room + 1), np.empty(room + 1)
        decided, values = (np.empty((2, HISTORY + room), np.float32) for _ in range(2))
        slopes = np.zeros((2, HISTORY + room), np.float32)  # of the rails and detectors that have them
        classes = np.empty((2, HISTORY + room), np.int8)
        outputs: tuple[NDArray[Any], ...] = (decided, slopes, values, classes)
        for array, past in zip(outputs, self._past, strict=True):
            array[:, :HISTORY] = past
        gain, zero = self._units()
        n = kernel.track(
            samples[0], samples[-1], self._complex, self._tables.value, self._tables.slope, self._setup,
            self._means, gain, zero, self._nominal, self._template, self._state, HISTORY,
            instants[:-1], phases[:-1], decided, slopes, values, classes,
        )  # fmt: skip
        instants[n], phases[n] = self._state[kernel.INSTANT], self._state[kernel.PHASE]
        self._past = tuple(array[:, n : n + HISTORY].copy() for array in outputs)
        self._seen += n
        self._slow += (self._means - self._slow) * min(n / min(self._seen, self.UNIT_SYMBOLS), 1.0)
        track = Track(
            instants[: n + 1],
            phases[: n + 1],
            values[:, HISTORY : HISTORY + n],
            decided[:, HISTORY : HISTORY + n],
            slopes[:, HISTORY : HISTORY + n],
            classes[:, HISTORY : HISTORY + n],
            gain,
            zero,
            samples,
            self._base,
        )
        sps = float(self._setup[kernel.SPS])
        # what the next symbol, its wave from one symbol back on, and the interpolator may still need
        reach = self._state[kernel.INSTANT] - (2.0 + abs(float(self._setup[kernel.OFFSET]))) * sps - TAPS
        keep = min(max(int(reach) - BEFORE, 0), samples[0].size)
        self._rest = tuple(rail[keep:].copy() for rail in samples)
        self._base += keep
        self._state[kernel.INSTANT] -= keep
        self._state[kernel.PREVIOUS] -= keep
        return track

    @property
    def rate(self) -> float:
        """The loop's integrated rate against the start's ``sps``, as a fraction."""
        return float(self._state[kernel.RATE])

    @property
    def turn(self) -> float:
        """The carrier loop's integrated advance, cycles a symbol."""
        return float(self._state[kernel.TURN])

    @property
    def means(self) -> NDArray[np.float64]:
        """Level means as tracked now, shape ``(rails, levels)``, in the rails' own unit."""
        return self._means[: self._scheme.rails, : self._scheme.levels].copy()

    def _units(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        gain, zero = level_units(self._slow[:, : self._scheme.levels], np.asarray(self._scheme.rail_levels))
        if self._scheme.rails == 1:
            # the idle rail has no levels of its own
            gain[1], zero[1] = gain[0], 0.0
        return gain, zero


def level_units(
    means: NDArray[np.float64], nominal: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Least-squares scale and middle, each ``(rails,)``, that bring nominal levels ``(levels,)`` onto ``means`` ``(rails, levels)``."""
    centred = nominal - nominal.sum() / nominal.size
    scale = centred / (centred @ centred)
    gain = means @ scale
    zero = means @ (1.0 / nominal.size - scale * (nominal.sum() / nominal.size))
    return np.where(gain > 0, gain, 1e-12), zero
