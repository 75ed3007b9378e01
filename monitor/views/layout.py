"""Where everything stands on the page: plain rectangles in pixels, no Qt.

The eye's rails stand one over another above the opening curve, so that one time axis serves them all; each rail's level
distributions stand beside it on the same amplitude axis.
"""

from dataclasses import dataclass

DESIGN_WIDTH = 1280
DESIGN_HEIGHT = 800
SIDE_WIDTH = 440


@dataclass(frozen=True, slots=True)
class Box:
    """A rectangle in whole pixels; y grows downwards."""

    x: int
    y: int
    width: int
    height: int

    @property
    def right(self) -> int:
        """First pixel column beyond the box."""
        return self.x + self.width

    @property
    def bottom(self) -> int:
        """First pixel row below the box."""
        return self.y + self.height

    def contains(self, other: "Box", slack: int = 0) -> bool:
        """Whether the other box lies within this one, give or take ``slack`` pixels."""
        return (
            other.x >= self.x - slack
            and other.y >= self.y - slack
            and other.right <= self.right + slack
            and other.bottom <= self.bottom + slack
        )

    def overlaps(self, other: "Box") -> bool:
        """Whether the two share a pixel."""
        return self.x < other.right and other.x < self.right and self.y < other.bottom and other.y < self.bottom


@dataclass(frozen=True, slots=True)
class RailBoxes:
    """One rail: the eye, the gutter with its amplitude ticks, the distributions, and the caption line over both."""

    caption: Box
    gutter: Box
    eye: Box
    levels: Box
    levels_caption: Box


@dataclass(frozen=True, slots=True)
class Page:
    """All areas of a page; None for what is not there.

    Attributes
    ----------
    scale
        Pixels a design unit: 1 at 1280 x 800.
    header
        Two lines of text.
    rails
        Top to bottom; empty when there is no eye.
    curve, curve_caption, curve_gutter, time_axis, key
        The opening curve, the line over it, its ticks' gutter, the time ticks under it and the key right of it.
    message
        In the eye's place when there is none.
    side
        Figures.
    notes
        Lines of text under the eye.
    """

    width: int
    height: int
    scale: float
    header: Box
    rails: tuple[RailBoxes, ...]
    curve: Box | None
    curve_caption: Box | None
    curve_gutter: Box | None
    time_axis: Box | None
    key: Box | None
    message: Box | None
    side: Box | None
    notes: Box | None


def page_scale(width: int, height: int) -> float:
    """Pixels a design unit, so that a page of any shape keeps its text in proportion."""
    return min(width / DESIGN_WIDTH, height / DESIGN_HEIGHT)


def notes_width(width: int, height: int, *, side: bool) -> int:
    """Pixels that a line of notes has, known before it is known how many lines there are."""
    notes = arrange(width, height, rails=0, side=side, note_lines=1).notes
    return notes.width if notes is not None else 0


def arrange(width: int, height: int, *, rails: int, side: bool, note_lines: int) -> Page:
    """Split a page of ``width`` x ``height`` pixels; ``rails`` 0 leaves the eye's place to a message.

    Raises ValueError for a page without pixels.
    """
    if width < 1 or height < 1:
        raise ValueError(f"a picture needs at least 1 x 1 pixels, got {width} x {height}")
    scale = page_scale(width, height)

    def px(units: float) -> int:
        return round(units * scale)

    margin = px(24)
    header = Box(margin, px(16), width - 2 * margin, px(50))
    top = header.bottom + px(16)
    bottom = height - px(14)
    side_width = min(px(SIDE_WIDTH), (width - 2 * margin) // 2) if side else 0
    gap = px(32) if side else 0
    side_box = Box(width - margin - side_width, top, side_width, bottom - top) if side else None
    left_width = width - 2 * margin - side_width - gap
    notes = None
    if note_lines:
        notes = Box(margin, bottom - px(20) * note_lines, left_width, px(20) * note_lines)
        bottom = notes.y - px(10)
    left = Box(margin, top, left_width, bottom - top)

    if rails == 0:
        return Page(width, height, scale, header, (), None, None, None, None, None, left, side_box, notes)

    caption, gutter, between = px(24), px(62), px(10)
    levels_width = px(176)
    time_axis_height = px(40)
    eye_x = left.x + gutter
    eye_width = left.width - gutter - between - levels_width
    free = left.height - caption * (rails + 1) - px(10) * rails - time_axis_height
    curve_height = max(px(84), round(free * (0.25 if rails == 1 else 0.19)))
    eye_height = (free - curve_height) // rails
    y = left.y
    places = []
    for _ in range(rails):
        eye = Box(eye_x, y + caption, eye_width, eye_height)
        levels = Box(eye.right + between, eye.y, levels_width, eye_height)
        places.append(
            RailBoxes(
                Box(left.x, y, eye.right - left.x, caption),
                Box(left.x, eye.y, gutter, eye_height),
                eye,
                levels,
                Box(levels.x, y, levels.width, caption),
            )
        )
        y = eye.bottom + px(10)
    curve_caption = Box(left.x, y, eye_x + eye_width - left.x, caption)
    curve = Box(eye_x, curve_caption.bottom, eye_width, curve_height)
    time_axis = Box(left.x, curve.bottom, eye_x + eye_width + px(16) - left.x, time_axis_height)
    key = Box(curve.right + between, curve_caption.y, levels_width, curve.bottom - curve_caption.y)
    return Page(
        width,
        height,
        scale,
        header,
        tuple(places),
        curve,
        curve_caption,
        Box(left.x, curve.y, gutter, curve_height),
        time_axis,
        key,
        None,
        side_box,
        notes,
    )
