"""The window of a live watch: draws what has changed as soon as there is a new state."""

import os
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from PySide6.QtCore import QEvent, QPointF, QRect, QSize, Qt, QTimer, Signal, qInstallMessageHandler
from PySide6.QtGui import (
    QAction,
    QCloseEvent,
    QColor,
    QHideEvent,
    QImage,
    QKeyEvent,
    QKeySequence,
    QPainter,
    QPaintEvent,
    QPalette,
    QResizeEvent,
    QShowEvent,
)
from PySide6.QtWidgets import QApplication, QLineEdit, QMainWindow, QWidget

from monitor.errors import InputError, MonitorError
from monitor.interrupt import Interrupt
from monitor.snapshot import Snapshot
from monitor.state import LiveState
from monitor.views.canvas import Canvas, qcolour
from monitor.views.choices import load_choices, save_choices, settings_file
from monitor.views.control import (
    ACTIONS,
    MENUS,
    SHELVE_SECONDS,
    Action,
    ActionName,
    LinkAction,
    Watched,
    free_name,
    next_rail,
    persistence_words,
    step_history,
    step_persistence,
    step_text,
)
from monitor.views.diagnosis_wording import PageName, next_page
from monitor.views.history import AlarmMemory
from monitor.views.layout import Box
from monitor.views.live_drawing import View, draw_help
from monitor.views.live_page import LivePage
from monitor.views.painter import ensure_application, png_bytes
from monitor.views.theme import ThemeName, find_theme
from monitor.views.tone import Tone

if TYPE_CHECKING:
    from monitor.views.opengl import EyeCover

PainterInUse = Literal["raster", "opengl"]
PainterName = Literal["auto", "raster", "opengl"]

_SCREEN_PACKAGES = "libxcb-cursor0 libxkbcommon-x11-0 libxcb-icccm4 libxcb-keysyms1 libxcb-image0 libxcb-render-util0"
LOOK_MS = 10
INTERRUPTED = 130
SAID_SECONDS = 6.0
LEAST_SIZE = QSize(900, 560)
FIRST_SIZE = QSize(1280, 828)
_QT_KEYS = {"Enter": ("Return", "Enter"), "Escape": ("Esc",), "PageUp": ("PgUp",), "PageDown": ("PgDown",)}
_CHECKED: tuple[ActionName, ...] = ("hold", "tone", "help")


def paint_image(widget: QWidget, image: QImage | None, event: QPaintEvent) -> None:
    """Bring an image of the screen's own pixels to a widget, as much of it as the event asks for."""
    if image is None:
        return
    image.setDevicePixelRatio(widget.devicePixelRatioF())
    painter = QPainter(widget)
    painter.setClipRegion(event.region())
    painter.drawImage(QPointF(0.0, 0.0), image)
    painter.end()
    image.setDevicePixelRatio(1.0)


