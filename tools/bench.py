"""The benchmark: how fast each stage and the whole chain are, next to reference libraries, in one run on one machine.

    python tools/bench.py               everything, as a table
    python tools/bench.py --json        the same as one JSON document on standard output
    python tools/bench.py --quick       smaller inputs, fewer rounds: about a fifth of the time
    python tools/bench.py --only NAME   that one and what it is compared with; may be repeated
    python tools/bench.py --error-rate  estimated error rates next to counted ones, up to 1e7 symbols a link: an hour
    python tools/bench.py --coverage N  how many of N runs' 95 % intervals held the truth, figure by figure: an hour for 400

The rounds go through all benchmarks in turn, so that a slow spell of the machine hits them alike; the best round
counts. Inputs are made before, and one call goes ahead uncounted. References run on one thread. Behind the rates come
what is measured once: memory, a whole command's time, the loops' timing against bound and theory. All of it is measured
in that run; nothing is asserted.
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
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from threadpoolctl import threadpool_limits

if TYPE_CHECKING:
    from dsp.tracking import Detector

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
        What is counted: ``samples``, ``outputs``, ``points`` or ``products``.
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


def rail_filter(size: int) -> Callable[[], Any]:
    """The streaming filter, one rail."""
    from dsp.filters import RailFilter

    x, stage = real_noise(size), RailFilter(low_pass().astype(np.float64), 1)
    return lambda: stage.push((x,))


def rail_filter_complex(size: int) -> Callable[[], Any]:
    """The streaming filter, two rails."""
    from dsp.filters import RailFilter, split

    rails, stage = split(complex_noise(size)), RailFilter(low_pass().astype(np.float64), 2)
    return lambda: stage.push(rails)


def decimator(size: int) -> Callable[[], Any]:
    """The same filter, every fourth output."""
    from dsp.filters import RailFilter

    x, stage = real_noise(size), RailFilter(low_pass().astype(np.float64), 1, decimate=4)
    return lambda: stage.push((x,))


def upfirdn(size: int) -> Callable[[], Any]:
    """The same filter, every fourth output, by scipy."""
    from scipy import signal

    x, taps = real_noise(size), low_pass()
    return lambda: signal.upfirdn(taps, x, down=4)


def interpolate(size: int) -> Callable[[], Any]:
    """Eight-tap least-squares interpolation at instants of any spacing."""
    from dsp._kernels.raster import resample_real
    from dsp.interpolation import weights

    x = real_noise(size + 16)
    at = instants(size + 1) + 4.0
    out = np.empty((1, at.size - 1), np.float32)
    table = weights(0.25)
    return lambda: resample_real(x, table, at, 0.0, 1.0, 0.0, out)


def interpolate_eight(size: int) -> Callable[[], Any]:
    """Eight points a symbol of both rails, the carrier taken out: what the eye is made from."""
    from dsp._kernels.lanes import LANES, SPAN
    from dsp._kernels.raster import resample_eight
    from dsp.interpolation import spread_weights

    count = size // (2 * LANES)
    x_i, x_q = real_noise(8 * count + 64)[: 4 * count + 64], real_noise(8 * count + 64)[4 * count :]
    at = 8.3 + 4.0003 * np.arange(count + 1)
    cycles = 1e-4 * np.arange(count + 1)
    table = spread_weights(0.18, 0.5, LANES, SPAN)
    waves = [np.empty((LANES, count), np.float32) for _ in range(2)]
    one, nought = np.float32(1.0), np.float32(0.0)
    return lambda: resample_eight(x_i, x_q, table, at, 0.0, cycles, 0.0, True, one, one, nought, nought, *waves)


def lagged_sums(size: int) -> Callable[[], Any]:
    """21 lags of decided levels with 8 phases of the wave, as a matrix product with copies of every lag."""
    levels, wave = lagged_inputs(size)
    lags = range(21)

    sums = np.empty((21, 8), np.float32)

    def call() -> None:
        for at in range(0, wave.shape[1] - 20, 4096):
            part = wave[:, at : min(at + 4096, wave.shape[1] - 20)]
            copies = np.stack([levels[at + lag : at + lag + part.shape[1]] for lag in lags])
            np.matmul(copies, part.T, out=sums)

    return call


def lagged_inputs(size: int) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Two-level symbols and a wave of 8 phases a symbol, ``size`` products of 21 lags."""
    count = size // (21 * 8)
    levels = np.random.default_rng(5).choice(np.array([-1.0, 1.0], np.float32), count + 20)
    return levels, np.ascontiguousarray(real_noise(8 * (count + 20)).reshape(8, -1))


