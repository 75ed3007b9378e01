"""The figures of a reading as words and numbers for people; no Qt here. What is not known has no line."""

import math
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

from dsp.reading import Budget, Reading

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_LEAST_BER = 1e-18


@dataclass(frozen=True, slots=True)
class Figure:
    """One line of the table; ``interval``: its 95 % one in words, empty where none is known."""

    label: str
    value: str
    interval: str = ""


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


@dataclass(frozen=True, slots=True)
class _Known:
    """A reading with the intervals of its figures by name."""

    reading: Reading
    intervals: Mapping[str, tuple[float, float]]

    def line(self, label: str, key: str, write: Callable[[float], str]) -> Iterator[Figure]:
        value = getattr(self.reading, key)
        if value is None or not math.isfinite(value):
            return
        low, high = self.intervals.get(key, (math.nan, math.nan))
        known = math.isfinite(low) and math.isfinite(high)
        yield Figure(label, write(value), _between(write(low), write(high)) if known else "")


def _between(low: str, high: str) -> str:
    """Two figures as an interval, their unit once; one where both read alike and say a bound."""
    if low == high and low.startswith("below"):
        return low
    start, _, unit = low.partition(" ")
    return f"{start if unit and high.endswith(f' {unit}') and not unit.startswith('×') else low} to {high}"


def _two(
    label: str, first: float | None, second: float | None, write: Callable[[float, float], str]
) -> Iterator[Figure]:
    if first is not None and second is not None and math.isfinite(first) and math.isfinite(second):
        yield Figure(label, write(first, second))


def _unit(digits: int, unit: str, *, sign: bool = False) -> Callable[[float], str]:
    number = signed if sign else plain
    return lambda value: f"{number(value, digits)} {unit}"


def _eye(known: _Known) -> Iterator[Figure]:
    yield from known.line("Width", "width_ui", _unit(3, "UI"))
    yield from known.line("Noise margin", "noise_margin_db", _unit(1, "dB"))
    yield from known.line("Opening at target rate", "opening_at_ber_pct", _unit(1, "%"))
    yield from known.line("Closure", "closure_db", _unit(1, "dB"))
    yield from known.line("Level thickness", "level_rms_pct", _unit(1, "% rms"))
    yield from known.line("Level linearity", "level_linearity", lambda value: plain(value, 3))
    yield from known.line("Best instant", "best_instant_ui", _unit(3, "UI", sign=True))
    tolerance = known.reading.timing_tolerance_ui
    if tolerance is not None:
        yield from _two("1 dB worse at", *tolerance, lambda early, late: f"{signed(early, 2)}, {signed(late, 2)} UI")
    yield from known.line("Timing slope", "timing_slope_pct_per_ui", _unit(0, "%/UI"))
    equaliser = known.reading.equaliser
    if equaliser is not None:
        yield Figure(f"Equalised, {equaliser.taps} taps", _unit(1, "%")(equaliser.opening_pct))


def _crossings(known: _Known) -> Iterator[Figure]:
    yield from known.line("Spread", "crossing_rms_ui", _unit(3, "UI rms"))
    yield from known.line("Peak to peak", "crossing_pp_ui", _unit(3, "UI"))
    yield from known.line("Pattern part", "crossing_pattern_pp_ui", _unit(3, "UI"))
    yield from known.line("Random part", "crossing_random_rms_ui", _unit(3, "UI rms"))
    yield from known.line("Duty-cycle distortion", "dcd_ui", _unit(3, "UI", sign=True))
    yield from known.line("Rise 20 to 80 %", "rise_20_80_ui", _unit(3, "UI"))
    yield from known.line("Periodic jitter", "periodic_jitter_ui", _unit(3, "UI"))
    yield from known.line("… at", "periodic_jitter_hz", _unit(1, "Hz"))


def _errors(known: _Known) -> Iterator[Figure]:
    yield from known.line("SNR", "snr_db", _unit(1, "dB"))
    yield from known.line("MER", "mer_db", _unit(1, "dB"))
    yield from known.line("EVM", "evm_pct", _unit(1, "% rms"))
    yield from known.line("Q", "q", lambda value: plain(value, 2))
    yield from known.line("Bit error rate", "ber", power_of_ten)
    yield from known.line("… 95 % from", "ber_low", power_of_ten)
    yield from known.line("… 95 % to", "ber_high", power_of_ten)


def _clock(known: _Known) -> Iterator[Figure]:
    yield from known.line("Clock offset", "clock_ppm", _unit(1, "ppm", sign=True))
    yield from known.line("Clock jitter", "jitter_rms_ui", _unit(4, "UI rms"))
    yield from known.line("Carrier", "carrier_hz", _unit(1, "Hz", sign=True))
    yield from known.line("Phase jitter", "phase_rms_deg", lambda value: f"{plain(value, 2)}° rms")
    yield from known.line("I/Q gain", "iq_gain_db", _unit(2, "dB", sign=True))
    yield from known.line("I/Q skew", "iq_skew_deg", lambda value: f"{signed(value, 2)}°")
    yield from known.line("DC offset", "dc_pct", _unit(1, "%", sign=True))


def figure_groups(reading: Reading, intervals: Mapping[str, tuple[float, float]] | None = None) -> tuple[Group, ...]:
    """Every known figure but the opening, its interval, the symbols, the budget and the verdict; no empty group.

    ``intervals``: 95 % ones by the figures' names, as a diagnosis has them.
    """
    known = _Known(reading, intervals or {})
    groups = (
        Group("Eye", tuple(_eye(known))),
        Group("Noise and errors", tuple(_errors(known))),
        Group("Crossings", tuple(_crossings(known))),
        Group("Clock" if reading.carrier_hz is None else "Clock and carrier", tuple(_clock(known))),
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
