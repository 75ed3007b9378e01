"""What is an alarm: rules as a link file writes them, and the alarms that need no rule. No clock, no files."""

import difflib
import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields
from typing import Any, Final, Literal, get_args

from dsp.reading import READING_KEYS, Budget, Equaliser
from monitor.errors import InputError

Comparison = Literal["<", ">"]
Severity = Literal["low", "medium", "high"]
SEVERITIES: Final[tuple[Severity, ...]] = get_args(Severity)

_NOT_ONE_NUMBER: Final = ("eyes", "timing_tolerance_ui", "budget", "equaliser", "verdict")
FIGURES: Final[tuple[str, ...]] = (
    *(key for key in READING_KEYS if key not in _NOT_ONE_NUMBER),
    *(f"budget.{part.name}" for part in fields(Budget)),
    *(f"equaliser.{part.name}" for part in fields(Equaliser)),
)
"""What a rule can watch: the reading's single numbers; those of its budget and equaliser after a dot."""

_UNITS: Final = {
    "_pct_per_ui": "%/UI",
    "_pct": "%",
    "_db": "dB",
    "_ui": "UI",
    "_hz": "Hz",
    "_ppm": "ppm",
    "_deg": "°",
}
_RULE: Final = re.compile(r"\s*([A-Za-z0-9_.]+)\s*([<>])\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*")
_KEYS: Final = ("rule", "clear", "hold_s", "release_s", "severity", "latch")
_LONGEST_S: Final = 30 * 86400.0


@dataclass(frozen=True, slots=True)
class AlarmRule:
    """One rule over one figure of the reading.

    Attributes
    ----------
    figure
        One of `FIGURES`.
    comparison, limit
        Raised while the figure is below (``<``) or above (``>``) the limit, in the figure's unit.
    clear
        Where it is well again (dead band): at or beyond this, on the good side of the limit. None: at the limit.
    hold_s, release_s
        On-delay and off-delay in seconds of the stream, 0 to 30 days.
    severity, latch
        ``latch``: the alarm stays until it is acknowledged, though the figure is well again.

    Raises
    ------
    InputError
        A value out of its range, without saying which rule; `parse_rules` says it.
    """

    figure: str
    comparison: Comparison
    limit: float
    clear: float | None = None
    hold_s: float = 0.0
    release_s: float = 0.0
    severity: Severity = "medium"
    latch: bool = False

    def __post_init__(self) -> None:
        if self.figure not in FIGURES:
            raise InputError(_unknown_figure(self.figure))
        if self.comparison not in get_args(Comparison):
            raise InputError(f"comparison must be < or >, got {self.comparison!r}")
        if not math.isfinite(self.limit):
            raise InputError(f"the limit must be finite, got {self.limit!r}")
        if self.clear is not None:
            if not math.isfinite(self.clear):
                raise InputError(f"clear must be finite, got {self.clear!r}")
            if self.clear < self.limit if self.comparison == "<" else self.clear > self.limit:
                side = "below" if self.comparison == "<" else "above"
                good = "at or above" if self.comparison == "<" else "at or below"
                raise InputError(
                    f"clear = {number_text(self.clear)} lies {side} the limit of {self.text!r}; it must be {good} it"
                )
        for name, value in (("hold_s", self.hold_s), ("release_s", self.release_s)):
            if not 0.0 <= value <= _LONGEST_S:
                raise InputError(f"{name} must lie between 0 and {_LONGEST_S:g} seconds, got {value!r}")
        if self.severity not in SEVERITIES:
            raise InputError(f"severity {self.severity!r} is not known; take {', '.join(SEVERITIES)}")

    @property
    def text(self) -> str:
        """The rule as a link file writes it: ``opening_pct < 40``."""
        return f"{self.figure} {self.comparison} {number_text(self.limit)}"

    @property
    def unit(self) -> str:
        """The figure's unit; empty for a plain number."""
        return unit_of(self.figure)

    def broken(self, value: float, *, standing: bool) -> bool:
        """Whether the value breaks the rule; for an alarm that is ``standing``, whether it is not yet well again."""
        limit = self.clear if standing and self.clear is not None else self.limit
        return value < limit if self.comparison == "<" else value > limit

    def worse(self, one: float, other: float) -> float:
        """The worse of two values."""
        return min(one, other) if self.comparison == "<" else max(one, other)


@dataclass(frozen=True, slots=True)
class BuiltInAlarm:
    """An alarm without a rule: whoever sees the condition says so, see `AlarmBoard.condition`. Larger values are worse."""

    text: str
    severity: Severity
    unit: str = ""
    limit: float | None = None
    hold_s: float = 0.0
    release_s: float = 0.0
    latch: bool = False

    def worse(self, one: float, other: float) -> float:
        """The worse of two values."""
        return max(one, other)


