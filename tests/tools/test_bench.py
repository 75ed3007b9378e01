import json
import subprocess
import sys
from itertools import count
from pathlib import Path

import numpy as np
import pytest

from tools import bench

BENCH = Path(__file__).parents[2] / "tools" / "bench.py"


def fake(name, size, calls, against=None):
    def prepare(given):
        return lambda: calls.append((name, given))

    return bench.Benchmark(name, "a fake", "samples", size, prepare, against)


def scripted(durations):
    """A clock by which the timed stretches last the given seconds, one after the other."""
    readings = []
    now = 0.0
    for duration in durations:
        readings += [now, now + duration]
        now += duration + 1.0
    return iter(readings).__next__


def test_the_best_round_counts_and_ratios_come_from_the_same_run(monkeypatch):
    monkeypatch.setattr(bench, "ROUNDS", 2)
    calls = []
    ours, theirs = fake("ours", 600, calls, "theirs"), fake("theirs", 100, calls)
    # Rounds go through both in turn: theirs 2 s then 1 s, ours 3 s then 4 s.
    results = bench.measure([theirs, ours], clock=scripted([2.0, 3.0, 1.0, 4.0]))
    assert [result["rate"] for result in results] == [100.0, 200.0]
    assert [result["ratio"] for result in results] == [None, 2.0]
    assert [result["spread"] for result in results] == pytest.approx([1.0, 1 / 3])
    assert [name for name, _ in calls] == ["theirs", "ours", "theirs", "ours", "theirs", "ours"]


def test_quick_takes_smaller_inputs_and_counts_them():
    calls = []
    (result,) = bench.measure([fake("ours", 800, calls)], quick=True, clock=map(float, count()).__next__)
    assert {size for _, size in calls} == {100}
    assert result["rate"] == 100.0
    assert result["rounds"] == bench.QUICK_ROUNDS


def test_what_cannot_run_is_null_with_its_reason_and_the_rest_goes_on():
    def prepare(_):
        raise bench.Unavailable("not installed here")

    absent = bench.Benchmark("theirs", "a fake", "samples", 10, prepare)
    results = bench.measure([absent, fake("ours", 10, [], "theirs")], quick=True)
    assert results[0]["rate"] is None
    assert results[0]["missing"] == "not installed here"
    assert results[1]["rate"] > 0
    assert results[1]["ratio"] is None
    assert "not installed here" in bench.table(results)


def test_only_brings_the_reference_along_and_refuses_unknown_names():
    benchmarks = [fake("theirs", 1, []), fake("other", 1, []), fake("ours", 1, [], "theirs")]
    assert [b.name for b in bench.chosen(["ours"], benchmarks)] == ["theirs", "ours"]
    assert bench.chosen([], benchmarks) == benchmarks
    with pytest.raises(ValueError, match=r"'our'.*theirs, other, ours"):
        bench.chosen(["our"], benchmarks)


def test_names_are_unique_and_every_reference_exists():
    benchmarks = (*bench.REFERENCES, *bench.PROJECT, *bench.MEASUREMENTS)
    names = [benchmark.name for benchmark in benchmarks]
    assert len(set(names)) == len(names)
    assert {benchmark.against for benchmark in benchmarks} - {None} <= set(names)


@pytest.mark.parametrize("pair", [(bench.lfilter, bench.oaconvolve), (bench.lfilter_complex, bench.oaconvolve_complex)])
def test_the_filters_compared_do_the_same_work(pair):
    direct, other = (prepare(5000)() for prepare in pair)
    assert direct.dtype == other.dtype
    np.testing.assert_allclose(direct[40:], other[20:-20], atol=1e-5)  # one delays by 20 samples, the other does not


