"""The strip under the live page: how the opening went over the watch."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from monitor.state import LiveState
from monitor.views.canvas import Canvas
from monitor.views.drawing import y_of
from monitor.views.history import AlarmSpan, Run, history_runs, lost_spans, time_ticks, value_range
from monitor.views.layout import Box
from monitor.views.live_wording import clock, span_words
from monitor.views.pixels import tick_step
from monitor.views.wording import plain

_TEXT, _SMALL = 13.0, 12.0
_LEAST_SPAN_S = 60.0


@dataclass(frozen=True, slots=True)
class _Strip:
    """The plot with its axes: from ``start`` to ``end`` seconds, ``low`` to ``high`` per cent."""

    plot: Box
    start: float
    end: float
    low: float
    high: float

    def x(self, seconds: float) -> float:
        return self.plot.x + self.plot.width * (seconds - self.start) / (self.end - self.start)

    def y(self, opening_pct: float) -> float:
        return y_of(self.plot, opening_pct, self.low, self.high)


def draw_history(
    canvas: Canvas, box: Box, plot: Box, state: LiveState, alarms: Sequence[AlarmSpan], span_s: float | None
) -> None:
    """The opening over the last ``span_s`` seconds or, for None, the whole watch: ``plot`` within ``box``.

    With marks above it, alarms under it, lost samples and missing lock on it.
    """
    theme = canvas.theme
    now = max(state.seconds, 1e-9)
    start = 0.0 if span_s is None else max(0.0, now - span_s)
    # before the first minute is over, time runs into an empty strip instead of being squeezed anew at every look
    end = now if state.ended else max(now, start + (_LEAST_SPAN_S if span_s is None else span_s))
    lost = lost_spans(state.locks, now, locked=state.locked)
    runs = history_runs(state.history, lost, start, end, plot.width)
    best = state.best.opening_pct if state.best is not None else None
    strip = _Strip(plot, start, end, *value_range(runs, best))
    shown_lost = [(a, b) for a, b in lost if b > start and strip.x(b) - strip.x(max(a, start)) >= 0.5]
    gaps = [at for at in state.gaps_s if at >= start]
    alarms = [span for span in alarms if span.end_s >= start]

    canvas.fill(plot, theme.panel)
    canvas.clip(plot)
    for a, b in shown_lost:
        _hatch(canvas, plot, strip.x(max(a, start)), strip.x(b))
    values = _axis_values(canvas, strip)
    for value in values:
        canvas.line(plot.x, strip.y(value), plot.right, strip.y(value), theme.edge if value == 0 else theme.grid)
    _draw_runs(canvas, strip, runs)
    if best is not None:
        canvas.line(plot.x, strip.y(best), plot.right, strip.y(best), theme.ink, 1.0, dashed=True)
    _draw_gaps(canvas, strip, gaps)
    for mark in state.marks:
        if mark.seconds >= start:
            canvas.line(strip.x(mark.seconds), plot.y, strip.x(mark.seconds), plot.bottom, theme.ink, 1.4)
    if state.seconds > 0 and end > now:
        canvas.line(strip.x(now), plot.y, strip.x(now), plot.bottom, theme.edge, 1.0)
    canvas.clip(None)
    canvas.frame(plot, theme.edge)

    for value in values:
        label = Box(box.x, round(strip.y(value)) - canvas.px(8), plot.x - box.x - canvas.px(8), canvas.px(16))
        canvas.write(f"{plain(value, 0)} %", label, _SMALL, theme.dim, align="right")
    _draw_alarms(canvas, strip, alarms)
    _draw_times(canvas, strip)
    _draw_mark_names(canvas, box, strip, state)
    present = {"best": best is not None, "alarm": bool(alarms), "samples lost": bool(gaps), "no lock": bool(shown_lost)}
    title = Box(box.x, box.y, box.width, canvas.px(20))
    right = _draw_legend(canvas, title, [entry for entry, there in present.items() if there])
    heading = f"Opening, {span_words(span_s)}"
    canvas.write(heading, replace(title, width=max(0, right - title.x)), _TEXT, theme.ink, bold=True)


def _axis_values(canvas: Canvas, strip: _Strip) -> list[float]:
    step = tick_step(strip.high - strip.low, max(1, strip.plot.height // max(canvas.px(19), 1)))
    return [step * k for k in range(math.ceil(strip.low / step), math.floor(strip.high / step) + 1)]


def _draw_runs(canvas: Canvas, strip: _Strip, runs: Sequence[Run]) -> None:
    """Each stretch as a line of its means within a band from its least to its most."""
    theme = canvas.theme
    for run in runs:
        xs = (run.x + strip.plot.x).tolist()
        upper, lower, mean = (
            [strip.y(value) for value in values.tolist()] for values in (run.most, run.least, run.mean)
        )
        if len(xs) == 1:
            canvas.dot(xs[0], mean[0], 2.0, theme.accent, theme.panel)
            continue
        outline = [*zip(xs, upper, strict=True), *zip(xs[::-1], lower[::-1], strict=True)]
        canvas.polygon(outline, theme.accent, 0.3)
        canvas.polyline(list(zip(xs, mean, strict=True)), theme.accent, 1.8)


def _draw_gaps(canvas: Canvas, strip: _Strip, gaps: Sequence[float]) -> None:
    """A diamond on a short stem for each loss of samples; of many close together only some, so that the curve is seen."""
    theme, plot = canvas.theme, strip.plot
    foot, reach, last_x = plot.bottom - canvas.px(2), canvas.px(5), -math.inf
    for at in gaps:
        x = strip.x(at)
        if x - last_x < reach:
            continue
        last_x = x
        canvas.line(x, foot - canvas.px(22), x, plot.bottom, theme.alert, 1.4)
        _diamond(canvas, x, foot - reach, reach)


def _diamond(canvas: Canvas, x: float, y: float, reach: float) -> None:
    canvas.polygon([(x - reach, y), (x, y - reach), (x + reach, y), (x, y + reach)], canvas.theme.alert)


def _draw_alarms(canvas: Canvas, strip: _Strip, alarms: Sequence[AlarmSpan]) -> None:
    """A bar under the plot for each alarm, thicker for the severer."""
    plot = strip.plot
    lane = Box(plot.x, plot.bottom + canvas.px(2), plot.width, canvas.px(7))
    for span in alarms:
        left = max(round(strip.x(span.start_s)), lane.x)
        right = min(round(strip.x(span.end_s)), lane.right)
        height = {"low": canvas.px(3), "medium": canvas.px(5)}.get(span.severity, lane.height)
        canvas.fill(Box(left, lane.y, max(right - left, canvas.px(3)), height), canvas.theme.alert)


def _hatch(canvas: Canvas, plot: Box, left: float, right: float) -> None:
    """Slanting lines where there was no lock; told apart from the panel without colour."""
    left, right = max(left, float(plot.x)), min(right, float(plot.right))
    box = Box(round(left), plot.y, max(1, round(right) - round(left)), plot.height)
    canvas.fill(box, canvas.theme.track)
    canvas.clip(box)
    pitch = max(canvas.px(8), 3)
    x = plot.x + (box.x - plot.x - plot.height) // pitch * pitch
    while x < box.right:
        canvas.line(x, plot.bottom, x + plot.height, plot.y, canvas.theme.edge, 1.0)
        x += pitch
    canvas.clip(plot)


def _draw_times(canvas: Canvas, strip: _Strip) -> None:
    theme, plot = canvas.theme, strip.plot
    top = plot.bottom + canvas.px(11)
    for at in time_ticks(strip.start, strip.end, max(1, plot.width // canvas.px(110))):
        x = strip.x(at)
        canvas.line(x, plot.bottom, x, plot.bottom + canvas.px(10), theme.edge)
        half = canvas.text_width(clock(at), _SMALL) // 2 + 2
        edge = min(round(x) - half, plot.right + canvas.px(8) - 2 * half)
        canvas.write(clock(at), Box(edge, top, 2 * half, canvas.px(16)), _SMALL, theme.dim, align="centre")


def _draw_mark_names(canvas: Canvas, box: Box, strip: _Strip, state: LiveState) -> None:
    """Flags over the strip; the newest mark's name has the first right to the room."""
    theme, plot = canvas.theme, strip.plot
    y, height = box.y + canvas.px(21), canvas.px(17)
    limit = float(plot.right)
    for number, mark in reversed(list(enumerate(state.marks, start=1))):
        if mark.seconds < strip.start:
            break
        x = strip.x(mark.seconds)
        canvas.polygon([(x, y + height), (x, y + canvas.px(5)), (x + canvas.px(8), y + canvas.px(9))], theme.ink)
        text = mark.name or str(number)
        room = Box(round(x) + canvas.px(11), y, max(0, round(limit - x) - canvas.px(17)), height)
        if canvas.text_width(text, _SMALL) <= room.width or (mark.name and room.width >= canvas.px(60)):
            canvas.write(text, room, _SMALL, theme.ink)
        limit = x


