"""What stands behind a reading's budget and error rate: curves and taps for views and reports. What cannot be known is None."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Response:
    """The link's pattern response at the best instant, in units of its cursor.

    ``lags`` ``(n,)``: symbols gone by (positive) and still to come (negative). ``taps`` ``(rails, rails, n)``: of a rail, to a
    rail's symbols.
    """

    lags: NDArray[np.int64]
    taps: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ErrorCurve:
    """Bit error rate against one setting: ``at`` ``(n,)``, rising, with ``ber`` ``(n,)``."""

    at: NDArray[np.float64]
    ber: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class JitterSplit:
    """Jitter of the threshold crossings by the dual-Dirac model, in UI: total = deterministic + 2 Q(ber) random."""

    deterministic_pp_ui: float
    random_rms_ui: float
    total_pp_ui: float
    at_ber: float


@dataclass(frozen=True, slots=True)
class Constellation:
    """Decision samples counted.

    ``counts`` ``(n, n)``: Q by row upwards and I by column, each from ``-reach`` to ``reach`` level units.
    """

    counts: NDArray[np.uint32]
    reach: float


@dataclass(frozen=True, slots=True)
class EqualiserTrial:
    """One equaliser tried on samples that it was not fitted on.

    ``taps`` ``(n,)``, ``spacing_ui`` apart, ``cursor`` the index that meets the symbol itself; ``feedback`` ``(m,)``: of
    decisions gone by, empty for a linear one. ``opening_pct`` of those samples behind it; ``before_pct`` without it.
    """

    kind: Literal["linear", "decision-feedback"]
    taps: NDArray[np.complex128]
    feedback: NDArray[np.complex128]
    spacing_ui: float
    cursor: int
    before_pct: float
    opening_pct: float


@dataclass(frozen=True, slots=True)
class Diagnosis:
    """All of it for one window of symbols.

    ``over_time``: BER against the sampling instant, UI about the best one; ``over_threshold``: against the worst eye's
    threshold, level units. ``remarks``: sentences on second causes, at most two; the first sentence is the reading's verdict.
    ``intervals``: 95 % ones of the reading's figures, by name. ``opening_pct``: of this window, to set the others against.
    """

    response: Response | None = None
    over_time: ErrorCurve | None = None
    over_threshold: ErrorCurve | None = None
    jitter: JitterSplit | None = None
    constellation: Constellation | None = None
    equalisers: tuple[EqualiserTrial, ...] = ()
    best_thresholds: tuple[float, ...] = ()
    fitting_roll_off: float | None = None
    opening_pct: float | None = None
    opening_with_3db_more_pct: float | None = None
    tone_hz: float | None = None
    compression_db: float | None = None
    am_pm_deg: float | None = None
    remarks: tuple[str, ...] = ()
    intervals: Mapping[str, tuple[float, float]] = field(default_factory=dict)
