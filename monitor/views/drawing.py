"""What stands where in the picture, drawn with Qt; `monitor.views.painter` is the way in."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from PySide6.QtGui import QImage, QPainter

from dsp.picture import EyeImage
from dsp.reading import Reading
from monitor.snapshot import Snapshot
from monitor.views import pixels
from monitor.views.canvas import Canvas, PlacedText
from monitor.views.layout import Box, Page, RailBoxes, arrange, notes_width, page_scale
from monitor.views.theme import RAMP_STEPS, ThemeName, find_theme
from monitor.views.wording import (
    Group,
    budget_rows,
    figure_groups,
    interval_text,
    plain,
    sentence,
    signed,
)

_TEXT = 13.0
_SMALL = 12.0
_LARGE = 19.0
_MOST_NOTE_LINES = 4
_TIME_TICKS = (-1.0, -0.5, 0.0, 0.5, 1.0)


@dataclass(frozen=True, slots=True)
class Drawn:
    """A finished picture and what is known about it: its areas and every piece of text on it."""

    image: QImage
    page: Page
    texts: tuple[PlacedText, ...]


def draw_image(snapshot: Snapshot, width: int, height: int, theme_name: ThemeName) -> Drawn:
    """Draw a snapshot on a new image.

    Needs a QGuiApplication; raises ValueError for an unknown theme or a page without pixels.
    """
    image = QImage(width, height, QImage.Format.Format_RGB32)
    painter = QPainter(image)
    try:
        page, texts = draw_snapshot(painter, snapshot, width, height, theme_name)
    finally:
        painter.end()
    return Drawn(image, page, texts)


def draw_snapshot(
    painter: QPainter, snapshot: Snapshot, width: int, height: int, theme_name: ThemeName
) -> tuple[Page, tuple[PlacedText, ...]]:
    """Draw a snapshot over the top left ``width`` x ``height`` pixels of a painter; returns the areas and the texts."""
    theme = find_theme(theme_name)
    canvas = Canvas(painter, theme, page_scale(width, height))
    image, reading = snapshot.image, snapshot.reading
    room = notes_width(width, height, side=reading is not None)
    notes = _note_lines(canvas, snapshot.notes, room) if image is not None else []
    page = arrange(
        width,
        height,
        rails=0 if image is None else len(image.rails),
        side=reading is not None,
        note_lines=len(notes),
    )
    canvas.fill(Box(0, 0, width, height), theme.page)
    _draw_header(canvas, page, snapshot)
    if image is not None:
        _draw_eye(canvas, page, image, reading)
    elif page.message is not None:
        _draw_message(canvas, page.message, snapshot)
    if page.side is not None and reading is not None:
        _draw_side(canvas, page.side, reading)
    if page.notes is not None:
        _draw_notes(canvas, page.notes, notes)
    return page, tuple(canvas.texts)


def _draw_header(canvas: Canvas, page: Page, snapshot: Snapshot) -> None:
    box, theme = page.header, canvas.theme
    first = Box(box.x, box.y, box.width, canvas.px(28))
    second = Box(box.x, first.bottom, box.width, box.bottom - first.bottom)
    gap = canvas.px(24)

    def row(area: Box, left: str, right: str, size: float, bold: bool) -> None:
        colour = theme.ink if bold else theme.dim
        taken = min(canvas.text_width(right, _TEXT), area.width * 2 // 5) if right else 0
        canvas.write(right, Box(area.right - taken, area.y, taken, area.height), _TEXT, theme.dim, align="right")
        room = area.width - taken - (gap if right else 0)
        canvas.write(left, replace(area, width=room), size, colour, bold=bold, elide="middle")

    seen = []
    if snapshot.seconds is not None:
        seen.append(duration(snapshot.seconds))
    if snapshot.reading is not None:
        seen.append(f"{plain(snapshot.reading.symbols, 0)} symbols")
    if snapshot.coverage_pct is not None and snapshot.image is not None:
        seen.append(f"{plain(snapshot.coverage_pct, 0)} % of traces drawn")
    lock = snapshot.lock_text if snapshot.image is not None else ""
    row(first, snapshot.source_text, lock, 18.0, True)
    row(second, snapshot.link_text, "  ·  ".join(seen), _TEXT, False)
    rule = box.bottom + canvas.px(6)
    canvas.fill(Box(box.x, rule, box.width, max(1, canvas.px(1))), theme.grid)


def duration(seconds: float) -> str:
    """A length of time in words."""
    if seconds < 120:
        return f"{plain(seconds, 1)} s"
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes:02d} min" if hours else f"{minutes} min {rest:02d} s"


def _draw_eye(canvas: Canvas, page: Page, image: EyeImage, reading: Reading | None) -> None:
    low, high = pixels.visible_levels(image)
    for rail, places in enumerate(page.rails):
        _draw_rail(canvas, places, image, rail, low, high)
        if places.levels.width > 0 and places.levels.height > 0:
            draw_levels(canvas, places, image, rail, low, high, reading)
    draw_curve(canvas, page, image)


def x_of(box: Box, ui: float) -> float:
    """Pixel of a time; the axis runs from the box's left to its right edge."""
    return box.x + box.width * (ui - pixels.TIME_MIN_UI) / (pixels.TIME_MAX_UI - pixels.TIME_MIN_UI)


