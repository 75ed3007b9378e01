"""The large figure: digits drawn by hand in square pixels, two of them a cell."""

import numpy as np
from numpy.typing import NDArray

_STROKES = {
    "0": " ### #   ##   ##   ##   # ### ",
    "1": "  #   ##    #    #    #   ### ",
    "2": " ### #   #   ##  ##  #   #####",
    "3": "####     #  ##     ##   # ### ",
    "4": "   #   ##  # # #  # #####   # ",
    "5": "######    ####     ##   # ### ",
    "6": " ### #    #### #   ##   # ### ",
    "7": "#####   #   #   #    #    #   ",
    "8": " ### #   # ### #   ##   # ### ",
    "9": " ### #   ##   # ####    # ### ",
    "-": "      ###         ",
    ".": "     #",
}
_ROWS = 6


def digit_pixels(text: str, scale: int = 1) -> NDArray[np.bool_]:
    """A number as pixels ``(6 * scale, width)``; knows digits, minus (either kind) and the point. Raises KeyError for others."""
    parts: list[NDArray[np.bool_]] = []
    for character in text.replace("−", "-"):
        strokes = np.array([mark == "#" for mark in _STROKES[character]])
        if parts:
            parts.append(np.zeros((_ROWS, 1), dtype=np.bool_))
        parts.append(strokes.reshape(_ROWS, -1))
    pixels = np.concatenate(parts, axis=1) if parts else np.zeros((_ROWS, 0), dtype=np.bool_)
    return np.asarray(np.repeat(np.repeat(pixels, scale, axis=0), scale, axis=1))


def half_blocks(pixels: NDArray[np.bool_]) -> list[str]:
    """Pixels ``(even rows, width)`` as lines of half blocks."""
    signs = " ▄▀█"
    return [
        "".join(signs[2 * int(upper) + int(lower)] for upper, lower in zip(pixels[y], pixels[y + 1], strict=True))
        for y in range(0, pixels.shape[0], 2)
    ]


def hash_blocks(pixels: NDArray[np.bool_]) -> list[str]:
    """Pixels as lines of ASCII, a cell each."""
    return ["".join("#" if pixel else " " for pixel in row) for row in pixels]
