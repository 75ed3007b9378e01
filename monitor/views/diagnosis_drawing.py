"""What stands behind the figures, drawn: causes, response, error rate, constellation, remedies. Each fills the box it is given."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from dsp.diagnosis import Constellation, Diagnosis, EqualiserTrial, ErrorCurve, Response
from dsp.reading import Budget, Reading
from monitor.snapshot import Snapshot
from monitor.views import pixels
from monitor.views.canvas import Canvas
from monitor.views.diagnosis_wording import (
    LEAST_BER,
    NO_NEIGHBOUR,
    PageName,
    cause_figures,
    chosen_trials,
    decades,
    error_figures,
    linear_trials,
    remedies,
    span_below,
    strongest,
)
from monitor.views.drawing import blit, draw_table, draw_verdict
from monitor.views.layout import Box
from monitor.views.theme import RAMP_STEPS, Colour
from monitor.views.wording import (
    UNEXPLAINED,
    Figure,
    budget_rows,
    figure_groups,
    plain,
    sentence,
    signed,
    ten_to,
    unknown_causes,
)

_TEXT, _SMALL = 13.0, 12.0
_LINE = 19.0


@dataclass(frozen=True, slots=True)
class _Plot:
    """A plot's inside with its two straight axes."""

    box: Box
    left: float
    right: float
    low: float
    high: float

    def x(self, value: float) -> float:
        return self.box.x + self.box.width * (value - self.left) / (self.right - self.left)

    def y(self, value: float) -> float:
        return self.box.y + self.box.height * (self.high - value) / (self.high - self.low)


def draw_page(canvas: Canvas, box: Box, page: PageName, snapshot: Snapshot) -> None:
    """One page of what stands behind the snapshot's figures; says so where it is not known."""
    reading, diagnosis = snapshot.reading, snapshot.diagnosis or Diagnosis()
    if reading is None:
        return
    rails = snapshot.image.rails if snapshot.image is not None else ()
    levels = snapshot.image.levels if snapshot.image is not None else None
    if page == "causes":
        draw_causes(canvas, box, reading, diagnosis)
    elif page == "response":
        draw_response(canvas, box, diagnosis.response, rails)
    elif page == "errors":
        draw_errors(canvas, box, reading, diagnosis)
    elif page == "decisions":
        draw_constellation(canvas, box, diagnosis.constellation, reading, levels)
    elif page == "remedies":
        draw_remedies(canvas, box, reading, diagnosis)
    else:
        groups = figure_groups(reading)
        if groups:
            draw_table(canvas, box, groups)


def draw_unknown(canvas: Canvas, box: Box, text: str) -> None:
    """That there is nothing to draw, and why."""
    for number, line in enumerate(canvas.wrap(text, box.width, _TEXT, 3)):
        row = Box(box.x, box.y + canvas.px(4) + number * canvas.px(20), box.width, canvas.px(20))
        if row.bottom <= box.bottom:
            canvas.write(line, row, _TEXT, canvas.theme.dim)


# -- causes ------------------------------------------------------------------------------------------------------------


