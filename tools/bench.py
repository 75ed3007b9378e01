"""The benchmark: how fast each stage and the whole chain are, next to reference libraries, in one run on one machine.

    python tools/bench.py               everything, as a table
    python tools/bench.py --json        the same as one JSON document on standard output
    python tools/bench.py --quick       smaller inputs, fewer rounds: about a fifth of the time
    python tools/bench.py --only NAME   that one and what it is compared with; may be repeated

The rounds go through all benchmarks in turn, so that a slow spell of the machine hits them alike; the best round
counts. Inputs are made before, and one call goes ahead uncounted. References run on one thread. Nothing is asserted.
"""

import argparse
import gc
import json
import platform
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from importlib import metadata
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

ROUNDS, QUICK_ROUNDS = 7, 3
QUICK_SHARE = 8


class Unavailable(Exception):
    """The benchmark cannot run here; the text says why."""


@dataclass(frozen=True, slots=True)
class Benchmark:
    """One thing to time.

    Attributes
    ----------
    name
        What ``--only`` takes.
    what
        What is timed, with its settings.
    unit
        What is counted: ``samples``, ``outputs`` or ``points``.
    size
        How many of them a call handles; ``--quick`` takes an eighth.
    prepare
        Takes the size, makes the inputs, returns the call to time. Raises `Unavailable`.
    against
        Name of the benchmark that it is compared with, or None.
    """

    name: str
    what: str
    unit: str
    size: int
    prepare: Callable[[int], Callable[[], Any]]
    against: str | None = None


@cache
def real_noise(size: int) -> NDArray[np.float32]:
    """Gaussian noise, shape (size,), the same each time."""
    return np.random.default_rng(1).standard_normal(size, dtype=np.float32)


@cache
def complex_noise(size: int) -> NDArray[np.complex64]:
    """Circular Gaussian noise, shape (size,), the same each time."""
    return np.asarray(real_noise(2 * size).view(np.complex64))


@cache
def low_pass() -> NDArray[np.float32]:
    """41 taps of a Hamming-windowed low-pass at a quarter of the sample rate."""
    from scipy.signal import firwin

    return firwin(41, 0.5).astype(np.float32)


# --- references: liquid-dsp -----------------------------------------------------------------------


@cache
def qpsk_stream(size: int) -> NDArray[np.complex64]:
    """QPSK, root raised cosine 0.35, 4 samples a symbol, without noise; made by liquid-dsp."""
    try:
        import liquid
    except ImportError as error:
        raise Unavailable("liquid-dsp is not installed: pip install -e .[test]") from error
    samples: NDArray[np.complex64] = liquid.symstreamr(ftype="rrcos", bw=0.25, m=9, beta=0.35, ms="qpsk").generate(size)
    return samples


def symtrack(size: int) -> Callable[[], Any]:
    """liquid-dsp's tracking loop in C: gain, matched filter and timing, equaliser, carrier; in blocks of 65536 samples.

    Bandwidth 0.9 is what the library sets. One call of the C function for all samples at once is no faster.
    """
    samples = qpsk_stream(size)
    import liquid

    blocks = [samples[i : i + 65536] for i in range(0, size, 65536)]

    def call() -> None:
        loop = liquid.symtrack(ftype="rrcos", k=4, m=9, beta=0.35, ms="qpsk")
        for block in blocks:
            loop.execute(block)

    return call


# --- references: scipy and numpy ------------------------------------------------------------------


def lfilter(size: int) -> Callable[[], Any]:
    """Direct-form filter."""
    from scipy import signal

    x, taps = real_noise(size), low_pass()
    return lambda: signal.lfilter(taps, np.float32(1.0), x)


def lfilter_complex(size: int) -> Callable[[], Any]:
    """Direct-form filter, complex signal."""
    from scipy import signal

    x, taps = complex_noise(size), low_pass()
    return lambda: signal.lfilter(taps, np.float32(1.0), x)


def oaconvolve(size: int) -> Callable[[], Any]:
    """Overlap-add convolution."""
    from scipy import signal

    x, taps = real_noise(size), low_pass()
    return lambda: signal.oaconvolve(x, taps, mode="same")


def oaconvolve_complex(size: int) -> Callable[[], Any]:
    """Overlap-add convolution, complex signal."""
    from scipy import signal

    x, taps = complex_noise(size), low_pass()
    return lambda: signal.oaconvolve(x, taps, mode="same")


