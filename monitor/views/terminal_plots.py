"""The eye, the opening curve and the history in character cells."""

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from dsp.picture import EyeImage
from monitor.state import LiveState
from monitor.views import pixels
from monitor.views.history import AlarmSpan, Run, history_runs, lost_spans, value_range
from monitor.views.live_wording import clock
from monitor.views.terminal_cells import Ink, Sheet, cells
from monitor.views.terminal_colours import Palette
from monitor.views.wording import plain, signed

_UPPER = ord("▀")
_SPACE = ord(" ")
_SHADE_SIGNS = " ·░▒▓█"
_ASCII_SIGNS = " .:-=+*%#@"
_EIGHTHS = " ▁▂▃▄▅▆▇█"
_ASCII_PARTS = " .:#"


def coarse(image: EyeImage, rail: int, width: int) -> EyeImage:
    """One rail of the eye on at most ``width`` columns of equal length, each the mean of those that fall in it."""
    density = image.density[rail : rail + 1]
    if image.column_ui.size <= width:
        return replace(image, density=density)
    span = pixels.TIME_MAX_UI - pixels.TIME_MIN_UI
    place = np.clip(((image.column_ui - pixels.TIME_MIN_UI) / span * width).astype(np.int64), 0, width - 1)
    starts = np.flatnonzero(np.diff(place, prepend=-1))
    counts = np.diff(starts, append=place.size)
    sums = np.add.reduceat(density[0].astype(np.float64), starts, axis=0)
    # a lone trace is not lost to rounding
    means = np.ceil(sums / counts[:, None]).astype(np.uint32)
    centres = pixels.TIME_MIN_UI + span * (place[starts] + 0.5) / width
    return replace(image, density=means[None], column_ui=centres)