def draw_causes(canvas: Canvas, box: Box, reading: Reading, diagnosis: Diagnosis) -> int:
    """The verdict and its remarks, then how the causes make up the 100 points; returns where it ends."""
    theme, y = canvas.theme, box.y
    budget = reading.budget
    rows = budget_rows(budget) if budget is not None else []
    needed = canvas.px(_LINE) * (len(rows) + 2)
    if reading.verdict:
        y = draw_verdict(canvas, replace(box, height=box.bottom - y), reading.verdict) + canvas.px(6)
    for remark in diagnosis.remarks:
        lines = canvas.wrap(sentence(remark), box.width - canvas.px(14), _TEXT, 3)
        if y + canvas.px(18) * len(lines) + needed > box.bottom:
            break
        for text in lines:
            row = Box(box.x + canvas.px(14), y, box.width - canvas.px(14), canvas.px(18))
            canvas.write(text, row, _TEXT, theme.dim)
            y += canvas.px(18)
        y += canvas.px(4)
    if budget is None or not rows:
        draw_unknown(canvas, replace(box, y=y, height=max(0, box.bottom - y)), "What closes the eye is not known.")
        return y + canvas.px(24)
    y = draw_balance(canvas, Box(box.x, y + canvas.px(2), box.width, max(0, box.bottom - y)), reading, budget)
    missing = unknown_causes(budget)
    more = list(cause_figures(diagnosis))
    for figure in more:
        if y + canvas.px(_LINE) > box.bottom:
            return y
        y = _draw_figure_row(canvas, Box(box.x, y, box.width, canvas.px(_LINE)), figure)
    if missing:
        text = "Not known here: " + ", ".join(label.lower().replace("i/q", "I/Q") for label in missing)
        for line in canvas.wrap(text, box.width, _SMALL, 2):
            if y + canvas.px(17) > box.bottom:
                break
            canvas.write(line, Box(box.x, y, box.width, canvas.px(17)), _SMALL, theme.dim)
            y += canvas.px(17)
    return y


