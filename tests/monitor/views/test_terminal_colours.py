import numpy as np
import pytest

from monitor.views.terminal_colours import _FIRST_16, Look, code_of, look_of, palette
from monitor.views.theme import Colour, contrast_ratio, oklab_from_srgb

XTERM = {"TERM": "xterm-256color", "LANG": "en_GB.UTF-8"}


@pytest.mark.parametrize(
    ("environ", "look"),
    [
        (XTERM, Look(256, True)),
        (XTERM | {"COLORTERM": "truecolor"}, Look(1 << 24, True)),
        (XTERM | {"COLORTERM": "24bit"}, Look(1 << 24, True)),
        (XTERM | {"TERM": "linux"}, Look(16, True)),
        (XTERM | {"TERM": "xterm"}, Look(16, True)),
        (XTERM | {"TERM": "vt220"}, Look(0, True)),
        (XTERM | {"TERM": "dumb", "COLORTERM": "truecolor"}, Look(0, True)),
        # no-color.org: when present and not an empty string
        (XTERM | {"COLORTERM": "truecolor", "NO_COLOR": "1"}, Look(0, True)),
        (XTERM | {"NO_COLOR": ""}, Look(256, True)),
        ({"TERM": "xterm-256color"}, Look(256, False)),
        (XTERM | {"LC_ALL": "C"}, Look(256, False)),
        (XTERM | {"LC_CTYPE": "POSIX"}, Look(256, False)),
        ({"TERM": "xterm-256color", "LC_ALL": "C.UTF-8"}, Look(256, True)),
        ({"TERM": "xterm-256color", "LC_CTYPE": "de_DE.utf8@euro"}, Look(256, True)),
        # Python sets LC_CTYPE itself in a C locale (PEP 538)
        ({"TERM": "xterm-256color", "LC_CTYPE": "C.UTF-8"}, Look(256, False)),
    ],
)
def test_the_environment_says_what_the_terminal_can_show(environ, look):
    assert look_of(environ, "utf-8") == look


def test_an_output_that_is_not_utf_8_gets_ascii():
    assert not look_of(XTERM, "latin-1").unicode
    assert not look_of(XTERM, None).unicode


def colour_of(code, depth):
    """The colour of a code; 16 to 231 are a cube, 232 to 255 greys (XTerm's 256colres.pl; from memory)."""
    if depth == 1 << 24:
        return Colour(code >> 16, code >> 8 & 255, code & 255)
    if code < 16:
        return Colour(*_FIRST_16[code])
    if code < 232:
        return Colour(*(0 if part == 0 else 55 + 40 * part for part in np.unravel_index(code - 16, (6, 6, 6))))
    return Colour(*(8 + 10 * (code - 232),) * 3)


@pytest.mark.parametrize("code", [16, 67, 110, 231, 232, 240, 255])
def test_a_colour_that_is_among_the_256_is_found_there(code):
    assert colour_of(code_of(colour_of(code, 256), 256), 256) == colour_of(code, 256)


@pytest.mark.parametrize("depth", [16, 256, 1 << 24])
def test_text_can_be_read_on_its_ground(depth):
    """WCAG 2.2, success criterion 1.4.3: at least 4.5:1."""
    inks = palette(depth)
    for ink in (inks.text, inks.strong, inks.dim, inks.accent, inks.alarm, inks.held, inks.quiet):
        assert contrast_ratio(colour_of(ink.fore, depth), colour_of(ink.back, depth)) >= 4.5 - 0.6 * (depth == 16)


@pytest.mark.parametrize("depth", [16, 256, 1 << 24])
def test_more_traces_are_never_darker(depth):
    colours = [colour_of(code, depth) for code in palette(depth).shades.tolist()]
    lightness = [oklab_from_srgb(np.array([colour.red, colour.green, colour.blue]) / 255.0)[0] for colour in colours]
    assert (np.diff(lightness) >= 0).all()
    assert len(set(palette(depth).shades.tolist())) >= 4


def test_without_colours_nothing_but_weight_tells_inks_apart():
    inks = palette(0)
    assert inks.shades.size == 0
    assert inks.alarm.weight != inks.text.weight