class Face(QWidget):
    """The page inside the window; draws the parts that changed since the last look."""

    def __init__(self, parent: QWidget, page: LivePage) -> None:
        super().__init__(parent)
        self.setAttribute(Qt.WidgetAttribute.WA_OpaquePaintEvent)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.page = page
        self.view: View | None = None

    def look(self, view: View) -> None:
        """Show another view."""
        self.view = view
        ratio = self.devicePixelRatioF()
        width, height = self.pixels()
        for box in self.page.draw(view, width, height, ratio):
            self.update(logical_rect(box, ratio))

    def pixels(self) -> tuple[int, int]:
        """Width and height in pixels of the screen."""
        ratio = self.devicePixelRatioF()
        return max(1, round(self.width() * ratio)), max(1, round(self.height() * ratio))

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Lay the page out anew."""
        if self.view is not None:
            self.look(self.view)

    def paintEvent(self, event: QPaintEvent) -> None:
        """Bring the page to the screen."""
        paint_image(self, self.page.image, event)


class HelpSheet(QWidget):
    """All keys, over the page."""

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.theme: ThemeName = "light"
        self.actions_told: tuple[Action | LinkAction, ...] = ACTIONS
        self.hide()

    def paintEvent(self, event: QPaintEvent) -> None:
        """Draw the list."""
        painter = QPainter(self)
        scale = min(self.width() / 760, self.height() / 520)
        whole = Box(0, 0, self.width(), self.height())
        draw_help(Canvas(painter, find_theme(self.theme), scale), whole, self.actions_told)
        painter.end()


class NameLine(QLineEdit):
    """Where a mark's name is typed. While it is open, every key is its own."""

    named = Signal(str)
    left = Signal()

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.setMaxLength(80)
        self.hide()

    def event(self, event: QEvent) -> bool:
        """Keep keys from the window's shortcuts."""
        if event.type() == QEvent.Type.ShortcutOverride:
            event.accept()
            return True
        if event.type() == QEvent.Type.KeyPress and isinstance(event, QKeyEvent) and event.key() == Qt.Key.Key_Tab:
            return True
        return super().event(event)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Enter names, Escape leaves all as it was."""
        if event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            self.named.emit(self.text().strip())
        elif event.key() == Qt.Key.Key_Escape:
            self.left.emit()
        else:
            super().keyPressEvent(event)


class LiveWindow(QMainWindow):
    """Shows one watched stream. Belongs to the main thread; the watched side is only asked and told, never waited for.

    `refresh` is one look. ``painter`` is what `choose_painter` said; ``choices`` the file that keeps how the window is set;
    ``pictures`` the folder for saved pictures; ``until`` ends the watch when it turns true; ``now`` the clock of remarks.
    """

    def __init__(
        self,
        watched: Watched,
        *,
        title: str,
        painter: Literal["raster", "opengl"] = "raster",
        choices: Path | None = None,
        pictures: Path | None = None,
        tone: Tone | None = None,
        until: Callable[[], bool] | None = None,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        super().__init__()
        self.setWindowTitle(title)
        self.setMinimumSize(LEAST_SIZE)
        self._watched = watched
        self._choices_file = choices if choices is not None else settings_file()
        self._choices = load_choices(self._choices_file)
        self._pictures = pictures if pictures is not None else Path.cwd()
        self._tone = tone or Tone()
        self._until = until
        self._now = now
        self._memory = AlarmMemory()
        self._newest = watched.state()
        self._shown = self._newest
        self._held = False
        self._rail: int | None = None
        self._page: PageName = "glance"
        self._said = ""
        self._said_until = 0.0
        self._stopped = False
        self._marked = False
        self.face = Face(self, LivePage(traces=painter == "raster"))
        self.setCentralWidget(self.face)
        self._cover: EyeCover | None = None
        if painter == "opengl":
            from monitor.views import opengl

            self._cover = opengl.EyeCover(self.face, self.face.page)
        self.help = HelpSheet(self.face)
        self.name_line = NameLine(self.face)
        self.name_line.named.connect(self._name_given)
        self.name_line.left.connect(self._leave_name)
        self.commands: dict[ActionName, QAction] = {}
        self._make_menus()
        self._timer = QTimer(self)
        self._timer.setInterval(LOOK_MS)
        self._timer.timeout.connect(self._peek)
        self._put_theme()
        self._put_menu_size()
        if not (self._choices.geometry and self.restoreGeometry(self._choices.geometry)):
            self.resize(FIRST_SIZE)
        self._watched.set_persistence(self._choices.persistence)
        if self._choices.tone:
            self._start_tone()

    # -- the look ------------------------------------------------------------------------------------------------------

    def _peek(self) -> None:
        """Look if there is a reason to."""
        passed = self._said and self._now() >= self._said_until
        if passed or self._watched.state() is not self._newest or (self._until is not None and self._until()):
            self.refresh()

    def refresh(self) -> None:
        """Take the newest state and show it; while held, only its alarms."""
        if self._until is not None and self._until():
            self.close()
            return
        self._newest = self._watched.state()
        self._memory.tell(self._newest.alarms, self._newest.seconds)
        if not self._held:
            self._shown = self._newest
        if self._rail is not None and self._rail >= len(self._newest.rails):
            self._rail = None
        if self._said and self._now() >= self._said_until:
            self._said = ""
        reading = self._newest.snapshot.reading
        self._tone.follow(reading.opening_pct if reading is not None else None)
        view = self.view()
        self.face.look(view)
        if self._cover is not None:
            self._cover.look(view)

    def view(self) -> View:
        """What is shown, and how."""
        return View(
            state=self._shown,
            alarms=self._newest.alarms,
            spans=self._memory.spans(),
            held=self._held,
            rail=self._rail,
            page=self._page,
            persistence=self._choices.persistence,
            tone=self._tone.on,
            theme=self.theme,
            zoom=self._choices.zoom,
            span_s=self._choices.span_s,
            said=self._said,
        )

    @property
    def theme(self) -> ThemeName:
        """The chosen theme, or the system's."""
        if self._choices.theme is not None:
            return self._choices.theme
        return "dark" if QApplication.styleHints().colorScheme() == Qt.ColorScheme.Dark else "light"

    @property
    def zoom(self) -> float:
        """How much larger than usual the text is."""
        return self._choices.zoom

    def show_another(self, memory: AlarmMemory) -> None:
        """Another stream is shown from now on, whose alarms are in this memory; what was said of the last one is gone."""
        self._memory, self._marked, self._rail = memory, False, None
        if self._held:
            self._hold()
        if self.name_line.isVisible():
            self._leave_name()

    def say(self, text: str) -> None:
        """Show a remark at the page's foot for some seconds."""
        self._said, self._said_until = text, self._now() + SAID_SECONDS

    # -- what the user does --------------------------------------------------------------------------------------------

    def _make_menus(self) -> None:
        menus = {name: self.menuBar().addMenu(name) for name in MENUS}
        self._menus = list(menus.values())
        does: dict[ActionName, Callable[[], None]] = {
            "mark": self._mark,
            "name": self._ask_name,
            "acknowledge": self._acknowledge,
            "shelve": self._shelve,
            "hold": self._hold,
            "clear": self._clear,
            "rail": self._next_rail,
            "page": self._next_page,
            "back": lambda: self._next_page(back=True),
            "longer": lambda: self._persist(step_persistence(self._choices.persistence, longer=True)),
            "shorter": lambda: self._persist(step_persistence(self._choices.persistence, longer=False)),
            "newest": lambda: self._persist(0.0),
            "further": lambda: self._look_back(longer=True),
            "nearer": lambda: self._look_back(longer=False),
            "larger": lambda: self._resize_text(larger=True),
            "smaller": lambda: self._resize_text(larger=False),
            "theme": self._other_theme,
            "save": self._save,
            "report": self._report,
            "tone": self._switch_tone,
            "help": self._help,
            "close": self._close,
        }
        for entry in ACTIONS:
            action = QAction(entry.words, self)
            keys = [name for key in entry.keys for name in _QT_KEYS.get(key, (key,))]
            action.setShortcuts([QKeySequence(key) for key in keys])
            action.setStatusTip(entry.what)
            action.setCheckable(entry.name in _CHECKED)
            action.triggered.connect(_without_argument(does[entry.name], self.refresh))
            menus[entry.menu].addAction(action)
            self.addAction(action)
            self.commands[entry.name] = action

    def _check(self, name: ActionName, on: bool) -> None:
        action = self.commands[name]
        before = action.blockSignals(True)
        action.setChecked(on)
        action.blockSignals(before)

    def _mark(self) -> None:
        self._watched.mark()
        self._marked = True
        self.say("marked; now turn something")

    def _ask_name(self) -> None:
        marks = self._newest.marks
        if not (marks or self._marked):  # a mark of this moment may not be in the state yet
            self.say("no mark to name yet: Space marks")
            return
        line = self.name_line
        line.setText(marks[-1].name if marks else "")
        line.setPlaceholderText("What was turned at the last mark? Enter keeps it, Escape leaves it")
        self._place_name_line()
        line.show()
        line.raise_()
        line.selectAll()
        line.setFocus()

    def _name_given(self, name: str) -> None:
        self._leave_name()
        self._watched.name_mark(name)
        self.say(f"mark named “{name}”" if name else "the mark has no name")
        self.refresh()

    def _leave_name(self) -> None:
        self.name_line.hide()
        self.face.setFocus()

    def _acknowledge(self) -> None:
        self._watched.acknowledge()
        self.say("alarms acknowledged" if self._newest.alarms else "no alarm to acknowledge")

    def _shelve(self) -> None:
        if not self._newest.alarms:
            self.say("no alarm to shelve")
            return
        self._watched.shelve(SHELVE_SECONDS)
        self.say(f"foremost alarm shelved for {SHELVE_SECONDS / 60:.0f} minutes")

    def _hold(self) -> None:
        if self.help.isVisible():  # the same key leaves the list of keys
            self._check("hold", self._held)
            self._help()
            return
        self._held = not self._held
        self._check("hold", self._held)

    def _clear(self) -> None:
        self._watched.clear()
        self.say("eye cleared")

    def _next_rail(self) -> None:
        rails = self._newest.rails
        self._rail = next_rail(self._rail, rails)
        if len(rails) < 2:
            self.say("this link has one rail")

    def _next_page(self, *, back: bool = False) -> None:
        self._page = next_page(self._page, back=back)

    def _persist(self, seconds: float | None) -> None:
        self._choices.persistence = seconds
        self._watched.set_persistence(seconds)
        self.say(persistence_words(seconds))

    def _look_back(self, *, longer: bool) -> None:
        self._choices.span_s = step_history(self._choices.span_s, longer=longer)

    def _resize_text(self, *, larger: bool) -> None:
        self._choices.zoom = step_text(self._choices.zoom, larger=larger)
        self._put_menu_size()

    def _put_menu_size(self) -> None:
        font = self.font()
        font.setPixelSize(round(14 * self._choices.zoom))
        for part in (self.menuBar(), *self._menus):
            part.setFont(font)
        # with a new font it folds to one sign until it is laid out again, which this makes it do
        self.menuBar().resize(max(self.width(), 1), self.menuBar().sizeHint().height())

    def _other_theme(self) -> None:
        self._choices.theme = "light" if self.theme == "dark" else "dark"
        self._put_theme()

    def _put_theme(self) -> None:
        """Give menus and the name's line the page's colours."""
        theme = find_theme(self.theme)
        palette = QPalette(qcolour(theme.page))
        for role, colour in (
            (QPalette.ColorRole.Window, theme.page),
            (QPalette.ColorRole.Base, theme.panel),
            (QPalette.ColorRole.Button, theme.page),
            (QPalette.ColorRole.Text, theme.ink),
            (QPalette.ColorRole.WindowText, theme.ink),
            (QPalette.ColorRole.ButtonText, theme.ink),
            (QPalette.ColorRole.PlaceholderText, theme.dim),
            (QPalette.ColorRole.Highlight, theme.level_even),
            (QPalette.ColorRole.HighlightedText, theme.page),
        ):
            palette.setColor(role, qcolour(colour))
        dim = QColor(qcolour(theme.dim))
        palette.setColor(QPalette.ColorGroup.Disabled, QPalette.ColorRole.Text, dim)
        self.setPalette(palette)
        self.help.theme = self.theme
        self.help.update()

    def _save(self) -> None:
        path = free_name(self._pictures, ".png")
        page = LivePage()
        width, height = self.face.pixels()
        page.draw(self.view(), width, height, self.face.devicePixelRatioF())
        assert page.image is not None
        try:
            path.write_bytes(png_bytes(page.image))
        except OSError as error:
            self.say(f"picture not saved: {error.strerror or error}: {path.parent}")
        else:
            self.say(f"picture saved: {path.name}")

    def _report(self) -> None:
        path = free_name(self._pictures, ".html")
        try:
            self._watched.report(path)
        except MonitorError as error:
            self.say(str(error))
        else:
            self.say(f"report saved: {path.name}")

    def _switch_tone(self) -> None:
        if self._tone.on:
            self._tone.stop()
            self._choices.tone = False
        else:
            self._start_tone()
        self._check("tone", self._tone.on)

    def _start_tone(self) -> None:
        trouble = self._tone.start()
        self._choices.tone = self._tone.on
        self._check("tone", self._tone.on)
        if trouble:
            self.say(trouble)

    def _help(self) -> None:
        if self.help.isVisible():
            self.help.hide()
        else:
            self._place_help()
            self.help.show()
            self.help.raise_()
        self._check("help", self.help.isVisible())

    def _close(self) -> None:
        self.close()

    # -- Qt's calls ----------------------------------------------------------------------------------------------------

    def _place_help(self) -> None:
        width = min(self.face.width() - 32, max(760, round(self.face.width() * 0.72)))
        height = min(self.face.height() - 32, round(width * 520 / 760))
        x, y = (self.face.width() - width) // 2, (self.face.height() - height) // 2
        self.help.setGeometry(x, y, width, height)

    def _place_name_line(self) -> None:
        boxes = self.face.page.boxes
        if boxes is None:
            return
        ratio = self.face.devicePixelRatioF()
        font = self.name_line.font()
        font.setPixelSize(max(14, round(20 * boxes.page.scale / ratio)))
        self.name_line.setFont(font)
        height = self.name_line.sizeHint().height() + 12
        place = logical_rect(boxes.history, ratio)
        self.name_line.setGeometry(place.x(), place.y() - height - 6, place.width(), height)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep what lies over the page in its place."""
        super().resizeEvent(event)
        if self.help.isVisible():
            self._place_help()
        if self.name_line.isVisible():
            self._place_name_line()

    def showEvent(self, event: QShowEvent) -> None:
        """Look at once, and then again and again."""
        super().showEvent(event)
        self.face.setFocus()
        self.refresh()
        self._timer.start()

    def hideEvent(self, event: QHideEvent) -> None:
        """Nobody looks."""
        self._timer.stop()
        super().hideEvent(event)

    def changeEvent(self, event: QEvent) -> None:
        """Follow the system from light to dark while nothing else was chosen."""
        super().changeEvent(event)
        if event.type() == QEvent.Type.ThemeChange and self._choices.theme is None:
            self._put_theme()

    def closeEvent(self, event: QCloseEvent) -> None:
        """End the watch: no more looks, the choices kept, the tone off, the watched side told to stop."""
        self._timer.stop()
        if not self._stopped:
            self._stopped = True
            self._tone.stop()
            self._choices.geometry = bytes(self.saveGeometry().data())
            save_choices(self._choices_file, self._choices)
            if self._cover is not None:
                self._cover.close()
            self._watched.stop()
        super().closeEvent(event)


def _without_argument(first: Callable[[], None], then: Callable[[], None]) -> Callable[[], None]:
    def both() -> None:
        first()
        then()

    return both


def logical_rect(box: Box, ratio: float) -> QRect:
    """A box of the screen's pixels as the least rectangle of Qt's own that covers it, ``ratio`` pixels to each."""
    left, top = int(box.x // ratio), int(box.y // ratio)
    return QRect(left, top, int(-(-box.right // ratio)) - left, int(-(-box.bottom // ratio)) - top)


def _application() -> QApplication:
    """Qt's application on a real screen. Raises InputError where none answers: Qt by itself would abort."""
    if QApplication.instance() is None and sys.platform == "linux" and "QT_QPA_PLATFORM" not in os.environ:
        # the last is a way out that needs no screen, so that there is something to say it with
        first = "wayland;xcb" if os.environ.get("WAYLAND_DISPLAY") else "xcb"
        os.environ["QT_QPA_PLATFORM"] = f"{first};offscreen"
        said: list[str] = []
        before = qInstallMessageHandler(lambda kind, context, message: said.append(message))
        try:
            ensure_application()
        finally:
            qInstallMessageHandler(before)
            del os.environ["QT_QPA_PLATFORM"]
        if QApplication.platformName() == "offscreen":
            reason = (
                "DISPLAY is not set" if not os.environ.get("DISPLAY") else f"{os.environ['DISPLAY']} does not answer"
            )
            raise InputError(
                f"no window: {reason}, or a library of Qt's is missing; take --view terminal, "
                f"or on Debian: apt install {_SCREEN_PACKAGES}"
            )
    ensure_application()
    application = QApplication.instance()
    if not isinstance(application, QApplication):
        raise InputError("no window: this program already has an application object of Qt's that cannot show any")
    application.setApplicationName("lidwatch")
    return application


