"""Diagnoses for the views' tests, computed here from a pulse with an echo and noise, not by the program."""

import itertools
from dataclasses import replace

import numpy as np
from scipy.stats import norm

from dsp.diagnosis import Constellation, Diagnosis, EqualiserTrial, ErrorCurve, JitterSplit, Response
from dsp.reading import Budget, Equaliser
from tests.monitor.views.synthetic_eyes import full_reading, raised_cosine

ECHO, NOISE, ROLL_OFF = 0.34, 0.16, 0.35
LAGS = np.arange(-8, 9)


def wave(ui, echo=ECHO):
    """The response at ``ui`` from the decision instant, one value a lag (positive: gone by)."""
    return raised_cosine(ui + LAGS, ROLL_OFF) + echo * raised_cosine(ui + LAGS - 1.0, ROLL_OFF)


def pattern_ber(taps, threshold, noise=NOISE):
    """Two levels: the mean over all patterns of the five strongest neighbours of the tail beyond the threshold."""
    cursor = taps[LAGS == 0][0]
    others = taps[LAGS != 0]
    strong = others[np.argsort(-np.abs(others))[:5]]
    shifts = np.array([np.dot(signs, strong) for signs in itertools.product((-1, 1), repeat=5)])
    high = norm.sf((cursor + shifts - threshold) / noise)
    low = norm.cdf((-cursor + shifts - threshold) / noise)
    return 0.5 * float(np.mean(high) + np.mean(low))


def mmse(response, taps=7, spacing=0.5, cursor=3):
    """Taps of the least-squares equaliser ``spacing`` UI apart for white noise, complex (Proakis, chapter 9; from memory)."""
    rows = np.array([response((k - cursor) * spacing) for k in range(taps)])
    gram = rows @ rows.T + NOISE**2 * np.eye(taps)
    return np.linalg.solve(gram, rows[:, LAGS == 0][:, 0]).astype(np.complex128)


def make_diagnosis(rails=2, *, seed=3):
    """All of it for one or two rails."""
    taps = wave(0.0)
    taps = taps / taps[LAGS == 0]
    both = np.zeros((rails, rails, LAGS.size))
    for rail in range(rails):
        both[rail, rail] = taps
    if rails == 2:
        both[0, 1], both[1, 0] = (
            -0.12 * np.roll(taps, 2) * (np.abs(LAGS) < 5),
            0.12 * np.roll(taps, 2) * (np.abs(LAGS) < 5),
        )
    instants = np.linspace(-0.5, 0.5, 65)
    over_time = np.array([pattern_ber(wave(ui), 0.0) for ui in instants])
    thresholds = np.linspace(-1.0, 1.0, 65)
    over_threshold = np.array([pattern_ber(wave(0.0), at) for at in thresholds])
    rng = np.random.default_rng(seed)
    constellation = None
    if rails == 2:
        symbols = rng.choice([-1.0, 1.0], (2, 20_000))
        spread = np.array([np.convolve(row, taps, "same") for row in symbols]) + NOISE * rng.standard_normal(
            (2, 20_000)
        )
        counts, _, _ = np.histogram2d(spread[1], spread[0], bins=96, range=[[-2.5, 2.5]] * 2)
        constellation = Constellation(counts.astype(np.uint32), 2.5)
    linear = mmse(wave)
    return Diagnosis(
        response=Response(LAGS, both),
        over_time=ErrorCurve(instants, over_time),
        over_threshold=ErrorCurve(thresholds, over_threshold),
        jitter=JitterSplit(0.118, 0.0213, 0.118 + 2 * float(norm.isf(1e-6)) * 0.0213, 1e-6),
        constellation=constellation,
        equalisers=(
            EqualiserTrial("linear", linear, np.empty(0, np.complex128), 0.5, 3, 41.2, 88.3),
            EqualiserTrial("decision-feedback", linear[:5], np.array([0.34, 0.02, -0.01], complex), 1.0, 2, 41.2, 90.6),
        ),
        best_thresholds=(0.012,),
        fitting_roll_off=0.25,
        opening_pct=41.2,
        opening_with_3db_more_pct=47.7,
        tone_hz=50.0,
        compression_db=0.42,
        am_pm_deg=1.7,
        remarks=(
            "Noise takes 8.4 points; 3 dB more signal would bring the opening at 10⁻⁶ from 41.2 to 47.7 %.",
            "A tone at 50.0 Hz stands in the noise.",
        ),
    )


def diagnosed_reading(image, eyes, **changes):
    """A reading whose budget adds up to 100 with the opening at the target error rate."""
    return full_reading(
        image,
        eyes,
        **(
            {
                "opening_at_ber_pct": 41.2,
                "budget": Budget(34.1, 12.4, 5.3, 2.2, 1.4, 0.9, None, 2.5),
                "equaliser": Equaliser(7, 88.3),
                "verdict": "Echo of −9.3 dB one symbol late takes 34 of 100 points; "
                "a 7-tap equaliser would bring the opening from 41 to 88 %.",
            }
            | changes
        ),
    )


def diagnosed(snapshot, **changes):
    """The snapshot with all that stands behind its figures."""
    image = snapshot.image
    return replace(
        snapshot,
        reading=diagnosed_reading(image, snapshot.reading.eyes, **changes),
        diagnosis=make_diagnosis(len(image.rails)),
    )
