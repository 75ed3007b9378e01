"""Where everything stands on the live page, at any size of window and of text: plain rectangles in pixels, no Qt."""

from dataclasses import dataclass

from monitor.views.layout import DESIGN_HEIGHT, DESIGN_WIDTH, Box, Page, RailBoxes

# below this many pixels a design unit, text is too small to read: plots give way instead
_LEAST_UNIT = 0.86
# the least page, in design units, that still holds everything
_LEAST_WIDTH, _LEAST_HEIGHT = 640.0, 420.0


@dataclass(frozen=True, slots=True)
class LiveBoxes:
    """All areas of the live page; areas never overlap, and what is drawn in one stays in it.

    Attributes
    ----------
    eye
        Header, rails, curve and so on, as a still picture has them; ``page.side`` is None.
    header, band, body, figure, detail, history, footer
        Source and link; alarms and how things are set; the eye's whole area; the large figure and its change; what
        closes the eye and the other figures; the opening over the watch; notices and keys.
    history_plot
        The strip inside ``history``.
    """

    page: Page
    header: Box
    band: Box
    body: Box
    figure: Box
    detail: Box
    history: Box
    history_plot: Box
    footer: Box


def live_unit(width: int, height: int, ratio: float, zoom: float) -> float:
    """Pixels a design unit for a window of ``width`` x ``height`` pixels, ``ratio`` of them to a logical one.

    Grows with the window and with ``zoom``, the user's wish for larger text, as far as the page still holds everything.
    """
    natural = max(min(width / DESIGN_WIDTH, height / DESIGN_HEIGHT), _LEAST_UNIT * ratio)
    return min(natural * zoom, width / _LEAST_WIDTH, height / _LEAST_HEIGHT)


def arrange_live(width: int, height: int, unit: float, *, rails: int, small_figure: bool = False) -> LiveBoxes:
    """Split a window; ``rails`` 0 leaves the eye's place to a message.

    ``small_figure``: the figure gives room to what is below it. Raises ValueError without pixels.
    """
    if width < 1 or height < 1:
        raise ValueError(f"a window needs at least 1 x 1 pixels, got {width} x {height}")
    wide, high = width / unit, height / unit

    def px(units: float) -> int:
        return round(units * unit)

    margin = px(20)
    inner = width - 2 * margin
    header = Box(margin, px(8), inner, px(50) if high >= 560 else px(28))
    band = Box(margin, header.bottom + px(10), inner, px(34))
    footer = Box(margin, height - px(28), inner, px(22))
    history_height = px(min(max(0.21 * high, 108), 230))
    history = Box(margin, footer.y - px(4) - history_height, inner, history_height)
    gutter = px(54)
    plot_top, plot_foot = px(40), px(28)
    history_plot = Box(
        margin + gutter, history.y + plot_top, inner - gutter - px(8), max(1, history.height - plot_top - plot_foot)
    )
    top = band.bottom + px(8)
    bottom = history.y - px(8)
    side_width = px(min(max(0.345 * wide, 270), 440))
    gap = px(28)
    side = Box(width - margin - side_width, top, side_width, bottom - top)
    figure_height = min(px(100 if small_figure else 226 if high >= 640 else 196), side.height)
    figure = Box(side.x, side.y, side.width, figure_height)
    detail = Box(side.x, figure.bottom, side.width, side.height - figure_height)
    body = Box(margin, top, inner - side_width - gap, bottom - top)
    page = arrange_eye(width, height, unit, header, body, rails)
    return LiveBoxes(page, header, band, body, figure, detail, history, history_plot, footer)


def arrange_eye(width: int, height: int, unit: float, header: Box, body: Box, rails: int) -> Page:
    """The eye's own areas within ``body``."""

    def px(units: float) -> int:
        return round(units * unit)

    if rails == 0:
        return Page(width, height, unit, header, (), None, None, None, None, None, body, None, None)
    caption, gutter, between, axis = px(22), px(58), px(10), px(42)
    wide = body.width / unit
    levels_width = px(176) if wide >= 680 else px(128) if wide >= 500 else 0
    eye_x = body.x + gutter
    eye_width = max(1, body.width - gutter - (between + levels_width if levels_width else px(14)))
    free = body.height - caption * rails - px(8) * (rails - 1) - axis
    curve_height = round((free - caption - px(8)) * (0.27 if rails == 1 else 0.2))
    curve_height = max(curve_height, px(72))
    with_curve = (free - caption - px(8) - curve_height) // rails >= px(104)
    eye_height = (free - caption - px(8) - curve_height) // rails if with_curve else free // rails
    eye_height = max(1, eye_height)
    y = body.y
    places = []
    for _ in range(rails):
        eye = Box(eye_x, y + caption, eye_width, eye_height)
        levels = Box(eye.right + between, eye.y, levels_width, eye_height)
        places.append(
            RailBoxes(
                Box(body.x, y, eye.right - body.x, caption),
                Box(body.x, eye.y, gutter, eye_height),
                eye,
                levels,
                Box(levels.x, y, levels.width, caption),
            )
        )
        y = eye.bottom + px(8)
    last = places[-1].eye
    if not with_curve:
        time_axis = Box(body.x, last.bottom, eye_x + eye_width + px(14) - body.x, axis)
        return Page(width, height, unit, header, tuple(places), None, None, None, time_axis, None, None, None, None)
    curve_caption = Box(body.x, y, eye_x + eye_width - body.x, caption)
    curve = Box(eye_x, curve_caption.bottom, eye_width, curve_height)
    time_axis = Box(body.x, curve.bottom, eye_x + eye_width + px(14) - body.x, axis)
    key = Box(curve.right + between, curve_caption.y, levels_width, curve.bottom - curve_caption.y)
    return Page(
        width,
        height,
        unit,
        header,
        tuple(places),
        curve,
        curve_caption,
        Box(body.x, curve.y, gutter, curve_height),
        time_axis,
        key if levels_width else None,
        None,
        None,
        None,
    )