def prepare_screen() -> None:
    """Make ready what takes long the first time, before samples come: Qt's application, its fonts, the loops that draw.

    From the main thread, before others run: importing Qt's bindings aborts when another thread imports something meanwhile. Raises
    InputError as `run_window` does.
    """
    _application()
    width, height = FIRST_SIZE.width(), FIRST_SIZE.height()
    LivePage().draw(View(state=LiveState(Snapshot(), searching="waiting for samples")), width, height)


def choose_painter(painter: PainterName) -> Literal["raster", "opengl"]:
    """What draws the eyes: for ``auto`` OpenGL where a real driver answers, else the raster painter.

    Raises InputError where OpenGL is asked for and cannot be had.
    """
    if painter == "raster":
        return "raster"
    from monitor.views.opengl import opengl_trouble

    trouble = opengl_trouble(software=painter == "opengl")
    if not trouble:
        return "opengl"
    if painter == "opengl":
        raise InputError(f"--painter opengl: {trouble}; take raster, which needs no OpenGL")
    return "raster"


def run_window(
    watched: Watched,
    *,
    painter: PainterName = "auto",
    title: str = "lidwatch",
    choices: Path | None = None,
    pictures: Path | None = None,
    until: Callable[[], bool] | None = None,
) -> int:
    """Show the window until it is closed; returns 0, or 130 after Ctrl-C, with the watched side told to stop.

    From the main thread. ``choices``: the file of the user's choices, ``pictures``: the folder for saved pictures, ``until``: asked at each
    look whether to end. Raises InputError where Qt does not load, no screen answers, or OpenGL was asked for in vain.
    """

    def make(painter: PainterInUse, over: Callable[[], bool]) -> LiveWindow:
        return LiveWindow(watched, title=title, painter=painter, choices=choices, pictures=pictures, until=over)

    return show_window(make, painter, until)


def show_window(
    make: Callable[[PainterInUse, Callable[[], bool]], LiveWindow],
    painter: PainterName,
    until: Callable[[], bool] | None,
) -> int:
    """Make a window, given the painter and when to end, and show it until it is closed; see `run_window`."""
    application = _application()
    chosen = choose_painter(painter)
    with Interrupt() as interrupt:

        def over() -> bool:
            return interrupt.asked or (until is not None and until())

        window = make(chosen, over)
        try:
            window.show()
            application.exec()
        finally:
            window.close()
            window.deleteLater()
            QApplication.sendPostedEvents(None, QEvent.Type.DeferredDelete.value)
    return INTERRUPTED if interrupt.asked else 0
