"""The alarms of one stream: which stand, since when, how bad, and who has seen them.

The states and transitions are those of ANSI/ISA-18.2 and IEC 62682. Time is the stream's: seconds and sample index are handed in, so that
a recording gives the same alarms as the live stream did.
"""

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final, Literal

from monitor.alarm_rules import AlarmRule, BuiltInAlarm, Severity, built_in_alarms, number_text, parse_rules
from monitor.errors import InputError

__all__ = ["AlarmBoard", "AlarmEvent", "AlarmRule", "AlarmState", "StandardState", "parse_rules"]

StandardState = Literal["normal", "unacknowledged", "acknowledged", "returned", "latched", "shelved"]
EventState = Literal["raised", "cleared", "acknowledged", "latched", "resumed", "shelved", "unshelved"]

_SLACK_S: Final = (
    1e-6  # a delay of 2 s has passed between 0.3 s and 2.3 s, whatever the last bit of the difference says
)
_LONGEST_SHELF_S: Final = 86400.0
_MOST_RECORDED: Final = 10_000
_RANK: Final[dict[Severity, int]] = {"high": 0, "medium": 1, "low": 2}


@dataclass(frozen=True, slots=True)
class AlarmEvent:
    """Something that happened to one alarm, at a time of the stream.

    ``state``: ``raised``; ``cleared`` (with a latch: only when acknowledged); ``acknowledged``; ``latched`` (the cause is gone, the alarm
    stays) and ``resumed`` (it came back before that); ``shelved`` and ``unshelved``. ``value`` is the figure at that moment, ``worst`` the
    worst since the cause was first seen; both None where there is none.
    """

    state: EventState
    rule: str
    severity: Severity
    seconds: float
    sample: int
    value: float | None
    worst: float | None
    limit: float | None
    unit: str
    raised_at_s: float | None
    cleared_at_s: float | None
    shelved_until_s: float | None = None

    def fields(self) -> dict[str, Any]:
        """What an alarm line of the journal holds beside kind, time, sample and seconds."""
        found: dict[str, Any] = {
            "state": self.state,
            "rule": self.rule,
            "severity": self.severity,
            "value": self.value,
            "worst": self.worst,
            "limit": self.limit,
            "unit": self.unit,
            "raised_at_s": self.raised_at_s,
            "cleared_at_s": self.cleared_at_s,
        }
        if self.state == "shelved":
            found["shelved_until_s"] = self.shelved_until_s
        return found


@dataclass(frozen=True, slots=True)
class AlarmState:
    """One alarm as it is now.

    ``active``: raised and not cleared. ``since_s``: when it was raised, or shelved if it was not. ``text`` says value, limit and worst.
    ``activations`` counts how often it was raised.
    """

    name: str
    severity: Severity
    state: StandardState
    active: bool
    value: float | None
    worst: float | None
    limit: float | None
    unit: str
    since_s: float
    raised_at_s: float | None
    cleared_at_s: float | None
    shelved_until_s: float | None
    activations: int
    text: str

    @property
    def shown(self) -> bool:
        """Whether a view has anything to show: not normal."""
        return self.state != "normal"


@dataclass(slots=True)
class _Activation:
    """One time that an alarm stood."""

    number: int
    raised_at_s: float
    worst: float | None
    cleared_at_s: float | None = None


