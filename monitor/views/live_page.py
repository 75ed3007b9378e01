"""The live page as one image, of which each look draws anew only the panels whose content has changed."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import Any

from PySide6.QtGui import QImage, QPainter

from monitor.views.canvas import Canvas, PlacedText
from monitor.views.layout import Box
from monitor.views.live_drawing import (
    View,
    draw_band,
    draw_detail,
    draw_eye_axes,
    draw_figure,
    draw_footer,
    draw_header,
    draw_no_eye,
    draw_traces,
    shown_rail,
)
from monitor.views.live_history import draw_history
from monitor.views.live_layout import LiveBoxes, arrange_live, live_unit
from monitor.views.live_wording import change_lines, health_words
from monitor.views.theme import find_theme


class _Same:
    """Equal only to itself: an array as part of a key, by identity, kept alive so that no other takes its place."""

    def __init__(self, item: object) -> None:
        self.item = item

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Same) and self.item is other.item

    __hash__ = None  # type: ignore[assignment]


def _detail_key(view: View) -> tuple[Any, ...]:
    """What the detail shows: the diagnosis, which holds arrays, by identity."""
    snapshot = view.state.snapshot
    return view.page, snapshot.reading, _Same(snapshot.diagnosis) if view.page != "glance" else None


@dataclass(frozen=True, slots=True)
class _Panel:
    name: str
    box: Box
    key: tuple[Any, ...]
    draw: Callable[[Canvas], None]
    ground: bool = True


class LivePage:
    """Draws views on an image of its own. One thread.

    Attributes
    ----------
    image
        The page as drawn last; None before.
    boxes
        Where things stand on it.
    """

    def __init__(self, *, traces: bool = True) -> None:
        """``traces`` False leaves the eyes' insides to another painter."""
        self.image: QImage | None = None
        self.boxes: LiveBoxes | None = None
        self._traces = traces
        self._keys: dict[str, tuple[Any, ...]] = {}
        self._texts: dict[str, tuple[PlacedText, ...]] = {}

    @property
    def texts(self) -> tuple[PlacedText, ...]:
        """Every piece of text that stands on the page."""
        return tuple(text for texts in self._texts.values() for text in texts)

    def draw(self, view: View, width: int, height: int, ratio: float = 1.0) -> list[Box]:
        """Bring the image up to the view, ``width`` x ``height`` pixels; returns the areas that changed."""
        state = view.state
        image = state.snapshot.image
        rails = 0
        if image is not None:
            rails = 1 if view.rail is not None and view.rail < len(image.rails) else len(image.rails)
        unit = live_unit(width, height, ratio, view.zoom)
        boxes = arrange_live(width, height, unit, rails=rails, small_figure=view.page != "glance")
        if self.image is None or (self.image.width(), self.image.height()) != (width, height):
            self.image = QImage(width, height, QImage.Format.Format_RGB32)
            self._keys.clear()
        if self.boxes != boxes or self._keys.get("theme") != (view.theme,):
            self._keys = {"theme": (view.theme,)}
            self._texts = {}
        fresh = len(self._keys) == 1
        self.boxes = boxes
        changed: list[Box] = []
        painter = QPainter(self.image)
        try:
            canvas = Canvas(painter, find_theme(view.theme), unit)
            if fresh:
                canvas.fill(Box(0, 0, width, height), canvas.theme.page)
                changed.append(Box(0, 0, width, height))
            for panel in self._panels(view, boxes):
                if self._keys.get(panel.name) == panel.key:
                    continue
                self._keys[panel.name] = panel.key
                canvas.texts = []
                if panel.ground:
                    canvas.fill(panel.box, canvas.theme.page)
                panel.draw(canvas)
                self._texts[panel.name] = tuple(canvas.texts)
                if not fresh:
                    changed.append(panel.box)
                if panel.name == "axes":  # its ground has covered the traces
                    for name in [name for name in self._keys if name.startswith("traces")]:
                        del self._keys[name]
        finally:
            painter.end()
        return changed

    def _panels(self, view: View, boxes: LiveBoxes) -> list[_Panel]:
        state = view.state
        snapshot = state.snapshot
        header = (
            snapshot.source_text,
            snapshot.link_text,
            snapshot.lock_text,
            state.locked,
            state.ended,
            health_words(state),
        )
        settings = (view.persistence, view.rail, state.rails, view.tone, view.held and int(state.seconds), view.held)
        best = state.best.opening_pct if state.best is not None else None
        last = state.history[-1] if state.history else None
        panels = [
            _Panel("header", boxes.header, header, lambda canvas: draw_header(canvas, boxes.header, state)),
            _Panel("band", boxes.band, (view.alarms, *settings), lambda canvas: draw_band(canvas, boxes.band, view)),
            _Panel(
                "figure",
                boxes.figure,
                (snapshot.reading, best, state.best_at_s, change_lines(state)),
                lambda canvas: draw_figure(canvas, boxes.figure, state),
            ),
            _Panel(
                "detail",
                boxes.detail,
                _detail_key(view),
                lambda canvas: draw_detail(canvas, boxes.detail, snapshot, view.page),
            ),
            _Panel(
                "history",
                boxes.history,
                (
                    # an alarm that stands grows with the history, not by itself
                    tuple((span.name, span.start_s) for span in view.spans),
                    len(state.history),
                    last,
                    state.marks,
                    state.gaps_s,
                    state.locks,
                    state.locked,
                    best,
                    view.span_s,
                    int(state.seconds * 4),
                ),
                lambda canvas: draw_history(canvas, boxes.history, boxes.history_plot, state, view.spans, view.span_s),
            ),
            _Panel(
                "footer",
                boxes.footer,
                (view.said, state.notices, state.journal_text),
                lambda canvas: draw_footer(canvas, boxes.footer, view),
            ),
        ]
        return [*panels, *self._eye_panels(view, boxes)]

    def _eye_panels(self, view: View, boxes: LiveBoxes) -> list[_Panel]:
        state = view.state
        whole, reading = state.snapshot.image, state.snapshot.reading
        if whole is None:
            key = (state.searching, state.locked, state.ended, state.locks, state.snapshot.notes)
            return [_Panel("message", boxes.body, key, lambda canvas: draw_no_eye(canvas, boxes.body, state))]
        from monitor.views.pixels import visible_levels

        image, reading = shown_rail(whole, reading, view.rail)
        axes = (
            visible_levels(image),
            _Same(whole.opening_pct),
            _Same(whole.distributions),
            whole.best_ui,
            image.rails,
            reading.eyes if reading is not None else None,
        )

        def draw_axes(canvas: Canvas) -> None:
            draw_eye_axes(canvas, boxes.page, image, reading)
            if not self._traces:
                for places in boxes.page.rails:
                    canvas.fill(places.eye, canvas.theme.panel)

        panels = [
            _Panel("axes", boxes.body, axes, draw_axes),
        ]
        if self._traces:
            for rail, places in enumerate(boxes.page.rails):
                panels.append(
                    _Panel(
                        f"traces {rail}",
                        places.eye,
                        (_Same(whole.density), whole.best_ui, image.rails, axes[0]),
                        partial(draw_traces, eye=places.eye, image=image, rail=rail),
                        ground=False,
                    )
                )
        return panels
