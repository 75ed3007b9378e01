"""From two pictures of cells to the bytes that turn one into the other, with ECMA-48's control sequences."""

import numpy as np

from monitor.views.terminal_cells import BOLD, CONTINUED, REVERSE, Ink, Screen
from monitor.views.terminal_colours import NO_COLOUR, TRUE_COLOUR, Depth

# alternate screen and its cursor saved, no cursor, no automatic wrap, pasted text told apart
ENTER = b"\x1b[?1049h\x1b[?25l\x1b[?7l\x1b[?2004h\x1b[0m\x1b[2J"
LEAVE = b"\x1b[0m\x1b[2J\x1b[H\x1b[?2004l\x1b[?7h\x1b[?25h\x1b[?1049l"

# so many unchanged cells are sent again rather than stepped over
_STEP_OVER = 4


def update(screen: Screen, before: Screen | None, depth: Depth) -> bytes:
    """The bytes that turn ``before`` into ``screen``; without one of the same size, the whole screen. Empty where nothing changed.

    Colours and weight are at rest before and after.
    """
    shape = screen.chars.shape
    if before is None or before.chars.shape != shape:
        changed = np.ones(shape, dtype=np.bool_)
        out = ["\x1b[0m\x1b[2J"]
        cursor_before = None
    else:
        changed = (
            (screen.chars != before.chars)
            | (screen.fore != before.fore)
            | (screen.back != before.back)
            | (screen.weight != before.weight)
        )
        out = []
        cursor_before = before.cursor
    style = at_rest = Ink()
    for row in np.flatnonzero(changed.any(axis=1)).tolist():
        for start, stop in _runs(np.flatnonzero(changed[row]).tolist()):
            out.append(f"\x1b[{row + 1};{start + 1}H" if start else f"\x1b[{row + 1}H")
            cells = zip(
                screen.chars[row, start:stop].tolist(),
                screen.fore[row, start:stop].tolist(),
                screen.back[row, start:stop].tolist(),
                screen.weight[row, start:stop].tolist(),
                strict=True,
            )
            for character, fore, back, weight in cells:
                if character == CONTINUED:
                    continue
                if style.fore != fore or style.back != back or style.weight != weight:
                    wanted = Ink(fore, back, weight)
                    out.append(_restyle(style, wanted, depth))
                    style = wanted
                out.append(chr(character))
    if style != at_rest:
        out.append("\x1b[0m")
    if screen.cursor is not None and (out or screen.cursor != cursor_before):
        column, row = screen.cursor
        out.append(f"\x1b[{row + 1};{column + 1}H")
    if (screen.cursor is None) != (cursor_before is None):
        out.append("\x1b[?25l" if screen.cursor is None else "\x1b[?25h")
    return "".join(out).encode("utf-8")


def _runs(columns: list[int]) -> list[tuple[int, int]]:
    runs: list[tuple[int, int]] = []
    for column in columns:
        if runs and column - runs[-1][1] < _STEP_OVER:
            runs[-1] = (runs[-1][0], column + 1)
        else:
            runs.append((column, column + 1))
    return runs


def _restyle(before: Ink, wanted: Ink, depth: Depth) -> str:
    parts = []
    if before.weight & ~wanted.weight:
        parts.append("0")
        before = Ink()
    if wanted.weight & BOLD and not before.weight & BOLD:
        parts.append("1")
    if wanted.weight & REVERSE and not before.weight & REVERSE:
        parts.append("7")
    if wanted.fore != before.fore:
        parts.append(_colour(wanted.fore, depth, 30))
    if wanted.back != before.back:
        parts.append(_colour(wanted.back, depth, 40))
    return f"\x1b[{';'.join(parts)}m"


def _colour(code: int, depth: Depth, base: int) -> str:
    """Select Graphic Rendition: 30 to 37 and 40 to 47, 90 and 100 for the bright eight, 38 and 48 with 5 or 2 for more (ITU-T T.416)."""
    if code < 0 or depth == NO_COLOUR:
        return str(base + 9)
    if depth == TRUE_COLOUR:
        return f"{base + 8};2;{code >> 16};{code >> 8 & 255};{code & 255}"
    if depth == 256:
        return f"{base + 8};5;{code}"
    return str(base + code) if code < 8 else str(base + 60 + code - 8)
