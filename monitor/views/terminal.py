"""The live view in a terminal, such as over SSH."""

import contextlib
import os
import select
import signal
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import TextIO

from monitor.errors import MonitorError
from monitor.state import LiveState
from monitor.views.control import (
    SHELVE_SECONDS,
    Watched,
    action_for,
    free_name,
    next_rail,
    persistence_words,
    step_persistence,
)
from monitor.views.diagnosis_wording import next_page
from monitor.views.history import AlarmMemory, AlarmSpan
from monitor.views.live_wording import calls
from monitor.views.terminal_cells import Screen, spell
from monitor.views.terminal_colours import Look, look_of
from monitor.views.terminal_keys import ESCAPE_WAIT_S, Keys
from monitor.views.terminal_mode import Signals, Terminal
from monitor.views.terminal_output import update
from monitor.views.terminal_page import Shown, compose, figures_line

_FRAME_S = 0.1
_LINE_S = 1.0
_REMARK_S = 4.0
_LONGEST_NAME = 80
# so many bytes a second at most, for the picture to be new when it arrives
_BYTES_PER_S = 400_000
_REMOTE_BYTES_PER_S = 40_000
_ENDING = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)


def run_terminal(
    watched: Watched,
    *,
    stdin: TextIO | None = None,
    stdout: TextIO | None = None,
    now: Callable[[], float] = time.monotonic,
    pictures: Path | None = None,
    environ: Mapping[str, str] | None = None,
    until: Callable[[], bool] | None = None,
    view: "Callable[[Look, Callable[[], float], Path], TerminalView] | None" = None,
    lines: Callable[[], tuple[Sequence[str], bool]] | None = None,
) -> int:
    """Show a watched stream until the user ends it, from the main thread; the watched side is told to stop however this ends.

    On a terminal the picture with its keys; elsewhere, or where TERM is dumb, a line of figures a second until the stream ends.
    ``pictures``: the folder for saved pictures, the current one by default. ``until``: asked at each look whether to end. ``stdin`` and
    ``stdout`` default to those of the process; where ``stdin`` is no terminal, keys come from the controlling one. ``view`` and ``lines``
    make another picture than that of one stream, and other lines, with whether they are the last.

    Returns the exit status: 0; 130 after Ctrl-C, 143 after SIGTERM, 129 after a hang-up. The terminal is given back as it was found,
    also when the watched side raises, which is passed on.
    """
    stdin = sys.stdin if stdin is None else stdin
    stdout = sys.stdout if stdout is None else stdout
    environ = os.environ if environ is None else environ
    look = look_of(environ, stdout.encoding)
    try:
        with Signals() as signals:
            if not stdout.isatty() or environ.get("TERM", "dumb") in ("", "dumb"):
                return _run_lines(lines or (lambda: _line_of(watched)), stdout, look, signals, now)
            stdout.flush()
            remote = any(environ.get(name) for name in ("SSH_CONNECTION", "SSH_TTY"))
            budget = _REMOTE_BYTES_PER_S if remote else _BYTES_PER_S
            with _keys_of(stdin) as keys_fd, Terminal(keys_fd, stdout.fileno()) as terminal:
                folder = pictures or Path()
                shown = TerminalView(watched, look, now, folder) if view is None else view(look, now, folder)
                return _Loop(shown, terminal, signals, now, budget, until).run()
    finally:
        watched.stop()


@contextlib.contextmanager
def _keys_of(stdin: TextIO | None) -> Iterator[int | None]:
    """Where keys come from: the input if it is a terminal, else the controlling terminal if there is one."""
    if stdin is not None and not stdin.closed and stdin.isatty():
        yield stdin.fileno()
        return
    try:
        opened = os.open("/dev/tty", os.O_RDONLY | os.O_NOCTTY)
    except OSError:
        yield None
        return
    try:
        yield opened
    finally:
        os.close(opened)


