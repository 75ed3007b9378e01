"""The OpenGL painter against the raster painter, by Mesa's software renderer: Debian's libegl-mesa0 and libgl1-mesa-dri."""

import json
import os
import shutil
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from monitor.views import pixels
from monitor.views.layout import Box
from monitor.views.painter import ensure_application
from monitor.views.theme import find_theme
from tests.monitor.views.synthetic_eyes import make_eye

ROOT = Path(__file__).parents[3]
HERE = Path(__file__).parent

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="EGL and Xvfb are Linux's")


def run(script, *arguments, before=(), **environment):
    """Run a script of this folder in a process of its own, warnings as errors."""
    kept = {
        key: value for key, value in os.environ.items() if key not in ("QT_QPA_PLATFORM", "WAYLAND_DISPLAY", "DISPLAY")
    }
    done = subprocess.run(
        [*before, sys.executable, "-W", "error", str(HERE / script), *map(str, arguments)],
        cwd=ROOT,
        env=kept | {"PYTHONPATH": str(ROOT)} | environment,
        capture_output=True,
        text=True,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    return done


def rgb_array(image):
    raw = np.frombuffer(image.constBits(), dtype=np.uint8).reshape(image.height(), image.bytesPerLine())
    return raw[:, : 4 * image.width()].reshape(image.height(), image.width(), 4)[:, :, 2::-1].astype(int)


def raster_picture(theme, width, height, scale, best_ui):
    ensure_application()
    from PySide6.QtGui import QImage, QPainter

    from monitor.views.canvas import Canvas
    from monitor.views.drawing import draw_density

    image = replace(make_eye(4, noise=0.1, symbols=2000)[0], best_ui=best_ui)
    low, high = pixels.visible_levels(image)
    target = QImage(width, height, QImage.Format.Format_RGB32)
    painter = QPainter(target)
    draw_density(Canvas(painter, find_theme(theme), scale), Box(0, 0, width, height), image, 0, low, high)
    painter.end()
    return rgb_array(target)


def assert_alike(one, other):
    """The same picture, but for lone steep traces, which the raster painter follows and OpenGL lets fade."""
    difference = np.abs(one.astype(int) - other).max(axis=2)
    assert difference.mean() < 1.0
    assert np.quantile(difference, 0.98) <= 16
    # upside down, or of one colour, it would not pass
    for unlike in (other[::-1], np.full_like(other, int(other.mean()))):
        assert np.abs(one.astype(int) - unlike).max(axis=2).mean() > 3.0


@pytest.mark.parametrize(
    ("theme", "width", "height", "scale", "best"),
    [("light", 500, 300, 1.0, 0.05), ("dark", 801, 403, 2.0, "none"), ("dark", 120, 90, 0.86, -0.31)],
)
def test_opengl_draws_the_eye_that_the_raster_painter_draws(tmp_path, theme, width, height, scale, best):
    run("opengl_picture.py", tmp_path / "gl.npz", theme, width, height, scale, best, EGL_PLATFORM="surfaceless")
    with np.load(tmp_path / "gl.npz") as drawn:
        assert_alike(drawn["picture"], raster_picture(theme, width, height, scale, None if best == "none" else best))


@pytest.fixture(scope="module")
def screens(tmp_path_factory):
    """The window on a virtual display, by either painter: what the display showed, and what was told."""
    if shutil.which("xvfb-run") is None:
        pytest.skip("xvfb-run is not installed")
    ensure_application()
    from PySide6.QtGui import QImage

    shots = {}
    for painter in ("raster", "opengl"):
        folder = tmp_path_factory.mktemp(painter)
        run(
            "window_on_screen.py",
            folder,
            painter,
            before=("xvfb-run", "-a", "-s", "-screen 0 1600x1000x24"),
        )
        image = QImage(str(folder / f"{painter}.png")).convertToFormat(QImage.Format.Format_RGB32)
        shots[painter] = (rgb_array(image), json.loads((folder / f"{painter}.json").read_text()))
    return shots


def test_the_window_looks_alike_by_either_painter(screens):
    (raster, told), (opengl, _) = screens["raster"], screens["opengl"]
    assert raster.shape == opengl.shape
    inside = np.zeros(raster.shape[:2], dtype=bool)
    for x, y, width, height in told["eyes"]:
        place = np.s_[
            y + told["face"][1] : y + told["face"][1] + height, x + told["face"][0] : x + told["face"][0] + width
        ]
        assert_alike(opengl[place], raster[place])
        inside[place] = True
    assert inside.sum() > 100_000
    # but for the smoothing of large letters, all beside the eyes is the same drawing
    assert np.abs(opengl - raster).max(axis=2)[~inside].max() <= 12


@pytest.mark.parametrize("painter", ["raster", "opengl"])
def test_a_window_on_a_screen_ends_cleanly(screens, painter):
    told = screens[painter][1]
    assert told["platform"] == "xcb"
    assert told["status"] == 0
    assert told["calls"] == [["set_persistence", 2.0], ["stop"]]


def test_software_opengl_is_left_for_the_raster_painter(screens):
    assert screens["raster"][1]["auto"] == "raster"
