"""A grid of character cells to draw on, and text that fits it."""

import re
import unicodedata
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from rich.cells import get_character_cell_size

PLAIN, BOLD, REVERSE = 0, 1, 2
_SPACE = ord(" ")
# the right half of a character that is two cells wide
CONTINUED = 0

_RAISED = "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"
_LOWERED = str.maketrans(_RAISED, "-0123456789")
_ASCII = str.maketrans(
    {
        "−": "-",
        "–": "-",
        "—": "-",
        "×": "x",
        "·": "|",
        "…": "...",
        "°": " deg",
        "’": "'",
        "‘": "'",
        "“": '"',
        "”": '"',
        "µ": "u",
        "≥": ">=",
        "≤": "<=",
        "±": "+-",
        "φ": "phase",
    }
)


@dataclass(frozen=True, slots=True)
class Ink:
    """How a cell is written: colour codes of the screen's depth, -1 for the terminal's own, and BOLD or REVERSE."""

    fore: int = -1
    back: int = -1
    weight: int = PLAIN


@dataclass(frozen=True, eq=False, slots=True)
class Screen:
    """A finished picture of cells.

    ``chars`` (code points; 0 continues a wide character), ``fore``, ``back`` (colour codes) and ``weight`` are read-only and of
    shape ``(rows, columns)``. ``cursor`` is where text is being typed, as column and row; None for no cursor.
    """

    chars: NDArray[np.uint32]
    fore: NDArray[np.int32]
    back: NDArray[np.int32]
    weight: NDArray[np.uint8]
    cursor: tuple[int, int] | None = None

    @property
    def columns(self) -> int:
        """Cells in a row."""
        return int(self.chars.shape[1])

    @property
    def rows(self) -> int:
        """Rows of cells."""
        return int(self.chars.shape[0])

    def lines(self) -> list[str]:
        """The characters row by row, without colours."""
        return ["".join(chr(c) for c in row if c != CONTINUED) for row in self.chars.tolist()]


class Sheet:
    """A grid of cells that is being drawn; what falls outside is cut off.

    Columns and rows count from the top left. ``unicode`` False writes all text in ASCII. Raises ValueError without cells.
    """

    def __init__(self, columns: int, rows: int, ink: Ink, *, unicode: bool) -> None:
        if columns < 1 or rows < 1:
            raise ValueError(f"a screen needs at least 1 x 1 cells, got {columns} x {rows}")
        self.columns, self.rows = columns, rows
        self.unicode = unicode
        self.cursor: tuple[int, int] | None = None
        self._ink = ink
        self._chars = np.full((rows, columns), _SPACE, dtype=np.uint32)
        self._fore = np.full((rows, columns), ink.fore, dtype=np.int32)
        self._back = np.full((rows, columns), ink.back, dtype=np.int32)
        self._weight = np.full((rows, columns), ink.weight, dtype=np.uint8)

    def spell(self, text: str) -> str:
        """The text as this sheet can show it: one line, no control characters, in ASCII where that is all there is."""
        return spell(text, self.unicode)

    def write(self, x: int, y: int, text: str, ink: Ink, width: int | None = None, align: str = "left") -> int:
        """Write one line from ``x`` on; longer than ``width`` cells it ends in an ellipsis. Returns the column after it."""
        room = min(self.columns - x, self.columns if width is None else width)
        if room <= 0 or not 0 <= y < self.rows or x < 0:
            return x
        text = shorten(self.spell(text), room, self.ellipsis)
        taken = cells(text)
        if align == "right":
            x += room - taken
        elif align == "centre":
            x += (room - taken) // 2
        self._put(x, y, text, ink)
        return x + taken

    @property
    def ellipsis(self) -> str:
        """The sign for what was left out."""
        return "…" if self.unicode else "..."

    def _put(self, x: int, y: int, text: str, ink: Ink) -> None:
        for character in text:
            size = get_character_cell_size(character)
            self._free(x, y)
            self._chars[y, x] = ord(character)
            for column in range(x, x + size):
                if column > x:
                    self._free(column, y)
                    self._chars[y, column] = CONTINUED
                self._fore[y, column], self._back[y, column] = ink.fore, ink.back
                self._weight[y, column] = ink.weight
            x += size

    def _free(self, x: int, y: int) -> None:
        """Half a wide character cannot stay: the other half becomes a space."""
        if self._chars[y, x] == CONTINUED:
            self._chars[y, x - 1] = _SPACE
        if x + 1 < self.columns and self._chars[y, x + 1] == CONTINUED:
            self._chars[y, x + 1] = _SPACE

    def fill(self, x: int, y: int, width: int, height: int, ink: Ink, character: str = " ") -> None:
        """Fill a rectangle."""
        width, height = min(width, self.columns - x), min(height, self.rows - y)
        blank = np.full((max(height, 0), max(width, 0)), ord(character), dtype=np.uint32)
        self.paste(x, y, blank, np.full(blank.shape, ink.fore), np.full(blank.shape, ink.back))
        self._weight[y : y + max(height, 0), x : x + max(width, 0)] = ink.weight

    def paste(
        self, x: int, y: int, chars: NDArray[np.uint32], fore: NDArray[np.integer[Any]], back: NDArray[np.integer[Any]]
    ) -> None:
        """Copy narrow characters ``(height, width)`` with their colours onto the sheet; the place must lie within it."""
        height, width = chars.shape
        if not height or not width:
            return
        for row in range(y, y + height):
            self._free(x, row)
            self._free(x + width - 1, row)
        place = np.s_[y : y + height, x : x + width]
        self._chars[place], self._fore[place], self._back[place] = chars, fore, back
        self._weight[place] = PLAIN

    def stamp(self, x: int, y: int, chars: NDArray[np.uint32], where: NDArray[np.bool_], ink: Ink) -> None:
        """Copy those of the narrow characters ``(height, width)`` that ``where`` names; the place must lie within the sheet."""
        place = np.s_[y : y + chars.shape[0], x : x + chars.shape[1]]
        for part, value in ((self._fore, ink.fore), (self._back, ink.back), (self._weight, ink.weight)):
            part[place][where] = value
        self._chars[place][where] = chars[where]

    def finish(self) -> Screen:
        """The picture; the sheet must not be drawn on afterwards."""
        for part in (self._chars, self._fore, self._back, self._weight):
            part.setflags(write=False)
        return Screen(self._chars, self._fore, self._back, self._weight, self.cursor)