class TerminalView:
    """What is shown and what keys do, without any terminal: keys in, pictures out. One thread."""

    def __init__(self, watched: Watched, look: Look, now: Callable[[], float], pictures: Path) -> None:
        self._watched = watched
        self.look = look
        self._now = now
        self._pictures = pictures
        self._state = watched.state()
        self._memory = AlarmMemory()
        self._spans: tuple[AlarmSpan, ...] = ()
        self._shown = Shown()
        self._remark_until = 0.0
        self.closing = False

    def picture(self, columns: int, rows: int) -> Screen:
        """The newest state; while held the old one, but for its alarms and what the journal says."""
        newest = self._watched.state()
        self._memory.tell(newest.alarms, newest.seconds)
        if self._shown.held:
            self._state = _held(self._state, newest)
        else:
            self._state = newest
            self._spans = self._memory.spans()
        if self._shown.remark and self._now() >= self._remark_until:
            self._shown = replace(self._shown, remark="")
        shown = replace(self._shown, alarm_spans=self._spans)
        return compose(self._state, columns, rows, self.look, shown)

    def show_another(self, memory: AlarmMemory) -> None:
        """Another stream is shown from now on, whose alarms are in this memory; what was said of the last one is gone."""
        self._memory = memory
        self._shown = replace(self._shown, rail=None, held=False, entry=None, remark="")

    def press(self, key: str) -> None:
        """Do what a key means."""
        if self._shown.entry is not None and not key.startswith("Ctrl+"):
            self._type(key)
            return
        action = action_for(key)
        if action is None or action.window_only:
            return
        match action.name:
            case "mark":
                self._watched.mark()
                self._say("marked: turn something, and see the change")
            case "name":
                if self._state.marks or self._watched.state().marks:
                    self._shown = replace(self._shown, entry="", remark="")
                else:
                    self._say("there is no mark to name yet: Space makes one")
            case "acknowledge":
                self._watched.acknowledge()
                self._say("alarms acknowledged" if any(map(calls, self._state.alarms)) else "no alarm asks for it")
            case "shelve":
                if self._state.alarms:
                    self._watched.shelve(SHELVE_SECONDS)
                    self._say(f"the foremost alarm is quiet for {SHELVE_SECONDS / 60:g} minutes")
                else:
                    self._say("no alarm to shelve")
            case "hold":
                self._shown = replace(self._shown, held=not self._shown.held, remark="")
            case "clear":
                self._watched.clear()
                self._say("the eye begins anew")
            case "rail":
                rails = self._state.rails
                self._shown = replace(self._shown, rail=next_rail(self._shown.rail, rails))
                if len(rails) < 2:
                    self._say("this link has one rail")
            case "page" | "back":
                page = next_page(self._shown.page, back=action.name == "back")
                self._shown = replace(self._shown, page=page)
            case "longer" | "shorter":
                self._keep(step_persistence(self._shown.persistence, longer=action.name == "longer"))
            case "newest":
                self._keep(0.0)
            case "save":
                self._save()
            case "report":
                self._report()
            case "tone":
                self._say("the tone is only in the window")
            case "help":
                self._shown = replace(self._shown, helping=not self._shown.helping)
            case "close":
                self.closing = True
            case _:
                pass

    def paste(self, text: str) -> None:
        """Pasted text is a name or nothing, never keys."""
        if self._shown.entry is not None:
            self._add(text)

    def _type(self, key: str) -> None:
        entry = self._shown.entry or ""
        if key == "Enter":
            name = " ".join(entry.split())
            self._shown = replace(self._shown, entry=None)
            if name:
                self._watched.name_mark(name)
                self._say(f"the mark is called {name}")
        elif key == "Escape":
            self._shown = replace(self._shown, entry=None)
        elif key == "Backspace":
            self._shown = replace(self._shown, entry=entry[:-1])
        elif key == "Space":
            self._add(" ")
        elif len(key) == 1:
            self._add(key)

    def _add(self, text: str) -> None:
        printed = "".join(character for character in " ".join(text.splitlines()) if character.isprintable())
        self._shown = replace(self._shown, entry=((self._shown.entry or "") + printed)[:_LONGEST_NAME])

    def _keep(self, seconds: float | None) -> None:
        self._shown = replace(self._shown, persistence=seconds)
        self._watched.set_persistence(seconds)
        self._say(persistence_words(seconds))

    def _say(self, text: str) -> None:
        self._shown = replace(self._shown, remark=text)
        self._remark_until = self._now() + _REMARK_S

    def _save(self) -> None:
        from monitor.views.painter import save_picture

        path = free_name(self._pictures, ".png")
        try:
            save_picture(self._state.snapshot, path)
        except MonitorError as error:
            self._say(f"picture not saved: {error}")
        else:
            self._say(f"picture saved: {path}")

    def _report(self) -> None:
        path = free_name(self._pictures, ".html")
        try:
            self._watched.report(path)
        except MonitorError as error:
            self._say(str(error))
        else:
            self._say(f"report saved: {path}")


