"""The tiles of several links: where they stand, what they say, and the window and the terminal around them."""

from dataclasses import replace

import numpy as np
import pytest

from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, LinkState, LiveState
from monitor.views.control import ACTIONS, LINK_ACTIONS, link_action_for
from monitor.views.layout import Box
from monitor.views.painter import ensure_application, save_tiles
from monitor.views.terminal_colours import Look
from monitor.views.terminal_keys import Keys
from monitor.views.theme import THEME_NAMES, contrast_ratio, find_theme
from monitor.views.tile_wording import closing_rail, shown_opening, tile_words
from tests.monitor.views.several_links import LINKS, RecordingLinks
from tests.monitor.views.synthetic_eyes import full_reading, make_eye

MANY = tuple((f"{name} {number}", kind, failure) for number in range(4) for name, kind, failure in LINKS)


@pytest.fixture(scope="module", autouse=True)
def _qt():
    ensure_application()


# --- where they stand


@pytest.mark.parametrize("width", [600, 900, 1280, 3840])
@pytest.mark.parametrize("count", [1, 2, 5, 9, 20])
def test_tiles_lie_side_by_side_within_the_strip(width, count):
    from monitor.views.tiles import arrange_tiles

    boxes = arrange_tiles(width, count, 1.0)
    strip = Box(0, 0, width, boxes.height)
    assert len(boxes.tiles) == count
    assert all(strip.contains(tile) for tile in boxes.tiles)
    assert not any(a.overlaps(b) for a in boxes.tiles for b in boxes.tiles if a is not b)
    assert {(tile.width, tile.height) for tile in boxes.tiles} == {(boxes.tiles[0].width, boxes.tiles[0].height)}
    assert boxes.tiles[0].width >= 160


def test_tiles_without_pixels_or_number_are_refused():
    from monitor.views.tiles import arrange_tiles

    for width, count in ((0, 1), (100, 0)):
        with pytest.raises(ValueError, match="tiles need"):
            arrange_tiles(width, count, 1.0)


# --- what they say


def words_of(**more):
    return tile_words(LinkState("x", LiveState(Snapshot(), **more)))


def test_a_tile_says_first_what_is_wrong():
    failed = tile_words(RecordingLinks().links[4])
    assert (failed.state, failed.foot) == ("Failed", "tcp://old-mast.example:5555: the keys do not fit")
    assert words_of(searching="waiting for samples").state == "Waiting"
    assert words_of(seconds=3.0, searching="no clock line").foot == "no clock line"
    assert words_of(seconds=9.0, locks=((1.0, True), (8.0, False))).state == "No lock"
    calling = AlarmLine("lock lost", "high", "unacknowledged", 65.0, "")
    assert words_of(alarms=(calling,)).foot == "lock lost, 1:05"
    assert (
        words_of(alarms=(calling, replace(calling, name="clipping", severity="low"))).foot
        == "2 alarms: lock lost, 1:05"
    )


def test_an_old_figure_of_a_link_that_failed_is_not_shown_as_if_it_were_new():
    failed = RecordingLinks().links[4]
    assert failed.state.snapshot.reading.opening_pct is not None
    assert shown_opening(failed) is None


def test_the_little_eye_is_the_rail_that_closes_most():
    image, eyes = make_eye(2, ("I", "Q"), symbols=60)
    reading = full_reading(image, eyes)
    first, second = reading.eyes
    for openings, rail in (((50.0, 40.0), 1), ((40.0, 50.0), 0), ((None, 50.0), 1), ((None, None), 0)):
        changed = tuple(replace(e, opening_pct=o) for e, o in zip((first, second), openings, strict=True))
        assert closing_rail(image, replace(reading, eyes=changed)) == rail
    assert closing_rail(image, None) == 0


@pytest.mark.parametrize("theme", THEME_NAMES)
@pytest.mark.parametrize(("width", "links"), [(1280, LINKS), (700, LINKS), (1280, MANY)])
def test_every_tile_has_its_name_and_no_text_leaves_its_place_or_lies_on_another(theme, width, links):
    from monitor.views.tiles import TileImage

    strip = TileImage()
    several = RecordingLinks(links, front=2).several()
    strip.draw(several, width, 1.0, theme)
    texts = strip.texts
    for name, _, _ in links:
        assert [text for text in texts if text.text == name]
    for text in texts:
        assert text.box.contains(text.extent, slack=4), text
        assert sum(tile.contains(text.extent, slack=2) for tile in strip.boxes.tiles) == 1, text
    assert not [(a, b) for i, a in enumerate(texts) for b in texts[i + 1 :] if a.extent.overlaps(b.extent)]
    palette = find_theme(theme)
    for text in texts:
        ground = palette.alert if text.colour == palette.page else palette.panel
        assert contrast_ratio(text.colour, ground) >= 4.5, text