def draw_balance(canvas: Canvas, box: Box, reading: Reading, budget: Budget) -> int:
    """A stair from what is left open at the target error rate over each cause up to 100; returns where it ends."""
    theme = canvas.theme
    rows: list[tuple[str, float]] = budget_rows(budget)
    left_open = reading.opening_at_ber_pct
    if left_open is not None and math.isfinite(left_open):
        rows = [("Left open at the target", left_open), *rows]
    pitch = canvas.px(_LINE)
    labels = max(canvas.text_width(label, _SMALL, bold=True) for label, _ in rows) + canvas.px(12)
    labels = min(labels, box.width // 2)
    values = canvas.text_width("−100.0", _SMALL) + canvas.px(6)
    bars = Box(box.x + labels, box.y, max(1, box.width - labels - values), pitch * len(rows))
    ends = np.cumsum([0.0, *(points for _, points in rows)])
    low, high = min(0.0, float(ends.min())), max(100.0, float(ends.max()))
    plot = _Plot(bars, low, high, 0.0, 1.0)
    for value in (0.0, 50.0, 100.0):
        canvas.line(plot.x(value), bars.y, plot.x(value), bars.bottom, theme.grid)
    largest = next((label for label, _ in rows if label in dict(budget_rows(budget)) and label != UNEXPLAINED), "")
    y = box.y
    for number, (label, points) in enumerate(rows):
        if y + pitch > box.bottom + canvas.px(2):
            return y
        first = number == 0 and left_open is not None
        bold = label == largest
        a, b = sorted((plot.x(float(ends[number])), plot.x(float(ends[number + 1]))))
        bar = Box(round(a), y + canvas.px(4), max(1, round(b) - round(a)), pitch - canvas.px(8))
        if abs(points) < 0.05:
            pass  # told as 0.0: no bar
        elif label == UNEXPLAINED:
            canvas.frame(Box(bar.x + 1, bar.y + 1, max(1, bar.width - 2), bar.height - 2), theme.edge)
        else:
            canvas.fill(bar, theme.edge if first else theme.accent if bold else theme.level_even)
        canvas.write(
            label, Box(box.x, y, labels - canvas.px(8), pitch), _SMALL, theme.ink if bold else theme.dim, bold=bold
        )
        amount = Box(box.right - values, y, values, pitch)
        canvas.write(plain(points, 1), amount, _SMALL, theme.ink, align="right", bold=bold)
        y += pitch
    return y + canvas.px(4)


def _draw_figure_row(canvas: Canvas, row: Box, figure: Figure) -> int:
    """A label and its value on one line; returns where it ends."""
    taken = canvas.text_width(figure.value, _TEXT)
    canvas.write(figure.value, row, _TEXT, canvas.theme.ink, align="right")
    label = replace(row, width=max(0, row.width - taken - canvas.px(8)))
    canvas.write(figure.label, label, _TEXT, canvas.theme.dim)
    return row.bottom


def _columns(canvas: Canvas, width: int, figures: Sequence[Figure]) -> int:
    """1 or 2: in how many columns the figures fit."""
    half = (width - canvas.px(24)) // 2
    widest = max(
        (canvas.text_width(f.label, _TEXT) + canvas.text_width(f.value, _TEXT) + canvas.px(8) for f in figures),
        default=0,
    )
    return 2 if widest <= half and len(figures) > 1 else 1


def _figures_height(canvas: Canvas, width: int, figures: Sequence[Figure]) -> int:
    """The room that the figures want, with some above them."""
    if not figures:
        return 0
    return canvas.px(_LINE) * math.ceil(len(figures) / _columns(canvas, width, figures)) + canvas.px(8)


def _draw_figures(canvas: Canvas, box: Box, figures: Sequence[Figure]) -> int:
    """Figures in two columns where they fit, line by line, as far as there is room; returns where they end."""
    gap, pitch = canvas.px(24), canvas.px(_LINE)
    columns = _columns(canvas, box.width, figures)
    width = (box.width - gap) // 2 if columns == 2 else box.width
    y = box.y
    for number, figure in enumerate(figures):
        y = box.y + pitch * (number // columns)
        if y + pitch > box.bottom:
            return y
        _draw_figure_row(canvas, Box(box.x + (width + gap) * (number % columns), y, width, pitch), figure)
    return y + pitch if figures else y


# -- plots -------------------------------------------------------------------------------------------------------------


def _framed(canvas: Canvas, box: Box, gutter: float, foot: float) -> Box:
    """The inside of a plot that leaves room for ticks at its left and its foot."""
    left, tick = canvas.px(gutter), canvas.px(6)
    inside = Box(box.x + left, box.y + tick, box.width - left - canvas.px(16), box.height - tick - canvas.px(foot))
    canvas.fill(inside, canvas.theme.panel)
    return inside


def _left_tick(canvas: Canvas, plot: _Plot, value: float, text: str, *, strong: bool = False) -> None:
    theme, box, y = canvas.theme, plot.box, plot.y(value)
    canvas.line(box.x, y, box.right, y, theme.edge if strong else theme.grid)
    canvas.line(box.x - canvas.px(4), y, box.x, y, theme.edge)
    height = canvas.px(16)
    label = Box(box.x - canvas.px(58), round(y - height / 2), canvas.px(50), height)
    canvas.write(text, label, _SMALL, theme.dim, align="right")


def _foot_tick(canvas: Canvas, plot: _Plot, value: float, text: str) -> None:
    theme, box, x = canvas.theme, plot.box, plot.x(value)
    canvas.line(x, box.bottom, x, box.bottom + canvas.px(4), theme.edge)
    label = Box(round(x) - canvas.px(30), box.bottom + canvas.px(4), canvas.px(60), canvas.px(16))
    canvas.write(text, label, _SMALL, theme.dim, align="centre")


def _foot_name(canvas: Canvas, plot: _Plot, text: str) -> None:
    row = Box(
        plot.box.x - canvas.px(40), plot.box.bottom + canvas.px(20), plot.box.width + canvas.px(50), canvas.px(16)
    )
    canvas.write(text, row, _SMALL, canvas.theme.dim, align="centre")


def draw_response(canvas: Canvas, box: Box, response: Response | None, rails: Sequence[str]) -> None:
    """What each symbol puts at the decision instant, in units of the symbol decided; below it the strongest neighbours."""
    if response is None:
        draw_unknown(canvas, box, "The response of the link is not known.")
        return
    figures = strongest(response, 4)
    rows = _figures_height(canvas, box.width, figures)
    several = response.taps.shape[0] > 1
    key = canvas.px(20) if several else 0
    plot_box = Box(box.x, box.y + key, box.width, max(canvas.px(60), box.height - key - rows))
    if several:
        _draw_tap_key(canvas, Box(box.x, box.y, box.width, key), rails)
    _draw_taps(canvas, plot_box, response)
    below = Box(box.x, plot_box.bottom + canvas.px(8), box.width, max(0, box.bottom - plot_box.bottom - canvas.px(8)))
    if figures:
        _draw_figures(canvas, below, figures)
    else:
        draw_unknown(canvas, below, NO_NEIGHBOUR)


def _draw_taps(canvas: Canvas, box: Box, response: Response) -> None:
    theme = canvas.theme
    inside = _framed(canvas, box, 44, 38)
    if inside.width < 8 or inside.height < 8:
        return
    lags, taps = response.lags, response.taps
    count = taps.shape[0]
    neighbours = np.where((lags == 0)[None, None] & np.eye(count, dtype=np.bool_)[:, :, None], 0.0, taps)
    reach = max(float(np.abs(neighbours).max(initial=0.0)) * 1.25, 0.05)
    whole = reach > 0.7
    low, high = (min(-0.2, -reach), max(1.15, reach)) if whole else (-reach, reach)
    plot = _Plot(inside, float(lags[0]) - 0.6, float(lags[-1]) + 0.6, low, high)
    step = pixels.tick_step(high - low, max(3, inside.height // max(canvas.px(26), 1)))
    for k in range(math.ceil(low / step), math.floor(high / step) + 1):
        _left_tick(canvas, plot, k * step, f"{plain(100.0 * k * step, 0 if step >= 0.01 else 1)} %", strong=k == 0)
    every = next(n for n in (1, 2, 3, 4, 6, 12) if n >= len(lags) * canvas.px(26) / inside.width or n == 12)
    for lag in lags.tolist():
        if lag % every == 0:
            _foot_tick(canvas, plot, lag, signed(lag, 0))
    _foot_name(canvas, plot, "← symbols still to come   ·   gone by →")
    width = inside.width / (plot.right - plot.left)
    stem = max(1.0, min(3.0, 0.5 * width / canvas.scale / max(2 * count * count - 1, 1)))
    canvas.clip(inside)
    for rail in range(count):
        for source in range(count):
            place = ((2 * rail + source) - 1.5) * 0.2 if count > 1 else 0.0
            colour = theme.level_even if source == rail else theme.level_odd
            for lag, tap in zip(lags.tolist(), taps[rail, source].tolist(), strict=True):
                x, y = plot.x(lag + place), plot.y(tap)
                itself = lag == 0 and source == rail
                shade = theme.accent if itself else colour
                canvas.line(x, plot.y(0.0), x, max(y, inside.y - 2.0), shade, stem)
                if inside.y <= y <= inside.bottom and abs(tap) > 0.02 * reach:
                    canvas.dot(x, y, min(3.2, stem + 1.4), shade, theme.panel)
    canvas.clip(None)
    if not whole:
        words = Box(round(plot.x(0.0)) - canvas.px(94), inside.y + canvas.px(3), canvas.px(84), canvas.px(16))
        canvas.write("to 100 % ↑", words, _SMALL, theme.accent, align="right")
    canvas.frame(inside, theme.edge)


def _draw_tap_key(canvas: Canvas, box: Box, rails: Sequence[str]) -> None:
    theme, x = canvas.theme, box.x
    names = rails if len(rails) > 1 else ("I", "Q")
    for words, colour in (
        (f"{names[0]} from {names[0]}, {names[1]} from {names[1]}", theme.level_even),
        (f"{names[0]} from {names[1]}, {names[1]} from {names[0]}", theme.level_odd),
        ("the symbol itself", theme.accent),
    ):
        width = canvas.text_width(words, _SMALL)
        if x + canvas.px(14) + width > box.right:
            return
        canvas.dot(x + canvas.px(5), box.y + box.height / 2, 3.6, colour, theme.page)
        canvas.write(words, Box(x + canvas.px(14), box.y, width + 2, box.height), _SMALL, theme.dim)
        x += canvas.px(30) + width


def draw_errors(canvas: Canvas, box: Box, reading: Reading, diagnosis: Diagnosis) -> None:
    """The error rate against the instant and against the threshold, side by side or one over the other, and its figures."""
    curves = [
        ("Over the sampling instant", diagnosis.over_time, "UI from the best instant"),
        ("Over the threshold", diagnosis.over_threshold, "threshold, level units"),
    ]
    figures = error_figures(reading, diagnosis)
    rows = min(_figures_height(canvas, box.width, figures), max(0, box.height - canvas.px(150)))
    target = diagnosis.jitter.at_ber if diagnosis.jitter is not None else None
    room = Box(box.x, box.y, box.width, max(canvas.px(80), box.height - rows))
    known = [entry for entry in curves if entry[1] is not None]
    gap = canvas.px(14)
    upright = len(known) > 1 and room.height >= canvas.px(300)
    if not known:
        draw_unknown(canvas, box, "The error rate over instant and threshold is not known.")
        room = replace(room, height=canvas.px(30))
    axis = decades([curve for _, curve, _ in known if curve is not None], target)
    for number, (title, curve, name) in enumerate(known):
        if curve is None:
            continue
        if upright:
            each = (room.height - gap * (len(known) - 1)) // len(known)
            place = Box(room.x, room.y + (each + gap) * number, room.width, each)
        else:
            each = (room.width - gap * (len(known) - 1)) // len(known)
            place = Box(room.x + (each + gap) * number, room.y, each, room.height)
        draw_error_curve(canvas, place, curve, axis, title=title, name=name, target=target)
    below = Box(box.x, room.bottom + canvas.px(6), box.width, max(0, box.bottom - room.bottom - canvas.px(6)))
    _draw_figures(canvas, below, figures)


def draw_error_curve(
    canvas: Canvas,
    box: Box,
    curve: ErrorCurve,
    axis: tuple[int, int],
    *,
    title: str,
    name: str,
    target: float | None,
) -> None:
    """One curve on a logarithmic axis from 10 to the power ``axis[0]`` up to ``axis[1]``, with the stretch that keeps the target."""
    theme = canvas.theme
    canvas.write(title, Box(box.x, box.y, box.width, canvas.px(18)), _SMALL, theme.ink, bold=True)
    inside = _framed(canvas, Box(box.x, box.y + canvas.px(19), box.width, box.height - canvas.px(19)), 40, 38)
    if inside.width < 8 or inside.height < 8 or curve.at.size < 2:
        return
    low, high = axis
    plot = _Plot(inside, float(curve.at[0]), float(curve.at[-1]), float(low), float(high))
    step = next(
        n for n in (1, 2, 3, 4, 6, 9) if (high - low) / n <= max(2, inside.height // max(canvas.px(20), 1)) or n == 9
    )
    for exponent in range(-(-low // step) * step, high + 1, step):
        _left_tick(canvas, plot, exponent, "1" if exponent == 0 else ten_to(exponent))
    span = plot.right - plot.left
    step_x = pixels.tick_step(span, max(2, inside.width // max(canvas.px(48), 1)))
    digits = max(0, -math.floor(math.log10(step_x) + 1e-9))
    for k in range(math.ceil(plot.left / step_x - 1e-9), math.floor(plot.right / step_x + 1e-9) + 1):
        _foot_tick(canvas, plot, k * step_x, signed(k * step_x, digits))
    _foot_name(canvas, plot, name)
    level = np.log10(np.maximum(curve.ber, LEAST_BER))
    canvas.clip(inside)
    for run in pixels.finite_runs(level):
        xs, ys = curve.at[run].tolist(), level[run].tolist()
        canvas.polyline([(plot.x(x), plot.y(y)) for x, y in zip(xs, ys, strict=True)], theme.accent, 2.0)
    canvas.clip(None)
    if target is not None and low <= math.log10(target) <= high:
        y = plot.y(math.log10(target))
        canvas.line(inside.x, y, inside.right, y, theme.ink, 1.0, dashed=True)
        kept = span_below(curve, target)
        if kept is not None:
            ends = [min(max(plot.x(at), inside.x), inside.right) for at in kept]
            canvas.line(ends[0], y, ends[1], y, theme.ink, 2.0)
            for x in ends:
                canvas.line(x, y - canvas.px(4), x, y + canvas.px(4), theme.ink, 2.0)
        words = f"{plain(kept[1] - kept[0], 2)} wide" if kept is not None else "target not reached"
        row = Box(inside.x + canvas.px(4), round(y) - canvas.px(17), inside.width - canvas.px(8), canvas.px(16))
        if row.y < inside.y:
            row = replace(row, y=round(y) + canvas.px(1))
        canvas.write(words, row, _SMALL, theme.ink, align="centre")
    canvas.frame(inside, theme.edge)


def draw_constellation(
    canvas: Canvas,
    box: Box,
    constellation: Constellation | None,
    reading: Reading,
    levels: NDArray[np.float64] | None,
) -> None:
    """Where the decision samples lie, Q over I, with the thresholds between them; below it modulation error and imbalance."""
    theme = canvas.theme
    if constellation is None:
        draw_unknown(canvas, box, "There is no constellation: this link has one rail, or it is not known yet.")
        return
    known = [figure for group in figure_groups(reading) for figure in group.figures]
    wanted = ("MER", "EVM", "Phase jitter", "I/Q gain", "I/Q skew", "DC offset")
    figures = [figure for label in wanted for figure in known if figure.label == label]
    if box.height < canvas.px(300):
        figures = figures[:2]
    gutter, foot = canvas.px(38), canvas.px(24)
    rows = _figures_height(canvas, box.width, figures)
    beside = box.width - box.height > canvas.px(150)
    side = min(box.width - gutter, box.height - foot - canvas.px(4) - (0 if beside else rows))
    if side < canvas.px(40):
        draw_unknown(canvas, box, "There is no room for the constellation: make the window larger.")
        return
    inside = Box(box.x + gutter, box.y + canvas.px(4), side, side)
    reach = constellation.reach
    plot = _Plot(inside, -reach, reach, -reach, reach)
    blit(canvas, inside, pixels.count_indices(constellation.counts, side, side, RAMP_STEPS))
    each = len(reading.eyes) // 2
    for number, eye in enumerate(reading.eyes):
        if eye.threshold is None or abs(eye.threshold) >= reach:
            continue
        if number < each:
            x = plot.x(eye.threshold)
            canvas.line(x, inside.y, x, inside.bottom, theme.edge, 1.0, dashed=True)
        else:
            y = plot.y(eye.threshold)
            canvas.line(inside.x, y, inside.right, y, theme.edge, 1.0, dashed=True)
    last = -math.inf
    for level in [] if levels is None else [value for value in levels.tolist() if abs(value) < reach]:
        text = signed(level, 0 if abs(level - round(level)) < 0.005 else 1)
        x, y = plot.x(level), plot.y(level)
        canvas.line(x, inside.bottom, x, inside.bottom + canvas.px(4), theme.edge)
        canvas.line(inside.x - canvas.px(4), y, inside.x, y, theme.edge)
        if x - last < canvas.px(28):
            continue
        last = x
        place = Box(round(x) - canvas.px(24), inside.bottom + canvas.px(5), canvas.px(48), canvas.px(16))
        canvas.write(text, place, _SMALL, theme.dim, align="centre")
        place = Box(box.x, round(y) - canvas.px(8), gutter - canvas.px(7), canvas.px(16))
        canvas.write(text, place, _SMALL, theme.dim, align="right")
    canvas.frame(inside, theme.edge)
    canvas.write(
        "Q", Box(inside.x + canvas.px(4), inside.y + canvas.px(2), canvas.px(20), canvas.px(16)), _SMALL, theme.ink
    )
    corner = Box(inside.right - canvas.px(24), inside.bottom - canvas.px(18), canvas.px(20), canvas.px(16))
    canvas.write("I", corner, _SMALL, theme.ink, align="right")
    if beside:
        _draw_figures(
            canvas,
            Box(
                inside.right + canvas.px(20), inside.y, max(0, box.right - inside.right - canvas.px(20)), inside.height
            ),
            figures,
        )
    else:
        top = inside.bottom + foot + canvas.px(4)
        _draw_figures(canvas, Box(box.x, top, box.width, max(0, box.bottom - top)), figures)


# -- remedies ----------------------------------------------------------------------------------------------------------


def draw_remedies(canvas: Canvas, box: Box, reading: Reading, diagnosis: Diagnosis) -> None:
    """What would open the eye, with the opening before and after, and the taps of the first equaliser that was tried."""
    theme, y = canvas.theme, box.y
    rows = remedies(reading, diagnosis)
    if not diagnosis.equalisers:
        canvas.write("No equaliser was tried yet.", Box(box.x, y, box.width, canvas.px(20)), _TEXT, theme.dim)
        y += canvas.px(24)
    values = [row for row in rows if row.after_pct is not None]
    words = [row for row in rows if row.after_pct is None]
    for row in values:
        if y + canvas.px(34) > box.bottom or row.after_pct is None:
            break
        before = "" if row.before_pct is None else f"{plain(row.before_pct, 1)} → "
        value = f"{before}{plain(row.after_pct, 1)} %"
        y = _draw_figure_row(canvas, Box(box.x, y, box.width, canvas.px(_LINE)), Figure(row.words, value))
        _draw_gain(canvas, Box(box.x, y + canvas.px(1), box.width, canvas.px(8)), row.before_pct, row.after_pct)
        y += canvas.px(16)
    for row in words:
        for number, text in enumerate(canvas.wrap(row.words, box.width - canvas.px(14), _TEXT, 2)):
            if y + canvas.px(18) > box.bottom:
                return
            if number == 0:
                canvas.dot(box.x + canvas.px(4), y + canvas.px(9), 2.2, theme.edge, theme.page)
            canvas.write(
                text, Box(box.x + canvas.px(14), y, box.width - canvas.px(14), canvas.px(18)), _TEXT, theme.dim
            )
            y += canvas.px(18)
    y += canvas.px(8)
    rest = Box(box.x, y, box.width, min(box.bottom - y, canvas.px(240)))
    linear, chosen = linear_trials(diagnosis), chosen_trials(reading, diagnosis)[:1]
    if not chosen or rest.height < canvas.px(110):
        return
    gap = canvas.px(14)
    half = replace(rest, width=(rest.width - gap) // 2)
    if len(linear) > 1:
        draw_tap_counts(canvas, half, linear, chosen[0])
        draw_equaliser_taps(canvas, replace(half, x=half.right + gap), chosen[0])
    else:
        draw_equaliser_taps(canvas, rest, chosen[0])


def draw_tap_counts(canvas: Canvas, box: Box, trials: Sequence[EqualiserTrial], chosen: EqualiserTrial) -> None:
    """The opening behind each linear equaliser against its taps, the opening without one dashed; the chosen one stands out."""
    theme = canvas.theme
    canvas.write("Opening over taps", Box(box.x, box.y, box.width, canvas.px(18)), _SMALL, theme.ink, bold=True)
    inside = _framed(canvas, Box(box.x, box.y + canvas.px(19), box.width, box.height - canvas.px(19)), 44, 38)
    if inside.width < 8 or inside.height < 8:
        return
    values = [trial.opening_pct for trial in trials] + [chosen.before_pct]
    low, high = 10.0 * math.floor(min(values) / 10.0), 10.0 * math.ceil(max(values) / 10.0 + 0.01)
    plot = _Plot(inside, -0.5, len(trials) - 0.5, low, high)
    step = pixels.tick_step(high - low, max(2, inside.height // max(canvas.px(28), 1)))
    for k in range(math.ceil(low / step), math.floor(high / step) + 1):
        _left_tick(canvas, plot, k * step, f"{plain(k * step, 0)} %", strong=k == 0)
    y = plot.y(chosen.before_pct)
    canvas.line(inside.x, y, inside.right, y, theme.ink, 1.0, dashed=True)
    points = [(plot.x(float(n)), plot.y(trial.opening_pct)) for n, trial in enumerate(trials)]
    canvas.polyline(points, theme.level_even, 1.6)
    for number, (trial, (x, at)) in enumerate(zip(trials, points, strict=True)):
        ours = trial is chosen
        canvas.dot(x, at, 4.0 if ours else 2.6, theme.accent if ours else theme.level_even, theme.panel)
        _foot_tick(canvas, plot, float(number), str(trial.taps.size))
    _foot_name(canvas, plot, "taps")
    canvas.frame(inside, theme.edge)


def _draw_gain(canvas: Canvas, bar: Box, before: float | None, after: float) -> None:
    theme = canvas.theme

    def at(value: float) -> int:
        return round(bar.x + bar.width * min(max(value, 0.0), 100.0) / 100.0)

    canvas.fill(bar, theme.track)
    canvas.fill(replace(bar, width=at(after) - bar.x), theme.level_odd)
    if before is not None:
        canvas.fill(replace(bar, width=at(min(before, after)) - bar.x), theme.level_even)
        x = at(before)
        canvas.line(x, bar.y - canvas.px(2), x, bar.bottom + canvas.px(2), theme.ink, 2.0)


def draw_equaliser_taps(canvas: Canvas, box: Box, trial: EqualiserTrial) -> None:
    """The taps' sizes against their place; the one that meets the symbol itself stands out."""
    theme = canvas.theme
    title = f"The {trial.taps.size} taps" if trial.kind == "linear" else "Taps, then what is fed back"
    canvas.write(title, Box(box.x, box.y, box.width, canvas.px(18)), _SMALL, theme.ink, bold=True)
    canvas.write("size", Box(box.x, box.y, box.width, canvas.px(18)), _SMALL, theme.dim, align="right")
    inside = _framed(canvas, Box(box.x, box.y + canvas.px(19), box.width, box.height - canvas.px(19)), 44, 38)
    if inside.width < 8 or inside.height < 8:
        return
    size = np.abs(np.concatenate([trial.taps, trial.feedback]))
    place = (np.arange(trial.taps.size) - trial.cursor) * trial.spacing_ui
    place = np.concatenate([place, place[-1] + trial.spacing_ui + np.arange(trial.feedback.size)])
    top = max(float(size.max(initial=0.0)), 1e-9) * 1.12
    plot = _Plot(inside, float(place[0]) - 0.6, float(place[-1]) + 0.6, 0.0, top)
    step = pixels.tick_step(top, max(2, inside.height // max(canvas.px(28), 1)))
    digits = max(0, -math.floor(math.log10(step) + 1e-9))
    for k in range(math.floor(top / step) + 1):
        _left_tick(canvas, plot, k * step, plain(k * step, digits))
    step = pixels.tick_step(plot.right - plot.left, max(2, inside.width // max(canvas.px(40), 1)))
    for k in range(math.ceil(plot.left / step), math.floor(plot.right / step) + 1):
        _foot_tick(canvas, plot, k * step, signed(k * step, 0 if step >= 1 else 1))
    _foot_name(canvas, plot, "UI from the symbol itself")
    for number, (at, value) in enumerate(zip(place.tolist(), size.tolist(), strict=True)):
        fed_back = number >= trial.taps.size
        colour: Colour = theme.accent if number == trial.cursor else theme.level_odd if fed_back else theme.level_even
        canvas.line(plot.x(at), plot.y(0.0), plot.x(at), plot.y(value), colour, 2.0)
        canvas.dot(plot.x(at), plot.y(value), 3.0, colour, theme.panel)
    canvas.frame(inside, theme.edge)