def test_symtrack_locks_on_the_stream_it_is_timed_with():
    """Unlocked, the points would lie anywhere; locked, on a circle (its own carrier phase: any turn of it)."""
    import liquid

    symbols = liquid.symtrack(ftype="rrcos", k=4, m=9, beta=0.35, ms="qpsk").execute(bench.qpsk_stream(80000))
    assert symbols.size == 20000
    settled = symbols[-4000:]
    fourth = np.mean((settled / np.abs(settled)) ** 4)
    assert np.std(np.abs(settled)) < 0.05
    assert np.abs(fourth) > 0.98


def test_json_is_all_that_stands_on_standard_output():
    command = [sys.executable, BENCH, "--quick", "--json", "--only", "histogram2d"]
    done = subprocess.run(command, capture_output=True, text=True, check=True, stdin=subprocess.DEVNULL)
    document = json.loads(done.stdout)
    assert [result["name"] for result in document["results"]] == ["histogram2d"]
    assert document["results"][0]["rate"] > 0
    assert document["machine"]["numpy"] == np.__version__
    assert document["measurements"] == []


def test_an_unknown_name_is_one_error_with_status_2():
    done = subprocess.run([sys.executable, BENCH, "--only", "histogram"], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "'histogram'" in done.stderr
    assert "Traceback" not in done.stderr


# -- what the project's own half compares -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ours", "theirs", "tolerance"),
    [
        (bench.rail_filter, bench.lfilter, 1e-5),
        (bench.decimator, bench.upfirdn, 1e-5),
    ],
)
def test_our_filters_do_the_work_of_those_they_are_compared_with(ours, theirs, tolerance):
    (out,) = ours(5000)()
    np.testing.assert_allclose(out, theirs(5000)()[: out.size], atol=tolerance)


def test_the_chain_is_timed_with_every_figure_and_on_the_stream_that_symtrack_gets():
    document = json.loads(bench.chain(80_000, 2, 4)())
    assert document["source"]["samples"] == 80_000
    assert document["lock"]["timing"] is True
    assert document["reading"]["symbols"] > 19_500
    assert document["speed"]["coverage_pct"] == pytest.approx(25.0, abs=1.0)


def test_a_command_that_fails_is_told_with_its_status():
    with pytest.raises(bench.Unavailable, match="ended with 2"):
        bench.command(["replay", "no-such-file.wav"])


def test_the_memory_told_is_the_command_s_and_not_the_benchmark_s():
    ballast = np.ones(60_000_000)  # 480 MB in this process
    seconds, peak, busy = bench.command(["--version"])
    assert ballast[-1] == 1.0
    assert 0.0 < busy < seconds + 5.0
    assert 5.0 < peak < 250.0


def test_measurements_that_cannot_be_made_are_told_and_the_rest_goes_on():
    def absent(_):
        raise bench.Unavailable("not here")

    rows = [{"case": "one", "value": 2.0, "unit": "UI", "against": "theory", "ratio": 0.5, "bound": 3.0}]
    results = bench.take(
        [bench.Measurement("a", "a fake", absent), bench.Measurement("b", "another", lambda quick: rows)], True, str
    )
    assert results[0]["rows"] == []
    assert results[0]["missing"] == "not here"
    assert results[1]["rows"] == rows
    text = bench.measured_table(results)
    assert "not here" in text
    assert "0.500 x theory" in text


# -- the theory that timing is held against -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("rolloff", "rms"), [(0.2, 0.005452), (0.25, 0.005418), (0.35, 0.005331), (0.5, 0.005159), (1.0, 0.004402)]
)
def test_the_bound_on_timing(rolloff, rms):
    """BnT 0.01, 20 dB: evaluated beforehand from the published formula and checked by a data-aided estimator's spread."""
    assert bench.timing_bound(rolloff, 0.01, 100.0) ** 0.5 == pytest.approx(rms, rel=1e-3)


