"""The panels of the live page, each drawn on its own; `monitor.views.live_page` decides which are due."""

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

from dsp.picture import EyeImage
from dsp.reading import Reading
from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, LiveState
from monitor.views import pixels
from monitor.views.canvas import Canvas
from monitor.views.control import ACTIONS, Action, LinkAction, persistence_words
from monitor.views.diagnosis_drawing import draw_page
from monitor.views.diagnosis_wording import PAGE_TITLES, PAGES, PageName
from monitor.views.drawing import (
    draw_budget,
    draw_curve,
    draw_density,
    draw_eye_frame,
    draw_levels,
    draw_table,
    draw_time_axis,
    draw_verdict,
)
from monitor.views.history import AlarmSpan
from monitor.views.layout import Box, Page
from monitor.views.live_wording import (
    alarm_words,
    best_words,
    by_urgency,
    calls,
    change_lines,
    clock,
    health_words,
    key_figures,
    no_eye_lines,
)
from monitor.views.theme import Colour, ThemeName
from monitor.views.wording import UNEXPLAINED, figure_groups, interval_text, plain, telling_rows

_TEXT, _SMALL, _LARGE = 13.0, 12.0, 19.0


@dataclass(frozen=True, slots=True)
class View:
    """What is to be shown, and how.

    Attributes
    ----------
    state
        The state to draw; while held, the one of that moment.
    alarms
        The newest, also while held.
    spans
        Alarms that stood earlier or stand now, for the history.
    held, rail, page, persistence, tone
        How things are set; ``rail`` None shows all.
    span_s
        How much of the history; None for the whole watch.
    said
        The view's own last remark; may be empty.
    """

    state: LiveState
    alarms: tuple[AlarmLine, ...] = ()
    spans: tuple[AlarmSpan, ...] = ()
    held: bool = False
    rail: int | None = None
    page: PageName = "glance"
    persistence: float | None = 2.0
    tone: bool = False
    theme: ThemeName = "light"
    zoom: float = 1.0
    span_s: float | None = None
    said: str = ""


def shown_rail(image: EyeImage, reading: Reading | None, rail: int | None) -> tuple[EyeImage, Reading | None]:
    """The image and the reading's eyes of one rail alone, or of all for None."""
    if rail is None or rail >= len(image.rails) or len(image.rails) == 1:
        return image, reading
    only = slice(rail, rail + 1)
    image = replace(
        image, rails=image.rails[only], density=image.density[only], distributions=image.distributions[only]
    )
    if reading is not None:
        each = len(image.levels) - 1
        reading = replace(reading, eyes=reading.eyes[rail * each : (rail + 1) * each])
    return image, reading


