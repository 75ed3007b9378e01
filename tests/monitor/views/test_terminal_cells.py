import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.views.terminal_cells import Ink, Sheet, cells, shorten, spell, wrap
from monitor.views.terminal_digits import digit_pixels, half_blocks, hash_blocks


@given(st.text(max_size=40), st.booleans())
def test_spelled_text_is_one_printable_line(text, unicode):
    line = spell(text, unicode)
    assert line.isprintable()
    assert unicode or line.isascii()


@pytest.mark.parametrize(
    ("text", "ascii_text"),
    [
        ("−3.1 × 10⁻⁷", "-3.1 x 10^-7"),
        ("1.6° rms", "1.6 deg rms"),
        ("Skerry Ærø, Höfn", "Skerry ?r?, Hofn"),
        ("漁港", "????"),
        ("Name…", "Name..."),
    ],
)
def test_ascii_terminals_get_ascii_spelling(text, ascii_text):
    assert spell(text, False) == ascii_text


def test_combining_marks_join_their_letter_or_go():
    assert spell("e\u0301x\u20dd", True) == "éx"


@given(st.text("ab 漢é", max_size=30), st.integers(0, 20), st.booleans())
def test_shortened_text_fits_and_says_that_it_was_cut(text, room, middle):
    found = shorten(text, room, middle=middle)
    assert cells(found) <= room
    assert found == text or room < 1 or "…" in found or room == 1


@given(st.text("ab 漢", max_size=60), st.integers(2, 20), st.integers(1, 4))
def test_wrapped_lines_fit(text, room, most):
    lines = wrap(text, room, most)
    assert len(lines) <= most
    assert all(cells(line) <= room for line in lines)
    if not lines or not lines[-1].endswith("…"):
        assert "".join(lines).replace(" ", "") == text.replace(" ", "")


def test_half_a_wide_character_never_stays():
    sheet = Sheet(6, 1, Ink(), unicode=True)
    sheet.write(0, 0, "漢漢漢", Ink())
    sheet.write(1, 0, "x", Ink())
    sheet.write(4, 0, "y", Ink())
    assert sheet.finish().lines() == [" x漢y "]


def test_a_wide_character_that_does_not_fit_is_left_out():
    sheet = Sheet(3, 1, Ink(), unicode=True)
    sheet.write(0, 0, "漢漢", Ink())
    assert sheet.finish().lines() == ["漢…"]


@pytest.mark.parametrize("size", [(0, 5), (5, 0), (-1, 3)])
def test_a_screen_without_cells_is_refused(size):
    with pytest.raises(ValueError, match="at least 1 x 1"):
        Sheet(*size, Ink(), unicode=True)


def test_the_large_digits_differ_and_keep_their_size():
    pictures = {digit: digit_pixels(digit) for digit in "0123456789"}
    assert {picture.shape for picture in pictures.values()} == {(6, 5)}
    assert len({picture.tobytes() for picture in pictures.values()}) == 10
    assert digit_pixels("4", 2).shape == (12, 10)
    with pytest.raises(KeyError):
        digit_pixels("x")


def test_half_blocks_hold_two_rows_of_pixels():
    pixels = digit_pixels("7")
    assert hash_blocks(pixels)[0] == "#####"
    upper = {" ": 0, "▄": 0, "▀": 1, "█": 1}
    lower = {" ": 0, "▄": 1, "▀": 0, "█": 1}
    for y, line in enumerate(half_blocks(pixels)):
        assert [upper[sign] for sign in line] == pixels[2 * y].tolist()
        assert [lower[sign] for sign in line] == pixels[2 * y + 1].tolist()