def built_in_alarms(stall_s: float | None = None) -> tuple[BuiltInAlarm, ...]:
    """The alarms that every watch has; ``stall_s`` is told as the limit of ``no samples``.

    Values: ``no samples`` seconds without any; ``samples lost`` samples lost at once; ``clipping`` per cent of a block. Lost samples and
    clipping come and go with every block, so they clear only after a while without.
    """
    return (
        BuiltInAlarm("no samples", "high", "s", stall_s),
        BuiltInAlarm("lock lost", "high"),
        BuiltInAlarm("samples lost", "medium", "samples", release_s=5.0),
        BuiltInAlarm("clipping", "medium", "%", release_s=2.0),
    )


def parse_rule(text: str) -> AlarmRule:
    """The rule ``FIGURE < NUMBER`` or ``FIGURE > NUMBER``, the rest as by default. Raises InputError."""
    match = _RULE.fullmatch(text)
    if match is None:
        raise InputError(f"rule {text[:80]!r} cannot be read; write a figure, < or >, and a number: 'opening_pct < 40'")
    figure, comparison, limit = match.groups()
    return AlarmRule(figure, "<" if comparison == "<" else ">", float(limit))


def parse_rules(tables: Iterable[Mapping[str, Any]], *, where: str = "link file") -> tuple[AlarmRule, ...]:
    """The rules of a link file's ``[[alarm]]`` tables, in their order.

    Raises InputError that begins with ``where`` and the number of the table, the first being 1.
    """
    rules: list[AlarmRule] = []
    seen: dict[str, int] = {}
    for number, table in enumerate(tables, start=1):
        try:
            rule = _rule_of(table)
            first = seen.setdefault(rule.text, number)
            if first != number:
                raise InputError(f"{rule.text!r} stands already in alarm {first}; an alarm goes by its rule, once")
        except InputError as error:
            raise InputError(f"{where}: alarm {number}: {error}") from None
        rules.append(rule)
    return tuple(rules)


def unit_of(figure: str) -> str:
    """The unit that the figure's name ends in, as a sign; empty for a plain number."""
    for suffix, unit in _UNITS.items():
        if figure.endswith(suffix):
            return unit
    return ""


def number_text(value: float) -> str:
    """A number as one would type it: ``40``, ``0.35``, ``1e-6``; reading it back gives the same number."""
    if value == int(value) and abs(value) < 1e15:
        return str(int(value))
    return re.sub(r"e([-+])0+(?=\d)", r"e\1", repr(float(value))).replace("e+", "e")


def _rule_of(table: Mapping[str, Any]) -> AlarmRule:
    for key in table:
        if key not in _KEYS:
            raise InputError(f"{key!r} is not a key of [[alarm]]; take {', '.join(_KEYS)}")
    text = table.get("rule")
    if not isinstance(text, str):
        raise InputError("there must be a rule as text, such as rule = 'opening_pct < 40'")
    rule = parse_rule(text)
    severity, latch = table.get("severity", rule.severity), table.get("latch", rule.latch)
    if not isinstance(severity, str):
        raise InputError(f"severity must be text, got {severity!r}")
    if not isinstance(latch, bool):
        raise InputError(f"latch must be true or false, got {latch!r}")
    return AlarmRule(
        rule.figure,
        rule.comparison,
        rule.limit,
        _number(table, "clear") if "clear" in table else None,
        _number(table, "hold_s") if "hold_s" in table else rule.hold_s,
        _number(table, "release_s") if "release_s" in table else rule.release_s,
        severity,  # type: ignore[arg-type]  # the rule itself refuses what is none
        latch,
    )


def _number(table: Mapping[str, Any], key: str) -> float:
    value = table[key]
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise InputError(f"{key} must be a number, got {value!r}")
    try:
        return float(value)
    except OverflowError:
        return math.inf


def _unknown_figure(figure: str) -> str:
    if figure in _NOT_ONE_NUMBER:
        parts = [name for name in FIGURES if name.startswith(f"{figure}.")]
        mend = f"; take one of {', '.join(parts)}" if parts else ""
        return f"figure {figure!r} is not one number{mend}"
    near = difflib.get_close_matches(figure, FIGURES, n=4, cutoff=0.5)
    if not near:
        near = [name for name in FIGURES if figure and figure in name][:4]
    mend = f"near it: {', '.join(near)}" if near else f"take one of {', '.join(FIGURES)}"
    return f"figure {figure!r} is not known; {mend}"