@lru_cache(maxsize=2048)
def spell(text: str, unicode: bool) -> str:
    """One line that a terminal shows as so many cells: composed characters, no control, joining or combining ones."""
    line = unicodedata.normalize("NFC", re.sub(r"[\t\n\v\f\r]+", " ", text))
    if not unicode:
        line = re.sub(f"[{_RAISED}]+", lambda run: "^" + run.group().translate(_LOWERED), line).translate(_ASCII)
        line = "".join(_ascii(character) for character in line)
    return "".join(
        character if character.isprintable() else "?"
        for character in line
        if get_character_cell_size(character) > 0 or not character.isprintable()
    )


def _ascii(character: str) -> str:
    if character.isascii():
        return character
    base = "".join(part for part in unicodedata.normalize("NFKD", character) if part.isascii())
    return base or "?" * get_character_cell_size(character)


@lru_cache(maxsize=4096)
def cells(text: str) -> int:
    """How many cells a spelled text takes."""
    if text.isascii():
        return len(text)
    return sum(get_character_cell_size(character) for character in text)


def shorten(text: str, room: int, ellipsis: str = "…", *, middle: bool = False) -> str:
    """The text within ``room`` cells, with an ellipsis at its end or in its middle where something was left out."""
    if cells(text) <= room:
        return text
    room -= len(ellipsis)
    if room < 1:
        return _start(text, room + len(ellipsis))
    if not middle:
        return _start(text, room).rstrip() + ellipsis
    return _start(text, (room + 1) // 2) + ellipsis + _start(text[::-1], room // 2)[::-1]


def _start(text: str, room: int) -> str:
    kept = []
    for character in text:
        room -= get_character_cell_size(character)
        if room < 0:
            break
        kept.append(character)
    return "".join(kept)


def wrap(text: str, room: int, most: int, ellipsis: str = "…") -> list[str]:
    """A spelled text in lines of at most ``room`` cells, broken between words; no more than ``most`` lines."""
    if room < 1 or most < 1:
        return []
    lines: list[str] = []
    line = ""
    for word in text.split():
        longer = f"{line} {word}" if line else word
        if cells(longer) <= room:
            line = longer
            continue
        if line:
            lines.append(line)
        while cells(word) > room:
            part = _start(word, room) or word[0]
            lines.append(part)
            word = word[len(part) :]
        line = word
    if line:
        lines.append(line)
    if len(lines) > most:
        lines = [*lines[: most - 1], shorten(" ".join(lines[most - 1 :]), room, ellipsis)]
    return lines
