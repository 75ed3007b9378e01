"""The roll-off that was sent, behind a receive filter of another one."""

import numpy as np
import pytest

from dsp.pulses import raised_cosine
from dsp.roll_off import fitting_roll_off, spectrum
from tests.measuring import over_the_air, spec_for


def test_a_root_raised_cosine_squared_is_the_raised_cosine():
    """Nyquist's pulse by its closed form: Proakis and Salehi, Digital Communications, 5th ed., sec. 9.2-1."""
    frequency = (np.arange(20_000) + 0.5) / 20_000
    times = np.asarray([0.0, 0.3, 0.5, 1.0, 2.5])
    pulse = 2 * np.cos(2 * np.pi * np.outer(times, frequency)) @ spectrum(frequency, 0.35) ** 2 / frequency.size
    np.testing.assert_allclose(pulse, raised_cosine(times, 0.35), atol=1e-6)


@pytest.mark.parametrize(("sent", "received"), [(0.5, 0.25), (0.2, 0.35), (0.35, 0.6)])
def test_a_mismatched_filter_is_told_what_would_fit(sent, received):
    spec = spec_for("qpsk", f"rrc:{sent}", 4.0, 12_000, snr_db=25.0)
    diagnosis = over_the_air(spec, f"rrc:{received}").figures.diagnosis()
    assert diagnosis.fitting_roll_off == pytest.approx(sent, abs=0.03)


@pytest.mark.parametrize(
    "defects",
    [{"snr_db": 15.0}, {"snr_db": 30.0, "echoes": ((1.0, 0.3),)}, {"snr_db": 30.0, "echoes": ((0.4, 0.2j),)}],
    ids=["noise", "echo", "near echo"],
)
def test_other_trouble_is_not_taken_for_a_mismatch(defects):
    diagnosis = over_the_air(spec_for("qpsk", "rrc:0.35", 4.0, 12_000, **defects)).figures.diagnosis()
    assert diagnosis.fitting_roll_off is None


def test_a_filter_that_is_no_root_raised_cosine_is_not_asked():
    assert over_the_air(spec_for("pam2", "rect", 8.0, 4_000, snr_db=25.0)).figures.diagnosis().fitting_roll_off is None


def test_a_response_within_chance_says_nothing():
    times = np.arange(-48, 49) / 8
    response = raised_cosine(times, 0.35) + np.random.default_rng(1).normal(0.0, 0.01, times.size)
    assert fitting_roll_off(times, response, 1e-4, 0.35) is None
