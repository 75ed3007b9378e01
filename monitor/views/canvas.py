"""A painter that keeps text inside its box and remembers where it put it."""

import math
import threading
from dataclasses import dataclass
from typing import Literal

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QFont, QFontMetricsF, QPainter, QPen, QPolygonF

from monitor.views.layout import Box
from monitor.views.theme import Colour, Theme

Align = Literal["left", "centre", "right"]
Elide = Literal["right", "middle"]
# families by their own names, then whatever the system calls sans-serif
_FAMILIES = ["Noto Sans", "DejaVu Sans", "Liberation Sans", "Sans Serif"]
_ELIDE = {"right": Qt.TextElideMode.ElideRight, "middle": Qt.TextElideMode.ElideMiddle}


@dataclass(frozen=True, slots=True)
class PlacedText:
    """A piece of text on the page: what was asked for, what stands there, the box it was given and the box it fills."""

    text: str
    shown: str
    box: Box
    extent: Box
    colour: Colour


def qcolour(colour: Colour, alpha: float = 1.0) -> QColor:
    """The colour as Qt's, ``alpha`` 0 to 1."""
    return QColor(colour.red, colour.green, colour.blue, round(255 * alpha))


Fonts = dict[tuple[float, bool], tuple[QFont, QFontMetricsF]]
_local = threading.local()


def _fonts_at(scale: float) -> Fonts:
    """Fonts of the calling thread at a scale; those of the last few scales are kept, so that a moving picture makes none anew."""
    kept: dict[float, Fonts] = _local.__dict__.setdefault("fonts", {})
    if scale not in kept and len(kept) >= 4:
        kept.pop(next(iter(kept)))
    return kept.setdefault(scale, {})


