"""A tile for each of several links: its name, its opening, its eye in little, how it went, and what is wrong with it."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

from PySide6.QtGui import QImage, QPainter

from monitor.snapshot import Snapshot
from monitor.state import LinkState, LiveState, SeveralState
from monitor.views import pixels
from monitor.views.canvas import Canvas, PlacedText
from monitor.views.drawing import draw_density, draw_image, y_of
from monitor.views.history import history_runs, lost_spans, value_range
from monitor.views.layout import Box
from monitor.views.live_wording import by_urgency, calls
from monitor.views.theme import Colour, ThemeName, find_theme
from monitor.views.tile_wording import TileWords, closing_rail, shown_opening, tile_words
from monitor.views.wording import plain

_TEXT, _SMALL = 13.0, 12.0
_LEAST_WIDTH, _WIDE = 168, 236
_TALL, _LOW = 136, 92
_MARGIN, _GAP = 20, 10
_LEAST_SPAN_S = 60.0


@dataclass(frozen=True, slots=True)
class TileBoxes:
    """The strip of tiles over the page: its height in pixels and where each tile stands."""

    height: int
    tiles: tuple[Box, ...]


def arrange_tiles(width: int, count: int, unit: float) -> TileBoxes:
    """Split a strip of ``width`` pixels, ``unit`` of them to a design unit, for so many tiles: one row while they have room, else several.

    Raises ValueError without tiles or pixels.
    """
    if count < 1 or width < 1:
        raise ValueError(f"tiles need a number and pixels, got {count} on {width} pixels")

    def px(units: float) -> int:
        return round(units * unit)

    margin, gap = px(_MARGIN), px(_GAP)
    inner = max(width - 2 * margin, 1)
    in_row = max((inner + gap) // (px(_LEAST_WIDTH) + gap), 1)
    rows = -(-count // in_row)
    columns = -(-count // rows)
    each = max((inner - gap * (columns - 1)) // columns, 1)
    high = px(_TALL if rows == 1 else _LOW)
    top = px(8)
    tiles = tuple(
        Box(margin + (each + gap) * (number % columns), top + (high + gap) * (number // columns), each, high)
        for number in range(count)
    )
    return TileBoxes(top + (high + gap) * rows, tiles)


class TileImage:
    """The strip as an image, of which each look draws anew only the tiles that have changed. One thread.

    Attributes
    ----------
    image, boxes
        As drawn last; None before.
    """

    def __init__(self) -> None:
        self.image: QImage | None = None
        self.boxes: TileBoxes | None = None
        self._keys: list[tuple[Any, ...] | None] = []
        self._set: tuple[Any, ...] = ()
        self._texts: list[tuple[PlacedText, ...]] = []

    @property
    def texts(self) -> tuple[PlacedText, ...]:
        """Every piece of text that stands on the strip."""
        return tuple(text for texts in self._texts for text in texts)

    def draw(self, several: SeveralState, width: int, unit: float, theme_name: ThemeName) -> list[Box]:
        """Bring the image up to the state; returns the areas that changed."""
        theme = find_theme(theme_name)
        boxes = arrange_tiles(width, len(several.links), unit)
        changed: list[Box] = []
        if self.image is None or self._set != (width, unit, theme_name, boxes):
            self.image = QImage(width, boxes.height, QImage.Format.Format_RGB32)
            self.image.fill(theme.page.argb)
            self._set = width, unit, theme_name, boxes
            self._keys = [None] * len(several.links)
            self._texts = [()] * len(several.links)
            changed.append(Box(0, 0, width, boxes.height))
        self.boxes = boxes
        painter = QPainter(self.image)
        try:
            canvas = Canvas(painter, theme, unit)
            for number, (link, box) in enumerate(zip(several.links, boxes.tiles, strict=True)):
                front = number == several.front
                key = _key(link, front, several.pinned)
                if key == self._keys[number]:
                    continue
                self._keys[number] = key
                canvas.texts = []
                draw_tile(canvas, box, link, front=front, pinned=front and several.pinned)
                self._texts[number] = tuple(canvas.texts)
                changed.append(box)
        finally:
            painter.end()
        return changed


def _key(link: LinkState, front: bool, pinned: bool) -> tuple[Any, ...]:
    state = link.state
    image = state.snapshot.image
    return (
        front,
        front and pinned,
        link.failure,
        state.snapshot.reading,
        state.locked,
        state.ended,
        state.searching,
        state.alarms,
        len(state.history),
        # the eye in little is looked at, not measured on: twice a second is enough
        int(state.seconds * 2) if image is not None else None,
    )


def draw_tile(canvas: Canvas, box: Box, link: LinkState, *, front: bool, pinned: bool) -> None:
    """One tile over its whole box."""
    theme, state = canvas.theme, link.state
    words = tile_words(link)
    canvas.fill(box, theme.panel)
    _draw_frame(canvas, box, theme.ink if front else theme.grid, canvas.px(3) if front else max(1, canvas.px(1)))
    pad = canvas.px(11)
    inner = Box(box.x + pad, box.y + canvas.px(7), box.width - 2 * pad, box.height - canvas.px(14))
    title = replace(inner, height=canvas.px(20))
    right = inner.right
    if pinned:
        right = canvas.write("kept in front", title, _SMALL, theme.dim, align="right").x - canvas.px(8)
    canvas.write(link.name, replace(title, width=max(0, right - title.x)), _TEXT, theme.ink, bold=True, elide="middle")
    foot = Box(inner.x, inner.bottom - canvas.px(20), inner.width, canvas.px(20))
    _draw_foot(canvas, foot, link, words)
    middle = Box(inner.x, title.bottom + canvas.px(2), inner.width, max(0, foot.y - title.bottom - canvas.px(6)))
    tall = box.height >= canvas.px(_TALL)
    image, reading = state.snapshot.image, state.snapshot.reading
    with_eye = image is not None and not link.failure and tall and box.width >= canvas.px(_LEAST_WIDTH)
    eye_width = min(middle.width * 45 // 100, canvas.px(150)) if with_eye else 0
    left = replace(middle, width=middle.width - (eye_width + canvas.px(10) if with_eye else 0))
    if with_eye and image is not None:
        eye = Box(middle.right - eye_width, middle.y, eye_width, middle.height)
        low, high = pixels.visible_levels(image)
        canvas.clip(eye)
        draw_density(canvas, eye, image, closing_rail(image, reading), low, high)
        canvas.clip(None)
    _draw_opening(canvas, left, link, words.state, tall=tall)


def _draw_opening(canvas: Canvas, box: Box, link: LinkState, without: str, *, tall: bool) -> None:
    """The figure, or the words ``without`` one, and under or beside it how it went."""
    theme, state, opening = canvas.theme, link.state, shown_opening(link)
    figure_height = canvas.px(44) if tall else box.height
    figure = replace(box, height=figure_height, width=box.width if tall else min(canvas.px(96), box.width))
    if opening is None:
        canvas.write(without, figure, 17.0, theme.ink if link.failure else theme.dim, bold=True)
    else:
        size = 34.0 if tall else 26.0
        sign = canvas.text_width(" %", size / 2)
        while size > 14.0 and canvas.text_width(plain(opening, 1), size) + sign > figure.width:
            size -= 1.0
        end = canvas.write(plain(opening, 1), figure, size, theme.ink)
        unit = Box(end.right, end.y + end.height // 4, max(0, figure.right - end.right), end.height // 2)
        canvas.write(" %", unit, size / 2, theme.dim)
    strip = (
        Box(box.x, figure.bottom + canvas.px(2), box.width, max(0, box.bottom - figure.bottom - canvas.px(2)))
        if tall
        else Box(figure.right + canvas.px(6), box.y, max(0, box.right - figure.right - canvas.px(6)), box.height)
    )
    if strip.width >= canvas.px(30) and strip.height >= canvas.px(10):
        _draw_run(canvas, strip, state)


def _draw_run(canvas: Canvas, strip: Box, state: LiveState) -> None:
    """The opening over the whole watch, without axes."""
    theme = canvas.theme
    now = max(state.seconds, 1e-9)
    end = max(now, _LEAST_SPAN_S)
    runs = history_runs(state.history, lost_spans(state.locks, now, locked=state.locked), 0.0, end, strip.width)
    low, high = value_range(runs, None)
    canvas.clip(strip)
    for run in runs:
        xs = (run.x + strip.x).tolist()
        mean = [y_of(strip, value, low, high) for value in run.mean.tolist()]
        if len(xs) == 1:
            canvas.dot(xs[0], mean[0], 1.6, theme.accent, theme.panel)
        else:
            canvas.polyline(list(zip(xs, mean, strict=True)), theme.accent, 1.6)
    canvas.clip(None)


def _draw_foot(canvas: Canvas, foot: Box, link: LinkState, words: TileWords) -> None:
    theme = canvas.theme
    calling = [alarm for alarm in by_urgency(link.state.alarms) if calls(alarm)]
    if calling:
        chip = Box(foot.x - canvas.px(4), foot.y, foot.width + canvas.px(8), foot.height)
        canvas.fill(chip, theme.alert)
        canvas.write(words.foot, foot, _SMALL, theme.page, bold=True)
    else:
        canvas.write(words.foot, foot, _SMALL, theme.alert if link.failure else theme.dim)


def _draw_frame(canvas: Canvas, box: Box, colour: Colour, line: int) -> None:
    for side in (
        Box(box.x, box.y, box.width, line),
        Box(box.x, box.bottom - line, box.width, line),
        Box(box.x, box.y, line, box.height),
        Box(box.right - line, box.y, line, box.height),
    ):
        canvas.fill(side, colour)


def tiles_picture(
    links: Sequence[tuple[str, Snapshot]], front: int, width: int, height: int, theme_name: ThemeName
) -> QImage:
    """The tiles of measured recordings over the picture of the one in front. Needs a QGuiApplication."""
    several = SeveralState(
        tuple(
            LinkState(
                name,
                LiveState(snapshot, snapshot.seconds or 0.0, locked=snapshot.reading is not None, ended=True),
                "" if snapshot.reading is not None else (snapshot.notes[-1] if snapshot.notes else "nothing measured"),
            )
            for name, snapshot in links
        ),
        front,
    )
    strip = TileImage()
    strip.draw(several, width, width / 1280, theme_name)
    assert strip.image is not None
    rest = draw_image(links[front][1], width, max(height - strip.image.height(), 1), theme_name).image
    whole = QImage(width, height, QImage.Format.Format_RGB32)
    painter = QPainter(whole)
    try:
        painter.drawImage(0, 0, strip.image)
        painter.drawImage(0, strip.image.height(), rest)
    finally:
        painter.end()
    return whole
