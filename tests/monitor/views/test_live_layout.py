import itertools

import pytest

from monitor.views.layout import Box
from monitor.views.live_layout import arrange_live, live_unit

SIZES = [(900, 560), (1280, 800), (1920, 1080), (2560, 1600), (3840, 2160), (900, 2000), (3000, 560)]


@pytest.mark.parametrize("rails", [0, 1, 2])
@pytest.mark.parametrize("zoom", [1.0, 1.45, 2.1])
@pytest.mark.parametrize("size", SIZES)
def test_areas_lie_on_the_page_and_apart(size, zoom, rails):
    boxes = arrange_live(*size, live_unit(*size, 1.0, zoom), rails=rails)
    areas = [boxes.header, boxes.band, boxes.body, boxes.figure, boxes.detail, boxes.history, boxes.footer]
    for area in areas:
        assert Box(0, 0, *size).contains(area), area
        assert area.height >= 0
    for one, other in itertools.combinations([area for area in areas if area.height], 2):
        assert not one.overlaps(other)
    assert boxes.history.contains(boxes.history_plot)
    assert len(boxes.page.rails) == rails
    for places in boxes.page.rails:
        for part in (places.caption, places.gutter, places.eye, places.levels):
            assert boxes.body.contains(part), part
    for part in (boxes.page.curve, boxes.page.key, boxes.page.time_axis, boxes.page.message):
        assert part is None or boxes.body.contains(part)


@pytest.mark.parametrize("rails", [1, 2])
@pytest.mark.parametrize("size", SIZES)
def test_the_eye_keeps_room_to_be_seen_in(size, rails):
    unit = live_unit(*size, 1.0, 1.0)
    boxes = arrange_live(*size, unit, rails=rails)
    for places in boxes.page.rails:
        assert places.eye.width >= 300 * unit
        assert places.eye.height >= 100 * unit


def test_text_grows_with_the_window_and_is_never_too_small():
    assert live_unit(1280, 800, 1.0, 1.0) == 1.0
    assert live_unit(2560, 1600, 1.0, 1.0) == 2.0
    assert live_unit(900, 560, 1.0, 1.0) == pytest.approx(0.86)
    # a screen with two pixels to a logical one shows the same page, finer
    assert live_unit(1800, 1120, 2.0, 1.0) == pytest.approx(2 * 0.86)


def test_larger_text_stops_where_the_page_would_not_hold_everything():
    assert live_unit(1280, 800, 1.0, 1.45) == 1.45
    assert live_unit(900, 560, 1.0, 2.1) == pytest.approx(min(900 / 640, 560 / 420))


def test_a_window_without_pixels_is_refused():
    with pytest.raises(ValueError, match="at least 1 x 1 pixels, got 0 x 5"):
        arrange_live(0, 5, 1.0, rails=1)
