"""Draws one eye by OpenGL without any screen and writes its pixels: run by the tests, in a process of its own."""

import sys

import numpy as np
import vispy

vispy.use("egl")

from vispy import app, gloo  # noqa: E402

from monitor.views import pixels  # noqa: E402
from monitor.views.opengl import EyeProgram  # noqa: E402
from monitor.views.theme import find_theme  # noqa: E402
from tests.monitor.views.synthetic_eyes import make_eye  # noqa: E402


def main(path, theme_name, width, height, scale, best_ui):
    image = make_eye(4, noise=0.1, symbols=2000)[0]
    low, high = pixels.visible_levels(image)
    canvas = app.Canvas(size=(width, height), show=False)
    with canvas:
        renderer = gloo.gl.glGetParameter(gloo.gl.GL_RENDERER)
        target = gloo.FrameBuffer(gloo.Texture2D((height, width, 4)))
        with target:
            gloo.set_viewport(0, 0, width, height)
            gloo.set_state(depth_test=False, blend=False)
            eye = EyeProgram()
            for _ in range(2):  # the second time the textures are there already
                eye.take(pixels.column_tones(image, 0, low, high, height), image.column_ui, width)
                eye.style(find_theme(theme_name), best_ui, width, scale)
                eye.draw()
            picture = gloo.read_pixels((0, 0, width, height), alpha=False)
    canvas.close()
    np.savez(path, picture=picture, renderer=str(renderer))


if __name__ == "__main__":
    best = None if sys.argv[6] == "none" else float(sys.argv[6])
    main(sys.argv[1], sys.argv[2], int(sys.argv[3]), int(sys.argv[4]), float(sys.argv[5]), best)
