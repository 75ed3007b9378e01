import itertools
from dataclasses import replace

import numpy as np
import pytest

from monitor.state import AlarmLine, HistoryPoint
from monitor.views.control import ACTIONS
from monitor.views.layout import Box
from monitor.views.live_drawing import View, draw_help
from monitor.views.painter import ensure_application
from monitor.views.theme import THEME_NAMES, contrast_ratio, find_theme
from tests.monitor.views.live_states import SPANS

SIZES = [(900, 560), (1280, 800), (2560, 1600), (3840, 2160), (1000, 1000)]
STATES = ["busy", "calm", "worse", "no lock", "waiting", "ended"]


def new_page(**options):
    ensure_application()
    from monitor.views.live_page import LivePage

    return LivePage(**options)


def drawn(view, width=1280, height=800, ratio=1.0):
    page = new_page()
    page.draw(view, width, height, ratio)
    return page


def view_of(state, **settings):
    return View(state, state.alarms, SPANS if state.alarms else (), **settings)


def as_array(image):
    raw = np.frombuffer(image.constBits(), dtype=np.uint8).reshape(image.height(), image.bytesPerLine())
    return raw[:, : 4 * image.width()].reshape(image.height(), image.width(), 4)[:, :, 2::-1].copy()


def crop(pixels, box):
    return pixels[box.y : box.bottom, box.x : box.right]


def rgb(colour):
    return np.array([colour.red, colour.green, colour.blue])


def assert_same_picture(one, other):
    # Qt smooths the edges of large letters a few steps differently from one drawing to the next
    assert np.abs(one.astype(int) - other).max() <= 12


def differ(one, other):
    return np.abs(one.astype(int) - other).max(axis=2) > 12


def words(page):
    return [text.shown for text in page.texts]


