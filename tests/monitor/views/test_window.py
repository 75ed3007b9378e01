import gc
import os
import signal
import subprocess
import sys
import threading
from dataclasses import replace
from pathlib import Path

import pytest

from monitor.errors import InputError
from monitor.views.control import ACTIONS, MENUS, SHELVE_SECONDS
from monitor.views.painter import ensure_application
from monitor.views.tone import Tone

ROOT = Path(__file__).parents[3]


class RecordingWatch:
    """A watched side that tells the state it is given and notes what it is told."""

    def __init__(self, state):
        self.now = state
        self.told = []

    def state(self):
        return self.now

    def mark(self, name=""):
        self.told.append(("mark", name))

    def name_mark(self, name):
        self.told.append(("name_mark", name))

    def clear(self):
        self.told.append(("clear",))

    def acknowledge(self):
        self.told.append(("acknowledge",))

    def shelve(self, seconds):
        self.told.append(("shelve", seconds))

    def set_persistence(self, seconds):
        self.told.append(("set_persistence", seconds))

    def report(self, path):
        path.write_text("<!DOCTYPE html>")
        self.told.append(("report",))

    def stop(self):
        self.told.append(("stop",))


class SilentStream:
    def __init__(self):
        self.closed = False

    def close(self):
        self.closed = True


class Clock:
    def __init__(self):
        self.seconds = 0.0

    def __call__(self):
        return self.seconds


@pytest.fixture(autouse=True)
def _nothing_left_running_and_no_exception_lost():
    ensure_application()
    from PySide6.QtCore import QCoreApplication, QEvent, QTimer
    from PySide6.QtWidgets import QApplication
    from shiboken6 import isValid

    threads = set(threading.enumerate())
    lost = []
    before, sys.excepthook = sys.excepthook, lambda kind, error, trace: lost.append(error)
    yield
    sys.excepthook = before
    QCoreApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete.value)
    timers = [item for item in gc.get_objects() if isinstance(item, QTimer) and isValid(item) and item.isActive()]
    assert not timers, f"timers left running: {[timer.parent() for timer in timers]}"
    left = set(threading.enumerate()) - threads
    assert not left, f"threads left running: {left}"
    shown = [widget for widget in QApplication.topLevelWidgets() if widget.isVisible()]
    assert not shown, f"windows left open: {shown}"
    assert not lost, lost


class Bench:
    """A window with everything outside it replaced by something that records."""

    def __init__(self, folder, state):
        from monitor.views.window import LiveWindow

        self.folder = folder
        self.watch = RecordingWatch(state)
        self.clock = Clock()
        self.streams = []
        self.end = False
        self.window = LiveWindow(
            self.watch,
            title="Skerry tide gauge",
            choices=folder / "window.ini",
            pictures=folder,
            tone=Tone(self.open_stream),
            until=lambda: self.end,
            now=self.clock,
        )
        if not (folder / "window.ini").exists():
            self.window.resize(900, 560)
        self.window.show()
        self.window.activateWindow()
        self.process()
        self.watch.told.clear()

    def open_stream(self, fill):
        self.streams.append(SilentStream())
        return self.streams[-1]

    def process(self):
        from PySide6.QtWidgets import QApplication

        QApplication.processEvents()

    def press(self, name):
        """Press the named key, as `monitor.views.control` calls it, on whatever has the focus."""
        from PySide6.QtCore import Qt
        from PySide6.QtTest import QTest
        from PySide6.QtWidgets import QApplication

        names = {"Enter": "Return", "?": "Question", "+": "Plus", "-": "Minus", "=": "Equal"}
        modifier = Qt.KeyboardModifier.NoModifier
        if name.startswith("Ctrl+"):
            name, modifier = name.removeprefix("Ctrl+"), Qt.KeyboardModifier.ControlModifier
        QTest.keyClick(
            QApplication.focusWidget() or self.window, getattr(Qt.Key, f"Key_{names.get(name, name)}"), modifier
        )
        self.process()

    def choose(self, name):
        """Take the menu's entry."""
        self.window.commands[name].trigger()
        self.process()

    def words(self):
        return [text.shown for text in self.window.face.page.texts]

    def says(self, text):
        return any(text in shown for shown in self.words())

    def view(self):
        return self.window.view()