def fftconvolve(size: int) -> Callable[[], Any]:
    """Convolution by one transform of the whole."""
    from scipy import signal

    x, taps = real_noise(size), low_pass()
    return lambda: signal.fftconvolve(x, taps, mode="same")


def convolve(size: int) -> Callable[[], Any]:
    """Direct convolution."""
    x, taps = real_noise(size), low_pass()
    return lambda: np.convolve(x, taps, mode="same")


@cache
def instants(size: int) -> NDArray[np.float64]:
    """One instant fewer than samples, evenly spaced, none on a sample."""
    # numpy.interp is half as fast when there are as many instants as samples: it then tabulates all slopes first.
    at: NDArray[np.float64] = np.arange(size - 1) * ((size - 2) / size) + 0.3
    return at


def interp(size: int) -> Callable[[], Any]:
    """Linear interpolation; the input is float64 already, as numpy would make it."""
    x, grid, at = real_noise(size).astype(np.float64), np.arange(size, dtype=np.float64), instants(size)
    return lambda: np.interp(at, grid, x)


def cubic_spline(size: int) -> Callable[[], Any]:
    """Cubic spline: fitted to the samples, then evaluated."""
    from scipy.interpolate import CubicSpline

    x, grid, at = real_noise(size).astype(np.float64), np.arange(size, dtype=np.float64), instants(size)
    return lambda: CubicSpline(grid, x)(at)


def histogram2d(size: int) -> Callable[[], Any]:
    """Counting points into 128 columns of time and 512 rows of amplitude."""
    columns = np.random.default_rng(2).random(size)
    x = real_noise(size).astype(np.float64)
    return lambda: np.histogram2d(columns, x, bins=(128, 512), range=((0.0, 1.0), (-4.0, 4.0)))


REFERENCES = (
    Benchmark(
        "symtrack",
        "liquid-dsp symtrack_cccf in C: QPSK, RRC 0.35 (9 symbols a side), 4 samples a symbol, bandwidth 0.9",
        "samples",
        4_000_000,
        symtrack,
    ),
    Benchmark("lfilter", "scipy.signal.lfilter: real FIR, 41 taps, float32", "samples", 4_000_000, lfilter),
    Benchmark("oaconvolve", "scipy.signal.oaconvolve: same filter", "samples", 4_000_000, oaconvolve, "lfilter"),
    Benchmark("fftconvolve", "scipy.signal.fftconvolve: same filter", "samples", 4_000_000, fftconvolve, "lfilter"),
    Benchmark("convolve", "numpy.convolve: same filter", "samples", 4_000_000, convolve, "lfilter"),
    Benchmark(
        "lfilter-complex",
        "scipy.signal.lfilter: same filter, complex64 signal",
        "samples",
        2_000_000,
        lfilter_complex,
    ),
    Benchmark(
        "oaconvolve-complex",
        "scipy.signal.oaconvolve: same filter, complex64 signal",
        "samples",
        2_000_000,
        oaconvolve_complex,
        "lfilter-complex",
    ),
    Benchmark("interp", "numpy.interp: linear, real, one output a sample, float64", "outputs", 2_000_000, interp),
    Benchmark(
        "cubic-spline",
        "scipy CubicSpline: fit and evaluate, real, one output a sample, float64",
        "outputs",
        2_000_000,
        cubic_spline,
    ),
    Benchmark("histogram2d", "numpy.histogram2d: 128 columns, 512 rows, float64", "points", 1_000_000, histogram2d),
)

# --- the project's own: kernels, stages, the whole chain ------------------------------------------

PROJECT: tuple[Benchmark, ...] = ()

# --------------------------------------------------------------------------------------------------


def chosen(names: Sequence[str], benchmarks: Sequence[Benchmark]) -> list[Benchmark]:
    """Those named, and what they are compared with, in their order; all if none is named.

    Raises ValueError for an unknown name.
    """
    if not names:
        return list(benchmarks)
    by_name = {benchmark.name: benchmark for benchmark in benchmarks}
    for name in names:
        if name not in by_name:
            raise ValueError(f"no benchmark is called {name!r}; there are {', '.join(by_name)}")
    wanted = {*names} | {against for name in names if (against := by_name[name].against)}
    return [benchmark for benchmark in benchmarks if benchmark.name in wanted]