@pytest.mark.parametrize("zoom", [1.0, 1.45, 2.1])
@pytest.mark.parametrize("size", SIZES[:2] + SIZES[4:])
@pytest.mark.parametrize("state", STATES)
def test_no_text_leaves_its_place_or_overlaps_another(live_states, state, size, zoom):
    page = drawn(view_of(live_states[state], zoom=zoom, held=state == "calm"), *size)
    for placed in page.texts:
        assert Box(0, 0, *size).contains(placed.extent), placed
        assert placed.box.x - 2 <= placed.extent.x, placed
        assert placed.extent.right <= placed.box.right + 2, placed
    for one, other in itertools.combinations(page.texts, 2):
        slim = [
            Box(p.extent.x, p.extent.y + p.extent.height // 8, p.extent.width, p.extent.height * 3 // 4)
            for p in (one, other)
        ]
        assert not slim[0].overlaps(slim[1]), (one, other)


@pytest.mark.parametrize("size", SIZES[:3])
@pytest.mark.parametrize("state", STATES)
def test_nothing_is_shortened_at_the_usual_text_size_but_what_a_user_named(live_states, state, size):
    page = drawn(view_of(live_states[state]), *size)
    cut = [text.text for text in page.texts if "…" in text.shown]
    named = [mark.name for mark in live_states[state].marks if mark.name]
    assert all(any(name in text for name in named) for text in cut), cut


@pytest.mark.parametrize("ratio", [1.0, 1.5, 2.0])
def test_text_is_never_smaller_than_a_person_can_read(live_states, ratio):
    page = drawn(view_of(live_states["busy"]), round(900 * ratio), round(560 * ratio), ratio)
    heights = [text.extent.height / ratio for text in page.texts if text.extent.height < text.extent.width]
    # ascent and descent of a 10-pixel font of this family
    assert min(heights) >= 11.0


@pytest.mark.parametrize("theme", THEME_NAMES)
@pytest.mark.parametrize("state", STATES)
def test_text_is_readable_on_what_is_really_behind_it(live_states, state, theme):
    page = drawn(view_of(live_states[state], theme=theme, held=state == "calm"))
    pixels, colours = as_array(page.image), find_theme(theme)
    grounds = {tuple(rgb(c)): c for c in (colours.page, colours.panel, colours.alert, colours.ink)}
    for placed in page.texts:
        area = crop(pixels, placed.extent).reshape(-1, 3)
        values, counts = np.unique(area, axis=0, return_counts=True)
        ground = tuple(values[np.argmax(counts)])
        assert ground in grounds, placed
        assert contrast_ratio(placed.colour, grounds[ground]) >= 4.5, placed


def test_a_second_look_at_the_same_state_draws_nothing(live_states):
    page, view = new_page(), view_of(live_states["busy"])
    assert page.draw(view, 1280, 800) == [Box(0, 0, 1280, 800)]
    assert page.draw(view, 1280, 800) == []


def moved_on(state):
    image = state.snapshot.image
    density = image.density.copy()
    density[:, ::2] //= 2
    return replace(state, snapshot=replace(state.snapshot, image=replace(image, density=density)))


def test_new_traces_draw_the_eyes_alone(live_states):
    page, state = new_page(), live_states["busy"]
    page.draw(view_of(state), 1280, 800)
    changed = page.draw(view_of(moved_on(state)), 1280, 800)
    assert changed == [places.eye for places in page.boxes.page.rails]


CHANGES = {
    "reading": lambda s: replace(
        s, snapshot=replace(s.snapshot, reading=replace(s.snapshot.reading, opening_pct=51.2))
    ),
    "traces": moved_on,
    # the eye's surroundings are drawn anew, and its traces must be there still
    "eyes": lambda s: replace(
        s,
        snapshot=replace(
            s.snapshot,
            reading=replace(s.snapshot.reading, eyes=tuple(replace(e, threshold=0.4) for e in s.snapshot.reading.eyes)),
        ),
    ),
    "alarm": lambda s: replace(s, alarms=s.alarms[:1]),
    "mark": lambda s: replace(s, marks=s.marks[:-1]),
    "gap": lambda s: replace(s, gaps_s=(*s.gaps_s, 400.0), samples_lost=2048),
    "lock": lambda s: replace(s, snapshot=replace(s.snapshot, image=None, reading=None), locked=False, searching="x"),
    "notice": lambda s: replace(s, notices=("6:50 sender restarted",)),
    "change": lambda s: replace(s, change=None),
    "best": lambda s: replace(s, best_at_s=300.0),
    "time": lambda s: replace(s, seconds=s.seconds + 5.0),
    "ended": lambda s: replace(s, ended=True),
}


@pytest.mark.parametrize("change", CHANGES)
def test_a_page_brought_up_to_date_is_the_page_drawn_anew(live_states, change):
    before, after = live_states["busy"], CHANGES[change](live_states["busy"])
    page = drawn(view_of(before))
    first = as_array(page.image)
    page.draw(view_of(after), 1280, 800)
    assert_same_picture(as_array(page.image), as_array(drawn(view_of(after)).image))
    assert differ(as_array(page.image), first).any()


def test_what_changed_lies_in_the_areas_that_are_named(live_states):
    before = live_states["busy"]
    for change in CHANGES.values():
        page = drawn(view_of(before))
        first = as_array(page.image)
        areas = page.draw(view_of(change(before)), 1280, 800)
        different = (as_array(page.image) != first).any(axis=2)
        for area in areas:
            different[area.y : area.bottom, area.x : area.right] = False
        assert not different.any()


SETTINGS = {
    "held": {"held": True},
    "rail": {"rail": 1},
    "persistence": {"persistence": None},
    "tone": {"tone": True},
    "theme": {"theme": "dark"},
    "zoom": {"zoom": 1.2},
    "span": {"span_s": 60.0},
    "said": {"said": "picture saved"},
}


@pytest.mark.parametrize("setting", SETTINGS)
def test_a_setting_changed_and_changed_back_leaves_the_page_as_it_was(live_states, setting):
    state = live_states["busy"]
    page = drawn(view_of(state))
    first = as_array(page.image)
    page.draw(view_of(state, **SETTINGS[setting]), 1280, 800)
    other = as_array(page.image)
    assert_same_picture(other, as_array(drawn(view_of(state, **SETTINGS[setting])).image))
    assert differ(other, first).any()
    page.draw(view_of(state), 1280, 800)
    assert_same_picture(as_array(page.image), first)


def test_the_large_figure_its_change_and_the_target_are_told(live_states):
    shown = words(drawn(view_of(live_states["busy"])))
    opening = live_states["busy"].snapshot.reading.opening_pct
    assert f"{opening:.1f}" in shown
    assert {"better", "+4.2 points", "Best so far 84.1 % at 3:27"} <= set(shown)
    assert "since “feed turned east”, 82 s ago · 95 %: +2.9 to +5.5" in shown
    assert "worse" in words(drawn(view_of(live_states["worse"])))
    assert "no significant change" in words(drawn(view_of(live_states["calm"])))


def test_the_target_stands_on_the_bar_at_the_best_opening(live_states):
    state = live_states["busy"]
    page = drawn(view_of(state))
    figure = page.boxes.figure
    ink = np.abs(crop(as_array(page.image), figure).astype(int) - rgb(find_theme("light").ink)).sum(axis=2) < 30
    row = next(y for y in range(95, figure.height) if ink[y].any() and ink[y].sum() < 16)
    held = np.flatnonzero(ink[row])
    assert held.mean() + 0.5 == pytest.approx(figure.width * 0.841, abs=1.5)


def test_marks_gaps_alarms_and_missing_lock_stand_at_their_times(live_states):
    state = live_states["busy"]
    view = View(state, (), SPANS)
    page = drawn(view)
    plot, theme = page.boxes.history_plot, find_theme("light")
    pixels = as_array(page.image).astype(int)

    def columns(colour, rows, least):
        area = pixels[rows, plot.x : plot.right]
        return np.flatnonzero((np.abs(area - rgb(colour)).sum(axis=2) < 30).mean(axis=0) >= least)

    def times(found):
        return (found + 0.5) / plot.width * state.seconds

    inside = slice(plot.y + 4, plot.bottom - 4)
    for mark in state.marks:
        assert np.abs(times(columns(theme.ink, inside, 0.9)) - mark.seconds).min() < 0.6
    at_foot = times(columns(theme.alert, slice(plot.bottom - 20, plot.bottom - 1), 0.9))
    for gap in state.gaps_s:
        assert np.abs(at_foot - gap).min() < 0.6
    assert at_foot.size <= 2 * len(state.gaps_s)
    lane = times(columns(theme.alert, slice(plot.bottom + 3, plot.bottom + 5), 1.0))
    assert lane.min() == pytest.approx(98.0, abs=0.6)
    assert lane.max() == pytest.approx(360.0, abs=0.6)
    assert not ((lane > 132.0) & (lane < 299.0)).any()
    # all that stands in the hatched stretch is hatch: none of the curve's copper
    first, last = (round(plot.width * s / state.seconds) for s in (103.0, 127.0))
    area = pixels[inside, plot.x + first : plot.x + last]
    assert not (np.abs(area - rgb(theme.accent)).sum(axis=2) < 60).any()
    assert (np.abs(area - rgb(theme.track)).sum(axis=2) == 0).mean() > 0.4


def test_the_history_shows_how_far_the_opening_went_up_and_down(live_states):
    points = tuple(HistoryPoint(float(t), 60.0, 40.0, 80.0) for t in range(1, 60))
    state = replace(live_states["calm"], history=points, seconds=59.0, marks=(), best=None, best_at_s=None, locks=())
    page = drawn(View(state, ()))
    plot, theme = page.boxes.history_plot, find_theme("light")
    # the axis runs from 30 to 90 %: whole tens with some room
    column = as_array(page.image)[plot.y : plot.bottom, plot.x + plot.width // 3].astype(int)
    tinted = np.flatnonzero(np.abs(column - rgb(theme.panel)).sum(axis=1) > 60)
    share = 1.0 - (tinted + 0.5) / plot.height
    inside = share[(share > 0.17) & (share < 0.83)]
    assert inside.min() == pytest.approx(1 / 6, abs=0.03)
    assert inside.max() == pytest.approx(5 / 6, abs=0.03)
    assert inside.size > 0.6 * plot.height


def test_a_thousand_losses_do_not_hide_the_curve(live_states):
    state = live_states["busy"]
    page = drawn(View(replace(state, gaps_s=tuple(np.linspace(1.0, 410.0, 1000).tolist())), ()))
    plot, theme = page.boxes.history_plot, find_theme("light")
    area = crop(as_array(page.image).astype(int), plot)[: plot.height - 26]
    assert not (np.abs(area - rgb(theme.alert)).sum(axis=2) < 20).any()
    assert (np.abs(area - rgb(theme.accent)).sum(axis=2) < 60).any(axis=0).mean() > 0.5


def test_a_rail_alone_fills_the_eyes_place(live_states):
    state = live_states["busy"]
    both, alone = drawn(view_of(state)), drawn(view_of(state, rail=1))
    assert [text for text in words(both) if text.endswith(" rail")] == ["I rail", "Q rail"]
    assert [text for text in words(alone) if text.endswith(" rail")] == ["Q rail"]
    assert "Q alone  ·  traces fade in 2 s" in words(alone)
    assert alone.boxes.page.rails[0].eye.height > 1.8 * both.boxes.page.rails[0].eye.height


def test_alarms_that_call_come_first_and_all_are_counted(live_states):
    state = live_states["busy"]
    many = tuple(AlarmLine(f"rule {n}", "low", "unacknowledged", float(n), "") for n in range(12))
    shown = words(drawn(View(state, (*state.alarms[2:], *many, state.alarms[0]))))
    at = [number for number, text in enumerate(shown) if " · " in text and "at " in text and "raised" in text]
    assert shown[at[0]].startswith("opening_pct < 70")
    rest = next(text for text in shown if text.startswith("and ") and text.endswith(" more"))
    assert int(rest.split()[1]) + len(at) == 14
    assert "No alarms" in words(drawn(View(state, ())))


def test_without_an_eye_the_page_says_what_is_tried(live_states):
    shown = words(drawn(view_of(live_states["no lock"])))
    assert {"Lock lost at 6:45", "qpsk: no line at the symbol rate in the last 2 s", "not known"} <= set(shown)
    assert {"Searching", "waiting for samples"} <= set(words(drawn(view_of(live_states["waiting"]))))
    assert "The stream has ended" in words(drawn(view_of(live_states["ended"])))


def test_a_closed_eye_and_hostile_texts_are_drawn(live_states):
    state = live_states["busy"]
    reading = replace(state.snapshot.reading, opening_pct=-31.0, opening_low_pct=-40.0, opening_high_pct=-20.0)
    wild = "line one\nline two\x1b[31m " + "x" * 5000
    snapshot = replace(state.snapshot, reading=reading, source_text=wild, link_text=wild, notes=(wild,))
    alarm = AlarmLine(wild, "high", "unacknowledged", 1.0, wild)
    wild_state = replace(state, snapshot=snapshot, notices=(wild,), journal_text=wild, searching=wild)
    page = drawn(View(wild_state, (alarm,) * 3, said=""))
    assert "eye closed" in words(page)
    assert all(Box(0, 0, 1280, 800).contains(text.extent) for text in page.texts)
    none = replace(wild_state, snapshot=replace(snapshot, image=None, reading=None), locked=False)
    assert all(Box(0, 0, 1280, 800).contains(text.extent) for text in drawn(View(none, ())).texts)


def test_the_help_names_every_key(live_states):
    ensure_application()
    from PySide6.QtGui import QImage, QPainter

    from monitor.views.canvas import Canvas

    image = QImage(900, 620, QImage.Format.Format_RGB32)
    painter = QPainter(image)
    canvas = Canvas(painter, find_theme("light"), 1.18)
    draw_help(canvas, Box(0, 0, 900, 620))
    painter.end()
    shown = " ".join(text.shown for text in canvas.texts)
    assert "…" not in shown
    for action in ACTIONS:
        assert " or ".join(action.keys) in shown
        assert action.what in shown