@pytest.fixture
def open_bench(tmp_path, live_states):
    benches = []

    def open_one(state="busy", folder=tmp_path):
        benches.append(Bench(folder, live_states[state] if isinstance(state, str) else state))
        return benches[-1]

    yield open_one
    for bench in benches:
        bench.window.close()
        bench.window.deleteLater()


KEYS = [(action.name, key) for action in ACTIONS for key in action.keys]
TOLD = {
    "mark": ("mark", ""),
    "acknowledge": ("acknowledge",),
    "shelve": ("shelve", SHELVE_SECONDS),
    "clear": ("clear",),
    "longer": ("set_persistence", 5.0),
    "shorter": ("set_persistence", 1.0),
    "newest": ("set_persistence", 0.0),
    "close": ("stop",),
}


@pytest.mark.parametrize(("name", "key"), [(name, key) for name, key in KEYS if name in TOLD])
def test_what_the_user_asks_for_reaches_the_watched_side_once(open_bench, name, key):
    bench = open_bench()
    bench.press(key)
    assert bench.watch.told == [TOLD[name]]


VIEWED = {
    "hold": lambda view: view.held,
    "rail": lambda view: view.rail,
    "page": lambda view: view.page,
    "longer": lambda view: view.persistence,
    "shorter": lambda view: view.persistence,
    "newest": lambda view: view.persistence,
    "nearer": lambda view: view.span_s,
    "larger": lambda view: view.zoom,
    "theme": lambda view: view.theme,
    "tone": lambda view: view.tone,
}
THERE_AND_BACK = [
    ("hold", "hold"),
    ("page", "back"),
    ("longer", "shorter"),
    ("shorter", "longer"),
    ("nearer", "further"),
    ("larger", "smaller"),
    ("theme", "theme"),
    ("tone", "tone"),
]


@pytest.mark.parametrize("by_menu", [True, False])
@pytest.mark.parametrize(("there", "back"), THERE_AND_BACK)
def test_a_setting_goes_there_and_back(open_bench, there, back, by_menu):
    bench = open_bench()
    keys = {action.name: action.keys[0] for action in ACTIONS}
    before, seen = VIEWED[there](bench.view()), []
    for step in (there, back):
        if by_menu:
            bench.choose(step)
        else:
            bench.press(keys[step])
        seen.append(VIEWED[there](bench.view()))
    assert seen[0] != before
    assert seen[1] == before


@pytest.mark.parametrize(("name", "key"), KEYS)
def test_every_key_does_what_its_menu_entry_does(open_bench, name, key, tmp_path):
    outcomes = []
    for way in ("untouched", "key", "menu"):
        (tmp_path / way).mkdir()
        bench = open_bench(folder=tmp_path / way)
        if way == "key":
            bench.press(key)
        elif way == "menu":
            bench.choose(name)
        view = bench.view()
        outcomes.append(
            (
                list(bench.watch.told),
                [see(view) for see in VIEWED.values()],
                bench.window.isVisible(),
                bench.window.help.isVisible(),
                bench.window.name_line.isVisible(),
                len(list(bench.folder.glob("*.png"))),
            )
        )
        bench.window.close()
    untouched, by_key, by_menu = outcomes
    assert by_key == by_menu
    # at first the history is at its longest and the text at its smallest
    assert (by_key == untouched) == (name in ("further", "smaller"))


def test_every_action_is_in_a_menu_with_its_keys(open_bench):
    bench = open_bench()
    menus = bench.window.menuBar().actions()
    entries = {menu.text(): [entry.text() for entry in menu.menu().actions()] for menu in menus}
    assert tuple(entries) == MENUS
    for action in ACTIONS:
        assert action.words in entries[action.menu]
        assert len(bench.window.commands[action.name].shortcuts()) >= len(action.keys)