def test_only_tiles_that_changed_are_drawn_anew():
    from monitor.views.tiles import TileImage

    strip, links = TileImage(), RecordingLinks()
    assert len(strip.draw(links.several(), 1280, 1.0, "light")) == 1 + len(LINKS)
    assert strip.draw(links.several(), 1280, 1.0, "light") == []
    links.links[1] = replace(links.links[1], failure="gone")
    assert strip.draw(links.several(), 1280, 1.0, "light") == [strip.boxes.tiles[1]]
    links.choose(3)
    assert strip.draw(links.several(), 1280, 1.0, "light") == [strip.boxes.tiles[0], strip.boxes.tiles[3]]


def test_measured_recordings_are_drawn_as_tiles_over_the_worst(tmp_path, snapshots):
    from PySide6.QtGui import QImage

    links = [("east", snapshots["qpsk"]), ("west", snapshots["closed"]), ("quay", snapshots["no lock"])]
    for theme in THEME_NAMES:
        save_tiles(links, 1, tmp_path / "t.png", 1280, 900, theme)
        image = QImage(str(tmp_path / "t.png"))
        assert (image.width(), image.height()) == (1280, 900)


# --- the window


class Bench:
    def __init__(self, folder, links):
        from monitor.views.tile_window import TileWindow

        self.links = links
        self.window = TileWindow(links, title="harbour", choices=folder / "window.ini", pictures=folder)
        self.window.resize(1280, 828)
        self.window.show()
        self.window.activateWindow()
        self.process()
        links.told.clear()

    def process(self):
        from PySide6.QtWidgets import QApplication

        QApplication.processEvents()

    def press(self, key):
        from PySide6.QtTest import QTest

        QTest.keyClick(self.window.face, key)
        self.process()

    def page(self):
        return {text.text for text in self.window.face.page.texts}

    def close(self):
        self.window.close()
        self.process()


@pytest.fixture
def bench(tmp_path):
    made = []

    def make(links=None):
        made.append(Bench(tmp_path, links or RecordingLinks()))
        return made[-1]

    yield make
    for one in made:
        one.close()


def test_the_page_below_is_that_of_the_link_in_front(bench):
    shown = bench()
    assert "tcp://skerry-7.harbour.example:5555 · cf32_le · 1000000 Hz" in shown.page()
    shown.links.front = 1
    shown.window.refresh()
    assert "audio:harbour" in shown.page()
    assert "No alarms" in shown.page()


def test_a_click_on_a_tile_brings_its_link_to_the_front(bench):
    from PySide6.QtCore import QPoint, Qt
    from PySide6.QtTest import QTest

    shown = bench()
    strip = shown.window.strip
    box, ratio = strip.page.boxes.tiles[1], strip.devicePixelRatioF()
    place = QPoint(int((box.x + box.width / 2) / ratio), int((box.y + box.height / 2) / ratio))
    QTest.mouseClick(strip, Qt.MouseButton.LeftButton, pos=place)
    assert shown.links.told[0] == ("choose", 1)
    assert "audio:harbour" in shown.page()
    QTest.mouseClick(strip, Qt.MouseButton.LeftButton, pos=QPoint(1, 1))
    assert len([told for told in shown.links.told if told[0] == "choose"]) == 1


def test_keys_step_through_the_links_and_give_the_worst_back(bench):
    from PySide6.QtCore import Qt

    shown = bench()
    for key in (Qt.Key.Key_Period, Qt.Key.Key_Comma, Qt.Key.Key_W):
        shown.press(key)
    assert shown.links.told == [("step", 1), ("step", -1), ("release",)]
    shown.press(Qt.Key.Key_Space)
    assert ("mark",) in shown.links.told


def test_what_was_held_or_typed_for_one_link_does_not_pass_to_another(bench):
    from PySide6.QtCore import Qt

    shown = bench()
    shown.press(Qt.Key.Key_Escape)
    shown.press(Qt.Key.Key_N)
    assert shown.window.view().held
    assert shown.window.name_line.isVisible()
    shown.links.front = 1
    shown.window.refresh()
    assert not shown.window.view().held
    assert not shown.window.name_line.isVisible()
    assert "audio:harbour" in shown.page()