def pattern_sums(size: int) -> Callable[[], Any]:
    """The same sums by the kernel."""
    from dsp._kernels.raster import add_cross

    levels, wave = lagged_inputs(size)
    sums = np.zeros((21, 8))
    return lambda: add_cross(wave, levels, 20, wave.shape[1], 0, 21, sums)


def class_raster(size: int) -> Callable[[], Any]:
    """Traces of two-level symbols: 8 phases a symbol interpolated to 64 columns, 4 classes, 1024 rows."""
    from dsp._kernels.raster import fill
    from dsp.interpolation import expander

    count = size // 64
    wave = np.random.default_rng(3).uniform(-1.2, 1.2, (8, count + 16)).astype(np.float32)
    classes = np.random.default_rng(4).integers(0, 2, count + 16).astype(np.int8)
    starts = np.arange(0, count, 512)
    pieces = np.stack((8 + starts, np.minimum(512, count - starts)), axis=1)
    counts = np.zeros((64, 4 * 1024), np.uint32)
    weigh = expander(8, 0.2)
    return lambda: fill(wave, pieces, classes, 2, True, weigh, 1024, 200.0, 512.0, counts, counts)


def loops(size: int) -> Callable[[], Any]:
    """Timing and carrier loops on filtered QPSK at 4 samples a symbol, the derivative detector."""
    from dataclasses import replace

    samples = qpsk_stream(size)
    filtered, start = acquired_stream(samples)
    from dsp.link import find_scheme
    from dsp.tracking import Tracker, tables_for

    def call() -> None:
        tracker = Tracker(
            find_scheme("qpsk"), replace(start), tables_for(4.0, 0.675), timing_bandwidth=0.005, carrier_bandwidth=0.005
        )
        for i in range(0, size, 32768):
            tracker.push(tuple(rail[i : i + 32768] for rail in filtered))

    return call


def acquired_stream(samples: NDArray[np.complex64]) -> tuple[Any, Any]:
    """A QPSK stream (RRC 0.35, 4 samples a symbol) behind its matched filter, and where its loops begin."""
    from dsp.acquisition import Acquired, acquire
    from dsp.filters import Oscillator
    from dsp.frontend import FrontEnd, matched_filter, plan
    from dsp.link import Link, find_scheme
    from dsp.pulses import Pulse

    link = Link(find_scheme("qpsk"), 4.0, 1.0, Pulse("rrc", 0.35))
    front = plan(link, complex_in=True)
    rails = FrontEnd(link, front).push(samples)
    head = tuple(rail[:16384] for rail in rails)
    found = acquire(link, front, head, detector=None, timing_bandwidth=0.005, carrier_bandwidth=0.005)
    if not isinstance(found, Acquired):
        raise Unavailable(f"the stream was not found: {found.reason}")
    return matched_filter(link, front).push(Oscillator(found.carrier).push(rails)), found.start


@cache
def scratch() -> Path:
    """A folder for recordings, removed at the end."""
    import atexit
    import tempfile

    folder = tempfile.TemporaryDirectory(prefix="bench-")
    atexit.register(folder.cleanup)
    return Path(folder.name)


def qpsk_file(size: int) -> Path:
    """The QPSK stream as a raw file of complex float32."""
    path = scratch() / f"qpsk-{size}.cf32"
    if not path.exists():
        qpsk_stream(size).tofile(path)
    return path