def test_checked_entries_follow_keys_and_menu(open_bench):
    bench = open_bench()
    for name, key in (("hold", "H"), ("tone", "T"), ("help", "F1")):
        entry = bench.window.commands[name]
        assert not entry.isChecked()
        bench.press(key)
        assert entry.isChecked()
        bench.choose(name)
        assert not entry.isChecked()


# -- what is shown ---------------------------------------------------------------------------------------------------------


def test_a_look_shows_the_newest_state(open_bench, live_states):
    bench = open_bench("calm")
    bench.watch.now = live_states["worse"]
    bench.window.refresh()
    assert bench.view().state is live_states["worse"]
    assert bench.says("worse")


def test_looks_come_by_themselves_while_the_window_is_shown_and_not_after(open_bench, live_states):
    from PySide6.QtCore import QDeadlineTimer
    from PySide6.QtWidgets import QApplication

    bench = open_bench("calm")
    bench.watch.now = live_states["worse"]
    deadline = QDeadlineTimer(5000)
    while bench.view().state is not live_states["worse"] and not deadline.hasExpired():
        QApplication.processEvents()
    assert bench.view().state is live_states["worse"]
    bench.window.hide()
    bench.watch.now = live_states["busy"]
    deadline = QDeadlineTimer(150)
    while not deadline.hasExpired():
        QApplication.processEvents()
    assert bench.view().state is live_states["worse"]


def test_while_held_the_picture_stands_but_alarms_are_told(open_bench, live_states):
    bench = open_bench("calm")
    bench.press("Escape")
    bench.watch.now = live_states["busy"]
    bench.window.refresh()
    assert bench.view().state is live_states["calm"]
    assert bench.says("Held at 0:32")
    assert bench.says("opening_pct < 70")
    bench.press("Escape")
    assert bench.view().state is live_states["busy"]
    assert not bench.says("Held at")


def test_rails_come_round_and_vanish_with_a_link_that_has_none(open_bench, live_states):
    bench = open_bench()
    seen = []
    for _ in range(4):
        bench.press("Tab")
        seen.append(bench.view().rail)
    assert seen == [0, 1, None, 0]
    bench.press("Tab")
    bench.watch.now = live_states["calm"]
    bench.window.refresh()
    assert bench.view().rail is None
    bench.press("Tab")
    assert bench.view().rail is None
    assert bench.says("this link has one rail")


def test_an_alarm_that_has_passed_stays_on_the_history(open_bench, live_states):
    bench = open_bench()
    bench.watch.now = replace(live_states["busy"], alarms=(), seconds=420.0)
    bench.window.refresh()
    spans = bench.view().spans
    assert [(span.name, span.start_s, span.end_s) for span in spans] == [
        ("opening_pct < 70", 388.2, 412.3),
        ("samples lost", 390.0, 412.3),
    ]


def test_the_screen_shows_the_page_to_the_pixel(open_bench):
    bench = open_bench()
    grabbed = bench.window.face.grab().toImage().convertToFormat(bench.window.face.page.image.format())
    assert grabbed == bench.window.face.page.image


@pytest.mark.parametrize("ratio", [1.0, 1.25, 1.5, 2.0, 2.75])
def test_what_is_painted_again_covers_what_changed_and_hardly_more(ratio):
    from monitor.views.layout import Box
    from monitor.views.window import logical_rect

    for box in (Box(0, 0, 1, 1), Box(37, 91, 531, 143), Box(1, 2, 3, 5), Box(100, 200, 300, 400)):
        rect = logical_rect(box, ratio)
        for low, high, first, last in (
            (rect.x(), rect.x() + rect.width(), box.x, box.right),
            (rect.y(), rect.y() + rect.height(), box.y, box.bottom),
        ):
            assert low * ratio <= first < (low + 1) * ratio
            assert (high - 1) * ratio < last <= high * ratio


@pytest.mark.parametrize("size", [(900, 560), (1280, 800), (3840, 2160)])
def test_the_page_follows_the_windows_size(open_bench, size):
    bench = open_bench()
    bench.window.resize(*size)
    bench.process()
    face = bench.window.face
    assert (bench.window.width(), bench.window.height()) == size
    assert (face.page.image.width(), face.page.image.height()) == face.pixels() == (face.width(), face.height())


