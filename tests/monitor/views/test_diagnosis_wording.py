import math
from dataclasses import replace

import numpy as np
import pytest

from dsp.diagnosis import Diagnosis, ErrorCurve, Response
from dsp.reading import Budget, Reading
from monitor.views.diagnosis_wording import (
    PAGE_TITLES,
    PAGES,
    decades,
    error_figures,
    lag_words,
    next_page,
    remedies,
    span_below,
    strengths,
    strongest,
)
from monitor.views.wording import unknown_causes
from tests.monitor.views.diagnoses import ECHO, make_diagnosis


def test_pages_go_round_either_way():
    seen, page = [], PAGES[0]
    for _ in PAGES:
        seen.append(page)
        page = next_page(page)
    assert tuple(seen) == PAGES
    assert page == PAGES[0]
    assert all(next_page(next_page(name), back=True) == name for name in PAGES)
    assert set(PAGE_TITLES) == set(PAGES)


def test_an_echo_one_symbol_late_is_told_in_decibels():
    first = strongest(make_diagnosis(1).response, 3)[0]
    assert first.label == "1 symbol late"
    level = float(first.value.removesuffix(" dB").replace("−", "-"))
    assert level == pytest.approx(20 * math.log10(ECHO), abs=0.1)


def test_a_turned_echo_is_as_strong_as_a_straight_one():
    # a path of gain g at angle theta puts g cos on the own rail and -+ g sin on the other: the same power
    gain, angle = 0.3, 0.7
    own, other = gain * math.cos(angle), gain * math.sin(angle)
    taps = np.zeros((2, 2, 3))
    taps[0, 0, 1] = taps[1, 1, 1] = 1.0
    taps[0, 0, 2] = taps[1, 1, 2] = own
    taps[0, 1, 2], taps[1, 0, 2] = -other, other
    np.testing.assert_allclose(strengths(Response(np.arange(-1, 2), taps)), [0.0, 1.0, gain])


def test_no_neighbour_no_line():
    taps = np.zeros((1, 1, 3))
    taps[0, 0, 1] = 1.0
    assert strongest(Response(np.arange(-1, 2), taps), 4) == []


@pytest.mark.parametrize(
    ("lag", "words"), [(0, "the symbol itself"), (1, "1 symbol late"), (-1, "1 symbol early"), (3, "3 symbols late")]
)
def test_lags_in_words(lag, words):
    assert lag_words(lag) == words


def test_the_stretch_below_a_rate_lies_between_the_curves_crossings():
    at = np.linspace(-0.5, 0.5, 101)
    curve = ErrorCurve(
        at, 10.0 ** (-8 + 28 * np.abs(at - 0.05))
    )  # straight in the logarithm, so the crossings are exact
    low, high = span_below(curve, 1e-6)
    assert (low, high) == pytest.approx((0.05 - 2 / 28, 0.05 + 2 / 28), abs=1e-9)
    assert span_below(curve, 1e-9) is None
    assert span_below(ErrorCurve(at, np.full(101, np.nan)), 1e-6) is None


def test_a_rate_of_nothing_does_not_break_the_axis():
    at = np.linspace(-0.5, 0.5, 5)
    assert decades([ErrorCurve(at, np.array([0.1, 1e-3, 0.0, 1e-3, 0.1]))], 1e-6) == (-12, 0)
    assert decades([ErrorCurve(at, np.array([0.1, 1e-3, 0.0, 1e-3, 0.1]))], None) == (-18, 0)
    assert decades([], None) == (-7, 0)
    low, high = decades([ErrorCurve(at, np.full(5, 0.3))], None)
    assert low < high == 0
    assert span_below(ErrorCurve(at, np.array([0.1, 1e-3, 0.0, 1e-3, 0.1])), 1e-6) is not None


def test_what_is_not_known_says_so():
    words = [figure.value for figure in error_figures(Reading(100), Diagnosis())]
    assert words == ["not known"] * 3
    assert remedies(Reading(100), Diagnosis()) == []
    assert unknown_causes(Budget(isi_pct=1.0, noise_pct=math.nan))[0] == "Noise"
    assert len(unknown_causes(Budget())) == 8


def test_every_remedy_that_was_tried_is_told_with_its_numbers():
    diagnosis = make_diagnosis(2)
    rows = remedies(Reading(1000, 70.0, best_instant_ui=0.03), diagnosis)
    linear, feedback, stronger = rows[:3]
    assert linear.words == "Linear equaliser, 7 taps 0.5 UI apart"
    assert (linear.before_pct, linear.after_pct) == (41.2, 88.3)
    assert feedback.words == "Decision feedback, 5 + 3 taps"
    assert (stronger.before_pct, stronger.after_pct) == (41.2, 47.7)
    words = " ".join(row.words for row in rows[3:])
    for part in ("0.25", "+0.012", "+0.030 UI"):
        assert part in words
    assert len(remedies(Reading(1), replace(diagnosis, equalisers=(), fitting_roll_off=None))) == 2
