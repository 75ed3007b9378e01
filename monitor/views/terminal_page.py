"""The terminal view's picture of a live state, as cells: a pure function of what is shown."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from dsp.reading import Reading
from monitor.state import LiveState
from monitor.views.control import (
    ACTIONS,
    DEFAULT_PERSISTENCE,
    LINK_ACTIONS,
    Action,
    ActionName,
    LinkAction,
    persistence_words,
)
from monitor.views.diagnosis_wording import PageName
from monitor.views.history import AlarmSpan
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
from monitor.views.terminal_cells import Ink, Screen, Sheet, cells, shorten, spell, wrap
from monitor.views.terminal_colours import Look, Palette, palette
from monitor.views.terminal_diagnosis import draw_budget, draw_figures, draw_side_page
from monitor.views.terminal_digits import digit_pixels, half_blocks, hash_blocks
from monitor.views.terminal_plots import draw_curve, draw_eye, draw_history
from monitor.views.wording import figure_groups, interval_text, plain, sentence, telling_rows

LEAST_COLUMNS, LEAST_ROWS = 64, 20
_MOST_SIDE, _LEAST_SIDE = 54, 34
_MOST_ALARM_ROWS = 3
_RECENT_S = 600.0
# the width of most actions' words
_HELP_WORDS = 19
_LEAST_SPAN_S = 60.0
# what means nothing over a terminal's connection
_NOT_HERE: tuple[ActionName, ...] = ("tone",)
# shown in the last row, as far as there is room
_FOOT: tuple[tuple[ActionName, str], ...] = (
    ("mark", "mark"),
    ("help", "all keys"),
    ("close", "end"),
    ("acknowledge", "acknowledge"),
    ("hold", "hold"),
    ("page", "page"),
    ("name", "name"),
    ("clear", "clear"),
    ("rail", "rail"),
    ("longer", "traces"),
)
# what is shown where a key has two names and terminals often keep the first for themselves
_SHOWN_KEY: dict[ActionName, str] = {"help": "?"}


@dataclass(frozen=True, slots=True)
class Shown:
    """How the view is set, beside the state.

    Attributes
    ----------
    rail
        The one rail to show; None for all.
    persistence
        How long traces stay, as `monitor.views.control` counts it.
    page
        What stands beside the eye.
    held
        The picture stands still.
    helping
        The list of keys is shown.
    entry
        The mark's name as typed so far; None when none is being typed.
    remark
        What the last key did, in words.
    alarm_spans
        When alarms stood.
    several
        There are other links beside this one.
    """

    rail: int | None = None
    persistence: float | None = DEFAULT_PERSISTENCE
    page: PageName = "glance"
    held: bool = False
    helping: bool = False
    entry: str | None = None
    remark: str = ""
    alarm_spans: tuple[AlarmSpan, ...] = ()
    several: bool = False


_AS_STARTED = Shown()


def compose(state: LiveState, columns: int, rows: int, look: Look, shown: Shown = _AS_STARTED) -> Screen:
    """Draw a state on ``columns`` x ``rows`` cells; says so in words where these are too few. Raises ValueError without cells."""
    inks = palette(look.depth)
    sheet = Sheet(columns, rows, inks.text, unicode=look.unicode)
    if columns < LEAST_COLUMNS or rows < LEAST_ROWS:
        _draw_small(sheet, inks, state, shown)
    else:
        _draw_page(sheet, inks, state, shown)
    return sheet.finish()


def _draw_small(sheet: Sheet, inks: Palette, state: LiveState, shown: Shown) -> None:
    """What must not be missed, and why the rest is missing."""
    lines: list[tuple[str, Ink]] = []
    reading = state.snapshot.reading
    word, points, _ = change_lines(state)
    if reading is not None and reading.opening_pct is not None:
        lines.append((f"Opening {plain(reading.opening_pct, 1)} %", inks.strong))
    else:
        lines.append((no_eye_lines(state)[0], inks.strong))
    if word:
        lines.append((f"{word}, {points}", inks.text))
    alarms = by_urgency(state.alarms)
    lines += [(alarm_words(alarm), inks.alarm if calls(alarm) else inks.quiet) for alarm in alarms[:1]]
    if len(alarms) > 1:
        lines.append((f"and {len(alarms) - 1} more alarms", inks.text))
    size = f"{sheet.columns} × {sheet.rows}"
    words = f"Too small for the eye: the terminal has {size} characters, {LEAST_COLUMNS} × {LEAST_ROWS} are needed."
    lines += [(line, inks.dim) for line in wrap(sheet.spell(words), sheet.columns, 8, sheet.ellipsis)]
    for y, (text, ink) in enumerate(lines[: sheet.rows]):
        sheet.write(0, y, text, ink)
    if shown.entry is not None or shown.remark:
        _draw_remark(sheet, inks, state, shown, sheet.rows - 1)


def _draw_page(sheet: Sheet, inks: Palette, state: LiveState, shown: Shown) -> None:
    columns, rows = sheet.columns, sheet.rows
    snapshot = state.snapshot
    _draw_pair(sheet, inks.strong, inks.dim, 0, snapshot.source_text or "no source", _health(state, columns // 2))
    settings = [persistence_words(shown.persistence)]
    if not state.locked or state.ended:
        settings = ["ended" if state.ended else "no lock"]
    _draw_pair(sheet, inks.dim, inks.dim, 1, snapshot.link_text, "  ·  ".join(settings))
    alarms = _alarm_lines(state, min(_MOST_ALARM_ROWS, 1 + (rows - LEAST_ROWS) // 8))
    for y, (text, more, ink) in enumerate(
        ((text, more, _alarm_ink(inks, kind)) for text, more, kind in alarms), start=2
    ):
        sheet.fill(0, y, columns, 1, ink)
        sheet.write(columns - cells(more), y, more, ink)
        indent = 1 if ink is inks.alarm else 0
        sheet.write(indent, y, text, ink, columns - cells(more) - 2 * indent)
    top = 2 + len(alarms)
    # from the foot: keys, remark, history
    plot_rows = 2 if rows < 30 else 3 if rows < 40 else min(8, rows // 9)
    history = rows - 2 - (plot_rows + 2)
    verdict = snapshot.reading.verdict if snapshot.reading is not None else None
    side = min(max(columns * 2 // 5, _LEAST_SIDE), _MOST_SIDE)
    left = columns - side - 2
    bottom = history - (1 if rows >= 28 else 0)
    if verdict and rows < 36:
        lines = wrap(sheet.spell(sentence(verdict)), columns, 2, sheet.ellipsis)
        bottom -= len(lines)
        for number, line in enumerate(lines):
            sheet.write(0, bottom + number, line, inks.text)
    if shown.helping:
        _draw_help(sheet, inks, top, bottom, LINK_ACTIONS if shown.several else ())
    else:
        _draw_eye_area(sheet, inks, state, shown, top, left, bottom - top)
        if shown.page == "glance":
            _draw_side(sheet, inks, state, left + 2, top, side, bottom - top, with_verdict=rows >= 36)
        else:
            _draw_opening_line(sheet, inks, state, left + 2, top, side)
            draw_side_page(sheet, inks, shown.page, snapshot, left + 2, top + 1, side, bottom - top - 1)
    _draw_history(sheet, inks, state, shown, history, plot_rows)
    _draw_remark(sheet, inks, state, shown, rows - 2)
    _draw_keys(sheet, inks, state, shown, rows - 1)


def _draw_pair(sheet: Sheet, left_ink: Ink, right_ink: Ink, y: int, left: str, right: str) -> None:
    """A text at the left edge and one at the right; the left one gives way in its middle."""
    right = shorten(sheet.spell(right), sheet.columns * 3 // 5, sheet.ellipsis)
    room = sheet.columns - cells(right) - 2
    sheet.write(0, y, shorten(sheet.spell(left), room, sheet.ellipsis, middle=True), left_ink)
    sheet.write(sheet.columns - cells(right), y, right, right_ink)


def _health(state: LiveState, room: int) -> str:
    """Length, loss and delay; the symbols only where they have room."""
    parts = health_words(state).split("  ·  ")
    if cells(" · ".join(parts)) > room:
        parts = [part for part in parts if not part.endswith("symbols")]
    return " · ".join(parts)


def _alarm_lines(state: LiveState, most: int) -> list[tuple[str, str, str]]:
    """Text, how many are left out, and kind (alarm, quiet, none) of the rows that tell of alarms."""
    alarms = by_urgency(state.alarms)
    if not alarms:
        return [("No alarms", "", "none")]
    lines = []
    for alarm in alarms[:most]:
        text = alarm_words(alarm) + (f"  ·  {alarm.text}" if alarm.text else "")
        lines.append((f"{alarm.severity}: {text}", "", "alarm" if calls(alarm) else "quiet"))
    left = len(alarms) - most
    if left > 0:
        text, _, kind = lines[-1]
        lines[-1] = (text, f" and {left} more ", kind)
    return lines


def _alarm_ink(inks: Palette, kind: str) -> Ink:
    return {"alarm": inks.alarm, "quiet": inks.quiet}.get(kind, inks.dim)


def _draw_eye_area(
    sheet: Sheet, inks: Palette, state: LiveState, shown: Shown, top: int, width: int, height: int
) -> None:
    image = state.snapshot.image
    if image is None:
        _draw_message(sheet, inks, state, top, width, height)
        return
    rails = [shown.rail] if shown.rail is not None and shown.rail < len(image.rails) else list(range(len(image.rails)))
    curve_rows = 1 if height < 18 else 2 if height < 26 else 3 if height < 40 else 4
    captioned = len(image.rails) > 1
    stacked = len(rails) > 1 and height >= 30 and width < 3 * height
    between = 2
    each = width if stacked else (width - between * (len(rails) - 1)) // len(rails)
    gutter = 3 if len(image.levels) < 10 else 4
    for number, rail in enumerate(rails):
        part = height // len(rails) if stacked else height
        x, y = (0, top + number * part) if stacked else (number * (each + between), top)
        if captioned:
            sheet.write(x + gutter, y, f"{image.rails[rail]} rail", inks.dim)
            y, part = y + 1, part - 1
        last = not stacked or number == len(rails) - 1
        foot = curve_rows + 1 if last else 0
        draw_eye(sheet, inks, image, rail, x, y, each, part - foot, gutter)
        if last:
            draw_curve(sheet, inks, image, x, y + part - foot, each, curve_rows, gutter)


def _draw_message(sheet: Sheet, inks: Palette, state: LiveState, top: int, width: int, height: int) -> None:
    heading, sentence = no_eye_lines(state)
    sheet.fill(0, top, width, height, inks.panel)
    room = width - 4
    lines = [(line, True) for line in wrap(sheet.spell(heading), room, 2, sheet.ellipsis)]
    notes = [sentence, *state.snapshot.notes]
    for note in notes:
        if note:
            lines.append(("", False))
            lines += [(line, False) for line in wrap(sheet.spell(note), room, 4, sheet.ellipsis)]
    lines = lines[: max(height - 2, 1)]
    y = top + max(0, (height - len(lines)) * 2 // 5)
    for number, (text, large) in enumerate(lines):
        sheet.write(2, y + number, text, Ink(inks.panel.fore, inks.panel.back, inks.strong.weight if large else 0))


def _draw_side(
    sheet: Sheet, inks: Palette, state: LiveState, x: int, top: int, width: int, height: int, *, with_verdict: bool
) -> None:
    """The large figure and its change, then what there is room for: budget and verdict, the figures."""
    y = _draw_opening(sheet, inks, state, x, top, width, large=height >= 26)
    reading = state.snapshot.reading
    if reading is None:
        return
    end = top + height
    y += 1
    if with_verdict and reading.verdict:
        lines = wrap(sheet.spell(sentence(reading.verdict)), width, 4, sheet.ellipsis)
        for line in lines:
            sheet.write(x, y, line, inks.text)
            y += 1
        y += 1
    if reading.budget is not None:
        # in brief where there is little room: the largest causes, and the figures most looked for
        room = end - y
        rows = telling_rows(reading.budget)
        y = draw_budget(sheet, inks, rows, x, y, width, len(rows) + 1 if room >= 18 else room // 2 + 1)
        y += room >= 18 and bool(rows)
    _draw_figures(sheet, inks, reading, x, y, width, end - y)


def _draw_opening_line(sheet: Sheet, inks: Palette, state: LiveState, x: int, y: int, width: int) -> None:
    """The opening and its change since the mark in one row, where a page has the rest."""
    reading = state.snapshot.reading
    opening = reading.opening_pct if reading is not None else None
    word, points, _ = change_lines(state)
    text = "Opening not known" if opening is None else f"Opening {plain(opening, 1)} %"
    end = sheet.write(x, y, text, inks.strong)
    short = {"no significant change": "no change"}.get(word, word)
    ink = {"better": inks.accent, "worse": inks.alert}.get(word, inks.text)
    sheet.write(
        end + 1, y, f"{short} {points.removesuffix(' points')}" if word else "", ink, x + width - end - 1, align="right"
    )


def _draw_opening(sheet: Sheet, inks: Palette, state: LiveState, x: int, y: int, width: int, *, large: bool) -> int:
    reading = state.snapshot.reading
    opening = reading.opening_pct if reading is not None else None
    word, points, since = change_lines(state)
    interval = interval_text(reading) if reading is not None else None
    best = best_words(state)
    end = sheet.write(x, y, "Opening", inks.strong)
    if interval is not None:
        sheet.write(end + 1, y, f"95 %: {interval}", inks.dim, width - (end + 1 - x), align="right")
    y += 1
    if opening is not None and math.isfinite(opening):
        figure = plain(min(max(opening, -999.9), 999.9), 1)
        pixels = digit_pixels(figure, 2 if large else 1)
        if pixels.shape[1] + 2 > width:
            pixels = digit_pixels(figure)
        picture = half_blocks(pixels) if sheet.unicode else hash_blocks(pixels)
        for line in picture:
            sheet.write(x, y, line, inks.strong)
            y += 1
        beside = x + pixels.shape[1] + 1
        sheet.write(beside, y - 1, "%", inks.strong)
        room = x + width - beside - 2
        if room >= 11 and best:
            value, _, at = best.removeprefix("Best so far ").partition(" at ")
            for number, line in enumerate(("Best so far", value, f"at {at}" if at else "")):
                sheet.write(beside + 2, y - len(picture) + number, line, inks.dim, room, align="right")
            best = ""
    else:
        sheet.write(x, y + 1, "not known", inks.strong)
        y += 3
    if word or (opening is not None and opening <= 0):
        ink = {"better": inks.accent, "worse": inks.alert}.get(word, inks.strong)
        sheet.write(x, y, word or "closed", ink, width)
        sheet.write(x, y, points, inks.strong, width, align="right")
        y += 1
    for part in sheet.spell(since).split(sheet.spell(" · ")):
        for line in wrap(part, width, 2, sheet.ellipsis):
            sheet.write(x, y, line, inks.dim)
            y += 1
    if best:
        sheet.write(x, y, best, inks.dim, width)
        y += 1
    return y


def _draw_figures(sheet: Sheet, inks: Palette, reading: Reading, x: int, y: int, width: int, room: int) -> None:
    """All figures in their groups where they have room, else the main ones."""
    groups = figure_groups(reading)
    needed = sum(len(group.figures) + 2 for group in groups) - 1
    if needed <= room:
        for group in groups:
            sheet.write(x, y, group.title, inks.strong)
            for figure in group.figures:
                y += 1
                draw_figures(sheet, inks, [figure], x, y, width, 1)
            y += 2
        return
    figures = key_figures(reading)
    wide = 2 * room < len(figures) and width >= 56
    each = (width - 3) // 2 if wide else width
    for number, figure in enumerate(figures[: 2 * room if wide else max(room, 0)]):
        column, row = divmod(number, room) if wide else (0, number)
        draw_figures(sheet, inks, [figure], x + column * (each + 3), y + row, each, 1)


def _draw_history(sheet: Sheet, inks: Palette, state: LiveState, shown: Shown, y: int, plot_rows: int) -> None:
    now = max(state.seconds, state.history[-1].seconds if state.history else 0.0)
    if now <= _RECENT_S * 1.2:
        spans = [(0.0, max(now, _LEAST_SPAN_S), "the whole watch")]
    else:
        spans = [(0.0, now, "the whole watch"), (now - _RECENT_S, now, f"the last {_RECENT_S / 60:g} minutes")]
    between = 2
    each = (sheet.columns - between * (len(spans) - 1)) // len(spans)
    for number, (start, end, name) in enumerate(spans):
        draw_history(
            sheet,
            inks,
            state,
            shown.alarm_spans,
            (number * (each + between), y, each, plot_rows),
            (start, end),
            f"Opening, {name}",
        )


def _draw_remark(sheet: Sheet, inks: Palette, state: LiveState, shown: Shown, y: int) -> None:
    if shown.entry is not None:
        sheet.fill(0, y, sheet.columns, 1, inks.text)
        name = f"Name of mark {len(state.marks)}: " if state.marks else "Name: "
        start = sheet.write(0, y, name, inks.strong)
        room = max(sheet.columns - start - 1, 0)
        typed = sheet.spell(shown.entry)
        while cells(typed) > room:
            typed = typed[1:]
        sheet.cursor = (min(start + cells(typed), sheet.columns - 1), y)
        sheet.write(start, y, typed, inks.text)
        return
    text = shown.remark or state.journal_text or (state.notices[-1] if state.notices else "")
    if text:
        sheet.fill(0, y, sheet.columns, 1, inks.text)
        sheet.write(0, y, text, inks.text)


def _draw_keys(sheet: Sheet, inks: Palette, state: LiveState, shown: Shown, y: int) -> None:
    if shown.entry is not None:
        parts = [("Enter", "keep the name"), ("Escape", "leave it")]
    else:
        keys = {action.name: _SHOWN_KEY.get(action.name, action.keys[0]) for action in ACTIONS}
        wanted = [
            (name, words)
            for name, words in _FOOT
            if (name != "acknowledge" or state.alarms) and (name != "rail" or len(state.rails) > 1)
        ]
        if shown.held:
            wanted = [("hold", "go on"), *(pair for pair in wanted if pair[0] != "hold")]
        parts = [(keys[name], words) for name, words in wanted]
        if shown.several:
            parts[1:1] = [(LINK_ACTIONS[0].keys[0], "next link")]
    x = 0
    if shown.held:
        x = sheet.write(0, y, f" held at {clock(state.snapshot.seconds or state.seconds)} ", inks.held) + 2
    for key, words in parts:
        if x + cells(key) + cells(words) + 1 > sheet.columns:
            break
        x = sheet.write(x, y, key, inks.accent)
        x = sheet.write(x + 1, y, words, inks.dim) + 3


def _draw_help(sheet: Sheet, inks: Palette, top: int, bottom: int, more: Sequence[LinkAction]) -> None:
    actions: list[Action | LinkAction] = [*more]
    actions += [action for action in ACTIONS if not action.window_only and action.name not in _NOT_HERE]
    names = [_key_names(action.keys) for action in actions]
    key_width = max(cells(name) for name in names)
    room = bottom - top
    offset = 0
    if room > len(actions) + 2:
        sheet.write(0, top, "Keys", inks.strong)
        offset = 2
    for number, (action, name) in enumerate(zip(actions[: room - offset], names, strict=False)):
        y = top + offset + number
        sheet.write(0, y, name, inks.accent)
        end = sheet.write(key_width + 2, y, action.words, inks.text)
        x = max(end, key_width + 2 + _HELP_WORDS) + 2
        # words that say it all need no more, where there is no room for it
        if cells(sheet.spell(action.what)) <= sheet.columns - x:
            sheet.write(x, y, action.what, inks.dim)


def _key_names(keys: Sequence[str]) -> str:
    return " or ".join(keys)


def figures_line(state: LiveState) -> str:
    """The state on one line, for where there is no screen: time, opening, the key figures, alarms."""
    reading = state.snapshot.reading
    parts = [clock(state.seconds)]
    if reading is None:
        heading, sentence = no_eye_lines(state)
        parts.append(f"{heading}: {sentence}" if sentence else heading)
    else:
        opening = "not known" if reading.opening_pct is None else f"{plain(reading.opening_pct, 1)} %"
        interval = interval_text(reading)
        parts.append(f"opening {opening}" + (f" (95 %: {interval})" if interval else ""))
        word, points, _ = change_lines(state)
        if word:
            parts.append(f"{word} since the mark, {points}")
        parts += [f"{figure.label} {figure.value}" for figure in key_figures(reading)[:4]]
    if state.samples_lost:
        parts.append(f"{plain(state.samples_lost, 0)} samples lost")
    if state.journal_text:
        parts.append(state.journal_text)
    parts += [f"alarm, {alarm.severity}: {alarm_words(alarm)}" for alarm in by_urgency(state.alarms) if calls(alarm)]
    return "; ".join(spell(part.replace("  ·  ", ", "), True) for part in parts)