class AlarmBoard:
    """All alarms of one stream. Owned by the thread that runs the chain.

    States, with the letters of ISA-18.2: normal (A), unacknowledged (B), acknowledged (C), returned to normal unacknowledged (D), latched
    unacknowledged (E), shelved (G). Acknowledging is also the reset of a latch, so that latched acknowledged (F) does not last.

    A figure that cannot be known (None, absent, not finite) neither raises nor clears anything, and the time for which it is unknown
    counts towards no delay; what was pending goes on afterwards. Delays of rules end at a reading that shows the cause (or its end) still
    there, never between readings. Shelving hides an alarm for a time: its state goes on underneath, it may clear, but it is not raised.

    Time may stand still; where it goes back (a caller with two clocks), each alarm takes it as standing still.

    Parameters
    ----------
    rules
        Of the link file; no two with the same text.
    built_in
        Alarms fed by `condition`; None: `built_in_alarms`.

    Raises
    ------
    InputError
        Two alarms of one name.
    """

    def __init__(self, rules: Sequence[AlarmRule] = (), built_in: Sequence[BuiltInAlarm] | None = None) -> None:
        self._figures = [_FigureAlarm(rule) for rule in rules]
        self._conditions = [_Alarm(alarm) for alarm in (built_in_alarms() if built_in is None else built_in)]
        self._by_name = {alarm.name: alarm for alarm in (*self._figures, *self._conditions)}
        if len(self._by_name) != len(self._figures) + len(self._conditions):
            raise InputError("two alarms have the same rule; an alarm goes by its rule, once")
        self._activations = 0
        self._left_out = 0
        self._history: list[tuple[_Alarm, _Activation]] = []

    @property
    def activations(self) -> int:
        """How often any alarm was raised."""
        return self._activations

    @property
    def left_out(self) -> int:
        """Activations no longer in `record`: it holds the last 10000, and all that stand."""
        return self._left_out

    def update(self, figures: Mapping[str, Any] | None, seconds: float, sample: int) -> tuple[AlarmEvent, ...]:
        """Judge all rules by a reading.

        ``figures``: by the reading's keys, as `reading_document` gives them (parts of the budget within it, or under ``budget.isi_pct``);
        None: nothing is known.
        """
        events = self._end_shelves(seconds, sample)
        for alarm in self._figures:
            value = _figure(figures, alarm.rule.figure)
            events += alarm.judge(value, seconds, sample)
        return self._gathered(events)

    def condition(
        self, name: str, active: bool, seconds: float, sample: int, value: float | None = None
    ) -> tuple[AlarmEvent, ...]:
        """Tell whether a built-in alarm's cause is there; it counts as so until told otherwise. KeyError: no such alarm."""
        alarm = self._by_name[name]
        if isinstance(alarm, _FigureAlarm):
            raise KeyError(name)
        events = self._end_shelves(seconds, sample)
        events += alarm.see(active, _known(value), seconds, sample)
        return self._gathered(events)

    def advance(self, seconds: float, sample: int) -> tuple[AlarmEvent, ...]:
        """Let time pass with nothing new to judge: shelves end, and delays of the built-in alarms."""
        events = self._end_shelves(seconds, sample)
        for alarm in self._conditions:
            events += alarm.see_again(seconds, sample)
        return self._gathered(events)

    def acknowledge(self, name: str | None, seconds: float, sample: int) -> tuple[AlarmEvent, ...]:
        """Somebody has seen the alarm (None: all that show): what is latched and over clears. Raises InputError for an unknown name."""
        events = self._end_shelves(seconds, sample)
        for alarm in self._named(name):
            events += alarm.acknowledge(seconds, sample)
        return self._gathered(events)

    def shelve(self, name: str | None, for_s: float, seconds: float, sample: int) -> tuple[AlarmEvent, ...]:
        """Put an alarm aside for so many seconds; None: the foremost that shows (unacknowledged, most severe, newest first).

        Raises InputError for an unknown name, or a time not above 0 and at most a day.
        """
        if not 0.0 < for_s <= _LONGEST_SHELF_S:
            raise InputError(
                f"an alarm is shelved for more than 0 and at most {_LONGEST_SHELF_S:g} seconds, got {for_s!r}"
            )
        events = self._end_shelves(seconds, sample)
        alarms = self._named(name)
        if name is None:
            alarms = sorted((alarm for alarm in alarms if alarm.state not in ("normal", "shelved")), key=_precedence)[
                :1
            ]
        for alarm in alarms:
            events += alarm.shelve(for_s, seconds, sample)
        return self._gathered(events)

    def unshelve(self, name: str | None, seconds: float, sample: int) -> tuple[AlarmEvent, ...]:
        """Take an alarm (None: all) back from the shelf before its time. Raises InputError for an unknown name."""
        events = self._end_shelves(seconds, sample)
        for alarm in self._named(name):
            events += alarm.unshelve(seconds, sample)
        return self._gathered(events)

    def snapshot(self) -> tuple[AlarmState, ...]:
        """Every alarm as it is now, in the order of the rules, the built-in ones last."""
        return tuple(alarm.as_it_is() for alarm in self._by_name.values())

    def record(self) -> list[dict[str, Any]]:
        """Each time an alarm stood, oldest first, as the JSON document's ``alarms``."""
        return [
            {
                "rule": alarm.name,
                "severity": alarm.severity,
                "raised_at_s": activation.raised_at_s,
                "cleared_at_s": activation.cleared_at_s,
                "worst": activation.worst,
                "limit": alarm.limit,
                "unit": alarm.unit,
            }
            for alarm, activation in self._history
        ]

    def _named(self, name: str | None) -> "list[_Alarm]":
        if name is None:
            return list(self._by_name.values())
        if name not in self._by_name:
            raise InputError(f"there is no alarm {name!r}; there are {', '.join(map(repr, self._by_name))}")
        return [self._by_name[name]]

    def _end_shelves(self, seconds: float, sample: int) -> list[AlarmEvent]:
        events: list[AlarmEvent] = []
        for alarm in self._by_name.values():
            if alarm.shelved_until_s is not None and seconds >= alarm.shelved_until_s - _SLACK_S:
                events += alarm.unshelve(seconds, sample)
        return events

    def _gathered(self, events: Iterable[AlarmEvent]) -> tuple[AlarmEvent, ...]:
        events = tuple(events)
        for event in events:
            if event.state == "raised":
                alarm = self._by_name[event.rule]
                self._activations += 1
                self._history.append((alarm, alarm.last_activation))
        if len(self._history) > _MOST_RECORDED + 1000:  # in steps: a list is not shortened at every alarm
            surplus = len(self._history) - _MOST_RECORDED
            kept = [entry for entry in self._history[:surplus] if entry[1].cleared_at_s is None]
            self._left_out += surplus - len(kept)
            self._history[:surplus] = kept
        return events


