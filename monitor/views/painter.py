"""The raster painter: one state of a watched stream as a picture, with no display and no event loop.

Qt is loaded at the first picture. On Debian it needs libegl1, libgl1, libxkbcommon0, libdbus-1-3, libglib2.0-0 and
libfontconfig1; the last brings a font with it.
"""

import os
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from monitor.snapshot import Snapshot
from monitor.views.theme import ThemeName, find_theme

if TYPE_CHECKING:
    from PySide6.QtGui import QGuiApplication, QImage

_DEBIAN_PACKAGES = "libegl1 libgl1 libfontconfig1 libxkbcommon0 libdbus-1-3 libglib2.0-0 fonts-dejavu-core"
_MOST_PIXELS = 16384
# what Qt lists even where not one font file is installed
_GENERIC_FAMILIES = {"Monospace", "Sans Serif", "Serif"}

# Qt's application object must outlive every picture
_application: "QGuiApplication | None" = None


def paint_picture(snapshot: Snapshot, width: int = 1280, height: int = 800, theme: ThemeName = "light") -> "QImage":
    """Draw a snapshot as a QImage of ``width`` x ``height`` pixels that owns its memory.

    The first call must come from the main thread; later ones may come from any. Raises InputError when Qt's libraries
    or all fonts are missing, or for a size outside 1 to 16384 pixels; ValueError for an unknown theme.
    """
    from monitor.errors import InputError

    find_theme(theme)
    if not (1 <= width <= _MOST_PIXELS and 1 <= height <= _MOST_PIXELS):
        raise InputError(f"a picture of {width} x {height} pixels cannot be drawn; take 1 to {_MOST_PIXELS} each way")
    ensure_application()
    from monitor.views.drawing import draw_image

    return draw_image(snapshot, width, height, theme).image


def save_picture(
    snapshot: Snapshot,
    path: str | os.PathLike[str],
    width: int = 1280,
    height: int = 800,
    theme: ThemeName = "light",
) -> None:
    """Draw a snapshot into a PNG file, whatever its name ends with; a file of that name is overwritten.

    Raises InputError as `paint_picture` does, and when the file cannot be written.
    """
    _write(png_bytes(paint_picture(snapshot, width, height, theme)), path)


def save_tiles(
    links: Sequence[tuple[str, Snapshot]],
    front: int,
    path: str | os.PathLike[str],
    width: int = 1280,
    height: int = 800,
    theme: ThemeName = "light",
) -> None:
    """Draw several links, each with its name, as tiles over the picture of the one in front into a PNG file; see `save_picture`."""
    ensure_application()
    from monitor.views.tiles import tiles_picture

    _write(png_bytes(tiles_picture(links, front, width, height, theme)), path)


def _write(data: bytes, path: str | os.PathLike[str]) -> None:
    from monitor.errors import InputError

    try:
        Path(path).write_bytes(data)
    except (OSError, ValueError) as error:  # ValueError: a zero byte in the name
        reason = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise InputError(f"picture {os.fspath(path)!r} cannot be written: {reason}; give another path") from error


def png_bytes(image: "QImage") -> bytes:
    """The image as a PNG file's content; raises RuntimeError when Qt cannot encode it."""
    from PySide6.QtCore import QBuffer, QIODevice

    buffer = QBuffer()
    buffer.open(QIODevice.OpenModeFlag.WriteOnly)
    if not image.save(buffer, "PNG"):  # type: ignore[call-overload]
        raise RuntimeError("the picture could not be encoded as PNG")
    return bytes(buffer.data().data())


def ensure_application() -> None:
    """Make Qt's application object if there is none yet, without a display unless a platform is already chosen.

    Raises InputError when Qt cannot be loaded or there is no font to write with.
    """
    global _application
    from monitor.errors import InputError

    try:
        from PySide6.QtGui import QFontDatabase, QGuiApplication
        from PySide6.QtWidgets import QApplication
    except ImportError as error:
        raise InputError(
            f"pictures need Qt, which does not load: {error}; on Debian: apt install {_DEBIAN_PACKAGES}"
        ) from error
    if QGuiApplication.instance() is None:
        os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
        # the kind that windows need too: there is one to a process, and it cannot be changed for another
        _application = QApplication(sys.argv[:1] or ["lidwatch"])
    if set(QFontDatabase.families()) <= _GENERIC_FAMILIES:
        raise InputError("pictures need a font and none is installed; on Debian: apt install fonts-dejavu-core")