def test_a_remark_goes_after_some_seconds(open_bench):
    bench = open_bench()
    bench.press("Backspace")
    assert bench.says("eye cleared")
    bench.clock.seconds = 5.9
    bench.window.refresh()
    assert bench.says("eye cleared")
    bench.clock.seconds = 6.0
    bench.window.refresh()
    assert not bench.says("eye cleared")


def test_help_opens_and_closes_by_its_key_and_by_escape_without_holding(open_bench):
    bench = open_bench()
    bench.press("?")
    assert bench.window.help.isVisible()
    bench.press("F1")
    assert not bench.window.help.isVisible()
    bench.press("F1")
    bench.press("Escape")
    assert not bench.window.help.isVisible()
    assert not bench.view().held


# -- naming ----------------------------------------------------------------------------------------------------------------


def type_text(text):
    from PySide6.QtTest import QTest
    from PySide6.QtWidgets import QApplication

    QTest.keyClicks(QApplication.focusWidget(), text)


def test_a_name_is_typed_without_its_letters_doing_anything_else(open_bench):
    bench = open_bench()
    bench.press("N")
    assert bench.window.name_line.isVisible()
    assert bench.window.name_line.selectedText() == "feed turned east"
    type_text("Hns t0 +-?z")
    bench.press("Backspace")
    bench.press("Up")
    bench.press("Tab")
    bench.press("Enter")
    assert bench.watch.told == [("name_mark", "Hns t0 +-?")]
    assert not bench.window.name_line.isVisible()
    bench.press("Space")
    assert bench.watch.told[-1] == ("mark", "")


def test_escape_leaves_the_name_as_it_was(open_bench):
    bench = open_bench()
    bench.press("N")
    type_text("oops")
    bench.press("Escape")
    assert not bench.window.name_line.isVisible()
    assert bench.watch.told == []
    assert not bench.view().held


def test_without_a_mark_there_is_nothing_to_name(open_bench):
    bench = open_bench("waiting")
    bench.press("N")
    assert not bench.window.name_line.isVisible()
    assert bench.says("no mark to name yet")
    bench.press("Space")  # the state does not tell of it yet
    bench.press("N")
    assert bench.window.name_line.isVisible()


# -- pictures --------------------------------------------------------------------------------------------------------------


def test_the_picture_saved_is_the_page(open_bench):
    from PySide6.QtGui import QImage

    bench = open_bench()
    bench.press("S")
    bench.press("S")
    files = sorted(bench.folder.glob("lidwatch-*.png"))
    assert len(files) == 2
    saved = QImage(str(files[0]))
    face = bench.window.face
    assert (saved.width(), saved.height()) == face.pixels()
    page = face.page.image.copy()
    places = face.page.boxes.page.rails[0].eye
    inside = (places.x, places.y, places.width, places.height)
    assert saved.copy(*inside).convertToFormat(page.format()) == page.copy(*inside)
    assert bench.says("picture saved: lidwatch-")


def test_a_picture_that_cannot_be_saved_is_told(open_bench):
    bench = open_bench()
    bench.window._pictures = bench.folder / "gone"
    bench.press("S")
    assert bench.says("picture not saved: No such file or directory")


# -- tone ------------------------------------------------------------------------------------------------------------------


def test_the_tone_plays_only_while_it_is_on(open_bench):
    bench = open_bench()
    assert bench.streams == []
    bench.press("T")
    assert [stream.closed for stream in bench.streams] == [False]
    bench.press("T")
    assert [stream.closed for stream in bench.streams] == [True]
    bench.press("T")
    bench.window.close()
    assert [stream.closed for stream in bench.streams] == [True, True]


def test_a_tone_that_cannot_be_had_is_told_and_stays_off(open_bench):
    bench = open_bench()

    def refuse(fill):
        raise OSError("PortAudio library not found")

    bench.window._tone = Tone(refuse)
    bench.press("T")
    assert not bench.view().tone
    assert not bench.window.commands["tone"].isChecked()
    assert bench.says("no tone: PortAudio library not found")