def chain(size: int, threads: int, every: int) -> Callable[[], Any]:
    """A raw file in, the JSON document out, in this process."""
    from dsp.chain import ChainOptions
    from dsp.identify import Wanted
    from dsp.link import find_scheme
    from dsp.pulses import Pulse
    from monitor.document import to_json
    from monitor.session import run
    from monitor.sources import SampleOptions, open_source

    path = qpsk_file(size)
    wanted = Wanted(find_scheme("qpsk"), 250_000.0, Pulse("rrc", 0.35))

    def call() -> str:
        with open_source(str(path), SampleOptions(1e6, "cf32_le")) as source:
            outcome = run(source, wanted, ChainOptions(every=every), threads=threads)
        if not outcome.measured:
            raise Unavailable(f"the chain measured nothing: {outcome.reason}")
        return to_json(outcome)

    return call


def _chain_benchmark(threads: int, every: int) -> Benchmark:
    share, more = ("100 %", "") if every == 1 else ("25 %", "-quarter")
    hands = "one thread" if threads == 1 else "two threads"
    return Benchmark(
        f"chain-{threads}{more}",
        f"the whole chain, file to JSON: same stream as complex float32, all figures, {share} of traces, {hands}",
        "samples",
        16_000_000,
        lambda size: chain(size, threads, every),
        "symtrack",
    )


PROJECT: tuple[Benchmark, ...] = (
    Benchmark("rail-filter", "dsp.filters: real FIR, 41 taps", "samples", 4_000_000, rail_filter, "lfilter"),
    Benchmark(
        "rail-filter-complex",
        "dsp.filters: same filter, two rails",
        "samples",
        2_000_000,
        rail_filter_complex,
        "lfilter-complex",
    ),
    Benchmark("upfirdn", "scipy.signal.upfirdn: same filter, every 4th output", "samples", 4_000_000, upfirdn),
    Benchmark("decimator", "dsp.filters: same filter, every 4th output", "samples", 4_000_000, decimator, "upfirdn"),
    Benchmark(
        "resample", "dsp: eight taps, real, one output a sample, float32", "outputs", 2_000_000, interpolate, "interp"
    ),
    Benchmark(
        "resample-eight",
        "dsp: eight points a symbol, two rails, carrier taken out, float32",
        "outputs",
        2_000_000,
        interpolate_eight,
        "interp",
    ),
    Benchmark(
        "lagged-product",
        "numpy: 21 lags with 8 phases, matrix product of stacked copies, one thread",
        "products",
        80_000_000,
        lagged_sums,
    ),
    Benchmark(
        "pattern-sums", "dsp: the same sums without copies", "products", 80_000_000, pattern_sums, "lagged-product"
    ),
    Benchmark(
        "raster",
        "dsp: class raster, 64 columns interpolated from 8 phases, 4 classes of 1024 rows",
        "points",
        4_000_000,
        class_raster,
        "histogram2d",
    ),
    Benchmark(
        "loops",
        "dsp.tracking: timing and carrier behind the matched filter, QPSK",
        "samples",
        4_000_000,
        loops,
        "symtrack",
    ),
    *(_chain_benchmark(threads, every) for threads in (1, 2) for every in (1, 4)),
)

# --- what is measured otherwise: memory, whole commands, the loops' timing -------------------------


@dataclass(frozen=True, slots=True)
class Measurement:
    """Something measured once rather than timed in rounds.

    Attributes
    ----------
    name
        What ``--only`` takes.
    what
        What is measured, with its settings.
    take
        Told whether to be quick; returns rows of ``case``, ``value``, ``unit`` and what the value is held against. Raises
        `Unavailable`.
    """

    name: str
    what: str
    take: Callable[[bool], list[dict[str, Any]]]
    against: str | None = None


# A process begins with the peak of the one that it was forked from: a small one stands between, and tells of its child.
_LAUNCHER = """
import json, resource, subprocess, sys, time
began = time.perf_counter()
done = subprocess.run(sys.argv[1:], stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
seconds = time.perf_counter() - began
used = resource.getrusage(resource.RUSAGE_CHILDREN)
figures = [seconds, used.ru_maxrss, used.ru_utime + used.ru_stime]
print(json.dumps([done.returncode, figures, done.stderr.decode(errors="replace")]))
"""