class _Alarm:
    """One alarm's state; fed by conditions, `_FigureAlarm` by a figure."""

    def __init__(self, what: AlarmRule | BuiltInAlarm) -> None:
        self.name, self.severity, self.limit, self.unit = what.text, what.severity, what.limit, what.unit
        self._what = what
        self._now_s = -math.inf
        self._standing = False  # the cause, behind its delays
        self._acknowledged = True
        self._contrary_since_s: float | None = None  # since when the cause says other than `_standing`
        self._unknown_since_s: float | None = None
        self._pending_worst: float | None = None
        self._activation: _Activation | None = None
        self._value: float | None = None
        self._active_now = False
        self.shelved_until_s: float | None = None
        self._shelved_at_s = 0.0

    # -- the cause -----------------------------------------------------------------------------------------------------

    def see(self, cause: bool, value: float | None, seconds: float, sample: int) -> list[AlarmEvent]:
        """The cause is there, or not; ``value`` tells how bad."""
        seconds = self._time(seconds)
        self._active_now, self._value = cause, value
        if self._unknown_since_s is not None:
            if self._contrary_since_s is not None:
                self._contrary_since_s += seconds - self._unknown_since_s
            self._unknown_since_s = None
        activation = self._activation
        if activation is not None and activation.cleared_at_s is None:
            activation.worst = self._worse(activation.worst, value)
        elif cause:
            self._pending_worst = self._worse(self._pending_worst, value)
        if cause == self._standing:
            self._contrary_since_s = None
            if not cause:
                self._pending_worst = None
            return []
        if self._contrary_since_s is None:
            self._contrary_since_s = seconds
        delay = self._what.hold_s if cause else self._what.release_s
        if seconds - self._contrary_since_s < delay - _SLACK_S:
            return []
        return self._start(seconds, sample) if cause else self._end(seconds, sample)

    def see_nothing(self, seconds: float) -> list[AlarmEvent]:
        """Whether the cause is there cannot be known."""
        seconds = self._time(seconds)
        self._value = None
        if self._unknown_since_s is None:
            self._unknown_since_s = seconds
        return []

    def see_again(self, seconds: float, sample: int) -> list[AlarmEvent]:
        """Nothing new: the cause is as it was told last."""
        return self.see(self._active_now, self._value, seconds, sample)

    def _start(self, seconds: float, sample: int) -> list[AlarmEvent]:
        if self._latched:
            self._standing, self._contrary_since_s = True, None
            return [self._event("resumed", seconds, sample)]
        if self.shelved_until_s is not None:
            return []  # stays pending, and is raised when the shelf ends
        self._standing, self._contrary_since_s = True, None
        self._acknowledged = False
        number = self._activation.number + 1 if self._activation is not None else 1
        self._activation = _Activation(number, seconds, self._pending_worst)
        self._pending_worst = None
        return [self._event("raised", seconds, sample)]

    def _end(self, seconds: float, sample: int) -> list[AlarmEvent]:
        self._standing, self._contrary_since_s = False, None
        if self._latched:
            return [self._event("latched", seconds, sample)]
        return self._clear(seconds, sample)

    def _clear(self, seconds: float, sample: int) -> list[AlarmEvent]:
        self.last_activation.cleared_at_s = seconds
        return [self._event("cleared", seconds, sample)]

    # -- the person ----------------------------------------------------------------------------------------------------

    def acknowledge(self, seconds: float, sample: int) -> list[AlarmEvent]:
        """Seen; a shelved alarm shows nothing that could be."""
        seconds = self._time(seconds)
        if self._acknowledged or self.shelved_until_s is not None:
            return []
        over = self._latched
        self._acknowledged = True
        events = [self._event("acknowledged", seconds, sample)]
        return events + self._clear(seconds, sample) if over else events

    def shelve(self, for_s: float, seconds: float, sample: int) -> list[AlarmEvent]:
        """Put aside; again puts aside from now."""
        seconds = self._time(seconds)
        self.shelved_until_s, self._shelved_at_s = seconds + for_s, seconds
        return [self._event("shelved", seconds, sample)]

    def unshelve(self, seconds: float, sample: int) -> list[AlarmEvent]:
        """Back from the shelf; the cause of a built-in alarm that is there and was not raised is raised."""
        if self.shelved_until_s is None:
            return []
        seconds = self._time(seconds)
        self.shelved_until_s = None
        return [self._event("unshelved", seconds, sample), *self._after_shelf(seconds, sample)]

    def _after_shelf(self, seconds: float, sample: int) -> list[AlarmEvent]:
        return self.see_again(seconds, sample)

    # -- what it is now ------------------------------------------------------------------------------------------------

    @property
    def last_activation(self) -> _Activation:
        """The present or last time it stood; only after it was raised."""
        assert self._activation is not None
        return self._activation

    @property
    def _latched(self) -> bool:
        """Held by its latch alone."""
        activation = self._activation
        open_ = activation is not None and activation.cleared_at_s is None
        return open_ and self._what.latch and not self._standing and not self._acknowledged

    @property
    def state(self) -> StandardState:
        """The state by the standard's names."""
        if self.shelved_until_s is not None:
            return "shelved"
        if self._standing:
            return "acknowledged" if self._acknowledged else "unacknowledged"
        if self._acknowledged:
            return "normal"
        return "latched" if self._latched else "returned"

    def as_it_is(self) -> AlarmState:
        """All of it, for a view."""
        activation, state = self._activation, self.state
        raised = activation is not None and (activation.cleared_at_s is None or not self._acknowledged)
        return AlarmState(
            name=self.name,
            severity=self.severity,
            state=state,
            active=activation is not None and activation.cleared_at_s is None,
            value=self._value,
            worst=activation.worst if activation is not None else None,
            limit=self.limit,
            unit=self.unit,
            since_s=activation.raised_at_s if activation is not None and raised else self._shelved_at_s,
            raised_at_s=activation.raised_at_s if activation is not None else None,
            cleared_at_s=activation.cleared_at_s if activation is not None else None,
            shelved_until_s=self.shelved_until_s,
            activations=activation.number if activation is not None else 0,
            text=self._text(state),
        )

    def _text(self, state: StandardState) -> str:
        parts = []
        if state == "shelved":
            parts.append(f"until {self.shelved_until_s:.0f} s")
        if state == "latched":
            parts.append("held until acknowledged")
        elif state != "returned" and self._value is not None:
            parts.append(f"now {self._with_unit(self._value)}")
        elif state != "returned" and isinstance(self, _FigureAlarm):
            parts.append("now unknown")
        if self.limit is not None:
            parts.append(f"limit {self._with_unit(self.limit)}")
        if self._activation is not None and self._activation.worst is not None:
            parts.append(f"worst {self._with_unit(self._activation.worst)}")
        return ", ".join(parts)

    def _with_unit(self, value: float) -> str:
        return f"{number_text(float(f'{value:.4g}'))} {self.unit}".rstrip()

    def _event(self, state: EventState, seconds: float, sample: int) -> AlarmEvent:
        activation = self._activation
        return AlarmEvent(
            state,
            self.name,
            self.severity,
            seconds,
            sample,
            self._value,
            activation.worst if activation is not None else None,
            self.limit,
            self.unit,
            activation.raised_at_s if activation is not None else None,
            activation.cleared_at_s if activation is not None else None,
            self.shelved_until_s,
        )

    def _time(self, seconds: float) -> float:
        self._now_s = max(self._now_s, seconds)
        return self._now_s

    def _worse(self, one: float | None, other: float | None) -> float | None:
        if one is None or other is None:
            return other if one is None else one
        return self._what.worse(one, other)


class _FigureAlarm(_Alarm):
    """An alarm over a figure of the reading."""

    def __init__(self, rule: AlarmRule) -> None:
        super().__init__(rule)
        self.rule = rule

    def judge(self, value: float | None, seconds: float, sample: int) -> list[AlarmEvent]:
        """The figure as read; None: not known."""
        if value is None:
            return self.see_nothing(seconds)
        return self.see(self.rule.broken(value, standing=self._standing), value, seconds, sample)

    def _after_shelf(self, seconds: float, sample: int) -> list[AlarmEvent]:
        return []  # the next reading tells


def _precedence(alarm: _Alarm) -> tuple[bool, int, float]:
    return alarm.state == "acknowledged", _RANK[alarm.severity], -alarm.last_activation.raised_at_s


def _figure(figures: Mapping[str, Any] | None, name: str) -> float | None:
    """A figure by its key or by its path; None unless it is a finite number."""
    if figures is None:
        return None
    value: Any = figures.get(name)
    if value is None and "." in name:
        outer, _, inner = name.partition(".")
        group = figures.get(outer)
        value = group.get(inner) if isinstance(group, Mapping) else None
    return _known(value)


def _known(value: object) -> float | None:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return None
    return float(value) if math.isfinite(value) else None
