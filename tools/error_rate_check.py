"""Error rates and intervals held against truth: what `python tools/bench.py --error-rate` and `--coverage RUNS` do.

Seeded transmissions go through the whole chain; decided symbols are compared with the sent ones, bit by bit, and the count
with what the reading estimated from the same symbols. Nothing is asserted.
"""

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaincinv

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.eye import EyeSums
from dsp.figures import Figures
from dsp.intervals import Estimate
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse
from dsp.reading import Reading
from dsp.tracking import Track
from dsp.transmitter import TransmitSpec, transmit_blocks

SYMBOLS = {1e-3: 1_000_000, 1e-4: 2_000_000, 1e-5: 10_000_000}
_BAUD = 100_000.0
_STRETCH = 4096  # symbols that are aligned together
_SLIPPED = 0.1  # share of wrong bits from which a loop has slipped in the stretch, which no error rate tells of
_REACH = 8  # symbols by which they are looked for about where they are due


@dataclass(frozen=True, slots=True)
class Case:
    """One link: what ails it, and the SNR in dB that gives each of the rates of `SYMBOLS`."""

    name: str
    scheme: str
    snr_db: tuple[float, float, float]
    pulse: str = "rrc:0.35"
    sps: float = 4.0
    more: dict[str, Any] = field(default_factory=dict)

    def spec(self, snr_db: float, symbols: int, seed: int) -> TransmitSpec:
        """The transmission."""
        return TransmitSpec(
            scheme=self.scheme,
            symbol_rate_hz=_BAUD,
            sample_rate_hz=_BAUD * self.sps,
            pulse=Pulse.parse(self.pulse),
            symbols=symbols,
            seed=seed,
            snr_db=snr_db,
            **self.more,
        )


CASES = (
    Case("AWGN", "qpsk", (9.80, 11.40, 12.59)),
    Case("AWGN, four levels", "pam4", (16.5, 18.3, 19.6)),
    Case("echo", "qpsk", (13.0, 15.0, 16.5), more={"echoes": ((1.0, 0.3 + 0.1j),)}),
    Case("jitter", "pam2", (11.0, 14.0, 17.0), more={"jitter_rms_ui": 0.06}),
    Case("phase noise", "16qam", (18.5, 21.0, 24.0), more={"phase_noise_deg": 0.3}),
    Case("AWGN, 64 points", "64qam", (22.5, 24.2, 25.5)),
    Case("clipped", "16qam", (17.5, 19.5, 21.0), more={"gain": 0.2, "clipping": "hard", "clip_at": 0.75}),
    Case("cable, square pulses", "pam2", (12.0, 14.0, 15.5), pulse="rect", sps=8.0, more={"t_over_tau": 2.0}),
)


@dataclass(frozen=True, slots=True)
class Counted:
    """What came of one link: bits compared and wrong, stretches left out for a slip, and the reading of the same symbols."""

    bits: int
    errors: int
    slipped: int
    reading: Reading

    @property
    def rate(self) -> float:
        """Share of the bits that were wrong."""
        return self.errors / max(self.bits, 1)

    def interval(self) -> tuple[float, float]:
        """95 % interval of the counted rate. Source: C. J. Clopper, E. S. Pearson, Biometrika 26, 1934 (from memory)."""
        low = float(betaincinv(self.errors, self.bits - self.errors + 1, 0.025)) if self.errors else 0.0
        return low, float(betaincinv(self.errors + 1, self.bits - self.errors, 0.975))


