"""What each cause takes: closed forms where there are any, and the stream made again without the cause."""

from dataclasses import fields

import numpy as np
import pytest

from dsp.figures import Figures
from dsp.pulses import raised_cosine
from dsp.reading import Budget
from tests.dsp.streams import link_of, run, send

# normal quantile of 1e-6: tables of the normal distribution, e.g. Abramowitz and Stegun, Handbook of Mathematical Functions,
# table 26.5 (from memory; scipy agrees)
Z = 4.753424
CLEAN = {"snr_db": 65.0}


def figures_of(scheme, symbols=24_000, pulse="rrc:0.35", sps=4.0, seed=3, **defects):
    chain = run(link_of(scheme, sps, pulse), send(scheme, sps, pulse, symbols, seed=seed, **defects).samples)
    return Figures(chain.total, chain.context())


def whole(budget):
    return sum(getattr(budget, field.name) or 0.0 for field in fields(Budget))


@pytest.mark.parametrize(("scheme", "rails", "energy"), [("pam2", 1, 1.0), ("qpsk", 2, 2.0), ("16qam", 2, 10.0)])
def test_noise_takes_what_the_normal_law_says(scheme, rails, energy):
    snr = {"pam2": 20.0, "qpsk": 20.0, "16qam": 30.0}[scheme]
    budget = figures_of(scheme, snr_db=snr).budget()
    sigma = np.sqrt(energy / rails / 10 ** (snr / 10))
    assert budget.noise_pct == pytest.approx(100 * Z * sigma, abs=3.0)


def test_an_echo_of_a_symbol_takes_its_size():
    budget = figures_of("pam2", echoes=((1.0, 0.25),), **CLEAN).budget()
    # its size, and the little that averages of the level unit over so few symbols make of it
    assert 24.0 < budget.isi_pct < 28.0
    assert max(abs(part) for part in (budget.noise_pct, budget.timing_pct, budget.clipping_pct)) < 3.0


def test_a_slow_cable_takes_its_peak_distortion():
    # NRZ behind a one-pole low-pass: D = x / (1 - x), x = exp(-T/tau) (derived; sum of the geometric tail)
    x = np.exp(-2.5)
    sent = send("pam2", 32.0, "rect", 8000, t_over_tau=2.5, **CLEAN)
    chain = run(link_of("pam2", 32.0, "none"), sent.samples)
    budget = Figures(chain.total, chain.context()).budget()
    assert budget.isi_pct == pytest.approx(100 * x / (1 - x), abs=3.0)


def test_a_skewed_carrier_takes_the_sine_of_half_the_skew():
    # the loop shares the skew between the rails: I + Q tan(s/2), Q + I tan(s/2) (derived)
    budget = figures_of("qpsk", iq_skew_deg=12.0, **CLEAN).budget()
    assert budget.iq_pct == pytest.approx(100 * np.tan(np.radians(6.0)), abs=1.5)


@pytest.mark.parametrize(
    "defects", [{"snr_db": 18.0}, {"snr_db": 25.0, "echoes": ((0.7, 0.2),), "jitter_rms_ui": 0.03}]
)
def test_the_parts_and_the_opening_sum_to_100(defects):
    figures = figures_of("qpsk", 8000, **defects)
    reading = figures.reading()
    assert reading.opening_at_ber_pct + whole(reading.budget) == pytest.approx(100.0, abs=1e-6)


def test_causes_that_a_link_cannot_have_are_not_known():
    budget = figures_of("pam2", 6000, snr_db=20.0).budget()
    assert budget.phase_pct is None
    assert budget.iq_pct is None


def test_uneven_levels_are_levels_and_no_limiter():
    rng = np.random.default_rng(5)
    symbols = np.array([-3.0, -0.7, 1.3, 3.0])[rng.integers(0, 4, 20_000)]
    impulses = np.zeros(4 * symbols.size)
    impulses[::4] = symbols
    wave = np.convolve(impulses, raised_cosine(np.arange(-40, 41) / 4, 0.5), mode="same")
    samples = (0.2 * wave + 0.004 * rng.standard_normal(wave.size)).astype(np.float32)
    chain = run(link_of("pam4", 4.0, "rc:0.5"), samples)
    figures = Figures(chain.total, chain.context())
    # the least spacing, 1.7, against the mean of 2
    assert figures.budget().levels_pct == pytest.approx(15.0, abs=3.0)
    assert figures.budget().clipping_pct < 2.0


CASES = {
    "echo and noise": ("qpsk", {"isi": {"echoes": ((1.4, 0.15 - 0.1j),)}, "noise": {"snr_db": 26.0}}),
    "jitter and echo": ("pam2", {"timing": {"jitter_rms_ui": 0.03}, "isi": {"echoes": ((2.0, -0.15),)}}),
    "skew, phase noise, noise": (
        "16qam",
        {"iq": {"iq_skew_deg": 3.0}, "phase": {"phase_noise_deg": 0.1}, "noise": {"snr_db": 33.0}},
    ),
    "clipping": ("qpsk", {"clipping": {"clipping": "soft", "clip_at": 0.75, "gain": 0.6}}),
}


@pytest.mark.parametrize("name", CASES)
def test_a_part_is_what_the_stream_gains_that_is_made_without_its_cause(name):
    scheme, causes = CASES[name]
    together = CLEAN | {"gain": 0.3} | {key: value for changes in causes.values() for key, value in changes.items()}
    figures = figures_of(scheme, **together)
    opening = figures.reading(whole=False).opening_at_ber_pct
    budget = figures.budget()
    random = [cause for cause in causes if cause in ("noise", "timing", "phase")]
    groups = [[cause] for cause in causes if cause not in random] + ([random] if random else [])
    for group in groups:
        rest = CLEAN | {"gain": together["gain"]}
        for cause, changes in causes.items():
            if cause not in group:
                rest |= changes
        gained = figures_of(scheme, **rest).reading(whole=False).opening_at_ber_pct - opening
        assert sum(getattr(budget, f"{cause}_pct") for cause in group) == pytest.approx(gained, abs=3.0), group