# -- kept from one watch to the next ---------------------------------------------------------------------------------------


def test_choices_and_size_are_found_again(open_bench):
    first = open_bench()
    first.window.resize(900, 700)
    for name in ("theme", "larger", "longer", "nearer", "tone"):
        first.choose(name)
    kept = first.view()
    first.window.close()
    second = open_bench()
    view = second.view()
    assert (view.theme, view.zoom, view.persistence, view.span_s, view.tone) == (
        kept.theme,
        1.2,
        5.0,
        86400.0,
        True,
    )
    assert (second.window.width(), second.window.height()) == (900, 700)
    assert second.window.commands["tone"].isChecked()


def test_the_watched_side_is_told_the_kept_persistence(tmp_path, live_states):
    from monitor.views.choices import Choices, save_choices
    from monitor.views.window import LiveWindow

    save_choices(tmp_path / "window.ini", Choices(persistence=None))
    watch = RecordingWatch(live_states["calm"])
    window = LiveWindow(watch, title="x", choices=tmp_path / "window.ini")
    assert watch.told == [("set_persistence", None)]
    window.close()
    window.deleteLater()


# -- the end ---------------------------------------------------------------------------------------------------------------


def test_closing_tells_the_watched_side_to_stop_once(open_bench):
    bench = open_bench()
    bench.window.close()
    bench.window.close()
    assert bench.watch.told == [("stop",)]


def test_a_watch_that_is_to_end_closes_the_window(open_bench):
    bench = open_bench()
    bench.end = True
    bench.window.refresh()
    assert not bench.window.isVisible()
    assert bench.watch.told == [("stop",)]


def test_running_the_window_returns_zero_when_it_is_closed(tmp_path, live_states):
    from monitor.views.window import run_window

    watch = RecordingWatch(live_states["busy"])
    looks = []

    def enough():
        looks.append(None)
        return len(looks) > 3

    assert run_window(watch, painter="auto", title="x", choices=tmp_path / "c.ini", until=enough) == 0
    assert watch.told == [("set_persistence", 2.0), ("stop",)]


def test_ctrl_c_ends_the_watch_as_closing_does_but_says_so(tmp_path, live_states):
    from monitor.views.window import run_window

    watch = RecordingWatch(live_states["busy"])
    looks = []

    def press():
        looks.append(None)
        if len(looks) == 2:
            signal.raise_signal(signal.SIGINT)
        return False

    before = signal.getsignal(signal.SIGINT)
    assert run_window(watch, painter="raster", choices=tmp_path / "c.ini", until=press) == 130
    assert len(looks) == 2
    assert watch.told[-1] == ("stop",)
    assert signal.getsignal(signal.SIGINT) is before


# -- painters and screens --------------------------------------------------------------------------------------------------


def test_without_a_screen_the_raster_painter_is_chosen_and_opengl_refused():
    from monitor.views.window import choose_painter

    assert choose_painter("raster") == "raster"
    assert choose_painter("auto") == "raster"
    with pytest.raises(InputError, match="there is no screen; take raster"):
        choose_painter("opengl")


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere there is always a screen")
def test_a_display_that_does_not_answer_is_told_in_one_line():
    environment = {k: v for k, v in os.environ.items() if k not in ("QT_QPA_PLATFORM", "WAYLAND_DISPLAY", "DISPLAY")}
    code = (
        "from monitor.errors import InputError\nfrom monitor.views.window import run_window\n"
        "try:\n    run_window(None)\nexcept InputError as error:\n    print(error)\n"
    )
    for display, told in (({}, "DISPLAY is not set"), ({"DISPLAY": ":4321"}, ":4321 does not answer")):
        run = subprocess.run(
            [sys.executable, "-c", code],
            cwd=ROOT,
            env=environment | display,
            capture_output=True,
            text=True,
            timeout=60,
        )
        assert run.returncode == 0
        assert run.stderr == ""
        assert told in run.stdout
        assert "--view terminal" in run.stdout
        assert run.stdout.count("\n") == 1