class _Counter:
    """Compares decided symbols with sent ones, stretch by stretch, each aligned on its own: a slip costs one stretch."""

    def __init__(self, spec: TransmitSpec) -> None:
        scheme = spec.link_scheme
        self._levels = np.asarray(scheme.rail_levels)
        self._gray = np.arange(scheme.levels) ^ (np.arange(scheme.levels) >> 1)
        self._wrong = np.asarray([[int(a ^ b).bit_count() for b in self._gray] for a in self._gray])
        self._rails = scheme.rails
        self._turns = scheme.symmetry or 1
        self._bits_each = scheme.bits
        self._sent: NDArray[np.complex128] = np.zeros(0, np.complex128)
        self._first = 0  # index of the oldest sent symbol still held
        self._got: NDArray[np.complex128] = np.zeros(0, np.complex128)
        self._offset: int | None = None
        self.bits = self.errors = self.slipped = 0

    def sent(self, symbols: NDArray[Any]) -> None:
        self._sent = np.concatenate((self._sent, symbols))

    def decided(self, track: Track) -> None:
        points = track.decided[0] + 1j * track.decided[1] if self._rails == 2 else track.decided[0] + 0j
        self._got = np.concatenate((self._got, points))

    def compare(self) -> None:
        """Count what can be counted by now."""
        while self._got.size >= _STRETCH:
            window = 4 * _STRETCH if self._offset is None else 2 * _REACH
            start = 0 if self._offset is None else max(self._offset - _REACH, 0)
            if self._sent.size < start + window + _STRETCH:
                return
            got, self._got = self._got[:_STRETCH], self._got[_STRETCH:]
            near = self._sent[start : start + window + _STRETCH]
            match = np.correlate(near, got, "valid")
            at = int(np.argmax(np.abs(match)))
            turn = round(float(np.angle(match[at])) / (2 * math.pi) * self._turns) / self._turns
            sent = near[at : at + _STRETCH] * np.exp(-2j * math.pi * turn)
            wrong = 0
            for a, b in ((sent.real, got.real), (sent.imag, got.imag))[: self._rails]:
                wrong += int(self._wrong[self._place(a), self._place(b)].sum())
            if wrong > _SLIPPED * _STRETCH * self._bits_each:
                self.slipped += 1
            else:
                self.errors += wrong
                self.bits += _STRETCH * self._bits_each
            done = start + at + _STRETCH - 2 * _REACH
            self._sent = self._sent[max(done, 0) :]
            self._offset = start + at + _STRETCH - max(done, 0)

    def _place(self, values: NDArray[np.float64]) -> NDArray[np.int64]:
        return np.asarray(np.argmin(np.abs(values[:, None] - self._levels), axis=1))


def count(spec: TransmitSpec) -> Counted:
    """Send, receive, compare."""
    counter = _Counter(spec)
    link = Link(find_scheme(spec.scheme), spec.sample_rate_hz, spec.symbol_rate_hz, spec.pulse)
    chain = Chain(link, complex_in=not spec.real, options=ChainOptions(), on_track=counter.decided)
    for part in transmit_blocks(spec):
        counter.sent(part.symbols)
        chain.push(Block(part.samples, part.start))
        counter.compare()
    chain.finish()
    counter.compare()
    reading = Reading(symbols=0) if chain.total is None else Figures(chain.total, chain.context()).reading()
    return Counted(counter.bits, counter.errors, counter.slipped, reading)