def y_of(box: Box, value: float, low: float, high: float) -> float:
    """Pixel of a value on an upright axis from ``low`` at the box's foot to ``high`` at its head."""
    return box.y + box.height * (high - value) / (high - low)


def blit(canvas: Canvas, box: Box, indices: NDArray[np.uint8]) -> None:
    """Draw indices into the theme's ramp ``(height, width)`` over the box; colours go into an image that owns its memory."""
    picture = QImage(box.width, box.height, QImage.Format.Format_RGB32)
    target = np.frombuffer(picture.bits(), dtype=np.uint32).reshape(box.height, picture.bytesPerLine() // 4)
    np.take(canvas.theme.ramp, indices, out=target[:, : box.width])
    del target
    canvas.painter.drawImage(box.x, box.y, picture)


def _draw_rail(canvas: Canvas, places: RailBoxes, image: EyeImage, rail: int, low: float, high: float) -> None:
    draw_density(canvas, places.eye, image, rail, low, high)
    draw_eye_frame(canvas, places, image, rail, low, high)


def draw_density(canvas: Canvas, eye: Box, image: EyeImage, rail: int, low: float, high: float) -> None:
    """The traces of one rail, and the best instant across them; the amplitude axis runs from ``low`` to ``high``."""
    theme = canvas.theme
    if eye.width > 0 and eye.height > 0:
        blit(canvas, eye, pixels.density_indices(image, rail, low, high, eye.width, eye.height, RAMP_STEPS))
    if image.best_ui is not None:
        x = x_of(eye, image.best_ui)
        if eye.x <= x <= eye.right:
            canvas.line(x, eye.y, x, eye.bottom, theme.accent, 1.6, dashed=True)


def draw_eye_frame(canvas: Canvas, places: RailBoxes, image: EyeImage, rail: int, low: float, high: float) -> None:
    """Caption, frame and ticks round the traces of one rail."""
    theme, eye = canvas.theme, places.eye
    name = image.rails[rail]
    title = f"{name} rail" if name else "Eye"
    caption = Box(eye.x, places.caption.y, eye.width, places.caption.height - canvas.px(4))
    canvas.write(title, caption, _TEXT, theme.ink, bold=True)
    canvas.frame(eye, theme.edge)
    tick = canvas.px(5)
    for ui in _TIME_TICKS:
        x = x_of(eye, ui)
        canvas.line(x, eye.bottom, x, eye.bottom + tick, theme.edge)
    text_height = canvas.px(16)
    last = math.inf
    for level in image.levels:
        y = y_of(eye, float(level), low, high)
        canvas.line(eye.x - tick, y, eye.x, y, theme.edge)
        if last - y >= text_height:
            label = Box(places.gutter.x, round(y - text_height / 2), places.gutter.width - canvas.px(9), text_height)
            canvas.write(_level_name(float(level)), label, _SMALL, theme.dim, align="right")
            last = y
    side = replace(places.gutter, width=canvas.px(18))
    if canvas.text_width("level units", _SMALL) <= side.height:
        canvas.write_upwards("level units", side, _SMALL, theme.dim)


def _level_name(level: float) -> str:
    digits = 0 if abs(level - round(level)) < 0.005 else 2
    return signed(level, digits)


def draw_levels(
    canvas: Canvas, places: RailBoxes, image: EyeImage, rail: int, low: float, high: float, reading: Reading | None
) -> None:
    """How each level's traces are spread at the best instant, with each eye's opening."""
    theme, box = canvas.theme, places.levels
    caption = replace(places.levels_caption, height=places.levels_caption.height - canvas.px(4))
    eyes = () if reading is None else reading.eyes
    each = len(image.levels) - 1
    own = eyes[rail * each : (rail + 1) * each] if len(eyes) == each * len(image.rails) else ()
    canvas.write("Levels", caption, _TEXT, theme.ink, bold=True)
    if own:
        canvas.write("opening", caption, _SMALL, theme.dim, align="right")
    canvas.fill(box, theme.panel)
    openings = [f"{plain(eye.opening_pct, 1)} %" for eye in own if eye.opening_pct is not None]
    widest = max((canvas.text_width(text, _SMALL, bold=True) for text in openings), default=0)
    column = widest + canvas.px(14) if own else 0
    reach = box.width - column - canvas.px(8)
    for level in image.levels:
        y = y_of(box, float(level), low, high)
        canvas.line(box.x, y, box.right - column, y, theme.grid)
    profiles = pixels.level_profiles(image, rail, low, high, box.height)
    pitch = box.height / profiles.shape[1]
    for number, profile in enumerate(profiles):
        held = np.flatnonzero(profile > 0)
        if held.size == 0:
            continue
        colour = theme.level_even if number % 2 == 0 else theme.level_odd
        first, last = int(held[0]), int(held[-1])
        rim = [(box.x + reach * float(profile[row]), box.y + (row + 0.5) * pitch) for row in range(first, last + 1)]
        shape = [(float(box.x), box.y + first * pitch), *rim, (float(box.x), box.y + (last + 1) * pitch)]
        canvas.polygon(shape, colour, 0.55)
        canvas.polyline(shape, colour, 1.2)
    canvas.frame(box, theme.edge)
    known = [eye.opening_pct for eye in eyes if eye.opening_pct is not None]
    least = min(known) if known else None
    text_height = canvas.px(16)
    last_y = math.inf
    for eye in own:
        if eye.threshold is None or not low < eye.threshold < high:
            continue
        y = y_of(box, eye.threshold, low, high)
        worst = eye.opening_pct is not None and eye.opening_pct == least
        colour = theme.accent if worst else theme.edge
        canvas.line(box.x, y, box.right - column, y, colour, 1.4 if worst else 1.0, dashed=True)
        if eye.opening_pct is None or last_y - y < text_height:
            continue
        top = min(max(round(y - text_height / 2), box.y), box.bottom - text_height)
        label = Box(box.right - column + canvas.px(4), top, column - canvas.px(10), text_height)
        ink = theme.ink if worst else theme.dim
        canvas.write(f"{plain(eye.opening_pct, 1)} %", label, _SMALL, ink, align="right", bold=worst)
        last_y = y


def draw_curve(canvas: Canvas, page: Page, image: EyeImage) -> None:
    """The opening against the instant of decision, its axis and the key; nothing where the page has no such areas."""
    theme, box = canvas.theme, page.curve
    caption, gutter, key = page.curve_caption, page.curve_gutter, page.key
    if box is None or caption is None or gutter is None:
        return
    top = pixels.OPENING_TOP_PCT
    floor = pixels.opening_floor(image.opening_pct)
    title = Box(box.x, caption.y, box.width, caption.height - canvas.px(4))
    canvas.write("Opening if decided at this instant", title, _TEXT, theme.ink, bold=True)
    canvas.fill(box, theme.panel)

    text_height = canvas.px(16)
    step = max(50.0, pixels.tick_step(100.0 - floor, max(2, box.height // canvas.px(30) if canvas.px(30) else 2)))
    first = math.ceil(floor / step)
    for tick in range(first, int(top // step) + 1):
        value = tick * step
        y = y_of(box, value, floor, top)
        canvas.line(box.x, y, box.right, y, theme.edge if value == 0 else theme.grid)
        canvas.line(box.x - canvas.px(5), y, box.x, y, theme.edge)
        label = Box(gutter.x, round(y - text_height / 2), gutter.width - canvas.px(9), text_height)
        canvas.write(f"{plain(value, 0)} %", label, _SMALL, theme.dim, align="right")
    for ui in _TIME_TICKS:
        x = x_of(box, ui)
        canvas.line(x, box.y, x, box.bottom, theme.grid)

    canvas.clip(box)
    zero = y_of(box, 0.0, floor, top)
    share = (image.column_ui - pixels.TIME_MIN_UI) / (pixels.TIME_MAX_UI - pixels.TIME_MIN_UI)
    xs = box.x + box.width * share
    ys = box.y + box.height * (top - image.opening_pct) / (top - floor)
    runs = [list(zip(xs[run].tolist(), ys[run].tolist(), strict=True)) for run in pixels.finite_runs(image.opening_pct)]
    for run in runs:
        above = [(x, min(y, zero)) for x, y in run]
        canvas.polygon([(run[0][0], zero), *above, (run[-1][0], zero)], theme.accent_wash)
    canvas.line(box.x, zero, box.right, zero, theme.edge)
    for run in runs:
        canvas.polyline(run, theme.accent, 2.0)
    canvas.clip(None)

    canvas.frame(box, theme.edge)
    span = pixels.open_span(image.column_ui, image.opening_pct, image.best_ui)
    if span is not None:
        left, right = x_of(box, span.start_ui), x_of(box, span.stop_ui)
        reach = canvas.px(4)
        canvas.line(left, zero, right, zero, theme.ink, 2.0)
        canvas.line(left, zero - reach, left, zero + reach, theme.ink, 2.0)
        canvas.line(right, zero - reach, right, zero + reach, theme.ink, 2.0)
    if image.best_ui is not None and box.x <= x_of(box, image.best_ui) <= box.right:
        x = x_of(box, image.best_ui)
        canvas.line(x, box.y, x, box.bottom, theme.accent, 1.6, dashed=True)
        opening = pixels.value_at(image.column_ui, image.opening_pct, image.best_ui)
        if opening is not None:
            y = min(max(y_of(box, opening, floor, top), box.y), box.bottom)
            canvas.dot(x, y, 4.0, theme.accent, theme.panel)

    draw_time_axis(canvas, box)
    if key is not None:
        _draw_key(canvas, key, image, span)


def draw_time_axis(canvas: Canvas, box: Box) -> None:
    """Ticks, times and the axis' name under a plot."""
    theme, text_height = canvas.theme, canvas.px(16)
    for ui in _TIME_TICKS:
        x = x_of(box, ui)
        canvas.line(x, box.bottom, x, box.bottom + canvas.px(5), theme.edge)
        label = Box(round(x) - canvas.px(30), box.bottom + canvas.px(6), canvas.px(60), text_height)
        canvas.write(signed(ui, 0 if ui == round(ui) else 1), label, _SMALL, theme.dim, align="centre")
    name = Box(box.x, box.bottom + canvas.px(23), box.width, canvas.px(17))
    canvas.write("symbol periods (UI) from the decision instant", name, _SMALL, theme.dim, align="centre")


def _draw_key(canvas: Canvas, box: Box, image: EyeImage, span: pixels.Span | None) -> None:
    """What the signs mean, in the corner under the levels."""
    theme = canvas.theme
    line = canvas.px(19)
    sample = canvas.px(22)
    bar_height = canvas.px(10)
    y = box.y + canvas.px(28)
    bar = Box(box.x, y, box.width, bar_height)
    columns = np.arange(bar.width) * (RAMP_STEPS - 1) // max(bar.width - 1, 1)
    if bar.width > 0 and bar.height > 0:
        blit(canvas, bar, np.broadcast_to(columns.astype(np.uint8), (bar.height, bar.width)))
    canvas.frame(bar, theme.edge)
    words = Box(box.x, bar.bottom + canvas.px(3), box.width, canvas.px(16))
    canvas.write("Traces", replace(words, y=box.y, height=canvas.px(20)), _TEXT, theme.ink, bold=True)
    canvas.write("log scale", replace(words, y=box.y, height=canvas.px(20)), _SMALL, theme.dim, align="right")
    canvas.write("none", words, _SMALL, theme.dim)
    canvas.write("most", words, _SMALL, theme.dim, align="right")
    y = words.bottom + canvas.px(8)
    entries = []
    if image.best_ui is not None:
        entries.append("best instant")
    if span is not None:
        entries.append("width")
    for entry in entries:
        if y + line > box.bottom + canvas.px(6):
            return
        middle = y + line / 2
        if entry == "width":
            canvas.line(box.x, middle, box.x + sample, middle, theme.ink, 2.0)
            for end in (box.x, box.x + sample):
                canvas.line(end, middle - canvas.px(4), end, middle + canvas.px(4), theme.ink, 2.0)
        else:
            canvas.line(box.x, middle, box.x + sample, middle, theme.accent, 1.6, dashed=True)
            canvas.dot(box.x + sample / 2, middle, 4.0, theme.accent, theme.page)
        text = Box(box.x + sample + canvas.px(8), y, box.width - sample - canvas.px(8), line)
        canvas.write(entry, text, _SMALL, theme.dim)
        y += line


def _draw_message(canvas: Canvas, box: Box, snapshot: Snapshot) -> None:
    """In the eye's place: that there is no eye, and what was tried."""
    theme = canvas.theme
    canvas.fill(box, theme.panel)
    canvas.frame(box, theme.edge)
    inner = Box(box.x + canvas.px(56), box.y, box.width - canvas.px(112), box.height)
    heading, body, line = canvas.px(64), canvas.px(32), max(1, canvas.px(33))
    lines: list[tuple[str, bool]] = []
    for note in snapshot.notes:
        wrapped = canvas.wrap(note, inner.width - canvas.px(20), _LARGE, 3)
        lines += [(text, number == 0) for number, text in enumerate(wrapped)]
    room = max(0, (box.height - heading - body - canvas.px(120)) // line)
    hidden = len(lines) > room
    lines = lines[:room]
    total = heading + body + (canvas.px(28) + line + len(lines) * line if lines else 0)
    y = box.y + max(canvas.px(20), (box.height - total) * 4 // 10)
    canvas.fill(Box(box.x, y, canvas.px(6), total), theme.accent)
    canvas.write(
        snapshot.lock_text or "No eye to show", replace(inner, y=y, height=heading), 46.0, theme.ink, bold=True
    )
    y += heading
    canvas.write(
        "Nothing was drawn, because no eye could be measured.", replace(inner, y=y, height=body), _LARGE, theme.dim
    )
    y += body
    if lines:
        y += canvas.px(28)
        canvas.write("What was tried and found", replace(inner, y=y, height=line), _LARGE, theme.ink, bold=True)
        y += line
    for number, (text, starts) in enumerate(lines):
        if starts:
            canvas.dot(inner.x + canvas.px(5), y + line / 2, 2.5, theme.accent, theme.panel)
        shown = f"{text} …" if hidden and number == len(lines) - 1 else text
        row = Box(inner.x + canvas.px(20), y, inner.width - canvas.px(20), line)
        canvas.write(shown, row, _LARGE, theme.ink)
        y += line


def _draw_side(canvas: Canvas, box: Box, reading: Reading) -> None:
    y = _draw_opening(canvas, box, reading)
    gap = canvas.px(16)
    if reading.verdict:
        y = draw_verdict(canvas, Box(box.x, y, box.width, box.bottom - y), reading.verdict) + gap
    if reading.budget is not None and budget_rows(reading.budget):
        y = draw_budget(canvas, Box(box.x, y, box.width, box.bottom - y), budget_rows(reading.budget)) + gap
    groups = figure_groups(reading)
    if groups:
        draw_table(canvas, Box(box.x, y, box.width, box.bottom - y), groups)


def _draw_opening(canvas: Canvas, box: Box, reading: Reading) -> int:
    """The one large figure, its interval, and the same on a scale of 0 to 100; returns where it ends."""
    theme = canvas.theme
    title = Box(box.x, box.y, box.width, canvas.px(20))
    canvas.write("Opening", title, _TEXT, theme.ink, bold=True)
    large = Box(box.x, title.bottom, box.width, canvas.px(78))
    opening = reading.opening_pct
    if opening is None or not math.isfinite(opening):
        canvas.write("not known", large, 44.0, theme.dim)
        return large.bottom + canvas.px(10)
    filled = canvas.write(plain(opening, 1), large, 72.0, theme.ink)
    sign_x = filled.right + canvas.px(10)
    sign = Box(sign_x, large.y + canvas.px(26), max(0, box.right - sign_x), canvas.px(44))
    filled = canvas.write("%", sign, 36.0, theme.dim)
    interval = interval_text(reading)
    beside_x = filled.right + canvas.px(28)
    words = ["95 % interval", interval] if interval is not None else []
    if opening <= 0:
        words.insert(0, "eye closed")
    first_y = large.y + (large.height - canvas.px(21) * len(words)) // 2
    beside = Box(beside_x, first_y, max(0, box.right - beside_x), canvas.px(21))
    for number, text in enumerate(words):
        canvas.write(text, replace(beside, y=beside.y + number * canvas.px(21)), 14.0, theme.dim)
    bar = Box(box.x, large.bottom + canvas.px(4), box.width, canvas.px(10))
    canvas.fill(bar, theme.track)
    canvas.fill(replace(bar, width=round(bar.width * min(max(opening, 0.0), 100.0) / 100.0)), theme.accent)
    low, high = reading.opening_low_pct, reading.opening_high_pct
    if low is not None and high is not None and interval is not None:
        ends = [bar.x + bar.width * min(max(value, 0.0), 100.0) / 100.0 for value in (low, high)]
        middle = bar.y + bar.height / 2
        if ends[1] > ends[0]:
            canvas.line(ends[0], middle, ends[1], middle, theme.ink, 2.0)
        for end in ends if high > 0 else ():
            canvas.line(end, bar.y - canvas.px(3), end, bar.bottom + canvas.px(3), theme.ink, 2.0)
    return bar.bottom + canvas.px(20)


def draw_verdict(canvas: Canvas, box: Box, verdict: str) -> int:
    """The verdict beside a bar; returns where it ends."""
    theme = canvas.theme
    indent, line = canvas.px(14), canvas.px(21)
    lines = canvas.wrap(sentence(verdict), box.width - indent, 14.5, 3)
    canvas.fill(Box(box.x, box.y, canvas.px(4), line * len(lines)), theme.accent)
    for number, text in enumerate(lines):
        canvas.write(text, Box(box.x + indent, box.y + number * line, box.width - indent, line), 14.5, theme.ink)
    return box.y + line * len(lines)


def draw_budget(canvas: Canvas, box: Box, rows: Sequence[tuple[str, float]]) -> int:
    """What each cause takes from the opening, largest first, down two columns of bars; returns where it ends."""
    theme = canvas.theme
    title = Box(box.x, box.y, box.width, canvas.px(22))
    end = canvas.write("What closes it", title, _TEXT, theme.ink, bold=True).right
    unit = "points of opening, at the target error rate"
    if end + canvas.px(12) + canvas.text_width(unit, _SMALL) > title.right:
        unit = "points of opening"
    canvas.write(unit, title, _SMALL, theme.dim, align="right")
    gap, line, bar_height = canvas.px(24), canvas.px(29), canvas.px(5)
    width = (box.width - gap) // 2
    half = (len(rows) + 1) // 2
    most = max((abs(points) for _, points in rows), default=0.0) or 1.0
    for number, (label, points) in enumerate(rows):
        x = box.x + (width + gap) * (number // half)
        y = title.bottom + line * (number % half)
        text = Box(x, y, width, canvas.px(18))
        value = f"{plain(points, 1)}"
        taken = canvas.text_width(value, _SMALL, bold=number == 0)
        canvas.write(value, text, _SMALL, theme.ink, align="right", bold=number == 0)
        canvas.write(
            label, replace(text, width=width - taken - canvas.px(8)), _SMALL, theme.dim if number else theme.ink
        )
        bar = Box(x, text.bottom, width, bar_height)
        canvas.fill(bar, theme.track)
        canvas.fill(
            replace(bar, width=round(width * max(points, 0.0) / most)),
            theme.accent if number == 0 else theme.level_even,
        )
    return title.bottom + line * half


@dataclass(frozen=True, slots=True)
class _Table:
    """How the groups are set: in columns, at a text size, with a pitch of lines, leaving ``hidden`` figures out."""

    columns: tuple[tuple[Group, ...], ...]
    size: float
    pitch: float
    hidden: int = 0


_HEADING_LINES = 1.25
_BETWEEN_LINES = 0.6


def _lines_of(groups: Sequence[Group]) -> float:
    lines = sum(len(group.figures) + _HEADING_LINES for group in groups)
    return lines + _BETWEEN_LINES * max(0, len(groups) - 1)


def _in_two(groups: Sequence[Group]) -> tuple[tuple[Group, ...], ...]:
    """Share the groups out to two columns, in order, so that the longer one is as short as it can be."""
    chosen = min(
        ([number for number in range(len(groups)) if mask >> number & 1] for mask in range(1, 2 ** len(groups))),
        key=lambda first: (
            max(
                _lines_of([groups[number] for number in first]),
                _lines_of([group for number, group in enumerate(groups) if number not in first]),
            ),
            first,
        ),
    )
    rest = tuple(group for number, group in enumerate(groups) if number not in chosen)
    return tuple(column for column in (tuple(groups[number] for number in chosen), rest) if column)


def _fit_table(canvas: Canvas, width: int, height: int, groups: Sequence[Group]) -> _Table:
    """The largest setting of the groups that fits; at the least size figures are left out from the longest group."""
    groups = list(groups)
    two = (width - canvas.px(24)) // 2
    hidden = 0
    while True:
        for size in (18.0, 16.5, 15.0, 14.0, 13.0, 12.0, 11.0, 10.0):
            for columns, column_width in (((tuple(groups),), width), (_in_two(groups), two)):
                if len(columns) == 1 and column_width == two:
                    continue
                lines = max(_lines_of(column) for column in columns) + (1.0 if hidden else 0.0)
                if lines * size * 1.3 * canvas.scale > height or (size < 12.0 and len(columns) == 1):
                    continue
                if size > 10.0 and not _all_short_enough(canvas, groups, column_width, size):
                    continue
                pitch = min(size * 1.75, height / canvas.scale / lines)
                return _Table(columns, size, pitch, hidden)
        longest = max(groups, key=lambda group: len(group.figures))
        if len(longest.figures) <= 1:
            groups.pop()
            if not groups:
                return _Table((), 10.0, 13.0, hidden + 1)
        else:
            groups[groups.index(longest)] = replace(longest, figures=longest.figures[:-1])
        hidden += 1


def _all_short_enough(canvas: Canvas, groups: Sequence[Group], width: int, size: float) -> bool:
    gap = canvas.px(10)
    return all(
        canvas.text_width(figure.label, size) + gap + canvas.text_width(figure.value, size) <= width
        for group in groups
        for figure in group.figures
    )


def draw_table(canvas: Canvas, box: Box, groups: Sequence[Group]) -> None:
    """Every known figure, as large as the box bears."""
    theme = canvas.theme
    table = _fit_table(canvas, box.width, box.height, groups)
    gap = canvas.px(24)
    count = max(len(table.columns), 1)
    width = (box.width - gap * (count - 1)) // count
    pitch = table.pitch * canvas.scale
    for number, column in enumerate(table.columns):
        x = box.x + (width + gap) * number
        y = float(box.y)
        for group in column:
            canvas.write(group.title, Box(x, round(y), width, round(pitch)), table.size, theme.ink, bold=True)
            rule = round(y + pitch * 1.06)
            canvas.fill(Box(x, rule, width, max(1, canvas.px(1))), theme.grid)
            y += pitch * _HEADING_LINES
            for figure in group.figures:
                row = Box(x, round(y), width, round(pitch))
                taken = canvas.text_width(figure.value, table.size)
                canvas.write(figure.value, row, table.size, theme.ink, align="right")
                canvas.write(figure.label, replace(row, width=width - taken - canvas.px(6)), table.size, theme.dim)
                y += pitch
            y += pitch * _BETWEEN_LINES
    if table.hidden:
        row = Box(box.x, round(box.bottom - pitch), box.width, round(pitch))
        canvas.write(f"{table.hidden} more figures have no room here", row, table.size, theme.dim)


def _note_lines(canvas: Canvas, notes: Sequence[str], width: int) -> list[tuple[str, bool]]:
    """Notes broken to lines, each with whether it starts a note; the last line tells how many are left out."""
    lines: list[tuple[str, bool]] = []
    for number, note in enumerate(notes):
        wrapped = canvas.wrap(note, width - canvas.px(20), _TEXT, 2)
        left = len(notes) - number
        if len(lines) + len(wrapped) + (left > 1) > _MOST_NOTE_LINES:
            lines.append((f"and {left} more {'note' if left == 1 else 'notes'}", False))
            return lines
        lines += [(text, position == 0) for position, text in enumerate(wrapped)]
    return lines


def _draw_notes(canvas: Canvas, box: Box, lines: Sequence[tuple[str, bool]]) -> None:
    theme = canvas.theme
    line = box.height // max(len(lines), 1)
    for number, (text, starts) in enumerate(lines):
        y = box.y + number * line
        if starts:
            middle, reach = y + line / 2, canvas.px(5)
            x = box.x + reach
            canvas.polygon(
                [(x - reach, middle), (x, middle - reach), (x + reach, middle), (x, middle + reach)], theme.alert
            )
        canvas.write(text, Box(box.x + canvas.px(20), y, box.width - canvas.px(20), line), _TEXT, theme.ink)
