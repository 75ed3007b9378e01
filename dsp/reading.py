"""The figures of one window of symbols. The unit is each name's suffix; what cannot be known is None."""

from dataclasses import dataclass, fields


@dataclass(frozen=True, slots=True)
class Eye:
    """One eye: the gap between two neighbouring levels of one rail.

    ``opening_pct`` and ``height`` (in level units, 2 is perfect) are taken at the best instant of the whole reading;
    ``width_ui`` at most 1; ``centre_ui`` is the middle of the width against the loop's instant; ``threshold`` in level units.
    """

    opening_pct: float | None
    height: float | None
    width_ui: float | None
    centre_ui: float | None
    threshold: float | None


@dataclass(frozen=True, slots=True)
class Budget:
    """Points of opening that each cause takes; with the opening at the target error rate they sum to 100.

    A part is what the link would gain without that cause alone. ``unexplained_pct`` is the rest: what several causes take only together,
    and what none of them accounts for.
    """

    isi_pct: float | None = None
    noise_pct: float | None = None
    timing_pct: float | None = None
    phase_pct: float | None = None
    levels_pct: float | None = None
    iq_pct: float | None = None
    clipping_pct: float | None = None
    unexplained_pct: float | None = None


@dataclass(frozen=True, slots=True)
class Equaliser:
    """The opening that the same samples have behind a linear equaliser of so many taps."""

    taps: int
    opening_pct: float


@dataclass(frozen=True, slots=True)
class Reading:
    """Every figure of one window; see DEVELOPERS.md for what each one means."""

    symbols: int
    opening_pct: float | None = None
    opening_low_pct: float | None = None
    opening_high_pct: float | None = None
    closure_db: float | None = None
    eyes: tuple[Eye, ...] = ()
    width_ui: float | None = None
    best_instant_ui: float | None = None
    timing_slope_pct_per_ui: float | None = None
    timing_tolerance_ui: tuple[float, float] | None = None
    noise_margin_db: float | None = None
    level_rms_pct: float | None = None
    crossing_rms_ui: float | None = None
    crossing_pp_ui: float | None = None
    crossing_pattern_pp_ui: float | None = None
    crossing_random_rms_ui: float | None = None
    dcd_ui: float | None = None
    rise_20_80_ui: float | None = None
    periodic_jitter_ui: float | None = None
    periodic_jitter_hz: float | None = None
    level_linearity: float | None = None
    q: float | None = None
    snr_db: float | None = None
    mer_db: float | None = None
    evm_pct: float | None = None
    ber: float | None = None
    ber_low: float | None = None
    ber_high: float | None = None
    opening_at_ber_pct: float | None = None
    clock_ppm: float | None = None
    jitter_rms_ui: float | None = None
    carrier_hz: float | None = None
    phase_rms_deg: float | None = None
    iq_gain_db: float | None = None
    iq_skew_deg: float | None = None
    dc_pct: float | None = None
    budget: Budget | None = None
    equaliser: Equaliser | None = None
    verdict: str | None = None


READING_KEYS = tuple(field.name for field in fields(Reading))
