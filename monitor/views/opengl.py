"""The eyes' traces by OpenGL, over the page that the raster painter draws; only where a real driver answers."""

import sys
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import Qt
from PySide6.QtGui import QGuiApplication, QOffscreenSurface, QOpenGLContext
from PySide6.QtWidgets import QWidget

from monitor.views import pixels
from monitor.views.layout import Box
from monitor.views.live_drawing import View, shown_rail
from monitor.views.live_page import LivePage
from monitor.views.theme import Theme, find_theme

# Mesa's software renderers, by the name they answer with
_SOFTWARE = ("llvmpipe", "softpipe", "swrast", "software")
_GL_RENDERER = 0x1F01
_MOST_RAILS = 2

_VERTEX = """
attribute vec2 a_corner;
varying vec2 v_at;
void main() {
    v_at = 0.5 * a_corner + 0.5;
    gl_Position = vec4(a_corner, 0.0, 1.0);
}
"""

# u_best: first pixel and width of the best instant's line, and the lengths of dash and gap; no line for a width of 0
_FRAGMENT = """
uniform sampler2D u_tone;
uniform sampler2D u_ramp;
uniform vec2 u_size;
uniform float u_columns;
uniform vec2 u_axis;
uniform vec4 u_best;
uniform vec3 u_accent;
varying vec2 v_at;
void main() {
    float x = floor(v_at.x * u_size.x);
    float y = floor((1.0 - v_at.y) * u_size.y);
    float position = clamp(u_axis.x + u_axis.y * (x + 0.5) / u_size.x, 0.0, u_columns - 1.0);
    float left = min(floor(position), u_columns - 2.0);
    float row = (y + 0.5) / u_size.y;
    float first = texture2D(u_tone, vec2((left + 0.5) / u_columns, row)).r;
    float second = texture2D(u_tone, vec2((left + 1.5) / u_columns, row)).r;
    float tone = mix(first, second, position - left);
    vec3 colour = texture2D(u_ramp, vec2((floor(tone * 255.0 + 0.5) + 0.5) / 256.0, 0.5)).rgb;
    bool on_line = x >= u_best.x && x < u_best.x + u_best.y && mod(y, u_best.z + u_best.w) < u_best.z;
    gl_FragColor = vec4(on_line ? u_accent : colour, 1.0);
}
"""


