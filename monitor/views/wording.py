"""The figures of a reading as words and numbers for people; no Qt here. What is not known has no line."""

import math
import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass

from dsp.reading import Budget, Reading

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_LEAST_BER = 1e-18


@dataclass(frozen=True, slots=True)
class Figure:
    """One line of the table."""

    label: str
    value: str


@dataclass(frozen=True, slots=True)
class Group:
    """Figures that belong together."""

    title: str
    figures: tuple[Figure, ...]


def plain(value: float, digits: int) -> str:
    """A number with a true minus sign and grouped thousands; never ``-0``."""
    text = f"{value:,.{digits}f}"
    if text.strip("-0.,") == "":
        text = text.lstrip("-")
    return text.replace("-", "−")


def signed(value: float, digits: int) -> str:
    """As `plain`, with a plus sign for what is above 0."""
    text = plain(value, digits)
    return f"+{text}" if value > 0 and text.strip("0.,") else text


def ten_to(exponent: int) -> str:
    """A power of ten."""
    return f"10{str(exponent).translate(_SUPERSCRIPT)}"


def sentence(text: str) -> str:
    """A sentence from the figures with true minus signs."""
    return re.sub(r"(?<![\w.])-(?=\d)", "−", text)


def power_of_ten(value: float) -> str:
    """A rate such as ``3.1 × 10⁻⁷``; 0.01 and above in full, below 10⁻¹⁸ as that bound."""
    if value < _LEAST_BER:
        return "below 10⁻¹⁸"
    if value >= 0.01:
        return f"{value:.3f}"
    exponent = math.floor(math.log10(value))
    mantissa = f"{value / 10.0**exponent:.1f}"
    if mantissa == "10.0":
        mantissa, exponent = "1.0", exponent + 1
    return f"{mantissa} × {ten_to(exponent)}"


def rate_interval(low: float, high: float) -> str:
    """An interval of error rates."""
    if high < _LEAST_BER:
        return power_of_ten(high)
    return f"{power_of_ten(low)} to {power_of_ten(high)}"


def _usable(value: float | None) -> bool:
    return value is not None and math.isfinite(value)


def _one(label: str, value: float | None, write: Callable[[float], str]) -> Iterator[Figure]:
    if value is not None and math.isfinite(value):
        yield Figure(label, write(value))


def _two(
    label: str, first: float | None, second: float | None, write: Callable[[float, float], str]
) -> Iterator[Figure]:
    if first is not None and second is not None and math.isfinite(first) and math.isfinite(second):
        yield Figure(label, write(first, second))


def _unit(digits: int, unit: str, *, sign: bool = False) -> Callable[[float], str]:
    number = signed if sign else plain
    return lambda value: f"{number(value, digits)} {unit}"


def _eye(reading: Reading) -> Iterator[Figure]:
    yield from _one("Width", reading.width_ui, _unit(3, "UI"))
    yield from _one("Noise margin", reading.noise_margin_db, _unit(1, "dB"))
    yield from _one("Opening at target rate", reading.opening_at_ber_pct, _unit(1, "%"))
    yield from _one("Closure", reading.closure_db, _unit(1, "dB"))
    yield from _one("Level thickness", reading.level_rms_pct, _unit(1, "% rms"))
    yield from _one("Level linearity", reading.level_linearity, lambda value: plain(value, 3))
    yield from _one("Best instant", reading.best_instant_ui, _unit(3, "UI", sign=True))
    tolerance = reading.timing_tolerance_ui
    if tolerance is not None:
        yield from _two("1 dB worse at", *tolerance, lambda early, late: f"{signed(early, 2)}, {signed(late, 2)} UI")
    yield from _one("Timing slope", reading.timing_slope_pct_per_ui, _unit(0, "%/UI"))
    equaliser = reading.equaliser
    if equaliser is not None:
        yield from _one(f"Equalised, {equaliser.taps} taps", equaliser.opening_pct, _unit(1, "%"))


