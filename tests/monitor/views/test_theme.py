import numpy as np
import pytest

from monitor.views.theme import (
    DENSITY_STOPS,
    THEME_NAMES,
    Colour,
    contrast_ratio,
    find_theme,
    oklab_from_srgb,
    polar,
    ramp_oklab,
    srgb_from_oklab,
)


@pytest.mark.parametrize(
    ("lab", "rgb"),
    [
        # the web-platform tests of CSS Color 4 (css/css-color/oklab-001, -004, -005), from memory
        ((0.51975, -0.1403, 0.10768), (0.0, 128 / 255, 0.0)),
        ((0.50, 0.05, 0.0), (0.48477, 0.34290, 0.38412)),
        ((0.70, -0.1, 0.0), (0.29264, 0.70096, 0.63017)),
        ((1.0, 0.0, 0.0), (1.0, 1.0, 1.0)),
        ((0.0, 0.0, 0.0), (0.0, 0.0, 0.0)),
    ],
)
def test_oklab_gives_the_srgb_that_css_color_4_gives(lab, rgb):
    np.testing.assert_allclose(srgb_from_oklab(np.array(lab)), rgb, atol=6e-4)


def test_oklab_and_srgb_are_inverse():
    rgb = np.random.default_rng(4).random((200, 3))
    np.testing.assert_allclose(srgb_from_oklab(oklab_from_srgb(rgb)), rgb, atol=1e-6)


def test_contrast_is_that_of_wcag():
    black, white = Colour(0, 0, 0), Colour(255, 255, 255)
    assert contrast_ratio(black, white) == pytest.approx(21.0)
    assert contrast_ratio(white, white) == 1.0
    # 0x767676 is the lightest grey that passes 4.5:1 on white (WebAIM's well-known example, from memory)
    assert contrast_ratio(Colour(0x76, 0x76, 0x76), white) >= 4.5 > contrast_ratio(Colour(0x77, 0x77, 0x77), white)


@pytest.mark.parametrize("name", THEME_NAMES)
@pytest.mark.parametrize("ground", ["page", "panel"])
def test_text_stands_out_from_its_ground(name, ground):
    theme = find_theme(name)
    for ink in (theme.ink, theme.dim):
        assert contrast_ratio(ink, getattr(theme, ground)) >= 4.5
    # WCAG 2.2, 1.4.11: parts of a graphic that carry meaning need 3:1
    for part in (theme.accent, theme.alert, theme.edge if name == "dark" else theme.accent, theme.level_even):
        assert contrast_ratio(part, getattr(theme, ground)) >= 3.0


def cielab(argb):
    """CIE 15 L*a*b* under D65 from 0xFFRRGGBB, by CIE formulas: another route than Oklab."""
    rgb = np.stack([(argb >> shift & 255) / 255.0 for shift in (16, 8, 0)], axis=-1)
    linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])
    ratio = linear @ to_xyz.T / np.array([0.95047, 1.0, 1.08883])
    f = np.where(ratio > (6 / 29) ** 3, np.cbrt(ratio), ratio / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.stack([116 * f[..., 1] - 16, 500 * (f[..., 0] - f[..., 1]), 200 * (f[..., 1] - f[..., 2])], axis=-1)


@pytest.mark.parametrize("name", THEME_NAMES)
def test_density_steps_look_equal_in_cielab_too(name):
    lab = cielab(find_theme(name).ramp.astype(np.int64))
    lightness = lab[:, 0]
    falls = np.diff(lightness) * (1 if name == "dark" else -1)
    assert falls.min() >= -0.3  # 8-bit rounding
    sixteenths = np.linalg.norm(np.diff(lab[np.linspace(0, 255, 17).astype(int)], axis=0), axis=1)
    assert sixteenths.max() / sixteenths.min() < 2.2
    assert abs(lightness[-1] - lightness[0]) > 65


@pytest.mark.parametrize("name", THEME_NAMES)
def test_density_colours_exist_in_srgb_and_are_equal_steps_of_oklab(name):
    lab = ramp_oklab(DENSITY_STOPS[name])
    rgb = srgb_from_oklab(lab)
    assert rgb.min() > -0.002
    assert rgb.max() < 1.002
    steps = np.linalg.norm(np.diff(lab, axis=0), axis=1)
    np.testing.assert_allclose(steps, steps.mean(), rtol=0.01)
    np.testing.assert_allclose(lab[0], polar(*DENSITY_STOPS[name][0]))
    np.testing.assert_allclose(lab[-1], polar(*DENSITY_STOPS[name][2]))


# Machado, Oliveira, Fernandes, "A physiologically-based model for simulation of colour vision deficiency", 2009,
# at full severity, on linear RGB; values from memory
DEFICIENCIES = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
@pytest.mark.parametrize("name", THEME_NAMES)
def test_the_accent_differs_from_bars_and_densities_for_colour_blind_eyes(name, deficiency):
    theme = find_theme(name)

    def seen(red, green, blue):
        rgb = np.array([red, green, blue]) / 255.0
        linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
        shown = np.clip(np.array(DEFICIENCIES[deficiency]) @ linear, 0, 1)
        encoded = np.where(shown <= 0.0031308, 12.92 * shown, 1.055 * shown ** (1 / 2.4) - 0.055)
        return oklab_from_srgb(encoded)

    accent = seen(theme.accent.red, theme.accent.green, theme.accent.blue)
    ramp = theme.ramp.astype(np.int64)
    for argb in ramp[::8]:
        assert np.linalg.norm(accent - seen(argb >> 16 & 255, argb >> 8 & 255, argb & 255)) > 0.05


def test_an_unknown_theme_is_refused():
    with pytest.raises(ValueError, match="light, dark, paper"):
        find_theme("sepia")


def test_the_shared_ramp_cannot_be_written_to():
    with pytest.raises(ValueError, match="read-only"):
        find_theme("light").ramp[0] = 0