class Canvas:
    """Draws on one QPainter in one theme; ``scale`` turns design units into pixels. Not shared between threads."""

    def __init__(self, painter: QPainter, theme: Theme, scale: float) -> None:
        self.painter = painter
        self.theme = theme
        self.scale = scale
        self.texts: list[PlacedText] = []
        self._fonts = _fonts_at(scale)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.setRenderHint(QPainter.RenderHint.TextAntialiasing)

    def px(self, units: float) -> int:
        """Design units to whole pixels."""
        return round(units * self.scale)

    def _font(self, size: float, bold: bool) -> tuple[QFont, QFontMetricsF]:
        key = (size, bold)
        if key not in self._fonts:
            font = QFont()
            font.setFamilies(_FAMILIES)
            font.setStyleHint(QFont.StyleHint.SansSerif)
            font.setPixelSize(max(1, round(size * self.scale)))
            font.setHintingPreference(QFont.HintingPreference.PreferVerticalHinting)
            if bold:
                font.setWeight(QFont.Weight.Bold)
            self._fonts[key] = (font, QFontMetricsF(font))
        return self._fonts[key]

    def text_width(self, text: str, size: float, *, bold: bool = False) -> int:
        """Pixels that the text needs."""
        return math.ceil(self._font(size, bold)[1].horizontalAdvance(text))

    def wrap(self, text: str, width: int, size: float, most: int) -> list[str]:
        """Break into at most ``most`` lines of ``width`` pixels at spaces; the last line takes all that is left."""
        lines: list[str] = []
        line = ""
        for word in text.split():
            longer = f"{line} {word}" if line else word
            if line and len(lines) < most - 1 and self.text_width(longer, size) > width:
                lines.append(line)
                line = word
            else:
                line = longer
        return [*lines, line] if line else lines

    def write(
        self,
        text: str,
        box: Box,
        size: float,
        colour: Colour,
        *,
        align: Align = "left",
        bold: bool = False,
        elide: Elide = "right",
    ) -> Box:
        """Write one line, vertically centred in the box, shortened with an ellipsis where it is too long.

        Returns the box that the text fills; control characters are shown as spaces.
        """
        font, metrics = self._font(size, bold)
        clean = "".join(character if character.isprintable() else " " for character in text)
        shown = metrics.elidedText(clean, _ELIDE[elide], box.width)
        advance = metrics.horizontalAdvance(shown)
        x = {"left": box.x, "centre": box.x + (box.width - advance) / 2, "right": box.right - advance}[align]
        baseline = box.y + (box.height + metrics.ascent() - metrics.descent()) / 2
        self.painter.setFont(font)
        self.painter.setPen(qcolour(colour))
        self.painter.drawText(QPointF(x, round(baseline)), shown)
        top = round(baseline - metrics.ascent())
        extent = Box(math.floor(x), top, math.ceil(advance), math.ceil(metrics.ascent() + metrics.descent()))
        if shown:
            self.texts.append(PlacedText(text, shown, box, extent, colour))
        return extent

    def write_upwards(self, text: str, box: Box, size: float, colour: Colour) -> None:
        """Write one line turned to read from bottom to top, centred in the box."""
        font, metrics = self._font(size, False)
        shown = metrics.elidedText(text, Qt.TextElideMode.ElideRight, box.height)
        advance = metrics.horizontalAdvance(shown)
        self.painter.save()
        self.painter.setFont(font)
        self.painter.setPen(qcolour(colour))
        x = box.x + (box.width + metrics.ascent() - metrics.descent()) / 2
        y = box.y + (box.height + advance) / 2
        self.painter.translate(x, y)
        self.painter.rotate(-90)
        self.painter.drawText(QPointF(0, 0), shown)
        self.painter.restore()
        extent = Box(
            math.floor(x - metrics.ascent()),
            math.floor(y - advance),
            math.ceil(metrics.ascent() + metrics.descent()),
            math.ceil(advance),
        )
        if shown:
            self.texts.append(PlacedText(text, shown, box, extent, colour))

    def fill(self, box: Box, colour: Colour) -> None:
        """Fill a box to its very edges."""
        self.painter.fillRect(box.x, box.y, box.width, box.height, qcolour(colour))

    def frame(self, box: Box, colour: Colour) -> None:
        """Draw a thin frame just outside the box."""
        line = max(1, self.px(1))
        for side in (
            Box(box.x - line, box.y - line, box.width + 2 * line, line),
            Box(box.x - line, box.bottom, box.width + 2 * line, line),
            Box(box.x - line, box.y, line, box.height),
            Box(box.right, box.y, line, box.height),
        ):
            self.fill(side, colour)

    def line(
        self, x1: float, y1: float, x2: float, y2: float, colour: Colour, width: float = 1.0, *, dashed: bool = False
    ) -> None:
        """Draw a straight line, ``width`` in design units; upright and level ones fall on whole pixels."""
        thick = max(1, round(width * self.scale))
        if x1 == x2:
            x1 = x2 = math.floor(x1) + 0.5 if thick % 2 else float(round(x1))
        if y1 == y2:
            y1 = y2 = math.floor(y1) + 0.5 if thick % 2 else float(round(y1))
        pen = QPen(qcolour(colour), thick)
        pen.setCapStyle(Qt.PenCapStyle.FlatCap)
        if dashed:
            pen.setDashPattern([4.0 * self.scale / thick, 3.0 * self.scale / thick])
        self.painter.setPen(pen)
        self.painter.drawLine(QPointF(x1, y1), QPointF(x2, y2))

    def polyline(self, points: list[tuple[float, float]], colour: Colour, width: float) -> None:
        """Draw connected lines, ``width`` in design units."""
        pen = QPen(qcolour(colour), max(1.0, width * self.scale))
        pen.setJoinStyle(Qt.PenJoinStyle.RoundJoin)
        self.painter.setPen(pen)
        self.painter.drawPolyline(QPolygonF([QPointF(x, y) for x, y in points]))

    def polygon(self, points: list[tuple[float, float]], colour: Colour, alpha: float = 1.0) -> None:
        """Fill a closed shape."""
        self.painter.setPen(Qt.PenStyle.NoPen)
        self.painter.setBrush(QBrush(qcolour(colour, alpha)))
        self.painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in points]))
        self.painter.setBrush(Qt.BrushStyle.NoBrush)

    def dot(self, x: float, y: float, radius: float, colour: Colour, ring: Colour) -> None:
        """Draw a filled dot with a ring round it, ``radius`` in design units."""
        size = radius * self.scale
        self.painter.setPen(QPen(qcolour(ring), max(1.0, 1.5 * self.scale)))
        self.painter.setBrush(QBrush(qcolour(colour)))
        self.painter.drawEllipse(QRectF(x - size, y - size, 2 * size, 2 * size))
        self.painter.setBrush(Qt.BrushStyle.NoBrush)

    def clip(self, box: Box | None) -> None:
        """Keep further drawing inside the box; None lifts it."""
        if box is None:
            self.painter.setClipping(False)
        else:
            self.painter.setClipRect(box.x, box.y, box.width, box.height)
