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
    benchmarks = (*bench.REFERENCES, *bench.PROJECT)
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


def test_an_unknown_name_is_one_error_with_status_2():
    done = subprocess.run([sys.executable, BENCH, "--only", "histogram"], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "'histogram'" in done.stderr
    assert "Traceback" not in done.stderr
