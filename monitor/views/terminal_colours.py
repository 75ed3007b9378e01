"""What a terminal can show, and the views' colours as it can show them.

The first 16 colours are taken as ECMA-48 names them, their values as most terminals have them; the other 240 are the usual cube of
6 x 6 x 6 and 24 greys.
"""

import locale
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from monitor.views.terminal_cells import BOLD, PLAIN, REVERSE, Ink
from monitor.views.theme import RAMP_STEPS, Colour, find_theme, oklab_from_srgb

Depth = Literal[0, 16, 256, 16777216]
NO_COLOUR: Depth = 0
TRUE_COLOUR: Depth = 16777216
# shades of the eye: enough for its relief, few enough that noise does not change every cell of every picture
SHADES = 14
_COARSE_SHADES = 9

_FIRST_16 = (
    (0, 0, 0),
    (205, 0, 0),
    (0, 205, 0),
    (205, 205, 0),
    (0, 0, 238),
    (205, 0, 205),
    (0, 205, 205),
    (229, 229, 229),
    (127, 127, 127),
    (255, 0, 0),
    (0, 255, 0),
    (255, 255, 0),
    (92, 92, 255),
    (255, 0, 255),
    (0, 255, 255),
    (255, 255, 255),
)
_CUBE = (0, 95, 135, 175, 215, 255)


@dataclass(frozen=True, slots=True)
class Look:
    """What the terminal can show: how many colours (0 for none), and whether more than ASCII."""

    depth: Depth = TRUE_COLOUR
    unicode: bool = True


def look_of(environ: Mapping[str, str], encoding: str | None) -> Look:
    """What the environment says of the terminal, for an output stream of that encoding.

    NO_COLOR (no-color.org: set and not empty) takes all colours; COLORTERM truecolor or 24bit gives all of them. The locale is that of
    POSIX: LC_ALL, else LC_CTYPE, else LANG.
    """
    term = environ.get("TERM", "").lower()
    depth: Depth
    if environ.get("NO_COLOR") or term in ("", "dumb", "unknown") or term.startswith(("vt1", "vt2")):
        depth = NO_COLOUR
    elif environ.get("COLORTERM", "").lower() in ("truecolor", "24bit") or term.endswith("-direct"):
        depth = TRUE_COLOUR
    elif "256" in term:
        depth = 256
    else:
        depth = 16
    return Look(depth, _speaks_utf8(environ, encoding))


def _speaks_utf8(environ: Mapping[str, str], encoding: str | None) -> bool:
    if (encoding or "").lower().replace("-", "").replace("_", "") != "utf8":
        return False
    ctype = environ.get("LC_CTYPE", "")
    # Python itself sets LC_CTYPE to this where the locale is plain C (PEP 538)
    coerced = ctype == "C.UTF-8" and environ.get("LANG", "") in ("", "C", "POSIX")
    name = environ.get("LC_ALL") or ("" if coerced else ctype) or environ.get("LANG") or "C"
    codeset = name.partition(".")[2].partition("@")[0].lower().replace("-", "")
    if not codeset and name not in ("C", "POSIX"):
        return locale.getpreferredencoding(False).lower().replace("-", "") == "utf8"
    return codeset == "utf8"


@dataclass(frozen=True, eq=False, slots=True)
class Palette:
    """The inks of the terminal view; without colours they differ by weight alone.

    ``shades`` are the colour codes of the eye's densities, from none to most, ``(shades,)``, read-only; empty without colours.
    """

    text: Ink
    strong: Ink
    dim: Ink
    accent: Ink
    alert: Ink
    alarm: Ink
    quiet: Ink
    held: Ink
    panel: Ink
    curve: Ink
    history: Ink
    history_alarm: Ink
    faint: Ink
    shades: NDArray[np.int32]


@cache
def palette(depth: Depth) -> Palette:
    """The dark theme's colours as codes of that depth: 0xRRGGBB, or an index into the 256 or the 16."""
    if depth == NO_COLOUR:
        plain, bold, turned = Ink(), Ink(weight=BOLD), Ink(weight=REVERSE)
        strong_turned = Ink(weight=BOLD | REVERSE)
        return Palette(
            text=plain,
            strong=bold,
            dim=plain,
            accent=bold,
            alert=bold,
            alarm=strong_turned,
            quiet=plain,
            held=turned,
            panel=plain,
            curve=plain,
            history=plain,
            history_alarm=plain,
            faint=plain,
            shades=_frozen(np.empty(0, dtype=np.int32)),
        )
    theme = find_theme("dark")
    shades = _shades(depth)
    if depth == 16:
        # by name, so that it can be read whatever values the user has given them
        page, ink, dim, accent, alert, grid = 0, 15, 7, 11, 9, 8
        level, panel, edge = 6, 0, 8
    else:
        page, ink, dim, accent, alert, grid, level, panel, edge = (
            code_of(colour, depth)
            for colour in (
                theme.page,
                theme.ink,
                theme.dim,
                theme.accent,
                theme.alert,
                theme.grid,
                theme.level_odd,
                theme.panel,
                theme.edge,
            )
        )
    return Palette(
        text=Ink(ink, page),
        strong=Ink(ink, page, BOLD),
        dim=Ink(dim, page),
        accent=Ink(accent, page, BOLD),
        alert=Ink(alert, page, BOLD),
        # dark and bold is grey on some terminals
        alarm=Ink(page, alert, PLAIN),
        quiet=Ink(alert, page),
        held=Ink(page, accent, PLAIN),
        panel=Ink(ink, panel),
        curve=Ink(accent, panel),
        history=Ink(level, panel),
        history_alarm=Ink(alert, panel),
        faint=Ink(edge if edge != panel else grid, panel),
        shades=shades,
    )


def _shades(depth: Depth) -> NDArray[np.int32]:
    if depth == 16:
        return _frozen(np.array([0, 4, 4, 4, 4, 6, 6, 7, 7], dtype=np.int32))
    count = SHADES if depth == TRUE_COLOUR else _COARSE_SHADES
    ramp = find_theme("dark").ramp[np.rint(np.linspace(0, RAMP_STEPS - 1, count)).astype(np.int64)]
    codes = [
        code_of(Colour(int(c) >> 16 & 255, int(c) >> 8 & 255, int(c) & 255), depth)
        for c in (ramp & np.uint32(0xFFFFFF)).tolist()
    ]
    return _frozen(np.array(list(dict.fromkeys(codes)), dtype=np.int32))


def _frozen(values: NDArray[np.int32]) -> NDArray[np.int32]:
    values.setflags(write=False)
    return values


def code_of(colour: Colour, depth: Depth) -> int:
    """The code of the colour itself, or of the nearest of the 256 or the 16 as Oklab measures."""
    if depth == TRUE_COLOUR:
        return colour.argb & 0xFFFFFF
    # the first 16 of the 256 are what the user makes them: never taken from there
    table = _table()
    start, stop = (0, 16) if depth == 16 else (16, 256)
    wanted = oklab_from_srgb(np.array([colour.red, colour.green, colour.blue]) / 255.0)
    return start + int(np.argmin(np.sum((table[start:stop] - wanted) ** 2, axis=1)))


@cache
def _table() -> NDArray[np.float64]:
    cube = [(r, g, b) for r in _CUBE for g in _CUBE for b in _CUBE]
    greys = [(8 + 10 * n,) * 3 for n in range(24)]
    return oklab_from_srgb(np.array([*_FIRST_16, *cube, *greys], dtype=np.float64) / 255.0)