def test_alarms_that_stood_while_another_link_was_in_front_are_on_its_history(bench):
    shown = bench()
    west = shown.links.links[0]
    shown.links.front = 1
    shown.window.refresh()
    shown.links.links[0] = replace(west, state=replace(west.state, alarms=(), seconds=west.state.seconds + 5.0))
    shown.window.refresh()
    shown.links.front = 0
    shown.window.refresh()
    assert "opening_pct < 70" in {span.name for span in shown.window.view().spans}


def test_the_link_keys_are_in_menu_and_help(bench):
    shown = bench()
    menus = {action.text(): action.menu() for action in shown.window.menuBar().actions()}
    assert [action.text() for action in menus["Link"].actions()] == [entry.words for entry in LINK_ACTIONS]
    assert set(LINK_ACTIONS) <= set(shown.window.help.actions_told)
    taken = {key for action in ACTIONS for key in action.keys}
    assert not taken & {key for action in LINK_ACTIONS for key in action.keys}


def test_closing_the_window_stops_all(bench):
    shown = bench()
    shown.close()
    assert ("stop",) in shown.links.told


def test_many_links_leave_room_for_the_page(bench):
    shown = bench(RecordingLinks(MANY, front=7))
    shown.window.refresh()
    shown.process()
    assert shown.window.face.height() >= 300


# --- the terminal


def view_of(links, look=None):
    from pathlib import Path

    from monitor.views.terminal_tiles import TilesTerminalView

    return TilesTerminalView(links, look or Look(), lambda: 0.0, Path())


def test_each_link_has_a_row_over_the_page_of_the_one_in_front():
    lines = view_of(RecordingLinks(LINKS[:3], front=1)).picture(80, 24).lines()
    assert len(lines) == 24
    assert [line[0] for line in lines[:3]] == [" ", "▶", " "]
    assert lines[0].startswith("  Skerry west")
    assert "83.4 %" in lines[1]
    assert lines[3].startswith("audio:harbour")


def test_where_rows_are_few_those_round_the_front_are_shown_and_that_there_are_more():
    lines = view_of(RecordingLinks(MANY, front=10)).picture(80, 24).lines()
    above = [line for line in lines if line[:2].strip() in ("▶", "↑", "↓", "▶↑", "▶↓")]
    assert [line[1] for line in above] == ["↑", " ", "↓"]
    assert "▶ Skerry west 2" in lines[2][:16] or "▶ Skerry west 2" in lines[1][:16]
    assert not [line for line in lines if "Too small" in line]


@pytest.mark.parametrize("size", [(1, 1), (20, 3), (64, 20), (80, 24), (200, 60)])
@pytest.mark.parametrize("look", [Look(), Look(0, unicode=False)])
def test_the_picture_fills_any_terminal_and_is_plain_where_it_must_be(size, look):
    columns, rows = size
    screen = view_of(RecordingLinks(front=4), look).picture(columns, rows)
    assert (screen.columns, screen.rows) == (columns, rows)
    if not look.unicode:
        assert all(line.isascii() for line in screen.lines())
        assert (screen.fore == -1).all()
    assert screen.chars.dtype == np.uint32


def test_terminal_keys_step_through_the_links():
    links = RecordingLinks()
    view = view_of(links)
    for data in (b".", b",", b"w"):
        for key in Keys().feed(data):
            view.press(key)
    assert links.told == [("step", 1), ("step", -1), ("release",)]
    assert link_action_for("w") is link_action_for("W") is LINK_ACTIONS[2]


def test_a_letter_typed_into_a_name_is_no_key():
    links = RecordingLinks()
    view = view_of(links)
    view.picture(80, 30)
    for key in ("N", "w"):
        view.press(key)
    assert ("release",) not in links.told


def test_the_list_of_keys_names_those_of_several_links():
    view = view_of(RecordingLinks())
    view.picture(100, 50)
    view.press("?")
    text = "\n".join(view.picture(100, 50).lines())
    assert all(entry.words in text for entry in LINK_ACTIONS)


def test_without_a_screen_each_link_has_a_line_and_the_end_is_that_of_all():
    from monitor.views.terminal_tiles import link_lines

    links = RecordingLinks()
    lines, ended = link_lines(links.several())
    assert len(lines) == len(LINKS)
    assert not ended
    assert lines[1].startswith("Skerry east: 0:32; opening 83.4 %")
    assert lines[4] == "Old mast: tcp://old-mast.example:5555: the keys do not fit"
    links.links = [replace(one, state=replace(one.state, ended=True)) for one in links.links]
    assert link_lines(links.several())[1]