@pytest.mark.parametrize(("rolloff", "rms"), [(0.2, 0.00734), (0.35, 0.00794), (0.5, 0.00900)])
def test_the_theory_of_the_mueller_muller_loop(rolloff, rms):
    """BnT 0.01, 20 dB; at roll-off 0.35 it stands 3.46 dB above the bound."""
    variance = bench.mueller_muller_variance(rolloff, 0.01, 100.0)
    assert variance**0.5 == pytest.approx(rms, rel=2e-3)
    if rolloff == 0.35:
        assert 10 * np.log10(variance / bench.timing_bound(rolloff, 0.01, 100.0)) == pytest.approx(3.46, abs=0.01)


@pytest.mark.parametrize(
    ("rolloff", "power"),
    [(0.2, 0.208926), (0.25, 0.175624), (0.35, 0.119415), (0.5, 0.058988), (0.75, 0.009652), (1.0, 0.0)],
)
def test_gardner_pattern_noise_has_its_power_and_none_at_zero_frequency(rolloff, power):
    """2 (1 - a/2) - 4 p(1/2)^2; the spectrum is 0 at 0."""
    lags = np.arange(-200, 201)
    correlation = bench.gardner_correlation(rolloff, None, lags)
    assert correlation[200] == pytest.approx(power, abs=2e-5)
    assert abs(correlation.sum()) < 2e-4


@pytest.mark.parametrize("snr", [None, 10.0, 2.0])
def test_the_gardner_correlation_is_that_of_a_simulated_detector(snr):
    """By another route: symbols and noise through a raised-cosine and a root-raised-cosine filter at 2 samples a symbol."""
    from dsp.pulses import raised_cosine, root_raised_cosine

    rng = np.random.default_rng(5)
    n, rolloff = 200_000, 0.35
    t = np.arange(-60, 61) / 2
    impulses = np.zeros(2 * n)
    impulses[::2] = rng.choice([-1.0, 1.0], n)
    wave = np.convolve(impulses, raised_cosine(t, rolloff), mode="same")
    if snr is not None:
        # white noise at 2 samples a symbol, of variance 1/snr behind the filter
        wave += np.convolve(
            rng.standard_normal(2 * n) * (2 / snr) ** 0.5, root_raised_cosine(t, rolloff) / 2, mode="same"
        )
    output = wave[1:-1:2] * (wave[2::2] - wave[:-2:2])
    output -= output.mean()
    for lag in (0, 1, 2, 3):
        simulated = float(output[lag:] @ output[: output.size - lag]) / output.size
        (theory,) = bench.gardner_correlation(rolloff, snr, np.array([lag]))
        assert simulated == pytest.approx(theory, abs=0.02 * bench.gardner_correlation(rolloff, snr, np.array([0]))[0])


@pytest.mark.parametrize("detector", ["derivative", "mueller-muller", "gardner"])
def test_settled_loops_stay_near_their_theory(detector):
    """15 dB, BnT 0.01: 60 000 symbols are 1200 independent looks, 2 % in the rms."""
    snr = 10**1.5
    theory = {
        "derivative": bench.timing_bound(0.35, 0.01, snr),
        "mueller-muller": bench.mueller_muller_variance(0.35, 0.01, snr),
        "gardner": bench.gardner_variance(0.35, 0.01, snr, rails=2),
    }[detector]
    errors = bench.timing_errors("qpsk", detector, 0.35, 15.0, 0.01, 60_000, seed=1)
    assert errors.std() / theory**0.5 == pytest.approx(1.0, abs=0.12)
    assert abs(errors.mean()) < (0.01 if detector == "gardner" else 0.002)


def test_the_lateness_that_the_chain_takes_out_is_the_one_measured():
    from dsp.chain import _GARDNER_LATENESS

    for rolloff, value in zip(*_GARDNER_LATENESS, strict=True):
        if rolloff in (0.35, 0.5):
            for scheme, rails in (("pam2", 1), ("qpsk", 2)):
                errors = bench.timing_errors(scheme, "gardner", rolloff, None, 0.005, 120_000, seed=3)
                assert errors.mean() / 0.005 == pytest.approx(value / rails, rel=0.25)