def check(quick: bool, progress: Callable[[str], None], names: tuple[str, ...] = ()) -> Iterator[dict[str, Any]]:
    """Each case at each rate: counted, estimated, and their ratio; ``quick`` counts a tenth and leaves out the rarest."""
    for case in CASES:
        if names and case.name not in names:
            continue
        for (rate, symbols), snr in zip(SYMBOLS.items(), case.snr_db, strict=True):
            if quick and rate < 1e-4:
                continue
            progress(f"{case.name} at {rate:g}")
            counted = count(case.spec(snr, symbols // 10 if quick else symbols, 1))
            low, high = counted.interval()
            estimate = counted.reading.ber
            yield {
                "case": case.name,
                "scheme": case.scheme,
                "aimed_at": rate,
                "snr_db": snr,
                "bits": counted.bits,
                "errors": counted.errors,
                "slipped": counted.slipped,
                "counted": counted.rate,
                "counted_low": low,
                "counted_high": high,
                "estimated": estimate,
                "ratio": None if estimate is None or not counted.errors else estimate / counted.rate,
            }


COVERED = (
    (Case("AWGN", "qpsk", (14.0,) * 3), 6000),
    (Case("echo", "qpsk", (18.0,) * 3, more={"echoes": ((1.0, 0.3 + 0.1j),)}), 6000),
    (Case("echo, closed", "qpsk", (10.0,) * 3, more={"echoes": ((1.0, 0.3 + 0.1j),)}), 10000),
    (Case("cable, square pulses", "pam2", (20.0,) * 3, "rect", 32.0, {"t_over_tau": 1.5}), 6000),
    (Case("four levels", "pam4", (22.0,) * 3), 50000),
    (Case("two levels", "pam2", (18.0,) * 3, more={"echoes": ((1.0, 0.2),)}), 30000),
    (Case("jitter and phase noise", "16qam", (24.0,) * 3, more={"jitter_rms_ui": 0.02, "phase_noise_deg": 0.2}), 10000),
)
BLOCKS = 8
LONG = 100  # runs' worth of symbols that the truth is taken from


def measured(spec: TransmitSpec) -> Figures | None:
    """Figures of one transmission."""
    link = Link(find_scheme(spec.scheme), spec.sample_rate_hz, spec.symbol_rate_hz, spec.pulse)
    chain = Chain(link, complex_in=not spec.real)
    for part in transmit_blocks(spec):
        chain.push(Block(part.samples, part.start))
    chain.finish()
    return None if chain.total is None else Figures(chain.total, chain.context())


class _Tally:
    """How often intervals held the truth, figure by figure."""

    def __init__(self) -> None:
        self._values: dict[str, list[float]] = {}
        self._widths: dict[str, list[float]] = {}
        self._held: dict[str, int] = {}
        self._truth: dict[str, float] = {}

    def take(self, estimates: dict[str, Estimate], truth: dict[str, float | None]) -> None:
        """One run's estimates of the figures whose ``truth`` is known."""
        for key, true in truth.items():
            if true is None or key not in estimates:
                continue
            low, high = estimates[key].interval()
            self._truth[key] = true
            self._held[key] = self._held.get(key, 0) + (low <= true <= high)
            self._values.setdefault(key, []).append(estimates[key].value)
            self._widths.setdefault(key, []).append(high - low)

    def rows(self, case: str) -> Iterator[dict[str, Any]]:
        """A row a figure."""
        for key, values in self._values.items():
            yield {
                "case": case,
                "figure": key,
                "runs": len(values),
                "held_pct": 100.0 * self._held[key] / len(values),
                "truth": self._truth[key],
                "mean": float(np.mean(values)),
                "spread": float(np.std(values)),
                "width": float(np.mean(self._widths[key])),
            }


OF_THE_RUN = ("best_instant_ui", "rise_20_80_ui")  # figures against the instant that a run's own loop holds


def windows(spec: TransmitSpec, symbols: int) -> tuple[list[dict[str, Estimate]], Reading]:
    """Estimates of each window of a run, made of `BLOCKS` blocks as a watch makes them, and the reading of all of it."""
    link = Link(find_scheme(spec.scheme), spec.sample_rate_hz, spec.symbol_rate_hz, spec.pulse)
    blocks: list[EyeSums] = []
    found: list[dict[str, Estimate]] = []

    def take(sums: EyeSums) -> None:
        blocks.append(sums)
        if len(blocks) == BLOCKS:
            window = EyeSums(sums.scheme, sums.phases)
            for block in blocks:
                window.merge(block)
                window.keep_apart([block.small()])
            found.append(Figures(window, chain.context()).estimates)
            blocks.clear()

    chain = Chain(link, complex_in=not spec.real, options=ChainOptions(window=symbols // BLOCKS), on_window=take)
    for part in transmit_blocks(spec):
        chain.push(Block(part.samples, part.start))
    chain.finish()
    assert chain.total is not None
    return found, Figures(chain.total, chain.context()).reading(whole=False)


def coverage(runs: int, progress: Callable[[str], None], names: tuple[str, ...] = ()) -> Iterator[dict[str, Any]]:
    """Share of the runs of each link whose interval held the truth, figure by figure."""
    for case, symbols in COVERED:
        if names and case.name not in names:
            continue
        long = measured(case.spec(case.snr_db[0], LONG * symbols, 999_999))
        if long is None:
            continue
        truth = {key: estimate.value for key, estimate in long.estimates.items() if key not in OF_THE_RUN}
        tally = _Tally()
        for seed in range(runs):
            if seed % 50 == 0:
                progress(f"{case.name}: run {seed + 1} of {runs}")
            figures = measured(case.spec(case.snr_db[0], symbols, seed))
            if figures is not None:
                tally.take(figures.estimates, truth)
        progress(f"{case.name}: windows of one run")
        each, whole = windows(case.spec(case.snr_db[0], runs * symbols, 999_998), symbols)
        for estimates in each:
            tally.take(estimates, {key: getattr(whole, key) for key in OF_THE_RUN})
        yield from tally.rows(case.name)
