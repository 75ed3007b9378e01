"""Each sentence says what its figures say, and no more."""

from dataclasses import replace

import numpy as np
import pytest

from dsp.diagnosis import Response
from dsp.reading import Budget, Equaliser, Reading
from dsp.verdict import Evidence, sentences, strongest

EVIDENCE = Evidence(1e-6, 9600.0)


def reading(opening_at_ber=60.0, **parts):
    parts = {f"{cause}_pct": points for cause, points in parts.items()}
    return Reading(20_000, opening_pct=70.0, opening_at_ber_pct=opening_at_ber, budget=Budget(**parts))


def response(**taps):
    """Taps by lag: ``late1``, ``early2``, each of one rail."""
    lags = np.arange(-8, 13)
    line = (lags == 0).astype(float)
    for name, value in taps.items():
        side, lag = name[:-1], int(name[-1])
        line[lags == (lag if side == "late" else -lag)] = value
    return Response(lags, line[None, None])


def test_there_is_no_verdict_without_a_budget():
    assert sentences(Reading(50), EVIDENCE) == ()


def test_a_clean_link_is_called_clean():
    told = sentences(reading(opening_at_ber=95.0, noise=4.0, isi=1.0), EVIDENCE)
    assert told == ("Nothing closes this eye: it stays 95 % open down to an error rate of 1e-6.",)


def test_many_small_causes_are_not_called_clean():
    (told,) = sentences(reading(opening_at_ber=84.0, noise=4.5, isi=4.0, timing=4.0), EVIDENCE)
    assert told.startswith("No single cause takes more than 5 of 100 points")
    assert "84 % open" in told


def test_an_echo_is_told_with_its_level_its_place_and_what_would_help():
    link = replace(reading(isi=34.0, noise=4.0), equaliser=Equaliser(7, 88.0), opening_pct=41.0)
    (told,) = sentences(link, replace(EVIDENCE, response=response(late2=10 ** (-9.3 / 20))))
    assert told == (
        "An echo of -9.3 dB two symbols late takes 34 of 100 points; "
        "a 7-tap equaliser would bring the opening from 41 to 88 %."
    )


def test_an_equaliser_that_hardly_helps_is_not_named():
    link = replace(reading(isi=34.0), equaliser=Equaliser(31, 72.0))
    (told,) = sentences(link, replace(EVIDENCE, response=response(late2=0.3)))
    assert "equaliser" not in told


def test_an_equaliser_of_eleven_taps_reads_well():
    link = replace(reading(isi=34.0), equaliser=Equaliser(11, 90.0))
    assert "; an 11-tap equaliser" in sentences(link, EVIDENCE)[0]


@pytest.mark.parametrize(
    ("taps", "words"),
    [
        ({"late1": 0.2}, "What is left of the symbol before, -14.0 dB strong, takes 20 of 100 points."),
        ({"early1": -0.2}, "What shows of the next symbol already, -14.0 dB strong, takes 20 of 100 points."),
        ({"early3": 0.1}, "An echo of -20.0 dB three symbols early takes 20 of 100 points."),
        (
            {"late1": 0.2, "early1": 0.19},
            "Overlap of neighbouring symbols (the strongest -14.0 dB, one symbol late) takes 20 of 100 points.",
        ),
    ],
    ids=["left", "next", "early", "many"],
)
def test_overlap_is_named_after_the_symbols_that_make_it(taps, words):
    assert sentences(reading(isi=20.0), replace(EVIDENCE, response=response(**taps))) == (words,)


def test_the_strongest_symbol_counts_both_rails():
    lags = np.array([-1, 0, 1])
    taps = np.zeros((2, 2, 3))
    taps[0, 0, 1] = taps[1, 1, 1] = 1.0
    taps[0, 0, 2] = taps[1, 1, 2] = 0.3
    taps[0, 1, 2], taps[1, 0, 2] = -0.4, 0.4
    assert strongest(Response(lags, taps)) == pytest.approx((1, 20 * np.log10(0.5), 1.0))
    assert strongest(Response(lags, np.zeros((1, 1, 3)))) is None


def test_noise_is_told_with_the_snr_and_what_more_signal_would_bring():
    link = replace(reading(noise=46.0), snr_db=20.0)
    (told,) = sentences(link, replace(EVIDENCE, opening_with_3db_more_pct=79.4))
    assert (
        told == "Noise (SNR 20.0 dB) takes 46 of 100 points; 3 dB more signal would bring the opening from 70 to 79 %."
    )
    (told,) = sentences(link, replace(EVIDENCE, opening_with_3db_more_pct=71.0))
    assert "3 dB" not in told


def test_a_tone_is_named_with_its_frequency_and_how_far_that_can_be_known():
    evidence = replace(EVIDENCE, tone_hz=50.0, tone_pct=17.0)
    (told,) = sentences(reading(noise=30.0), evidence)
    assert "17 points of it from an interfering tone seen at 50 Hz (give or take whole multiples of 9600 Hz)" in told
    (told,) = sentences(reading(noise=30.0), replace(evidence, tone_pct=4.0))
    assert "tone" not in told


@pytest.mark.parametrize(
    ("cause", "figures", "evidence", "words"),
    [
        ("timing", {}, {"timing_rms_ui": 0.05}, "Timing jitter of 0.050 UI rms takes 25 of 100 points."),
        (
            "timing",
            {"periodic_jitter_ui": 0.08, "periodic_jitter_hz": 200.0},
            {"timing_rms_ui": 0.05},
            "Timing jitter, with a swing of 0.080 UI at 200 Hz, takes 25 of 100 points.",
        ),
        ("phase", {}, {"phase_rms_deg": 3.9}, "Phase jitter of 3.9 degrees rms of the carrier takes 25 of 100 points."),
        ("levels", {"level_linearity": 0.91}, {}, "Uneven levels (linearity 0.91) take 25 of 100 points."),
        (
            "iq",
            {"iq_gain_db": 0.5, "iq_skew_deg": -4.0},
            {},
            "Imbalance of I and Q (+0.5 dB, -4.0 degrees) takes 25 of 100 points.",
        ),
        (
            "clipping",
            {},
            {"compression_db": 1.24},
            "Clipping or compression (outermost level 1.2 dB low) takes 25 of 100 points.",
        ),
        ("clipping", {}, {}, "Clipping or compression takes 25 of 100 points."),
    ],
)
def test_every_cause_has_its_sentence(cause, figures, evidence, words):
    told = sentences(replace(reading(**{cause: 25.0}), **figures), replace(EVIDENCE, **evidence))
    assert told == (words,)


def test_at_most_two_causes_follow_the_first_and_only_those_that_weigh():
    told = sentences(reading(isi=40.0, noise=20.0, timing=10.0, phase=9.0), EVIDENCE)
    assert [line.split()[0] for line in told] == ["Overlap", "Noise", "Timing"]
    assert len(sentences(reading(isi=60.0, noise=8.0), EVIDENCE)) == 1


def test_what_no_cause_takes_is_said():
    told = sentences(reading(isi=20.0, noise=15.0, unexplained=12.0), EVIDENCE)
    assert told[2] == "Another 12 points are not any one cause's: they come back when several are mended together."
    told = sentences(reading(isi=20.0, unexplained=12.0), EVIDENCE)
    assert told[1] == "Another 12 points have no cause that these figures can name."


def test_more_than_all_points_are_not_counted_out():
    assert sentences(reading(noise=139.0), EVIDENCE) == ("Noise takes more than the whole opening.",)
