"""Colours of the views, light, dark and black on white for print, built in Oklab; no Qt here.

Oklab: B. Ottosson, "A perceptual color space for image processing", 2020. Contrast: WCAG 2.2, "relative luminance" and
"contrast ratio". Densities run from the paper's colour over slate blue to ink (light) or from night over slate blue to
chalk (dark), in equal steps of Oklab; the one accent is copper, which every kind of colour vision tells from blue.
"""

from dataclasses import dataclass, replace
from functools import cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

ThemeName = Literal["light", "dark", "paper"]
THEME_NAMES: tuple[ThemeName, ...] = ("light", "dark", "paper")
RAMP_STEPS = 256

_LMS_FROM_RGB = np.array(
    [
        [0.4122214708, 0.5363325363, 0.0514459929],
        [0.2119034982, 0.6806995451, 0.1073969566],
        [0.0883024619, 0.2817188376, 0.6299787005],
    ]
)
_LAB_FROM_LMS = np.array(
    [
        [0.2104542553, 0.7936177850, -0.0040720468],
        [1.9779984951, -2.4285922050, 0.4505937099],
        [0.0259040371, 0.7827717662, -0.8086757660],
    ]
)
_RGB_FROM_LMS = np.linalg.inv(_LMS_FROM_RGB)
_LMS_FROM_LAB = np.linalg.inv(_LAB_FROM_LMS)


@dataclass(frozen=True, slots=True)
class Colour:
    """An sRGB colour, 0 to 255 each."""

    red: int
    green: int
    blue: int

    @property
    def argb(self) -> int:
        """Opaque, as 0xAARRGGBB."""
        return 0xFF000000 | self.red << 16 | self.green << 8 | self.blue


def srgb_from_oklab(lab: NDArray[np.float64]) -> NDArray[np.float64]:
    """Oklab ``(..., 3)`` to encoded sRGB ``(..., 3)``, nominally 0 to 1; outside when sRGB lacks the colour."""
    linear = (lab @ _LMS_FROM_LAB.T) ** 3 @ _RGB_FROM_LMS.T
    size = np.abs(linear)
    encoded = np.where(size <= 0.0031308, 12.92 * size, 1.055 * np.maximum(size, 1e-12) ** (1 / 2.4) - 0.055)
    return np.asarray(np.sign(linear) * encoded)


def oklab_from_srgb(rgb: NDArray[np.float64]) -> NDArray[np.float64]:
    """Encoded sRGB ``(..., 3)``, 0 to 1, to Oklab ``(..., 3)``."""
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    return np.asarray(np.cbrt(linear @ _LMS_FROM_RGB.T) @ _LAB_FROM_LMS.T)


def polar(lightness: float, chroma: float, hue_deg: float) -> NDArray[np.float64]:
    """Oklab of a lightness (0 to 1), a chroma and a hue in degrees, shape ``(3,)``."""
    hue = np.deg2rad(hue_deg)
    return np.array([lightness, chroma * np.cos(hue), chroma * np.sin(hue)])


def contrast_ratio(first: Colour, second: Colour) -> float:
    """Contrast by WCAG 2.2: 1 (none) to 21 (black on white)."""
    lighter, darker = sorted((_luminance(first), _luminance(second)), reverse=True)
    return (lighter + 0.05) / (darker + 0.05)


def _luminance(colour: Colour) -> float:
    encoded = np.array([colour.red, colour.green, colour.blue]) / 255.0
    linear = np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4)
    return float(linear @ np.array([0.2126, 0.7152, 0.0722]))


def ramp_oklab(stops: tuple[tuple[float, float, float], ...]) -> NDArray[np.float64]:
    """A curve through three Oklab colours (lightness, chroma, hue in degrees), cut into `RAMP_STEPS` equal steps.

    The curve is the parabola that passes the middle colour half-way (a quadratic Bezier); shape ``(RAMP_STEPS, 3)``.
    """
    start, middle, end = (polar(*stop) for stop in stops)
    control = 2.0 * middle - (start + end) / 2.0
    t = np.linspace(0.0, 1.0, 4097)[:, None]
    curve = (1 - t) ** 2 * start + 2 * t * (1 - t) * control + t**2 * end
    length = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(curve, axis=0), axis=1))])
    wanted = np.linspace(0.0, length[-1], RAMP_STEPS)
    return np.column_stack([np.interp(wanted, length, curve[:, axis]) for axis in range(3)])


