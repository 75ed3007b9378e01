"""Eyes made with plain numpy for the painter's tests: raised-cosine links with noise, drawn into a raster directly."""

import numpy as np

from dsp.picture import EyeImage
from dsp.reading import Budget, Equaliser, Eye, Reading

COLUMNS_PER_UI = 64


def raised_cosine(t, rolloff):
    """The raised-cosine pulse at ``t`` symbol periods (Proakis, Digital Communications, chapter 9; from memory)."""
    singular = np.abs(np.abs(2.0 * rolloff * t) - 1.0) < 1e-9
    safe = np.where(singular, 0.0, t)
    value = np.sinc(safe) * np.cos(np.pi * rolloff * safe) / (1.0 - (2.0 * rolloff * safe) ** 2)
    return np.where(singular, np.pi / 4 * np.sinc(1 / (2 * rolloff)), value)


def make_eye(levels=2, rails=("",), *, symbols=3000, rolloff=0.35, noise=0.05, echo=0.0, rows=512, seed=1):
    """An EyeImage of random symbols; ``noise`` rms in level units, ``echo`` the share of a path one symbol late."""
    rng = np.random.default_rng(seed)
    nominal = np.arange(levels) * 2.0 - (levels - 1)
    column_ui = np.linspace(-1.0, 1.0, 2 * COLUMNS_PER_UI + 1)
    reach = levels + 2.0
    edges = np.linspace(-reach, reach, rows + 1)
    density = np.zeros((len(rails), column_ui.size, rows), dtype=np.uint32)
    distributions = np.zeros((len(rails), levels, rows), dtype=np.uint32)
    openings = np.full((len(rails) * (levels - 1), column_ui.size), np.nan)
    span = np.arange(-8, 9)
    for rail in range(len(rails)):
        a = rng.integers(0, levels, symbols + span.size)
        windows = np.lib.stride_tricks.sliding_window_view(a, span.size)[:symbols]
        amplitudes = nominal[windows]
        middle = windows[:, span.size // 2]
        # noise of the band -1 to +1 cycles a symbol, the same from column to column as a receiver's filter leaves it
        half = np.arange(-16, 17) / 2.0
        white = noise * rng.standard_normal((symbols, half.size))
        for j, ui in enumerate(column_ui):
            taps = raised_cosine(ui - span, rolloff) + echo * raised_cosine(ui - span - 1.0, rolloff)
            y = amplitudes @ taps / (1.0 + 0.3 * echo) + white @ np.sinc(2.0 * (ui - half))
            density[rail, j] = np.histogram(y, edges)[0]
            for m in range(levels - 1):
                upper, lower = y[middle == m + 1], y[middle == m]
                openings[rail * (levels - 1) + m, j] = 50.0 * (np.quantile(upper, 1e-3) - np.quantile(lower, 1 - 1e-3))
            if j == COLUMNS_PER_UI:
                for m in range(levels):
                    distributions[rail, m] = np.histogram(y[middle == m], edges)[0]
    opening = openings.min(axis=0)
    best = int(np.argmax(opening))
    image = EyeImage(
        rails=tuple(rails),
        density=density,
        column_ui=column_ui,
        row_level=(edges[1:] + edges[:-1]) / 2,
        opening_pct=opening,
        distributions=distributions,
        levels=nominal,
        best_ui=float(column_ui[best]),
        traces=symbols,
    )
    eyes = tuple(
        Eye(
            opening_pct=float(openings[i, best]),
            height=float(openings[i, best]) / 50.0,
            width_ui=0.6,
            centre_ui=0.0,
            threshold=float(nominal[i % (levels - 1)] + 1.0),
        )
        for i in range(openings.shape[0])
    )
    return image, eyes


def full_reading(image, eyes, **changes):
    """A reading in which every figure is known."""
    opening = float(np.nanmax(image.opening_pct))
    figures = {
        "symbols": 120_000,
        "opening_pct": opening,
        "opening_low_pct": opening - 1.4,
        "opening_high_pct": opening + 1.3,
        "closure_db": 2.9 if opening > 0 else None,
        "eyes": eyes,
        "width_ui": 0.612,
        "best_instant_ui": 0.004,
        "timing_slope_pct_per_ui": 182.0,
        "timing_tolerance_ui": (-0.08, 0.09),
        "noise_margin_db": 17.2,
        "level_rms_pct": 4.8,
        "crossing_rms_ui": 0.051,
        "crossing_pp_ui": 0.282,
        "crossing_pattern_pp_ui": 0.241,
        "crossing_random_rms_ui": 0.018,
        "dcd_ui": -0.006,
        "rise_20_80_ui": 0.43,
        "periodic_jitter_ui": 0.021,
        "periodic_jitter_hz": 118.7,
        "level_linearity": 0.981,
        "q": 9.31,
        "snr_db": 24.6,
        "mer_db": 23.9,
        "evm_pct": 6.4,
        "ber": 3.1e-7,
        "ber_low": 1.2e-7,
        "ber_high": 8.4e-7,
        "opening_at_ber_pct": 61.2,
        "clock_ppm": -12.4,
        "jitter_rms_ui": 0.0072,
        "carrier_hz": 1203.4,
        "phase_rms_deg": 1.62,
        "iq_gain_db": 0.21,
        "iq_skew_deg": -0.94,
        "dc_pct": 0.8,
        "budget": Budget(17.8, 8.4, 3.1, 2.2, 1.4, 0.9, 0.0, 5.0),
        "equaliser": Equaliser(7, 84.2),
        "verdict": "Neighbouring symbols close the eye most (17.8 points); "
        "a linear equaliser of 7 taps would open it to 84.2 %.",
    }
    return Reading(**(figures | changes))


def baseband_reading(image, eyes, **changes):
    """A reading of a two-level baseband link with the figures that such a link has."""
    return full_reading(
        image,
        eyes,
        carrier_hz=None,
        phase_rms_deg=None,
        iq_gain_db=None,
        iq_skew_deg=None,
        mer_db=None,
        evm_pct=None,
        level_linearity=None,
        budget=None,
        equaliser=None,
        verdict=None,
        periodic_jitter_hz=None,
        periodic_jitter_ui=None,
        opening_at_ber_pct=None,
        **changes,
    )