def _held(before: LiveState, newest: LiveState) -> LiveState:
    return replace(
        before,
        alarms=newest.alarms,
        notices=newest.notices,
        journal_text=newest.journal_text,
        ended=newest.ended,
    )


class _Loop:
    """Moves bytes between a view and its terminal: pictures at most so often as the connection takes them."""

    def __init__(
        self,
        view: TerminalView,
        terminal: Terminal,
        signals: Signals,
        now: Callable[[], float],
        bytes_per_s: float,
        until: Callable[[], bool] | None,
    ) -> None:
        self._view = view
        self._terminal = terminal
        self._signals = signals
        self._now = now
        self._bytes_per_s = bytes_per_s
        self._until = until
        self._depth = view.look.depth
        self._keys = Keys()
        self._escape_at = 0.0
        self._pending = b""
        self._before: Screen | None = None
        self._due = 0.0

    def run(self) -> int:
        while not (self._view.closing or (self._until is not None and self._until())):
            now = self._now()
            if not self._pending and now >= self._due:
                try:
                    self._draw(now)
                except OSError:
                    return 128 + signal.SIGHUP
            status = self._wait()
            if status is not None:
                return status
        return 0

    def _draw(self, now: float) -> None:
        screen = self._view.picture(*self._terminal.size())
        self._pending = update(screen, self._before, self._depth)
        self._before = screen
        self._due = now + max(_FRAME_S, len(self._pending) / self._bytes_per_s)
        self._flush()

    def _flush(self) -> None:
        if self._pending:
            self._pending = self._pending[self._terminal.write(self._pending) :]

    def _wait(self) -> int | None:
        """Wait for whatever comes first; the exit status when it is the end."""
        pause = max(0.0, min(self._due - self._now(), _FRAME_S))
        if self._pending:
            pause = 1.0
        if self._keys.waiting:
            pause = min(pause, ESCAPE_WAIT_S)
        inputs = [self._signals.fd] + ([] if self._terminal.keys_fd is None else [self._terminal.keys_fd])
        ready, writable, _ = select.select(inputs, [self._terminal.out_fd] if self._pending else [], [], pause)
        for number in self._signals.take():
            if number in _ENDING:
                return 128 + number
            if number == signal.SIGTSTP:
                self._terminal.leave()
                self._signals.stop_process()
            if number in (signal.SIGTSTP, signal.SIGCONT):
                self._terminal.leave()
                self._terminal.enter()
                self._pending, self._before = b"", None
            self._due = 0.0
        if self._terminal.keys_fd in ready:
            data = self._terminal.read()
            if not data:
                return 128 + signal.SIGHUP
            self._escape_at = self._now()
            self._press(self._keys.feed(data))
        elif self._keys.waiting and self._now() - self._escape_at >= ESCAPE_WAIT_S:
            self._press(self._keys.settle())
        if writable:
            try:
                self._flush()
            except OSError:
                return 128 + signal.SIGHUP
        return None

    def _press(self, keys: list[str | tuple[str, str]]) -> None:
        for key in keys:
            if isinstance(key, tuple):
                self._view.paste(key[1])
            else:
                self._view.press(key)
            # seen at once: the hand waits for it
            self._due = 0.0


def _line_of(watched: Watched) -> tuple[Sequence[str], bool]:
    state = watched.state()
    return [figures_line(state)], state.ended


def _run_lines(
    lines: Callable[[], tuple[Sequence[str], bool]],
    stdout: TextIO,
    look: Look,
    signals: Signals,
    now: Callable[[], float],
) -> int:
    """A line of figures a second, for a pipe, a file or a terminal that cannot move its cursor."""
    due = now()
    while True:
        texts, ended = lines()
        try:
            stdout.writelines(spell(text, look.unicode) + "\n" for text in texts)
            stdout.flush()
        except (OSError, ValueError):
            return 0  # nobody reads on
        if ended:
            return 0
        due = max(due + _LINE_S, now())
        while (pause := due - now()) > 0:
            select.select([signals.fd], [], [], pause)
            for number in signals.take():
                if number in _ENDING:
                    return 128 + number
                if number == signal.SIGTSTP:
                    signals.stop_process()
