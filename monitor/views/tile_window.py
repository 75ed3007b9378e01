"""The window of several live links: a tile each, and below them the whole page of the one in front."""

import time
from collections.abc import Callable
from pathlib import Path

from PySide6.QtCore import QSize, Qt, Signal
from PySide6.QtGui import QAction, QKeySequence, QMouseEvent, QPaintEvent, QResizeEvent
from PySide6.QtWidgets import QVBoxLayout, QWidget

from monitor.state import SeveralState
from monitor.views.control import ACTIONS, LINK_ACTIONS, LinkActionName, WatchedLinks
from monitor.views.history import LinkMemories
from monitor.views.live_layout import live_unit
from monitor.views.theme import ThemeName
from monitor.views.tiles import TileImage, arrange_tiles
from monitor.views.window import (
    LEAST_SIZE,
    LiveWindow,
    PainterInUse,
    PainterName,
    logical_rect,
    paint_image,
    show_window,
)

_TILES_S = 0.2


class TileStrip(QWidget):
    """The tiles; a click brings a link to the front."""

    picked = Signal(int)

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.setAttribute(Qt.WidgetAttribute.WA_OpaquePaintEvent)
        self.page = TileImage()
        self._several: SeveralState | None = None
        self._theme: ThemeName = "light"
        self._zoom = 1.0

    def look(self, several: SeveralState, theme: ThemeName, zoom: float) -> None:
        """Show another state."""
        self._several, self._theme, self._zoom = several, theme, zoom
        ratio = self.devicePixelRatioF()
        width = max(1, round(self.width() * ratio))
        unit = self._unit(width, ratio)
        wanted = -int(-arrange_tiles(width, len(several.links), unit).height // ratio)
        if self.height() != wanted:
            self.setFixedHeight(wanted)
        for box in self.page.draw(several, width, unit, theme):
            self.update(logical_rect(box, ratio))

    def _unit(self, width: int, ratio: float) -> float:
        window = self.window()
        return live_unit(width, max(1, round(window.height() * ratio)), ratio, min(self._zoom, 1.45))

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Lay the tiles out anew."""
        if self._several is not None:
            self.look(self._several, self._theme, self._zoom)

    def paintEvent(self, event: QPaintEvent) -> None:
        """Bring the strip to the screen."""
        paint_image(self, self.page.image, event)

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Bring the tile under the pointer to the front."""
        boxes, ratio = self.page.boxes, self.devicePixelRatioF()
        if boxes is None:
            return
        x, y = event.position().x() * ratio, event.position().y() * ratio
        for number, box in enumerate(boxes.tiles):
            if box.x <= x < box.right and box.y <= y < box.bottom:
                self.picked.emit(number)


class TileWindow(LiveWindow):
    """Shows several watched links; keys and menus do to the link in front what they do in the window of one."""

    def __init__(
        self,
        watched: WatchedLinks,
        *,
        title: str,
        painter: PainterInUse = "raster",
        choices: Path | None = None,
        pictures: Path | None = None,
        until: Callable[[], bool] | None = None,
    ) -> None:
        super().__init__(watched, title=title, painter=painter, choices=choices, pictures=pictures, until=until)
        self._links = watched
        self._memories = LinkMemories(len(watched.several().links))
        self._tiles_due = 0.0
        self.setMinimumSize(QSize(LEAST_SIZE.width(), LEAST_SIZE.height() + 150))
        self.strip = TileStrip(self)
        self.strip.picked.connect(self._pick)
        both = QWidget(self)
        layout = QVBoxLayout(both)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(0)
        layout.addWidget(self.strip)
        layout.addWidget(self.face, 1)
        self.setCentralWidget(both)
        self._make_link_menu()

    def _make_link_menu(self) -> None:
        menu = self.menuBar().addMenu("Link")
        self._menus.append(menu)
        does: dict[LinkActionName, Callable[[], None]] = {
            "next link": lambda: self._links.step(1),
            "previous link": lambda: self._links.step(-1),
            "worst link": self._release,
        }
        for entry in LINK_ACTIONS:
            action = QAction(entry.words, self)
            action.setShortcuts([QKeySequence(key) for key in entry.keys])
            action.setStatusTip(entry.what)
            action.triggered.connect(self._then_refresh(does[entry.name]))
            menu.addAction(action)
            self.addAction(action)
        self.help.actions_told = (*ACTIONS, *LINK_ACTIONS)

    def _then_refresh(self, first: Callable[[], None]) -> Callable[[], None]:
        def both() -> None:
            first()
            self.refresh()

        return both

    def _release(self) -> None:
        self._links.release()
        self.say("the worst link comes to the front by itself")

    def _pick(self, number: int) -> None:
        self._links.choose(number)
        self.refresh()

    def _peek(self) -> None:
        """Look if there is a reason to: the link in front has a new state, or its turn has passed, or the tiles' time has come."""
        now = time.monotonic()
        if now >= self._tiles_due or self._links.several().front != self._memories.front:
            self.refresh()
        else:
            super()._peek()

    def refresh(self) -> None:
        """Take the newest states, and show the one in front."""
        self._tiles_due = time.monotonic() + _TILES_S
        several = self._links.several()
        memory = self._memories.look(several)
        if memory is not None:
            self.show_another(memory)
        super().refresh()
        self.strip.look(several, self.theme, self.zoom)


def run_tiles(
    watched: WatchedLinks,
    *,
    painter: PainterName = "auto",
    title: str,
    choices: Path | None = None,
    pictures: Path | None = None,
    until: Callable[[], bool] | None = None,
) -> int:
    """Show the window of several links until it is closed, as `monitor.views.window.run_window` does for one."""

    def make(painter: PainterInUse, over: Callable[[], bool]) -> TileWindow:
        return TileWindow(watched, title=title, painter=painter, choices=choices, pictures=pictures, until=over)

    return show_window(make, painter, until)
