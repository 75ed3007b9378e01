import shutil
import subprocess
import time
import uuid
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.views.terminal_cells import BOLD, REVERSE, Ink, Sheet
from monitor.views.terminal_colours import Look
from monitor.views.terminal_output import ENTER, LEAVE, update
from monitor.views.terminal_page import compose
from tests.monitor.views.glass import Glass
from tests.monitor.views.live_states import make_states

COLUMNS, ROWS = 12, 4
INKS = st.builds(
    Ink,
    st.sampled_from([-1, 1, 9, 15]),
    st.sampled_from([-1, 0, 12]),
    st.sampled_from([0, BOLD, REVERSE, BOLD | REVERSE]),
)
WRITINGS = st.lists(st.tuples(st.integers(0, 11), st.integers(0, 3), st.text("ab漢é▀ ", max_size=6), INKS), max_size=6)


def screen_of(writings, ink):
    sheet = Sheet(COLUMNS, ROWS, ink, unicode=True)
    for x, y, text, own in writings:
        sheet.write(x, y, text, own)
    return sheet.finish()


def assert_shows(glass, screen):
    np.testing.assert_array_equal(glass.chars, screen.chars)
    for (y, x), style in glass.styles.items():
        assert style == (screen.fore[y, x], screen.back[y, x], screen.weight[y, x])


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(WRITINGS, INKS), min_size=1, max_size=4), st.sampled_from([16, 256, 1 << 24]))
def test_changes_sent_one_after_another_show_the_last_screen(pictures, depth):
    glass, before = Glass(COLUMNS, ROWS), None
    for writings, ink in pictures:
        screen = screen_of(writings, ink)
        glass.feed(update(screen, before, depth))
        assert glass.style == (-1, -1, 0)
        assert_shows(glass, screen)
        before = screen


def test_an_unchanged_screen_costs_nothing():
    first, second = (screen_of([(0, 0, "eye", Ink(1))], Ink()) for _ in range(2))
    assert update(second, first, 16) == b""


def test_one_changed_cell_costs_a_place_a_colour_and_the_character():
    first, second = (screen_of([(3, 1, text, Ink(1))], Ink()) for text in ("a", "b"))
    assert update(second, first, 16) == b"\x1b[2;4H\x1b[31mb\x1b[0m"


def test_the_cursor_is_shown_only_while_something_is_typed():
    sheets = [Sheet(5, 2, Ink(), unicode=True) for _ in range(3)]
    sheets[1].cursor = (2, 1)
    first, typing, last = (sheet.finish() for sheet in sheets)
    assert update(typing, first, 0) == b"\x1b[2;3H\x1b[?25h"
    assert update(last, typing, 0) == b"\x1b[?25l"


@pytest.mark.parametrize(
    ("depth", "code", "sent"),
    [
        # ECMA-48 8.3.117, ITU-T T.416 13.1.8 with semicolons, aixterm's 90 to 97; from memory
        (16, 4, "\x1b[34m"),
        (16, 12, "\x1b[94m"),
        (256, 67, "\x1b[38;5;67m"),
        (1 << 24, 0x0A141E, "\x1b[38;2;10;20;30m"),
        (0, -1, ""),
    ],
)
def test_colours_are_sent_as_the_terminal_knows_them(depth, code, sent):
    before = screen_of([], Ink())
    assert update(screen_of([(1, 0, "x", Ink(code))], Ink()), before, depth).decode().startswith(f"\x1b[1;2H{sent}x")


@pytest.mark.skipif(shutil.which("tmux") is None, reason="needs tmux, a terminal that tells what it shows")
@pytest.mark.parametrize("name", ["busy", "no lock"])
def test_a_real_terminal_shows_the_screen_that_was_meant(tmp_path, name):
    state = make_states()[name]
    first = compose(make_states()["calm"], 80, 24, Look(256))
    screen = compose(state, 80, 24, Look(256))
    data = tmp_path / "sent"
    data.write_bytes(ENTER + update(first, None, 256) + update(screen, first, 256))
    assert shown_by_tmux(data, screen.lines()) == [line.rstrip() for line in screen.lines()]
    # the screen before comes back
    data.write_bytes(b"before\r\n" + ENTER + update(screen, None, 256) + LEAVE)
    assert shown_by_tmux(data, ["before"])[0] == "before"


def shown_by_tmux(data: Path, wanted: list[str]) -> list[str]:
    tmux = ["tmux", "-u", "-L", f"lidwatch-{uuid.uuid4().hex}", "-f", "/dev/null"]
    subprocess.run([*tmux, "new-session", "-d", "-x", "80", "-y", "24", f"cat {data}; sleep 30"], check=True)
    try:
        end = time.monotonic() + 5
        while True:
            shown = subprocess.run([*tmux, "capture-pane", "-p"], check=True, capture_output=True, text=True).stdout
            lines = [line.rstrip() for line in shown.split("\n")[:24]]
            if lines[: len(wanted)] == [line.rstrip() for line in wanted] or time.monotonic() > end:
                return lines
            time.sleep(0.05)
    finally:
        subprocess.run([*tmux, "kill-server"], check=False)