def command(arguments: Sequence[str]) -> tuple[float, float, float]:
    """Run lidwatch in a process of its own: wall seconds, peak resident memory in MB, processor seconds.

    Raises Unavailable where the system cannot tell or the command fails.
    """
    import subprocess
    from importlib.util import find_spec

    if find_spec("resource") is None:
        raise Unavailable("this system does not tell a process's memory")
    code = "import sys; from monitor.cli import main; sys.exit(main(sys.argv[1:]))"
    told = subprocess.run(
        [sys.executable, "-S", "-c", _LAUNCHER, sys.executable, "-c", code, *arguments],
        cwd=Path(__file__).parents[1],
        stdout=subprocess.PIPE,
        check=True,
    )
    status, (seconds, peak, busy), errors = json.loads(told.stdout)
    if status != 0:
        raise Unavailable(f"lidwatch {' '.join(arguments)} ended with {status}: {errors.strip()[-200:]}")
    # kilobytes on Linux, bytes on macOS
    return seconds, peak / (1e6 if sys.platform == "darwin" else 1e3), busy


def memory(quick: bool) -> list[dict[str, Any]]:
    """Peak memory of a replay, for a file and one ten times as long."""
    size = 2_000_000 // (QUICK_SHARE if quick else 1)
    short = qpsk_stream(size)
    rows: list[dict[str, Any]] = []
    for times in (1, 10):
        path = scratch() / f"memory-{times}.cf32"
        with path.open("wb") as file:
            for _ in range(times):
                file.write(short.tobytes())
        seconds, peak, _ = command(
            ["replay", str(path), "--rate", "1e6", "--format", "cf32", "--symbol-rate", "250e3", "--scheme", "qpsk",
             "--pulse", "rrc:0.35", "--json"]
        )  # fmt: skip
        rows.append({"case": f"{times * size * 8 / 1e6:.0f} MB file", "value": peak, "unit": "MB", "seconds": seconds})
        path.unlink()
    rows[1]["against"], rows[1]["ratio"] = rows[0]["case"], rows[1]["value"] / rows[0]["value"]
    return rows


def replay(quick: bool) -> list[dict[str, Any]]:
    """From command to picture: a minute of a 9600 baud link at 48 kHz, with the link given and found; best of three."""
    import soundfile

    from dsp.pulses import Pulse
    from dsp.transmitter import TransmitSpec, transmit

    seconds = 60 // (QUICK_SHARE if quick else 1)
    sent = transmit(
        TransmitSpec(
            scheme="pam2", symbol_rate_hz=9600.0, sample_rate_hz=48_000.0, pulse=Pulse("rrc", 0.35),
            symbols=9600 * seconds, snr_db=20.0,
        )
    )  # fmt: skip
    path = scratch() / "minute.wav"
    soundfile.write(path, sent.samples, 48_000, subtype="PCM_16")
    picture = ["--picture", str(scratch() / "minute.png")]
    given = ["--symbol-rate", "9600", "--scheme", "pam2", "--pulse", "rrc:0.35"]
    rows = []
    for case, more in (("link given", given), ("link found", [])):
        runs = [command(["replay", str(path), *more, *picture]) for _ in range(4)]
        best = min(runs[1:])
        rows.append(
            {
                "case": f"{seconds} s, {case}",
                "value": best[0],
                "unit": "s",
                "processor_s": best[2],
                "first_s": runs[0][0],
            }
        )
    return rows