def draw_eye(
    sheet: Sheet, inks: Palette, image: EyeImage, rail: int, x: int, y: int, width: int, height: int, gutter: int
) -> None:
    """The traces of one rail with the levels' names left of them; with colours and half blocks two pixels a cell."""
    plot = width - gutter
    if plot < 2 or height < 1:
        return
    low, high = pixels.visible_levels(image)
    halves = sheet.unicode and inks.shades.size > 0
    pixel_rows = 2 * height if halves else height
    signs = _SHADE_SIGNS if sheet.unicode else _ASCII_SIGNS
    steps = inks.shades.size or len(signs)
    shade = pixels.density_indices(coarse(image, rail, plot), 0, low, high, plot, pixel_rows, steps)
    best = None
    if image.best_ui is not None and pixels.TIME_MIN_UI <= image.best_ui <= pixels.TIME_MAX_UI:
        best = _column(image.best_ui, plot)
    if inks.shades.size:
        codes = inks.shades[shade]
        if best is not None:
            # dashes, so that the traces under it are seen
            dashes = np.arange(pixel_rows) % (4 if halves else 2) < (2 if halves else 1)
            codes[dashes & (shade[:, best] <= steps // 4), best] = inks.curve.fore
        _paste_codes(sheet, inks, codes, x + gutter, y, halves=halves)
    else:
        chars = np.array([ord(sign) for sign in signs], dtype=np.uint32)[shade]
        if best is not None:
            line = (shade[:, best] == 0) & (np.arange(height) % 2 == 0)
            chars[line, best] = ord("┆" if sheet.unicode else "|")
        sheet.paste(x + gutter, y, chars, *[np.full(chars.shape, -1)] * 2)
    last = -1
    for level in image.levels[::-1].tolist():
        row = int((high - level) / (high - low) * height)
        if 0 <= row < height and row > last:
            digits = 0 if abs(level - round(level)) < 0.005 else 1
            sheet.write(x, y + row, signed(level, digits), inks.dim, gutter)
            last = row


def _paste_codes(sheet: Sheet, inks: Palette, codes: NDArray[np.int32], x: int, y: int, *, halves: bool) -> None:
    """Colour codes as cells, ``halves``: two rows of codes to a row of cells."""
    if halves:
        fore, back = codes[0::2], codes[1::2]
        chars = np.full(fore.shape, _UPPER, dtype=np.uint32)
        same = fore == back
        chars[same] = _SPACE
        # of a blank cell only the ground counts
        fore = np.where(same, inks.panel.fore, fore)
    else:
        chars = np.full(codes.shape, _SPACE, dtype=np.uint32)
        fore, back = np.full(codes.shape, inks.panel.fore), codes
    sheet.paste(x, y, chars, fore, back)


def draw_counts(
    sheet: Sheet, inks: Palette, counts: NDArray[np.uint32], x: int, y: int, width: int, height: int
) -> None:
    """Counts ``(rows upwards, columns)`` as densities on ``width`` x ``height`` cells."""
    halves = sheet.unicode and inks.shades.size > 0
    signs = _SHADE_SIGNS if sheet.unicode else _ASCII_SIGNS
    rows = 2 * height if halves else height
    shade = pixels.count_indices(counts, width, rows, inks.shades.size or len(signs))
    if inks.shades.size:
        _paste_codes(sheet, inks, inks.shades[shade], x, y, halves=halves)
    else:
        chars = np.array([ord(sign) for sign in signs], dtype=np.uint32)[shade]
        sheet.paste(x, y, chars, *[np.full(chars.shape, -1)] * 2)


def _column(ui: float, plot: int) -> int:
    share = (ui - pixels.TIME_MIN_UI) / (pixels.TIME_MAX_UI - pixels.TIME_MIN_UI)
    return min(max(int(share * plot), 0), plot - 1)


def draw_curve(
    sheet: Sheet, inks: Palette, image: EyeImage, x: int, y: int, width: int, height: int, gutter: int
) -> None:
    """How far the eye is open at each instant, 0 to 100 % of the rows, and the time axis with the best instant under it."""
    plot = width - gutter
    if plot < 2:
        return
    sheet.write(x, y, "%", inks.dim)
    span = pixels.TIME_MAX_UI - pixels.TIME_MIN_UI
    ui = pixels.TIME_MIN_UI + span * (np.arange(plot) + 0.5) / plot
    values = np.interp(ui, image.column_ui, image.opening_pct)
    sheet.fill(x + gutter, y, plot, height, inks.curve)
    draw_bars(sheet, inks.curve, values / 100.0, x + gutter, y, height)
    axis = y + height
    for time in (-1.0, 0.0, 1.0):
        text = signed(time, 0)
        column = _column(time, plot)
        sheet.write(x + gutter + min(max(column - (cells(text) - 1), 0), plot - cells(text)), axis, text, inks.dim)
    if plot >= 24:
        sheet.write(x + gutter + plot - 6, axis, "UI", inks.dim)
    if image.best_ui is not None and abs(image.best_ui) <= 1.0:
        sheet.write(x + gutter + _column(image.best_ui, plot), axis, "▲" if sheet.unicode else "^", inks.accent)


def draw_bars(sheet: Sheet, ink: Ink, shares: NDArray[np.float64], x: int, y: int, height: int) -> None:
    """A bar a column, each so much of the rows high; nothing where the share is NaN or not above 0."""
    signs = np.array([ord(sign) for sign in (_EIGHTHS if sheet.unicode else _ASCII_PARTS)], dtype=np.uint32)
    full = signs.size - 1
    known = shares > 0
    filled = np.maximum(1, np.rint(np.clip(np.where(known, shares, 0.0), 0.0, 1.0) * height * full)).astype(np.int64)
    parts = np.clip(filled - full * np.arange(height - 1, -1, -1)[:, None], 0, full)
    parts[:, ~known] = 0
    sheet.stamp(x, y, signs[parts], parts > 0, ink)


def draw_history(
    sheet: Sheet,
    inks: Palette,
    state: LiveState,
    alarms: Sequence[AlarmSpan],
    place: tuple[int, int, int, int],
    span: tuple[float, float],
    title: str,
) -> None:
    """The opening over a span of the stream: a title row, ``place``'s height of rows and a row of events under them."""
    x, y, width, height = place
    start, end = span
    gutter = 4
    plot = width - gutter
    if plot < 8 or height < 1:
        return
    lost = lost_spans(state.locks, state.seconds, locked=state.locked)
    runs = history_runs(state.history, lost, start, end, plot)
    best = state.best.opening_pct if state.best is not None else None
    bottom, top = value_range(runs, best)
    values = filled_runs(runs, plot)
    times = start + (end - start) * (np.arange(plot) + 0.5) / plot
    sheet.fill(x + gutter, y + 1, plot, height, inks.history)
    if best is not None and bottom < best <= top:
        row = min(int((top - best) / (top - bottom) * height), height - 1)
        sheet.write(x + gutter, y + 1 + row, ("─" if sheet.unicode else "-") * plot, inks.faint, plot)
    shares = (values - bottom) / (top - bottom)
    alarmed = np.zeros(plot, dtype=np.bool_)
    for alarm in alarms:
        alarmed |= (times >= alarm.start_s) & (times <= alarm.end_s)
    for kind, ink in ((~alarmed, inks.history), (alarmed, inks.history_alarm)):
        draw_bars(sheet, ink, np.where(kind, shares, math.nan), x + gutter, y + 1, height)
    sheet.write(x, y + 1, plain(top, 0), inks.dim, gutter - 1, align="right")
    if height > 1:
        sheet.write(x, y + height, plain(bottom, 0), inks.dim, gutter - 1, align="right")
    known = _draw_events(sheet, inks, state, alarmed, lost, times, x + gutter, y + 1 + height)
    taken = sheet.write(x, y, title, inks.strong, width)
    if best is not None and bottom < best <= top:
        known.append(("─" if sheet.unicode else "-") + " best")
    key = "  ".join(known)
    until = f"{clock(start)} to {clock(min(end, max(state.seconds, start)))}"
    room = x + width - taken - 2
    text = next((t for t in (f"{key}  {until}", key, until) if cells(sheet.spell(t)) <= room), "")
    sheet.write(taken + 2, y, text, inks.dim, room, align="right")


def filled_runs(runs: Sequence[Run], plot: int) -> NDArray[np.float64]:
    """A value a column: a run's own, and straight between those of one run; NaN elsewhere."""
    values = np.full(plot, math.nan)
    for run in runs:
        first, last = int(run.x[0]), int(run.x[-1])
        columns = np.arange(first, last + 1)
        values[columns] = np.interp(columns + 0.5, run.x, run.mean)
    return values


def _draw_events(
    sheet: Sheet,
    inks: Palette,
    state: LiveState,
    alarmed: NDArray[np.bool_],
    lost: Sequence[tuple[float, float]],
    times: NDArray[np.float64],
    x: int,
    y: int,
) -> list[str]:
    """What happened when, under the plot; returns the key of the signs that were used."""
    plot = times.size
    step = float(times[1] - times[0])
    start = float(times[0]) - step / 2

    def column(seconds: float) -> int | None:
        place = int((seconds - start) / step) if seconds >= start else -1
        return place if 0 <= place < plot else None

    signs = {
        "no lock": "░" if sheet.unicode else "~",
        "alarm": "!",
        "lost": "×" if sheet.unicode else "x",
        "mark": "▲" if sheet.unicode else "^",
    }
    used = []
    unlocked = np.zeros(plot, dtype=np.bool_)
    for first, last in lost:
        unlocked |= (times + step / 2 > first) & (times - step / 2 < last) & (times - step / 2 <= state.seconds)
    for name, flags, ink in (("no lock", unlocked, inks.dim), ("alarm", alarmed, inks.alert)):
        for place in np.flatnonzero(flags).tolist():
            sheet.write(x + place, y, signs[name], ink)
        if flags.any():
            used.append(name)
    for name, moments, ink in (
        ("lost", list(state.gaps_s), inks.alert),
        ("mark", [mark.seconds for mark in state.marks], inks.accent),
    ):
        places = [place for place in map(column, moments) if place is not None]
        for place in places:
            sheet.write(x + place, y, signs[name], ink)
        if places:
            used.append(name)
    return [f"{signs[name]} {name}" for name in signs if name in used]
