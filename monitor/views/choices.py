"""What the user chose in the window, kept from one watch to the next in a file of the user's own."""

import math
from dataclasses import dataclass
from pathlib import Path

from PySide6.QtCore import QByteArray, QSettings

from monitor.views.control import DEFAULT_PERSISTENCE, HISTORY_STEPS, PERSISTENCE_STEPS, TEXT_STEPS
from monitor.views.theme import THEME_NAMES, ThemeName


@dataclass(slots=True)
class Choices:
    """How the window is set; ``theme`` None follows the system."""

    theme: ThemeName | None = None
    zoom: float = 1.0
    persistence: float | None = DEFAULT_PERSISTENCE
    span_s: float | None = None
    tone: bool = False
    geometry: bytes = b""


def settings_file() -> Path:
    """Where the choices are kept."""
    import platformdirs

    return platformdirs.user_config_path("lidwatch", appauthor=False) / "window.ini"


def load_choices(path: Path) -> Choices:
    """Read the choices; what is missing, damaged or out of range is as in a first watch."""
    settings = QSettings(str(path), QSettings.Format.IniFormat)
    choices = Choices()
    theme = settings.value("theme")
    choices.theme = next((name for name in THEME_NAMES if name == theme), None)
    choices.zoom = _number(settings.value("zoom"), TEXT_STEPS, choices.zoom) or choices.zoom
    choices.persistence = _number(settings.value("persistence_s"), PERSISTENCE_STEPS, choices.persistence)
    choices.span_s = _number(settings.value("history_s"), HISTORY_STEPS, choices.span_s)
    choices.tone = str(settings.value("tone")).lower() == "true"
    geometry = settings.value("geometry")
    choices.geometry = bytes(geometry.data()) if isinstance(geometry, QByteArray) else b""
    return choices


def save_choices(path: Path, choices: Choices) -> bool:
    """Write the choices; False when the file cannot be written, which harms nothing else."""
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
    except OSError:
        return False
    settings = QSettings(str(path), QSettings.Format.IniFormat)
    settings.setValue("theme", choices.theme or "")
    settings.setValue("zoom", choices.zoom)
    settings.setValue("persistence_s", "endless" if choices.persistence is None else choices.persistence)
    settings.setValue("history_s", "endless" if choices.span_s is None else choices.span_s)
    settings.setValue("tone", choices.tone)
    settings.setValue("geometry", QByteArray(choices.geometry))
    settings.sync()
    return settings.status() == QSettings.Status.NoError


def _number(text: object, allowed: tuple[float | None, ...], default: float | None) -> float | None:
    if text == "endless" and None in allowed:
        return None
    try:
        value = float(str(text))
    except ValueError:
        return default
    return next((a for a in allowed if a is not None and math.isclose(a, value)), default)