def draw_header(canvas: Canvas, box: Box, state: LiveState) -> None:
    """Source and link; lock, length and losses."""
    theme, snapshot = canvas.theme, state.snapshot
    two = box.height >= canvas.px(44)
    first = replace(box, height=canvas.px(28))
    lock = "ended" if state.ended else snapshot.lock_text if state.locked else "no lock"
    health = health_words(state)
    if not two:
        lock, health = f"{lock}  ·  {health}", ""
    taken = min(canvas.text_width(lock, _TEXT), box.width * 3 // 5)
    canvas.write(lock, replace(first, x=box.right - taken, width=taken), _TEXT, theme.dim, align="right")
    room = replace(first, width=max(0, box.width - taken - canvas.px(20)))
    canvas.write(snapshot.source_text, room, 18.0, theme.ink, bold=True, elide="middle")
    if two:
        second = Box(box.x, first.bottom, box.width, box.bottom - first.bottom)
        taken = min(canvas.text_width(health, _TEXT), box.width * 3 // 5)
        canvas.write(health, replace(second, x=box.right - taken, width=taken), _TEXT, theme.dim, align="right")
        room = replace(second, width=max(0, box.width - taken - canvas.px(20)))
        canvas.write(snapshot.link_text, room, _TEXT, theme.dim, elide="middle")


def draw_band(canvas: Canvas, box: Box, view: View) -> None:
    """The alarms, those that call first, and at the right how the view is set."""
    theme = canvas.theme
    gap, pad = canvas.px(10), canvas.px(12)
    right = _draw_settings(canvas, box, view)
    alarms = by_urgency(view.alarms)
    if not alarms:
        canvas.frame(_inside(canvas, replace(box, width=right - box.x)), theme.grid)
        room = Box(box.x + pad, box.y, max(0, right - box.x - 2 * pad), box.height)
        canvas.write("No alarms", room, _TEXT, theme.dim)
        return
    x = box.x
    for number, alarm in enumerate(alarms):
        left = len(alarms) - number
        more = f"and {left - 1} more" if left > 1 else ""
        kept = canvas.text_width(more, _TEXT) + gap if more else 0
        mark = canvas.px(24)
        words = alarm_words(alarm)
        wanted = mark + canvas.text_width(words, _TEXT, bold=calls(alarm)) + 2 * pad
        left_over = right - x - kept
        if len(alarms) == 1 and alarm.text:
            more_words = f"{words}  ·  {alarm.text}"
            longer = mark + canvas.text_width(more_words, _TEXT, bold=calls(alarm)) + 2 * pad
            if longer <= left_over:
                words, wanted = more_words, longer
        if number and wanted > left_over:
            canvas.write(f"and {left} more", Box(x, box.y, max(0, right - x), box.height), _TEXT, theme.ink)
            return
        chip = Box(x, box.y, max(0, min(wanted, left_over)), box.height)
        ink = theme.page if calls(alarm) else theme.ink
        if calls(alarm):
            canvas.fill(chip, theme.alert)
        else:
            canvas.frame(_inside(canvas, chip), theme.alert)
        _severity_sign(canvas, chip.x + pad + canvas.px(6), chip.y + chip.height / 2, alarm.severity, ink)
        text = Box(chip.x + pad + mark, chip.y, max(0, chip.width - 2 * pad - mark), chip.height)
        canvas.write(words, text, _TEXT, ink, bold=calls(alarm))
        x = chip.right + gap


def _inside(canvas: Canvas, box: Box) -> Box:
    """The box that a frame can be drawn round without leaving this one."""
    line = max(1, canvas.px(1))
    return Box(box.x + line, box.y + line, max(0, box.width - 2 * line), max(0, box.height - 2 * line))


def _severity_sign(canvas: Canvas, x: float, y: float, severity: str, colour: Colour) -> None:
    """One bar for low, two for medium, three for high, rising: told apart without colour."""
    bars = {"low": 1, "medium": 2}.get(severity, 3)
    width, gap, foot = canvas.px(4), canvas.px(2), round(y) + canvas.px(7)
    left = round(x) - canvas.px(8)
    for bar in range(3):
        height = canvas.px(5 + 5 * bar) if bar < bars else max(1, canvas.px(1))
        canvas.fill(Box(left + bar * (width + gap), foot - height, width, height), colour)


def _draw_settings(canvas: Canvas, box: Box, view: View) -> int:
    """How the view is set, at the band's right; returns where it starts."""
    theme = canvas.theme
    pad = canvas.px(12)
    parts = [persistence_words(view.persistence)]
    rails = view.state.rails
    if len(rails) > 1 and view.rail is not None and view.rail < len(rails):
        parts.insert(0, f"{rails[view.rail]} alone")
    if view.tone:
        parts.append("tone on")
    words = "  ·  ".join(parts)
    taken = min(canvas.text_width(words, _TEXT), box.width // 3)
    x = box.right - taken
    canvas.write(words, Box(x, box.y, taken, box.height), _TEXT, theme.dim, align="right")
    x -= canvas.px(16)
    if view.held:
        held = f"Held at {clock(view.state.seconds)}"
        width = canvas.text_width(held, 15.0, bold=True) + 2 * pad
        chip = Box(x - width, box.y, width, box.height)
        canvas.fill(chip, theme.ink)
        canvas.write(held, chip, 15.0, theme.page, align="centre", bold=True)
        x = chip.x - canvas.px(12)
    return x


def draw_eye_axes(canvas: Canvas, page: Page, image: EyeImage, reading: Reading | None) -> None:
    """All of the eye but its traces."""
    low, high = pixels.visible_levels(image)
    for rail, places in enumerate(page.rails):
        draw_eye_frame(canvas, places, image, rail, low, high)
        if places.levels.width > 0 and places.levels.height > 0:
            draw_levels(canvas, places, image, rail, low, high, reading)
    if page.curve is not None:
        draw_curve(canvas, page, image)
    elif page.rails:
        draw_time_axis(canvas, page.rails[-1].eye)


def draw_traces(canvas: Canvas, eye: Box, image: EyeImage, rail: int) -> None:
    """The traces of one rail."""
    low, high = pixels.visible_levels(image)
    draw_density(canvas, eye, image, rail, low, high)


def draw_no_eye(canvas: Canvas, box: Box, state: LiveState) -> None:
    """In the eye's place: that there is none, and what is tried."""
    theme = canvas.theme
    frame = _inside(canvas, box)
    canvas.fill(frame, theme.panel)
    canvas.frame(frame, theme.edge)
    heading, sentence = no_eye_lines(state)
    inner = Box(box.x + canvas.px(40), box.y, box.width - canvas.px(80), box.height)
    line = canvas.px(29)
    lines = canvas.wrap(sentence, inner.width, _LARGE, 4)
    for note in state.snapshot.notes:
        lines += canvas.wrap(note, inner.width, _LARGE, 2)
    size = 40.0
    while size > 22.0 and canvas.text_width(heading, size, bold=True) > inner.width:
        size -= 3.0
    head = canvas.px(62)
    lines = lines[: max(0, (box.height - head - canvas.px(24)) // max(line, 1))]
    total = head + line * len(lines)
    y = box.y + max(canvas.px(10), (box.height - total) * 4 // 10)
    canvas.fill(Box(box.x + canvas.px(22), y, canvas.px(6), total), theme.accent)
    canvas.write(heading, Box(inner.x, y, inner.width, head), size, theme.ink, bold=True)
    for number, text in enumerate(lines):
        row = Box(inner.x, y + head + number * line, inner.width, line)
        canvas.write(text, row, _LARGE, theme.ink)


def draw_figure(canvas: Canvas, box: Box, state: LiveState) -> None:
    """The one large figure, the best so far as a target on its bar, and the change since the last mark."""
    theme, reading = canvas.theme, state.snapshot.reading
    if box.height < canvas.px(140):
        _draw_small_figure(canvas, box, state)
        return
    tall = box.height >= canvas.px(220)
    title = Box(box.x, box.y, box.width, canvas.px(20))
    canvas.write("Opening", title, _TEXT, theme.ink, bold=True)
    interval = interval_text(reading) if reading is not None else None
    if interval is not None:
        canvas.write(f"95 % interval {interval}", title, _TEXT, theme.dim, align="right")
    large = Box(box.x, title.bottom - canvas.px(4), box.width, canvas.px(98 if tall else 74))
    size = 92.0 if tall else 68.0
    opening = reading.opening_pct if reading is not None else None
    if opening is None or not math.isfinite(opening):
        canvas.write("not known", large, size / 2, theme.dim)
        opening = None
    else:
        figure = canvas.write(plain(opening, 1), large, size, theme.ink)
        x = figure.right + canvas.px(8)
        sign = Box(x, large.y + large.height // 3, max(0, box.right - x), large.height // 2)
        sign_end = canvas.write("%", sign, size / 2.2, theme.dim).right
        if opening <= 0:
            rest = replace(large, x=sign_end + canvas.px(16), width=max(0, box.right - sign_end - canvas.px(16)))
            canvas.write("eye closed", rest, 15.0, theme.ink, bold=True)
    bar = Box(box.x, large.bottom + canvas.px(2), box.width, canvas.px(12))
    _draw_opening_bar(canvas, bar, opening, state)
    y = bar.bottom + canvas.px(2)
    canvas.write(best_words(state), Box(box.x, y, box.width, canvas.px(20)), _TEXT, theme.dim)
    y += canvas.px(24)
    _draw_change(canvas, Box(box.x, y, box.width, max(0, box.bottom - y)), state)


def _draw_small_figure(canvas: Canvas, box: Box, state: LiveState) -> None:
    """The figure beside its change, over the bar: all that a page leaves room for."""
    theme, reading = canvas.theme, state.snapshot.reading
    opening = reading.opening_pct if reading is not None else None
    title = Box(box.x, box.y, box.width, canvas.px(18))
    canvas.write("Opening", title, _TEXT, theme.ink, bold=True)
    interval = interval_text(reading) if reading is not None else None
    if interval is not None:
        canvas.write(f"95 % interval {interval}", title, _TEXT, theme.dim, align="right")
    large = Box(box.x, title.bottom, box.width, canvas.px(48))
    if opening is None or not math.isfinite(opening):
        end = canvas.write("not known", large, 24.0, theme.dim).right
        opening = None
    else:
        end = canvas.write(f"{plain(opening, 1)} %", large, 42.0, theme.ink).right
    x = end + canvas.px(18)
    verdict, points, _ = change_lines(state)
    if canvas.text_width(verdict, 15.0, bold=True) > box.right - x:
        verdict = verdict.replace("significant ", "")
    words = [verdict, points] if verdict else ["eye closed"] if opening is not None and opening <= 0 else []
    line = canvas.px(21)
    for number, text in enumerate(words):
        row = Box(x, large.y + (large.height - line * len(words)) // 2 + number * line, max(0, box.right - x), line)
        canvas.write(text, row, 15.0, theme.ink, bold=number == 0)
    _draw_opening_bar(canvas, Box(box.x, large.bottom + canvas.px(13), box.width, canvas.px(10)), opening, state)


def _draw_opening_bar(canvas: Canvas, bar: Box, opening: float | None, state: LiveState) -> None:
    theme, reading = canvas.theme, state.snapshot.reading

    def at(value: float) -> float:
        return bar.x + bar.width * min(max(value, 0.0), 100.0) / 100.0

    canvas.fill(bar, theme.track)
    if opening is not None:
        canvas.fill(replace(bar, width=round(at(opening)) - bar.x), theme.accent)
    low = reading.opening_low_pct if reading is not None else None
    high = reading.opening_high_pct if reading is not None else None
    if low is not None and high is not None and high > max(low, 0.0) and math.isfinite(high - low):
        middle = bar.y + bar.height / 2
        canvas.line(at(low), middle, at(high), middle, theme.ink, 2.0)
        for end in (at(low), at(high)):
            canvas.line(end, bar.y + canvas.px(2), end, bar.bottom - canvas.px(2), theme.ink, 2.0)
    best = state.best.opening_pct if state.best is not None else None
    if best is not None and best > 0:
        x, reach = at(best), canvas.px(6)
        canvas.line(x, bar.y - canvas.px(3), x, bar.bottom, theme.ink, 2.0)
        canvas.polygon(
            [(x - reach, bar.y - 2 * reach), (x + reach, bar.y - 2 * reach), (x, bar.y - reach / 3)], theme.ink
        )


def _draw_change(canvas: Canvas, box: Box, state: LiveState) -> None:
    theme = canvas.theme
    verdict, points, since = change_lines(state)
    if not verdict:
        for number, text in enumerate(canvas.wrap(since, box.width, _TEXT, 2)):
            canvas.write(text, Box(box.x, box.y + number * canvas.px(19), box.width, canvas.px(19)), _TEXT, theme.dim)
        return
    colour = {"better": theme.level_even, "worse": theme.alert}.get(verdict, theme.dim)
    row = Box(box.x, box.y, box.width, canvas.px(36))
    middle, reach = row.y + row.height / 2, canvas.px(11)
    x = row.x + reach
    if verdict == "better":
        canvas.polygon([(x - reach, middle + reach), (x + reach, middle + reach), (x, middle - reach)], colour)
    elif verdict == "worse":
        canvas.polygon([(x - reach, middle - reach), (x + reach, middle - reach), (x, middle + reach)], colour)
    else:
        for shift in (-4, 4):
            canvas.fill(Box(row.x, round(middle) + canvas.px(shift - 1.5), 2 * reach, canvas.px(3)), colour)
    room = replace(row, x=row.x + canvas.px(32), width=max(0, row.width - canvas.px(32)))
    size = 25.0
    gap = canvas.px(14)
    while (
        size > 12.0 and canvas.text_width(verdict, size, bold=True) + gap + canvas.text_width(points, size) > room.width
    ):
        size -= 1.0
    end = canvas.write(verdict, room, size, theme.ink, bold=True).right + gap
    canvas.write(points, replace(room, x=end, width=max(0, room.right - end)), size, theme.ink)
    below = Box(box.x, row.bottom, box.width, canvas.px(20))
    canvas.write(since, below, _SMALL, theme.dim, elide="middle")


def draw_detail(canvas: Canvas, box: Box, snapshot: Snapshot, page: PageName) -> None:
    """The page's title and the page; at a glance verdict, largest causes and key figures, as far as there is room."""
    reading = snapshot.reading
    if reading is None:
        return
    title = Box(box.x, box.y, box.width, canvas.px(24))
    if page != "glance":
        _draw_page_title(canvas, title, page)
        draw_page(canvas, Box(box.x, title.bottom, box.width, max(0, box.bottom - title.bottom)), page, snapshot)
        return
    y, gap = box.y + canvas.px(6), canvas.px(12)
    if reading.verdict and canvas.px(90) <= box.bottom - y:
        y = draw_verdict(canvas, Box(box.x, y, box.width, box.bottom - y), reading.verdict) + gap
    rows = telling_rows(reading.budget) if reading.budget is not None else []
    # two lines of figures below it: the other causes have a page of their own
    lines = (box.bottom - y - canvas.px(22 + 12 + 46)) // max(canvas.px(29), 1)
    if len(rows) > 2 * lines:
        rows = [row for row in rows if row[0] != UNEXPLAINED]
    rows = rows[: max(0, 2 * min(lines, 4))]
    if rows:
        y = draw_budget(canvas, Box(box.x, y, box.width, box.bottom - y), rows) + gap
    rest = Box(box.x, y, box.width, max(0, box.bottom - y))
    groups = figure_groups(reading)
    if groups and rest.height >= canvas.px(300):
        draw_table(canvas, rest, groups)
    else:
        _draw_key_figures(canvas, rest, reading)


def _draw_page_title(canvas: Canvas, box: Box, page: PageName) -> None:
    """What the page is, and which of how many."""
    theme = canvas.theme
    canvas.write(PAGE_TITLES[page], box, 15.0, theme.ink, bold=True)
    side, gap = canvas.px(7), canvas.px(5)
    x = box.right - len(PAGES) * (side + gap) + gap
    for name in PAGES:
        mark = Box(x, box.y + (box.height - side) // 2, side, side)
        canvas.fill(mark, theme.accent if name == page else theme.edge)
        x += side + gap


def _draw_key_figures(canvas: Canvas, box: Box, reading: Reading) -> None:
    """The most telling figures in two columns, line by line, as many as there is room for."""
    theme, gap = canvas.theme, canvas.px(24)
    pitch, width = canvas.px(23), (box.width - gap) // 2
    least = canvas.px(8)
    fitting = [
        figure
        for figure in key_figures(reading)
        if canvas.text_width(figure.label, _TEXT) + least + canvas.text_width(figure.value, _TEXT) <= width
    ]
    figures = fitting[: 2 * (box.height // max(pitch, 1))]
    for number, figure in enumerate(figures):
        row = Box(box.x + (width + gap) * (number % 2), box.y + pitch * (number // 2), width, pitch)
        taken = canvas.text_width(figure.value, _TEXT)
        canvas.write(figure.value, row, _TEXT, theme.ink, align="right")
        canvas.write(figure.label, replace(row, width=max(0, width - taken - least)), _TEXT, theme.dim)
        if number < len(figures) - 2:
            canvas.fill(Box(row.x, row.bottom - 1, width, max(1, canvas.px(1))), theme.grid)


_HINTS = {"mark": "mark", "acknowledge": "acknowledge", "hold": "hold", "page": "next page", "help": "all keys"}


def draw_footer(canvas: Canvas, box: Box, view: View) -> None:
    """The newest notice or remark, and the keys most wanted."""
    theme, state = canvas.theme, view.state
    hints = []
    for action in ACTIONS:
        if action.name in _HINTS:
            hints.append(f"{action.keys[0]} {_HINTS[action.name]}")
    text = "   ".join(hints)
    taken = min(canvas.text_width(text, _SMALL), box.width * 3 // 5)
    canvas.write(text, Box(box.right - taken, box.y, taken, box.height), _SMALL, theme.dim, align="right")
    parts = [view.said] if view.said else [*state.notices[-2:][::-1]]
    if state.journal_text and not view.said:
        parts.append(state.journal_text)
    room = replace(box, width=max(0, box.width - taken - canvas.px(24)))
    canvas.write("  ·  ".join(parts), room, _SMALL, theme.ink if view.said else theme.dim)


def draw_help(canvas: Canvas, box: Box, actions: Sequence[Action | LinkAction] = ACTIONS) -> None:
    """All keys with what they do, over the page."""
    theme = canvas.theme
    canvas.fill(box, theme.panel)
    canvas.frame(_inside(canvas, box), theme.ink)
    inner = Box(box.x + canvas.px(24), box.y + canvas.px(14), box.width - canvas.px(48), box.height - canvas.px(28))
    title = replace(inner, height=canvas.px(30))
    canvas.write("Keys", title, _LARGE, theme.ink, bold=True)
    pitch = min(canvas.px(32), (inner.bottom - title.bottom) // len(actions))
    size = min(14.0, 0.6 * pitch / canvas.scale)
    keys_width = max(canvas.text_width(" or ".join(a.keys), size, bold=True) for a in actions) + canvas.px(20)
    words_width = max(canvas.text_width(a.words.rstrip("…"), size) for a in actions) + canvas.px(20)
    for number, action in enumerate(actions):
        row = Box(inner.x, title.bottom + number * pitch, inner.width, pitch)
        canvas.write(" or ".join(action.keys), replace(row, width=keys_width), size, theme.ink, bold=True)
        words = Box(row.x + keys_width, row.y, min(words_width, max(0, row.width - keys_width)), pitch)
        canvas.write(action.words.rstrip("…"), words, size, theme.ink)
        rest = Box(words.right, row.y, max(0, row.right - words.right), pitch)
        canvas.write(action.what, rest, size, theme.dim)