def _crossings(reading: Reading) -> Iterator[Figure]:
    yield from _one("Spread", reading.crossing_rms_ui, _unit(3, "UI rms"))
    yield from _one("Peak to peak", reading.crossing_pp_ui, _unit(3, "UI"))
    yield from _one("Pattern part", reading.crossing_pattern_pp_ui, _unit(3, "UI"))
    yield from _one("Random part", reading.crossing_random_rms_ui, _unit(3, "UI rms"))
    yield from _one("Duty-cycle distortion", reading.dcd_ui, _unit(3, "UI", sign=True))
    yield from _one("Rise 20 to 80 %", reading.rise_20_80_ui, _unit(3, "UI"))
    yield from _one("Periodic jitter", reading.periodic_jitter_ui, _unit(3, "UI"))
    yield from _one("… at", reading.periodic_jitter_hz, _unit(1, "Hz"))


def _errors(reading: Reading) -> Iterator[Figure]:
    yield from _one("SNR", reading.snr_db, _unit(1, "dB"))
    yield from _one("MER", reading.mer_db, _unit(1, "dB"))
    yield from _one("EVM", reading.evm_pct, _unit(1, "% rms"))
    yield from _one("Q", reading.q, lambda value: plain(value, 2))
    yield from _one("Bit error rate", reading.ber, power_of_ten)
    yield from _one("… 95 % from", reading.ber_low, power_of_ten)
    yield from _one("… 95 % to", reading.ber_high, power_of_ten)


def _clock(reading: Reading) -> Iterator[Figure]:
    yield from _one("Clock offset", reading.clock_ppm, _unit(1, "ppm", sign=True))
    yield from _one("Clock jitter", reading.jitter_rms_ui, _unit(4, "UI rms"))
    yield from _one("Carrier", reading.carrier_hz, _unit(1, "Hz", sign=True))
    yield from _one("Phase jitter", reading.phase_rms_deg, lambda value: f"{plain(value, 2)}° rms")
    yield from _one("I/Q gain", reading.iq_gain_db, _unit(2, "dB", sign=True))
    yield from _one("I/Q skew", reading.iq_skew_deg, lambda value: f"{signed(value, 2)}°")
    yield from _one("DC offset", reading.dc_pct, _unit(1, "%", sign=True))


def figure_groups(reading: Reading) -> tuple[Group, ...]:
    """Every known figure but the opening, its interval, the symbols, the budget and the verdict; no empty group."""
    groups = (
        Group("Eye", tuple(_eye(reading))),
        Group("Noise and errors", tuple(_errors(reading))),
        Group("Crossings", tuple(_crossings(reading))),
        Group("Clock" if reading.carrier_hz is None else "Clock and carrier", tuple(_clock(reading))),
    )
    return tuple(group for group in groups if group.figures)


def interval_text(reading: Reading) -> str | None:
    """The opening's 95 % interval, or None."""
    low, high = reading.opening_low_pct, reading.opening_high_pct
    if low is None or high is None or not (_usable(low) and _usable(high)):
        return None
    return f"{plain(low, 1)} to {plain(high, 1)} %"


_CAUSES = (
    ("isi_pct", "Neighbouring symbols"),
    ("noise_pct", "Noise"),
    ("timing_pct", "Clock jitter"),
    ("phase_pct", "Carrier phase"),
    ("levels_pct", "Uneven levels"),
    ("iq_pct", "I/Q imbalance"),
    ("clipping_pct", "Clipping"),
    ("unexplained_pct", "Not explained"),
)


UNEXPLAINED = _CAUSES[-1][1]


def budget_rows(budget: Budget) -> list[tuple[str, float]]:
    """Cause and points of opening, largest first and what no cause explains last; unknown causes left out."""
    rows = [(label, getattr(budget, key)) for key, label in _CAUSES]
    known = [(label, float(value)) for label, value in rows if _usable(value)]
    return sorted(known, key=lambda row: (row[0] == UNEXPLAINED, -row[1]))


def telling_rows(budget: Budget) -> list[tuple[str, float]]:
    """As `budget_rows`, without causes that take nothing worth telling."""
    return [row for row in budget_rows(budget) if abs(row[1]) >= 0.05]


def unknown_causes(budget: Budget) -> list[str]:
    """The causes whose points could not be told."""
    return [label for key, label in _CAUSES if not _usable(getattr(budget, key))]