def timing_errors(
    scheme_name: str,
    detector: "Detector",
    rolloff: float,
    snr_db: float | None,
    bandwidth: float,
    symbols: int,
    seed: int,
) -> NDArray[np.float64]:
    """Instants of a settled loop less the transmitter's true ones, UI, late positive: 4 samples a symbol, RRC, behind acquisition.

    Raises Unavailable where acquisition finds nothing or the loop slipped.
    """
    from dsp.acquisition import Acquired, acquire
    from dsp.filters import Oscillator
    from dsp.frontend import FrontEnd, matched_filter, plan
    from dsp.link import Link, find_scheme
    from dsp.pulses import Pulse
    from dsp.tracking import Tracker, tables_for
    from dsp.transmitter import TransmitSpec, transmit

    pulse = Pulse("rrc", rolloff)
    sent = transmit(
        TransmitSpec(
            scheme=scheme_name,
            symbol_rate_hz=1.0,
            sample_rate_hz=4.0,
            pulse=pulse,
            symbols=symbols,
            snr_db=snr_db,
            seed=seed,
        )
    )
    link = Link(find_scheme(scheme_name), 4.0, 1.0, pulse)
    carrier = link.scheme.kind == "carrier"
    front = plan(link, complex_in=carrier)
    rails = FrontEnd(link, front).push(sent.samples)
    found = acquire(
        link, front, tuple(rail[:16384] for rail in rails), detector=detector, timing_bandwidth=bandwidth, carrier_bandwidth=0.005
    )  # fmt: skip
    if not isinstance(found, Acquired):
        raise Unavailable(f"{scheme_name} at roll-off {rolloff}: {found.reason}")
    filters = matched_filter(link, front)
    tracker = Tracker(
        link.scheme,
        found.start,
        tables_for(4.0, 0.5 * (1 + rolloff)),
        timing_bandwidth=bandwidth,
        carrier_bandwidth=0.005,
    )
    track = tracker.push(filters.push(Oscillator(found.carrier).push(rails) if carrier else rails))
    at = track.instants[:-1] - filters.delay
    first = round((at[0] - sent.instants[0]) / 4.0)
    n = min(at.size, sent.instants.size - first)
    errors = (at[:n] - sent.instants[first : first + n]) / 4.0
    settled: NDArray[np.float64] = errors[round(15 / bandwidth) :]
    if np.abs(settled).max() > 0.5:
        raise Unavailable(f"{detector} slipped at roll-off {rolloff}")
    return settled


def timing_bound(rolloff: float, bandwidth: float, snr: float) -> float:
    """Variance in UI^2 that no timing loop of BnT ``bandwidth`` beats at Es/N0 ``snr``, RRC pulse.

    The modified Cramer-Rao bound: A. N. D'Andrea, U. Mengali and R. Reggiannini, IEEE Trans. Commun. 42(2/3/4), 1994,
    with 1/(2 BnT) symbols observed.
    """
    xi = 1 / 12 + rolloff**2 * (0.25 - 2 / np.pi**2)
    return float(bandwidth / (4 * np.pi**2 * xi * snr))


def mueller_muller_variance(rolloff: float, bandwidth: float, snr: float) -> float:
    """Linear theory of the Mueller-Mueller loop: white detector noise over its slope; M. Rice, 2009, eq. 8.50."""
    slope = -np.pi / 2 if rolloff == 0.5 else -2 * np.cos(np.pi * rolloff) / (1 - 4 * rolloff**2)
    return float(2 * bandwidth / snr / slope**2)


def gardner_correlation(rolloff: float, snr: float | None, lags: NDArray[np.int64]) -> NDArray[np.float64]:
    """Autocorrelation at the lock point of Gardner's detector on one binary rail of unit power, by whole symbols.

    The output is s(k-1/2) d(k), d the strobes' difference, with noise of variance 1/snr and correlation p, the received
    pulse, in both. Of a product of Gaussians the correlation is that of the factors' pairings; binary data takes off its
    fourth cumulant, -2 a symbol. Derived here; at lag 0 the pattern part is 2 (1 - a/2) - 4 p(1/2)^2.
    """
    from dsp.pulses import raised_cosine

    def pulse(t: ArrayLike) -> NDArray[np.float64]:
        return raised_cosine(t, rolloff)

    around = np.arange(-400, 401)
    middle = np.array([pulse(around - 0.5) @ pulse(around + lag - 0.5) for lag in lags])
    step = np.where(lags == 0, 2.0, np.where(np.abs(lags) == 1, -1.0, 0.0))
    crossed = (pulse(lags + 0.5) - pulse(lags - 0.5)) ** 2
    half = float(pulse(0.5))
    fourth = np.where(lags == 0, -4.0, np.where(np.abs(lags) == 1, 2.0, 0.0)) * half**2
    result = middle * step - crossed + fourth
    if snr is not None:
        same = 2.0 * (lags == 0)
        result = result + (middle * step + same - 2 * crossed) / snr + (same - crossed) / snr**2
    return np.asarray(result)


