"""What a terminal shows after some bytes: the few control sequences of ECMA-48 that the view sends, and no others."""

import re

import numpy as np
from rich.cells import get_character_cell_size

_SEQUENCE = re.compile(r"\x1b\[(\??)([0-9;]*)([A-Za-z])|(.)", re.DOTALL)


class Glass:
    def __init__(self, columns, rows):
        self.columns, self.rows = columns, rows
        self.modes = {}
        self.clear()
        self.style = (-1, -1, 0)
        self.x = self.y = 0

    def clear(self):
        self.chars = np.full((self.rows, self.columns), ord(" "), dtype=np.uint32)
        self.styles = {}

    def feed(self, data):
        """Take whole sequences as bytes."""
        for private, numbers, letter, character in _SEQUENCE.findall(data.decode("utf-8")):
            values = [int(number or 0) for number in numbers.split(";")]
            if character:
                self.put(character)
            elif private:
                self.modes[values[0]] = letter == "h"
            elif letter == "H":
                self.y = max(values[0], 1) - 1
                self.x = max(values[1] if len(values) > 1 else 1, 1) - 1
            elif letter == "J":
                assert values == [2]
                self.clear()
            else:
                assert letter == "m", letter
                self.restyle(values)

    def restyle(self, values):
        fore, back, weight = self.style
        values = list(values)
        while values:
            value = values.pop(0)
            if value == 0:
                fore, back, weight = -1, -1, 0
            elif value in (1, 7):
                weight |= {1: 1, 7: 2}[value]
            elif value in (38, 48):
                code = values.pop(0) if values.pop(0) == 5 else values.pop(0) << 16 | values.pop(0) << 8 | values.pop(0)
                fore, back = (code, back) if value == 38 else (fore, code)
            elif value in (39, 49):
                fore, back = (-1, back) if value == 39 else (fore, -1)
            else:
                base = value // 10 * 10
                code = value - base + (8 if base >= 90 else 0)
                assert base in (30, 40, 90, 100), value
                fore, back = (code, back) if base in (30, 90) else (fore, code)
        self.style = fore, back, weight

    def put(self, character):
        assert character.isprintable(), repr(character)
        for offset in range(get_character_cell_size(character)):
            self.chars[self.y, self.x + offset] = ord(character) if offset == 0 else 0
            self.styles[self.y, self.x + offset] = self.style
        self.x += get_character_cell_size(character)

    def lines(self):
        return ["".join(chr(c) for c in row if c) for row in self.chars.tolist()]
