"""A report on a link: one HTML page that needs nothing beside itself, for the screen and for paper."""

import base64
import os
from collections.abc import Iterable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from importlib.resources import files
from pathlib import Path
from typing import Any

from jinja2 import Environment, StrictUndefined
from markupsafe import Markup

from dsp.chain import ChainOptions
from dsp.diagnosis import Diagnosis
from dsp.identify import Identified
from dsp.link import Link
from dsp.reading import Budget, Reading
from monitor.definitions import BEHIND, OPENING, definition_of
from monitor.errors import InputError, printable
from monitor.session import Outcome
from monitor.snapshot import Snapshot
from monitor.snapshots import snapshot_of
from monitor.state import LiveState
from monitor.version import version
from monitor.views.diagnosis_wording import cause_figures, error_figures, remedies, strongest
from monitor.views.history import AlarmSpan
from monitor.views.live_wording import clock, mark_words
from monitor.views.wording import (
    UNEXPLAINED,
    budget_rows,
    figure_groups,
    interval_text,
    plain,
    power_of_ten,
    rate_interval,
    sentence,
    signed,
    unknown_causes,
)

_MOST_EVENTS = 200
_END_S = 0.01


@dataclass(frozen=True, slots=True)
class Setting:
    """What was taken to be so, and whether it was given or found."""

    label: str
    value: str
    how: str = ""


@dataclass(frozen=True, slots=True)
class ReportFacts:
    """All that a report tells.

    Attributes
    ----------
    snapshot
        Figures, eye and what stands behind them; without a reading the notes say why.
    settings, limits
        What was taken to be so; the alarm rules' text.
    state
        History, marks, gaps and locks; None where none was kept.
    alarms
        Each time an alarm stood, as the JSON document has them.
    stream
        Length, losses and the like: label and value.
    worst
        Of windows: what they were, and the reading with the least opening.
    made
        When.
    """

    snapshot: Snapshot
    settings: tuple[Setting, ...] = ()
    limits: tuple[str, ...] = ()
    state: LiveState | None = None
    alarms: tuple[dict[str, Any], ...] = ()
    stream: tuple[tuple[str, str], ...] = ()
    worst: tuple[str, Reading] | None = None
    made: datetime = field(default_factory=lambda: datetime.now(UTC))


def link_settings(link: Link | None, found: Iterable[str], options: ChainOptions) -> tuple[Setting, ...]:
    """The link's parts with how each is known, and how it was measured."""
    rows = []
    if link is not None:
        found = set(found)

        def how(key: str) -> str:
            return "found by itself" if key in found else "given"

        scheme = link.scheme
        carrier = "found by the carrier loop" if link.carrier_hz is None else f"{signed(link.carrier_hz, 1)} Hz"
        rows += [
            Setting(
                "Scheme",
                f"{scheme.name}: {scheme.levels} levels on {scheme.rails} rail{'s' * (scheme.rails > 1)}",
                how("scheme"),
            ),
            Setting("Symbol rate", f"{link.symbol_rate_hz:.9g} Bd", how("symbol_rate_hz")),
            Setting("Samples a symbol", f"{link.samples_per_symbol:.6g}", "follows"),
            Setting("Pulse", str(link.pulse), how("pulse")),
        ]
        if scheme.kind != "baseband":
            rows.append(Setting("Carrier, from the recording's centre", carrier, how("carrier_hz")))
    detector = options.detector or "chosen by the pulse"
    return (
        *rows,
        Setting("Timing detector", detector, "given" if options.detector else "default"),
        Setting("Timing loop, BnT", f"{options.timing_bandwidth:g} a symbol"),
        Setting("Target error rate", power_of_ten(options.target_ber)),
        Setting("Decisions", "by thresholds mid-way between the levels, at the instant where the eye is widest open"),
    )