@dataclass(frozen=True, eq=False, slots=True)
class Theme:
    """Every colour of a view.

    Attributes
    ----------
    page, panel
        Ground of the page and of the plots; the ramp starts with the panel's colour.
    ink, dim
        Text and lesser text, both at least 4.5:1 on page and panel.
    edge, grid
        Frames and ticks; lines that must not shout.
    accent, accent_wash
        The best instant, the opening curve, the least eye; the wash fills under the curve.
    level_even, level_odd
        The levels' distributions, told apart by lightness.
    track
        The empty part of a bar.
    alert
        The sign before a note.
    ramp
        Densities: uint32 0xFFRRGGBB, shape ``(RAMP_STEPS,)``, read-only.
    """

    name: ThemeName
    page: Colour
    panel: Colour
    ink: Colour
    dim: Colour
    edge: Colour
    grid: Colour
    accent: Colour
    accent_wash: Colour
    level_even: Colour
    level_odd: Colour
    track: Colour
    alert: Colour
    ramp: NDArray[np.uint32]


_Stops = tuple[tuple[float, float, float], tuple[float, float, float], tuple[float, float, float]]
DENSITY_STOPS: dict[ThemeName, _Stops] = {
    "light": ((0.985, 0.004, 85.0), (0.640, 0.092, 248.0), (0.235, 0.075, 276.0)),
    "paper": ((1.0, 0.0, 85.0), (0.640, 0.092, 248.0), (0.205, 0.060, 276.0)),
    "dark": ((0.190, 0.022, 262.0), (0.570, 0.088, 250.0), (0.965, 0.022, 95.0)),
}


@cache
def find_theme(name: ThemeName) -> Theme:
    """The theme of that name; raises ValueError for any other."""
    if name not in THEME_NAMES:
        raise ValueError(f"theme must be one of {', '.join(THEME_NAMES)}, got {name!r}")
    rgb = np.rint(srgb_from_oklab(ramp_oklab(DENSITY_STOPS[name])) * 255.0).astype(np.uint32)
    ramp = np.uint32(0xFF000000) | rgb[:, 0] << np.uint32(16) | rgb[:, 1] << np.uint32(8) | rgb[:, 2]
    ramp.setflags(write=False)
    panel = Colour(*(int(part) for part in rgb[0]))
    if name == "paper":
        return replace(
            find_theme("light"),
            name=name,
            page=panel,
            panel=panel,
            ink=_colour(0.150, 0.010, 270.0),
            dim=_colour(0.400, 0.015, 265.0),
            edge=_colour(0.560, 0.010, 262.0),
            accent_wash=_colour(0.955, 0.025, 62.0),
            ramp=ramp,
        )
    if name == "light":
        return Theme(
            name=name,
            page=_colour(0.955, 0.006, 85.0),
            panel=panel,
            ink=_colour(0.255, 0.030, 270.0),
            dim=_colour(0.460, 0.025, 265.0),
            edge=_colour(0.640, 0.018, 262.0),
            grid=_colour(0.885, 0.008, 250.0),
            accent=_colour(0.535, 0.130, 48.0),
            accent_wash=_colour(0.930, 0.030, 62.0),
            level_even=_colour(0.480, 0.085, 258.0),
            level_odd=_colour(0.680, 0.075, 245.0),
            track=_colour(0.895, 0.008, 250.0),
            alert=_colour(0.500, 0.150, 35.0),
            ramp=ramp,
        )
    return Theme(
        name=name,
        page=_colour(0.232, 0.020, 264.0),
        panel=panel,
        ink=_colour(0.945, 0.010, 90.0),
        dim=_colour(0.740, 0.018, 255.0),
        edge=_colour(0.530, 0.024, 260.0),
        grid=_colour(0.300, 0.022, 262.0),
        accent=_colour(0.780, 0.120, 62.0),
        accent_wash=_colour(0.310, 0.042, 60.0),
        level_even=_colour(0.740, 0.075, 245.0),
        level_odd=_colour(0.540, 0.085, 256.0),
        track=_colour(0.320, 0.020, 262.0),
        alert=_colour(0.760, 0.135, 45.0),
        ramp=ramp,
    )


def _colour(lightness: float, chroma: float, hue_deg: float) -> Colour:
    rgb = np.rint(np.clip(srgb_from_oklab(polar(lightness, chroma, hue_deg)), 0.0, 1.0) * 255.0)
    return Colour(int(rgb[0]), int(rgb[1]), int(rgb[2]))