class EyeProgram:
    """One eye's traces on the whole of the current viewport. Lives in the GL context that was current when it was made."""

    def __init__(self) -> None:
        from vispy import gloo

        self._gloo = gloo
        self._program = gloo.Program(_VERTEX, _FRAGMENT)
        self._program["a_corner"] = np.array([(-1, -1), (1, -1), (-1, 1), (1, 1)], dtype=np.float32)
        self._tone_shape: tuple[int, int] | None = None
        self._theme: Theme | None = None

    def take(self, tone: NDArray[np.float32], column_ui: NDArray[np.float64], width: int) -> None:
        """The tones ``(height, columns)`` of `pixels.column_tones`, to be drawn ``width`` pixels wide."""
        if tone.shape != self._tone_shape:
            texture = self._gloo.Texture2D(
                tone[:, :, np.newaxis], format="luminance", internalformat="r32f", interpolation="nearest"
            )
            self._program["u_tone"] = texture
            self._tone_shape = (tone.shape[0], tone.shape[1])
        else:
            self._program["u_tone"].set_data(tone[:, :, np.newaxis])
        columns_per_ui = (column_ui.size - 1) / (column_ui[-1] - column_ui[0])
        self._program["u_size"] = (float(width), float(tone.shape[0]))
        self._program["u_columns"] = float(tone.shape[1])
        self._program["u_axis"] = (
            float((pixels.TIME_MIN_UI - column_ui[0]) * columns_per_ui),
            float((pixels.TIME_MAX_UI - pixels.TIME_MIN_UI) * columns_per_ui),
        )

    def style(self, theme: Theme, best_ui: float | None, width: int, scale: float) -> None:
        """The theme's colours, and the best instant's line for a plot ``width`` pixels wide."""
        if theme is not self._theme:
            ramp = np.empty((1, theme.ramp.size, 3), dtype=np.uint8)
            for channel, shift in enumerate((16, 8, 0)):
                ramp[0, :, channel] = theme.ramp >> np.uint32(shift) & np.uint32(255)
            self._program["u_ramp"] = self._gloo.Texture2D(ramp, interpolation="nearest")
            accent = theme.accent
            self._program["u_accent"] = (accent.red / 255.0, accent.green / 255.0, accent.blue / 255.0)
            self._theme = theme
        if best_ui is None:
            self._program["u_best"] = (0.0, 0.0, 1.0, 0.0)
            return
        thick = max(1, round(1.6 * scale))
        x = width * (best_ui - pixels.TIME_MIN_UI) / (pixels.TIME_MAX_UI - pixels.TIME_MIN_UI)
        first = float(np.floor(x) - thick // 2 if thick % 2 else np.round(x) - thick // 2)
        self._program["u_best"] = (first, float(thick), 4.0 * scale, 3.0 * scale)

    def draw(self) -> None:
        """Draw on what is current."""
        self._program.draw("triangle_strip")


@dataclass(frozen=True, slots=True)
class _Traces:
    """What one eye is to show."""

    tone: NDArray[np.float32]
    column_ui: NDArray[np.float64]
    best_ui: float | None
    width: int
    theme: Theme
    scale: float


class _Canvas(Protocol):
    """A GL widget with one eye on it."""

    native: QWidget

    def show_traces(self, wanted: _Traces) -> None: ...

    def close(self) -> None: ...


class EyeCover:
    """A GL widget over each eye of a page. One thread, the main one."""

    def __init__(self, face: QWidget, page: LivePage) -> None:
        self._face = face
        self._page = page
        # made before the window is shown: the first GL widget in a shown window makes Qt take the window down and up again
        self._canvases = [_make_canvas(face) for _ in range(_MOST_RAILS)]

    def look(self, view: View) -> None:
        """Show the traces of a view that the page has just drawn."""
        boxes, whole = self._page.boxes, view.state.snapshot.image
        places = boxes.page.rails if boxes is not None and whole is not None else ()
        for canvas in self._canvases[len(places) :]:
            canvas.native.hide()
        if boxes is None or whole is None:
            return
        image, _ = shown_rail(whole, None, view.rail)
        low, high = pixels.visible_levels(image)
        theme, ratio = find_theme(view.theme), self._face.devicePixelRatioF()
        for rail, rail_boxes in enumerate(places):
            canvas, eye = self._canvases[rail], rail_boxes.eye
            _place(canvas.native, eye, ratio)
            tone = pixels.column_tones(image, rail, low, high, eye.height)
            canvas.show_traces(_Traces(tone, image.column_ui, image.best_ui, eye.width, theme, boxes.page.scale))

    def close(self) -> None:
        """Give the GL contexts back."""
        for canvas in self._canvases:
            canvas.close()
        self._canvases.clear()


def _place(native: QWidget, eye: Box, ratio: float) -> None:
    # whole logical pixels, inwards: where the screen has 1.25 or 1.5 of its own to each, a rim of the empty panel may show
    left, top = -int(-eye.x // ratio), -int(-eye.y // ratio)
    native.setGeometry(left, top, int(eye.right // ratio) - left, int(eye.bottom // ratio) - top)
    native.show()
    native.lower()


def _make_canvas(face: QWidget) -> _Canvas:
    """A vispy canvas inside the face that draws one eye."""
    from vispy import app, gloo

    app.use_app("pyside6")

    class EyeCanvas(app.Canvas):  # type: ignore[misc]
        """Draws one eye whenever Qt asks."""

        def __init__(self) -> None:
            self._eye: EyeProgram | None = None
            self._wanted: _Traces | None = None
            app.Canvas.__init__(self, parent=face, keys=None, autoswap=False, show=False)

        def show_traces(self, wanted: _Traces) -> None:
            """What to draw from now on."""
            self._wanted = wanted
            self.update()

        def on_draw(self, event: object) -> None:
            """Draw it."""
            wanted = self._wanted
            if wanted is None:
                return
            if self._eye is None:
                self._eye = EyeProgram()
            gloo.set_viewport(0, 0, *self.physical_size)
            gloo.set_state(depth_test=False, blend=False, cull_face=False)
            self._eye.take(wanted.tone, wanted.column_ui, wanted.width)
            self._eye.style(wanted.theme, wanted.best_ui, wanted.width, wanted.scale)
            self._eye.draw()

    canvas: _Canvas = EyeCanvas()
    canvas.native.setFocusPolicy(Qt.FocusPolicy.NoFocus)
    canvas.native.setAttribute(Qt.WidgetAttribute.WA_TransparentForMouseEvents)
    return canvas


def renderer_name() -> str | None:
    """What the OpenGL driver of the screen calls itself; None where no context can be had. Needs Qt's application."""
    context = QOpenGLContext()
    if not context.create():
        return None
    surface = QOffscreenSurface()
    surface.setFormat(context.format())
    surface.create()
    if not surface.isValid() or not context.makeCurrent(surface):
        return None
    try:
        return str(context.functions().glGetString(_GL_RENDERER))
    finally:
        context.doneCurrent()


def opengl_trouble(*, software: bool) -> str:
    """Why OpenGL should not be used, or nothing; ``software`` accepts a software renderer. Needs Qt's application."""
    if QGuiApplication.platformName() == "offscreen" or (
        sys.platform == "linux" and QGuiApplication.instance() is None
    ):
        return "there is no screen"
    try:
        import vispy  # noqa: F401
    except ImportError as error:
        return f"vispy does not load: {error}"
    name = renderer_name()
    if name is None:
        return "no OpenGL driver answers"
    if not software and any(word in name.lower() for word in _SOFTWARE):
        return f"OpenGL is software here ({name})"
    return ""