def measure(
    benchmarks: Sequence[Benchmark],
    quick: bool = False,
    progress: Callable[[str], None] = lambda _: None,
    clock: Callable[[], float] = time.perf_counter,
) -> list[dict[str, Any]]:
    """Best rate of each benchmark and its ratio to what it is compared with; None, and why, where it could not run."""
    rounds = QUICK_ROUNDS if quick else ROUNDS
    calls: dict[str, Callable[[], Any]] = {}
    missing: dict[str, str] = {}
    sizes = {b.name: b.size // QUICK_SHARE if quick else b.size for b in benchmarks}
    for benchmark in benchmarks:
        progress(f"preparing {benchmark.name}")
        try:
            calls[benchmark.name] = benchmark.prepare(sizes[benchmark.name])
            calls[benchmark.name]()
        except Unavailable as error:
            calls.pop(benchmark.name, None)
            missing[benchmark.name] = str(error)
    seconds: dict[str, list[float]] = {name: [] for name in calls}
    for turn in range(rounds):
        for name, call in calls.items():
            progress(f"round {turn + 1}/{rounds}: {name}")
            gc.collect()
            began = clock()
            call()
            seconds[name].append(clock() - began)
    rates = {name: sizes[name] / min(times) for name, times in seconds.items()}
    results = []
    for benchmark in benchmarks:
        rate, reference = rates.get(benchmark.name), rates.get(benchmark.against or "")
        results.append(
            {
                "name": benchmark.name,
                "what": benchmark.what,
                "unit": f"{benchmark.unit}/s",
                "rate": rate,
                "size": sizes[benchmark.name],
                "rounds": rounds,
                "spread": max(seconds[benchmark.name]) / min(seconds[benchmark.name]) - 1.0 if rate else None,
                "against": benchmark.against,
                "ratio": rate / reference if rate and reference else None,
                "missing": missing.get(benchmark.name),
            }
        )
    return results


def machine() -> dict[str, Any]:
    """What the figures depend on: processor and versions."""
    processor = platform.processor() or platform.machine()
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines()
        processor = next(line.partition(":")[2].strip() for line in lines if line.startswith("model name"))
    except (OSError, StopIteration):
        pass
    versions: dict[str, str | None] = {}
    for name in ("numpy", "scipy", "numba", "liquid-dsp"):
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            versions[name] = None
    return {"processor": processor, "system": platform.platform(), "python": platform.python_version(), **versions}


def table(results: Sequence[dict[str, Any]]) -> str:
    """The results as text, a line each."""
    lines = [f"{'name':<19} {'M/s':>9}  {'ratio':>22}  what"]
    for result in results:
        rate = "-" if result["rate"] is None else f"{result['rate'] / 1e6:.2f}"
        ratio = "" if result["ratio"] is None else f"{result['ratio']:.2f} x {result['against']}"
        what = f"{result['what']} ({result['unit']})" if result["missing"] is None else result["missing"]
        lines.append(f"{result['name']:<19} {rate:>9}  {ratio:>22}  {what}")
    return "\n".join(lines)


def show(text: str) -> None:
    """Overwrite the progress line on a terminal; elsewhere nothing. Empty text clears it."""
    if sys.stderr.isatty():
        print("\r\x1b[2K" + text, end="", file=sys.stderr, flush=True)


def main(arguments: Sequence[str]) -> int:
    """Run what was asked for; exit status 2 for an unknown name."""
    parser = argparse.ArgumentParser(prog="bench.py", description="Times every stage next to reference libraries.")
    parser.add_argument("--quick", action="store_true", help="smaller inputs and fewer rounds")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    parser.add_argument("--only", action="append", default=[], metavar="NAME", help="this one and its reference")
    options = parser.parse_args(arguments)
    try:
        benchmarks = chosen(options.only, (*REFERENCES, *PROJECT))
    except ValueError as error:
        parser.error(str(error))
    with threadpool_limits(1):
        results = measure(benchmarks, options.quick, show)
    show("")
    if options.json:
        print(json.dumps({"machine": machine(), "quick": options.quick, "results": results}, indent=1))
    else:
        print("\n".join(f"{key}: {value}" for key, value in machine().items()))
        print(table(results))
    return 0


if __name__ == "__main__":
    try:
        sys.exit(main(sys.argv[1:]))
    except KeyboardInterrupt:
        sys.exit(130)