def facts_of_run(
    outcome: Outcome, options: ChainOptions, limits: Iterable[str] = (), state: LiveState | None = None
) -> ReportFacts:
    """What is to be told of a replay; ``state`` is what an engine kept of it beside."""
    info, windows = outcome.source.info, outcome.windows
    stream = (
        ("Length", f"{plain(outcome.seconds, 3)} s, {plain(outcome.samples, 0)} samples"),
        ("Samples lost", f"{plain(outcome.samples_lost, 0)} in {outcome.gaps} gap{'s' * (outcome.gaps != 1)}"),
        ("At the format's end stops", plain(outcome.clipped, 0)),
        ("Not finite", plain(outcome.nonfinite, 0)),
        ("Lock", f"{plain(outcome.locked_pct, 1)} % of the time, {outcome.slips} slip{'s' * (outcome.slips != 1)}"),
    )
    worst = None
    if windows.worst is not None:
        text = f"{windows.count} window{'s' * (windows.count != 1)} of {plain(windows.symbols_each, 0)} symbols"
        worst = (text, windows.worst)
    rate = Setting("Samples", f"{info.format} at {info.sample_rate_hz:.12g} Hz")
    return ReportFacts(
        snapshot_of(outcome),
        (rate, *link_settings(outcome.link, outcome.identified, options)),
        tuple(limits),
        state,
        tuple(outcome.alarms),
        stream,
        worst,
    )


def facts_of_watch(
    state: LiveState,
    identified: Identified | None,
    options: ChainOptions,
    limits: Iterable[str] = (),
    alarms: Iterable[dict[str, Any]] = (),
) -> ReportFacts:
    """What is to be told of a watch up to a state: its newest figures, and the course of all of it."""
    link, found = (None, ()) if identified is None else (identified.link, identified.found)
    stream = [
        ("Watched", f"{plain(state.seconds, 1)} s of the stream"),
        ("Samples lost", plain(state.samples_lost, 0)),
    ]
    reading = state.snapshot.reading
    if reading is not None:
        stream.append(("Figures are of the last", f"{plain(reading.symbols, 0)} symbols"))
    if state.best is not None and state.best.opening_pct is not None:
        at = "" if state.best_at_s is None else f" at {clock(state.best_at_s)}"
        stream.append(("Best opening", f"{plain(state.best.opening_pct, 1)} %{at}"))
    if state.change is not None and state.marks:
        change = state.change
        between = f"{signed(change.low, 1)} to {signed(change.high, 1)}"
        stream.append(("Since the last mark", f"{change.verdict}: {signed(change.points, 1)} points (95 %: {between})"))
    return ReportFacts(
        state.snapshot, link_settings(link, found, options), tuple(limits), state, tuple(alarms), tuple(stream)
    )


