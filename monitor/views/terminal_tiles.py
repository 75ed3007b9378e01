"""The terminal view of several live links: a row each, and below them the page of the one in front."""

from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TextIO

import numpy as np

from monitor.state import LinkState, SeveralState
from monitor.views.control import WatchedLinks, link_action_for
from monitor.views.history import LinkMemories, history_runs, lost_spans, value_range
from monitor.views.live_wording import by_urgency, calls
from monitor.views.terminal import TerminalView, run_terminal
from monitor.views.terminal_cells import Screen, Sheet, cells
from monitor.views.terminal_colours import Look, Palette, palette
from monitor.views.terminal_page import LEAST_COLUMNS, LEAST_ROWS, figures_line
from monitor.views.terminal_plots import draw_bars, filled_runs
from monitor.views.tile_wording import shown_opening, tile_words
from monitor.views.wording import plain

_LEAST_SPAN_S = 60.0
_FIGURE = 8
_LEAST_ROWS_OF_LINKS = 3


def compose_rows(several: SeveralState, columns: int, rows: int, look: Look) -> Screen:
    """A row for each link, those round the one in front where there are fewer rows than links."""
    inks = palette(look.depth)
    sheet = Sheet(columns, rows, inks.text, unicode=look.unicode)
    count = len(several.links)
    first = min(max(several.front - rows // 2, 0), max(count - rows, 0))
    name_width = min(max(cells(sheet.spell(link.name)) for link in several.links), max(columns // 4, 12))
    last = min(first + rows, count)
    for y, number in enumerate(range(first, last)):
        _draw_row(sheet, inks, several, number, y, name_width)
    if first:
        sheet.write(1, 0, "↑" if look.unicode else "^", inks.accent)
    if last < count:
        sheet.write(1, last - first - 1, "↓" if look.unicode else "v", inks.accent)
    return sheet.finish()


def _draw_row(sheet: Sheet, inks: Palette, several: SeveralState, number: int, y: int, name_width: int) -> None:
    link = several.links[number]
    front = number == several.front
    sign = ("■" if several.pinned else "▶") if sheet.unicode else ("=" if several.pinned else ">")
    sheet.write(0, y, sign if front else " ", inks.accent)
    sheet.write(2, y, link.name, inks.strong if front else inks.text, name_width)
    x = 2 + name_width + 1
    opening = shown_opening(link)
    words = tile_words(link)
    if opening is None:
        sheet.write(x, y, words.state, inks.dim, _FIGURE + 2, align="right")
    else:
        sheet.write(x, y, f"{plain(max(opening, -999.9), 1)} %", inks.strong, _FIGURE + 2, align="right")
    x += _FIGURE + 3
    plot = max(min((sheet.columns - x) // 3, 40), 0)
    if plot >= 8:
        _draw_run(sheet, inks, link, x, y, plot)
        x += plot + 1
    calling = any(calls(alarm) for alarm in by_urgency(link.state.alarms)) or bool(link.failure)
    room = max(sheet.columns - x, 0)
    if calling:
        sheet.fill(x, y, room, 1, inks.alarm)
        sheet.write(x + 1, y, words.foot, inks.alarm, max(room - 1, 0))
    else:
        sheet.write(x, y, words.foot, inks.dim, room)


def _draw_run(sheet: Sheet, inks: Palette, link: LinkState, x: int, y: int, plot: int) -> None:
    """The opening over the whole watch, one row high."""
    state = link.state
    end = max(state.seconds, _LEAST_SPAN_S)
    lost = lost_spans(state.locks, state.seconds, locked=state.locked)
    runs = history_runs(state.history, lost, 0.0, end, plot)
    bottom, top = value_range(runs, None)
    sheet.fill(x, y, plot, 1, inks.history)
    draw_bars(sheet, inks.history, (filled_runs(runs, plot) - bottom) / (top - bottom), x, y, 1)


class TilesTerminalView(TerminalView):
    """What is shown of several links and what keys do, without any terminal."""

    def __init__(self, watched: WatchedLinks, look: Look, now: Callable[[], float], pictures: Path) -> None:
        super().__init__(watched, look, now, pictures)
        self._links = watched
        self._memories = LinkMemories(len(watched.several().links))
        self._shown = replace(self._shown, several=True)

    def picture(self, columns: int, rows: int) -> Screen:
        """The rows of all links over the page of the one in front; where there is no room for both, the page has less of it."""
        several = self._links.several()
        memory = self._memories.look(several)
        if memory is not None:
            self.show_another(memory)
        count = len(several.links)
        spare = rows - LEAST_ROWS if columns >= LEAST_COLUMNS else 0
        taken = min(count, max(spare, min(_LEAST_ROWS_OF_LINKS, rows)))
        above = compose_rows(several, columns, taken, self.look)
        if rows - taken < 1:
            return above
        return _stacked(above, super().picture(columns, rows - taken))

    def press(self, key: str) -> None:
        """Do what a key means."""
        action = link_action_for(key) if self._shown.entry is None else None
        if action is None:
            super().press(key)
        elif action.name == "worst link":
            self._links.release()
            self._say("the worst link comes to the front by itself")
        else:
            self._links.step(1 if action.name == "next link" else -1)


def _stacked(above: Screen, below: Screen) -> Screen:
    screen = Screen(
        np.concatenate((above.chars, below.chars)),
        np.concatenate((above.fore, below.fore)),
        np.concatenate((above.back, below.back)),
        np.concatenate((above.weight, below.weight)),
        None if below.cursor is None else (below.cursor[0], below.cursor[1] + above.rows),
    )
    for part in (screen.chars, screen.fore, screen.back, screen.weight):
        part.setflags(write=False)
    return screen


def link_lines(several: SeveralState) -> tuple[list[str], bool]:
    """A line for each link, for where there is no screen, and whether all have ended."""
    lines = [f"{link.name}: {link.failure or figures_line(link.state)}" for link in several.links]
    return lines, all(link.state.ended for link in several.links)


def run_terminal_tiles(
    watched: WatchedLinks,
    *,
    stdin: TextIO | None = None,
    stdout: TextIO | None = None,
    pictures: Path | None = None,
    environ: Mapping[str, str] | None = None,
    until: Callable[[], bool] | None = None,
) -> int:
    """Show several links in the terminal until the user ends it, as `monitor.views.terminal.run_terminal` does for one."""
    return run_terminal(
        watched,
        stdin=stdin,
        stdout=stdout,
        pictures=pictures,
        environ=environ,
        until=until,
        view=lambda look, now, folder: TilesTerminalView(watched, look, now, folder),
        lines=lambda: link_lines(watched.several()),
    )