def _draw_legend(canvas: Canvas, box: Box, entries: list[str]) -> int:
    """What the signs mean, from the right; returns where it starts."""
    theme = canvas.theme
    x = box.right
    middle = box.y + box.height / 2
    for entry in reversed(entries):
        width = canvas.text_width(entry, _SMALL)
        canvas.write(entry, Box(x - width, box.y, width, box.height), _SMALL, theme.dim)
        x -= width + canvas.px(24)
        sample = Box(x, round(middle) - canvas.px(5), canvas.px(18), canvas.px(10))
        if entry == "best":
            canvas.line(sample.x, middle, sample.right, middle, theme.ink, 1.0, dashed=True)
        elif entry == "alarm":
            canvas.fill(Box(sample.x, round(middle) - canvas.px(3), sample.width, canvas.px(7)), theme.alert)
        elif entry == "samples lost":
            _diamond(canvas, sample.x + sample.width / 2, middle, canvas.px(5))
        else:
            canvas.fill(sample, theme.track)
            canvas.clip(sample)
            for shift in range(-sample.height, sample.width, max(canvas.px(5), 2)):
                canvas.line(
                    sample.x + shift, sample.bottom, sample.x + shift + sample.height, sample.y, theme.edge, 1.0
                )
            canvas.clip(None)
        x -= canvas.px(18)
    return x