def save_report(facts: ReportFacts, path: str | os.PathLike[str]) -> None:
    """Write the page; a file of that name is overwritten. From the main thread at first. Raises InputError."""
    from monitor.views.painter import ensure_application

    ensure_application()
    page = render(facts)
    try:
        Path(path).write_text(page, encoding="utf-8")
    except (OSError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise InputError(f"report {os.fspath(path)!r} cannot be written: {reason}; give another path") from error


def render(facts: ReportFacts) -> str:
    """The page. Needs Qt's application object, for the pictures."""
    from monitor.views.report_pictures import draw_pictures

    snapshot, state = facts.snapshot, facts.state
    reading, diagnosis = snapshot.reading, snapshot.diagnosis or Diagnosis()
    end = state.seconds if state is not None else snapshot.seconds or 0.0
    spans = [
        AlarmSpan(
            alarm["rule"],
            alarm["severity"],
            alarm["raised_at_s"],
            end if alarm["cleared_at_s"] is None else alarm["cleared_at_s"],
        )
        for alarm in facts.alarms
    ]
    pictures = {
        name: Markup("data:image/png;base64," + base64.b64encode(data).decode("ascii"))
        for name, data in draw_pictures(snapshot, state, spans).items()
    }
    environment = Environment(
        autoescape=True, finalize=_one_line, undefined=StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    template = environment.from_string(files("monitor").joinpath("report.html.j2").read_text(encoding="utf-8"))
    return template.render(
        title=snapshot.link_text or snapshot.source_text or "no link",
        source=snapshot.source_text,
        lock=snapshot.lock_text,
        version=version(),
        made=facts.made.astimezone(UTC).strftime("%Y-%m-%d %H:%M:%S UTC"),
        notes=snapshot.notes,
        settings=facts.settings,
        limits=facts.limits,
        stream=facts.stream,
        pictures=pictures,
        opening=_opening(reading),
        interval=interval_text(reading) if reading is not None else None,
        closed=reading is not None and reading.opening_pct is not None and reading.opening_pct <= 0,
        verdict=sentence(reading.verdict) if reading is not None and reading.verdict else None,
        remarks=[sentence(remark) for remark in diagnosis.remarks],
        balance=_balance(reading) if reading is not None and reading.budget is not None else [],
        unknown=[label.lower().replace("i/q", "I/Q") for label in unknown_causes(reading.budget)]
        if reading is not None and reading.budget is not None
        else [],
        causes=cause_figures(diagnosis),
        remedies=[
            (
                r.words,
                None if r.before_pct is None else plain(r.before_pct, 1),
                None if r.after_pct is None else plain(r.after_pct, 1),
            )
            for r in (remedies(reading, diagnosis) if reading is not None else [])
        ],
        neighbours=strongest(diagnosis.response, 6) if diagnosis.response is not None else [],
        errors=error_figures(reading, diagnosis) if reading is not None else [],
        eyes=_eyes(reading, snapshot) if reading is not None else [],
        groups=_groups(reading, diagnosis) if reading is not None else [],
        opening_definition=OPENING,
        behind=BEHIND,
        worst=_worst(facts),
        events=_events(state) if state is not None else [],
        more_events=_more_events(state) if state is not None else 0,
        alarms=[_alarm(alarm, end) for alarm in facts.alarms],
        judged=state is not None,
    )


def _one_line(value: object) -> object:
    """Names and words without control characters; what is known to be safe as it is."""
    return printable(value) if isinstance(value, str) and not isinstance(value, Markup) else value


def _opening(reading: Reading | None) -> str | None:
    return None if reading is None or reading.opening_pct is None else plain(reading.opening_pct, 1)


@dataclass(frozen=True, slots=True)
class _Step:
    """One stair of the balance: where its bar begins and how wide it is, in per cent of the axis."""

    label: str
    points: str
    start: float
    width: float
    kind: str


def _balance(reading: Reading) -> list[_Step]:
    """From what is left open over each cause up to 100, and the sum."""
    budget = reading.budget or Budget()
    rows: list[tuple[str, float, str]] = []
    if reading.opening_at_ber_pct is not None:
        rows.append(("Left open at the target error rate", reading.opening_at_ber_pct, "left"))
    causes = budget_rows(budget)
    rows += [
        (label, points, "none" if label == UNEXPLAINED else "first" if number == 0 else "cause")
        for number, (label, points) in enumerate(causes)
    ]
    if not causes:
        return []
    ends = [0.0]
    for _, points, _ in rows:
        ends.append(ends[-1] + points)
    low, high = min(0.0, *ends), max(100.0, *ends)
    steps = []
    for (label, points, kind), a, b in zip(rows, ends[:-1], ends[1:], strict=True):
        start, stop = (100.0 * (value - low) / (high - low) for value in sorted((a, b)))
        steps.append(
            _Step(
                label,
                plain(points, 1),
                round(start, 2),
                round(max(stop - start, 0.3) if abs(points) >= 0.05 else 0.0, 2),
                kind,
            )
        )
    whole = 100.0 * (0.0 - low) / (high - low)
    steps.append(_Step("Together", plain(ends[-1], 1), round(whole, 2), 0.0, "sum"))
    return steps


def _eyes(reading: Reading, snapshot: Snapshot) -> list[tuple[str, ...]]:
    """Each eye's own figures; the rail's name before its first eye."""

    def told(value: float | None, digits: int, unit: str = "", *, sign: bool = False) -> str:
        return "not known" if value is None else (signed if sign else plain)(value, digits) + unit

    rails = snapshot.image.rails if snapshot.image is not None else ("",)
    each = max(len(reading.eyes) // len(rails), 1)
    rows: list[tuple[str, ...]] = []
    for number, eye in enumerate(reading.eyes):
        rail = rails[min(number // each, len(rails) - 1)]
        name = f"{rail} {number % each + 1}".strip() if len(reading.eyes) > 1 else "the eye"
        rows.append(
            (
                name,
                told(eye.opening_pct, 1, " %"),
                told(eye.height, 3),
                told(eye.width_ui, 3, " UI"),
                told(eye.centre_ui, 3, " UI", sign=True),
                told(eye.threshold, 3, sign=True),
            )
        )
    return rows


def _groups(reading: Reading, diagnosis: Diagnosis) -> list[tuple[str, list[tuple[str, str, str, str]]]]:
    """Every known figure by its group: label, value, interval, definition."""
    groups = []
    for group in figure_groups(reading, diagnosis.intervals):
        rows = []
        for figure in group.figures:
            if figure.label.startswith("… 95 %"):
                continue
            interval = figure.interval
            if figure.label == "Bit error rate" and reading.ber_low is not None and reading.ber_high is not None:
                interval = rate_interval(reading.ber_low, reading.ber_high)
            rows.append((figure.label, figure.value, interval, definition_of(figure.label)))
        groups.append((group.title, rows))
    return groups


def _worst(facts: ReportFacts) -> list[tuple[str, str]]:
    if facts.worst is None:
        return []
    text, reading = facts.worst
    rows = [
        ("Windows", text),
        ("Least opening of them", f"{_opening(reading) or 'not known'} %".replace("known %", "known")),
    ]
    if reading.snr_db is not None:
        rows.append(("SNR in that one", f"{plain(reading.snr_db, 1)} dB"))
    if reading.ber is not None:
        rows.append(("Bit error rate in that one", power_of_ten(reading.ber)))
    return rows


def _at(seconds: float, length: float) -> str:
    """A place in a stream of that length."""
    return f"{seconds:.2f} s" if length < 120 else clock(seconds)


def _all_events(state: LiveState) -> list[tuple[float, str]]:
    locks = state.locks
    if state.ended and locks and not locks[-1][1] and locks[-1][0] >= state.seconds - _END_S:
        locks = locks[:-1]  # that was the stream's end
    events = [(at, "lock gained" if gained else "lock lost") for at, gained in locks]
    events += [(at, "samples lost") for at in state.gaps_s]
    for number, mark in enumerate(state.marks, start=1):
        opening = "" if mark.opening_pct is None else f", opening {plain(mark.opening_pct, 1)} %"
        events.append((mark.seconds, f"{mark_words(mark.name, number)}{opening}"))
    return sorted(events)


def _events(state: LiveState) -> list[tuple[str, str]]:
    """What happened when, oldest first."""
    return [(_at(at, state.seconds), what) for at, what in _all_events(state)[:_MOST_EVENTS]]


def _more_events(state: LiveState) -> int:
    return max(0, len(_all_events(state)) - _MOST_EVENTS)


def _alarm(alarm: dict[str, Any], length: float) -> tuple[str, ...]:
    def number(value: object, unit: str = "") -> str:
        return f"{value:.6g}{unit}" if isinstance(value, int | float) else ""

    unit = f" {alarm['unit']}" if alarm["unit"] else ""
    cleared = alarm["cleared_at_s"]
    return (
        alarm["rule"],
        alarm["severity"],
        _at(alarm["raised_at_s"], length),
        "stood at the end" if cleared is None else _at(cleared, length),
        number(alarm["worst"], unit),
        number(alarm["limit"], unit),
    )