def gardner_variance(rolloff: float, bandwidth: float, snr: float | None, rails: int) -> float:
    """Linear theory of the Gardner loop, noise and pattern noise: the detector's spectrum through the loop; None: no noise."""
    from dsp.loops import exact_gains, transfer

    lags = np.arange(-60, 61)
    frequency = np.geomspace(1e-7, 0.5, 8001)
    density = np.cos(2 * np.pi * frequency[:, None] * lags) @ gardner_correlation(rolloff, snr, lags)
    slope = 2 * np.sin(np.pi * rolloff / 2) / (1 - rolloff**2 / 4)  # Rice, eq. 8.45
    response = np.abs(transfer(frequency, exact_gains(bandwidth))) ** 2
    total = 2 * float(np.trapezoid(np.maximum(density, 0.0) * response, frequency))
    return float(total / (rails * slope**2))


def jitter(quick: bool) -> list[dict[str, Any]]:
    """Timing jitter of the detectors against the bound and their own theory."""
    rolloff, bandwidth = 0.35, 0.005
    symbols = 1_000_000 // (QUICK_SHARE if quick else 1)
    rows = []
    for snr_db in (10.0, 20.0):
        snr = 10 ** (snr_db / 10)
        bound = timing_bound(rolloff, bandwidth, snr)
        theory: dict[Detector, float] = {
            "derivative": bound,
            "mueller-muller": mueller_muller_variance(rolloff, bandwidth, snr),
            "gardner": gardner_variance(rolloff, bandwidth, snr, rails=2),
        }
        for detector, variance in theory.items():
            rms = float(np.std(timing_errors("qpsk", detector, rolloff, snr_db, bandwidth, symbols, seed=1)))
            rows.append(
                {
                    "case": f"{detector}, Es/N0 {snr_db:g} dB",
                    "value": rms,
                    "unit": "UI rms",
                    "against": "own theory" if detector != "derivative" else "bound",
                    "ratio": rms / variance**0.5,
                    "theory": variance**0.5,
                    "bound": bound**0.5,
                    "above_bound_db": 20 * float(np.log10(rms / bound**0.5)),
                    "symbols": symbols,
                }
            )
    return rows


def lateness(quick: bool) -> list[dict[str, Any]]:
    """How late the Gardner loop is on the mean, over BnT, without noise; and its pattern jitter against theory."""
    bandwidth, symbols = 0.005, 400_000 // (QUICK_SHARE if quick else 1)
    rows = []
    for scheme, rails in (("pam2", 1), ("qpsk", 2)):
        for rolloff in (0.2, 0.25, 0.35, 0.5, 0.75, 1.0):
            errors = timing_errors(scheme, "gardner", rolloff, None, bandwidth, symbols, seed=2)
            rows.append(
                {
                    "case": f"{scheme}, roll-off {rolloff:g}",
                    "value": float(errors.mean()) / bandwidth,
                    "unit": "of BnT",
                    "rms": float(errors.std()),
                    "theory": gardner_variance(rolloff, bandwidth, None, rails) ** 0.5,
                }
            )
    return rows


MEASUREMENTS: tuple[Measurement, ...] = (
    Measurement("memory", "peak memory of lidwatch replay, QPSK, complex float32", memory),
    Measurement("replay", "lidwatch replay of a 48 kHz recording, command to picture, warm cache", replay),
    Measurement("jitter", "timing jitter of settled loops: QPSK, RRC 0.35, BnT 0.005, against true instants", jitter),
    Measurement("lateness", "Gardner loop: mean lateness, no noise, RRC, BnT 0.005", lateness),
)

# --------------------------------------------------------------------------------------------------

Entry = Benchmark | Measurement


def chosen(names: Sequence[str], benchmarks: Sequence[Entry]) -> list[Entry]:
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


