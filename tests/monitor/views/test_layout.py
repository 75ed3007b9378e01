import itertools

import pytest

from monitor.views.layout import Box, arrange, notes_width

SIZES = [(1280, 800), (2560, 1600), (1920, 1080), (800, 1200), (640, 400)]


def boxes(page):
    named = [page.header, page.curve, page.curve_caption, page.curve_gutter, page.key, page.message, page.side]
    named += [page.notes]
    for rail in page.rails:
        named += [rail.caption, rail.gutter, rail.eye, rail.levels, rail.levels_caption]
    return [box for box in named if box is not None]


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("rails", [0, 1, 2])
@pytest.mark.parametrize("side", [True, False])
@pytest.mark.parametrize("note_lines", [0, 1, 4])
def test_areas_stay_on_the_page_and_apart(size, rails, side, note_lines):
    page = arrange(*size, rails=rails, side=side, note_lines=note_lines)
    whole = Box(0, 0, *size)
    for box in boxes(page):
        assert whole.contains(box)
        assert box.width > 20
        assert box.height > 8
    for one, other in itertools.combinations(boxes(page), 2):
        assert not one.overlaps(other), (one, other)
    assert (page.side is not None) == side
    assert (page.notes is not None) == (note_lines > 0)
    assert (page.message is not None) == (rails == 0)


@pytest.mark.parametrize("size", SIZES)
def test_eyes_and_curve_share_the_time_axis_and_levels_the_amplitude_axis(size):
    page = arrange(*size, rails=2, side=True, note_lines=1)
    assert page.curve is not None
    for rail in page.rails:
        assert (rail.eye.x, rail.eye.width) == (page.curve.x, page.curve.width)
        assert (rail.levels.y, rail.levels.height) == (rail.eye.y, rail.eye.height)
    assert page.rails[0].eye.height == page.rails[1].eye.height


def test_the_eye_takes_the_room_of_figures_and_notes_that_are_not_there():
    full = arrange(1280, 800, rails=1, side=True, note_lines=3)
    bare = arrange(1280, 800, rails=1, side=False, note_lines=0)
    assert bare.rails[0].eye.width > 1.5 * full.rails[0].eye.width
    assert bare.rails[0].eye.height > full.rails[0].eye.height


def test_the_room_for_notes_is_known_beforehand():
    page = arrange(1280, 800, rails=2, side=True, note_lines=2)
    assert page.notes is not None
    assert notes_width(1280, 800, side=True) == page.notes.width


def test_a_page_without_pixels_is_refused():
    with pytest.raises(ValueError, match="at least 1 x 1"):
        arrange(0, 800, rails=1, side=True, note_lines=0)