def take(measurements: Sequence[Measurement], quick: bool, progress: Callable[[str], None]) -> list[dict[str, Any]]:
    """Rows of each measurement; none, and why, where it could not be made."""
    results = []
    for measurement in measurements:
        progress(f"measuring {measurement.name}")
        rows: list[dict[str, Any]] = []
        missing = None
        try:
            rows = measurement.take(quick)
        except Unavailable as error:
            missing = str(error)
        results.append({"name": measurement.name, "what": measurement.what, "rows": rows, "missing": missing})
    return results


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


def measured_table(results: Sequence[dict[str, Any]]) -> str:
    """The measurements as text: a heading each, a line a row."""
    lines = []
    for result in results:
        lines.append(f"\n{result['name']}: {result['what']}")
        if result["missing"] is not None:
            lines.append(f"  {result['missing']}")
        for row in result["rows"]:
            ratio = f"{row['ratio']:.3f} x {row['against']}" if "ratio" in row else ""
            rest = ", ".join(
                f"{key.replace('_', ' ')} {value:.4g}"
                for key, value in row.items()
                if key not in ("case", "value", "unit", "against", "ratio")
            )
            lines.append(f"  {row['case']:<30} {row['value']:>10.4g} {row['unit']:<7} {ratio:<22} {rest}".rstrip())
    return "\n".join(lines)


def show(text: str) -> None:
    """Overwrite the progress line on a terminal; elsewhere nothing. Empty text clears it."""
    if sys.stderr.isatty():
        print("\r\x1b[2K" + text, end="", file=sys.stderr, flush=True)


def held_against_truth(options: argparse.Namespace) -> int:
    """The checks of error rates and intervals, a line each as it is done, or one JSON document."""
    from error_rate_check import check, coverage

    rows = check(options.quick, show) if options.error_rate else coverage(options.coverage, show)
    done = []
    for row in rows:
        done.append(row)
        if not options.json:
            print(
                "  ".join(
                    f"{key} {value:.4g}" if isinstance(value, float) else f"{key} {value}" for key, value in row.items()
                )
            )
            sys.stdout.flush()
    if options.json:
        print(json.dumps({"machine": machine(), "results": done}, indent=1))
    return 0


def main(arguments: Sequence[str]) -> int:
    """Run what was asked for; exit status 2 for an unknown name."""
    parser = argparse.ArgumentParser(prog="bench.py", description="Times every stage next to reference libraries.")
    parser.add_argument("--quick", action="store_true", help="smaller inputs and fewer rounds")
    parser.add_argument("--json", action="store_true", help="one JSON document on standard output")
    parser.add_argument("--only", action="append", default=[], metavar="NAME", help="this one and its reference")
    parser.add_argument(
        "--error-rate", action="store_true", help="estimated error rates next to counted ones, nothing else"
    )
    parser.add_argument(
        "--coverage", type=int, metavar="RUNS", help="how often the intervals hold the truth, nothing else"
    )
    parser.add_argument(
        "--identification",
        action="store_true",
        help="identify random links next to textbook estimators, and what is no link, nothing else (half an hour; --quick: minutes)",
    )
    options = parser.parse_args(arguments)
    if options.error_rate or options.coverage is not None:
        return held_against_truth(options)
    if options.identification:
        import identification_grid

        few = ["--links", "64", "--non-links", "65", "--below", "16"] if options.quick else []
        return identification_grid.main(["--references", *few])
    try:
        wanted: list[Entry] = chosen(options.only, (*REFERENCES, *PROJECT, *MEASUREMENTS))
    except ValueError as error:
        parser.error(str(error))
    with threadpool_limits(1):
        results = measure([entry for entry in wanted if isinstance(entry, Benchmark)], options.quick, show)
        measured = take([entry for entry in wanted if isinstance(entry, Measurement)], options.quick, show)
    show("")
    if options.json:
        document = {"machine": machine(), "quick": options.quick, "results": results, "measurements": measured}
        print(json.dumps(document, indent=1))
    else:
        print("\n".join(f"{key}: {value}" for key, value in machine().items()))
        if results:
            print(table(results))
        if measured:
            print(measured_table(measured))
    return 0


if __name__ == "__main__":
    try:
        sys.exit(main(sys.argv[1:]))
    except KeyboardInterrupt:
        sys.exit(130)
