#!/usr/bin/env python3
"""How well links are identified from their samples alone: seeded random links, and things that are no link.

Every case is a function of its number only. A link counts as

- locked, if identification names a link and the chain, told nothing else, gains lock on it;
- right in rate, within 20 ppm of the transmitter's; right in scheme, by name, where names that describe the same wave are one (`TWINS`);
- right in pulse, if the opening with the pulse found is at most 3 points below that with the transmitter's own.

Signal to noise ratio, as Es/N0 behind the matched filter, is drawn from 3 dB above the scheme's threshold (a bit error rate of 1e-3)
to 40 dB; an echo stands at least 5 dB further below the signal than the threshold.
"""

from __future__ import annotations

import argparse
import itertools
import json
import math
import os
import sys
import time
from collections import Counter
from collections.abc import Callable, Iterable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

if __name__ == "__main__":  # run as a script from anywhere
    sys.path.insert(0, str(Path(__file__).resolve().parent.parent))
    for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
        os.environ.setdefault(_name, "1")

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from dsp.identify import Identified
    from dsp.transmitter import Transmission, TransmitSpec

SYMBOLS = 20_000
RATE_HZ = 1e6
JUDGED_SYMBOLS = 6_000  # over which the openings are compared

# Es/N0 in dB at a bit error rate of 1e-3. Linear schemes: Proakis and Salehi, Digital Communications, 5th ed., sec. 4.2 and 4.3 (Gray
# mapping). Frequency schemes, whose receiver is a discriminator: `_frequency_threshold`, an assumption.
THRESHOLD_DB = {
    "pam2": 9.8, "pam3": 13.7, "pam4": 16.5, "pam8": 22.5,
    "bpsk": 6.8, "qpsk": 9.8, "oqpsk": 9.8, "pi4dqpsk": 9.8, "8psk": 14.8, "16qam": 16.5, "64qam": 22.5,
}  # fmt: skip
FREQUENCY = ("fsk2", "fsk4", "gfsk", "msk", "gmsk")
# the same wave by two names: no samples can tell them apart
TWINS = {"msk": "fsk2", "gmsk": "gfsk"}


@dataclass(frozen=True)
class Accuracy:
    """How near identification and textbook estimators came to a root-raised-cosine link, and the bound of any estimator.

    Rates in ppm; carriers in symbol rates, None for baseband. The references are told the link's band, and for the carrier its scheme,
    pulse and every instant; what they cannot tell (multiples of the symbol rate over the symmetry) is forgiven.
    """

    rate_ppm: float
    square_law_ppm: float
    rate_bound_ppm: float
    carrier: float | None
    power_law: float | None
    carrier_bound: float


@dataclass(frozen=True)
class Verdict:
    """What became of one link of the grid."""

    number: int
    scheme: str
    pulse: str
    sps: float
    snr_db: float
    more: dict[str, Any]
    found_scheme: str | None = None
    found_pulse: str | None = None
    confidence: float | None = None
    rate_ppm: float | None = None
    locked: bool = False
    opening_pct: float | None = None
    true_opening_pct: float | None = None
    reason: str = ""
    seconds: float = 0.0
    sure: dict[str, float] | None = None
    accuracy: Accuracy | None = None

    @property
    def right_scheme(self) -> bool:
        """Whether the scheme was named, or its twin."""
        return self.found_scheme is not None and _one_name(self.found_scheme) == _one_name(self.scheme)

    @property
    def right_rate(self) -> bool:
        """Within 20 ppm."""
        return self.rate_ppm is not None and abs(self.rate_ppm) <= 20.0

    @property
    def right_pulse(self) -> bool:
        """At most 3 points of opening lost, of the right scheme; where the true pulse gives no opening either, nothing is lost."""
        if not (self.right_scheme and self.locked):
            return False
        if self.true_opening_pct is None:
            return True
        return self.opening_pct is not None and self.opening_pct >= self.true_opening_pct - 3.0


def _one_name(scheme: str) -> str:
    return TWINS.get(scheme, scheme)


def _frequency_threshold(scheme: str, index: float, bt: float | None) -> float:
    """Es/N0 taken for a discriminator receiver at 1e-3, dB: an assumption, not measured.

    12 dB is 1 dB more than orthogonal tones need without coherence (10.9 dB, from memory); more for four tones, narrow shifts, low BT.
    """
    base = 12.0 if scheme != "fsk4" else 15.5
    narrow = 20 * math.log10(0.7 / index) if index < 0.7 else 5 * math.log10(max(index, 1.0))
    return base + max(narrow, 0.0) + (0.5 / bt - 0.5 if bt is not None and bt < 1 else 0.0)


def draw_link(number: int, *, below: bool = False) -> TransmitSpec:
    """The ``number``-th link, as a `dsp.transmitter.TransmitSpec`; ``below``: 4 to 10 dB under its threshold instead."""
    from dsp.link import SCHEMES
    from dsp.pulses import Pulse
    from dsp.transmitter import TransmitSpec

    rng = np.random.default_rng([20, number])
    names = list(SCHEMES)
    scheme = SCHEMES[names[number % len(names)]]
    more: dict[str, Any] = {}
    rolloff = float(rng.uniform(0.15, 1.0))
    draw = rng.random()
    family = "rrc"
    index = bt = None
    if scheme.kind == "frequency":
        family = {"msk": "rect", "gmsk": "gauss", "gfsk": "gauss"}.get(scheme.name, "rect")
        if scheme.name not in ("msk", "gmsk"):
            index = float(np.exp(rng.uniform(math.log(0.3), math.log(2.0))))
            more["modulation_index"] = index
        if family == "gauss":
            bt = float(rng.uniform(0.3, 1.0))
        pulse = Pulse(family, bt)  # type: ignore[arg-type]
        index = index or 0.5
        threshold = _frequency_threshold(scheme.name, index, bt)
        least = 1.3 * ((scheme.levels - 1) * index + 2.0)
    else:
        if scheme.kind == "baseband" and draw > 0.6:
            family = "rect" if draw > 0.75 else "rc"
        elif scheme.kind == "carrier" and draw > 0.85 and not scheme.stagger:
            family = "rect" if draw > 0.92 else "rc"
        pulse = Pulse(family, None if family == "rect" else rolloff)  # type: ignore[arg-type]
        threshold = THRESHOLD_DB[scheme.name]
        least = 4.0 if family == "rect" else 2.1
    passband = scheme.kind != "baseband" and rng.random() < 0.2
    if passband:
        least = max(least * 2.2, 6.0)
    sps = float(np.exp(rng.uniform(math.log(least), math.log(400.0))))
    baud = RATE_HZ / sps
    width = (1 + rolloff) / 2 if family in ("rrc", "rc") else 1.0 if scheme.kind != "frequency" else least / 2.6
    if passband:
        low, high = 1.15 * width * baud, RATE_HZ / 2 - 1.15 * width * baud
        more["carrier_hz"] = float(
            rng.uniform(low, min(high, max(6 * low, 1.5 * low))) if high > low else 0.25 * RATE_HZ
        )
        more["passband"] = True
    elif scheme.kind != "baseband":
        room = max(RATE_HZ / 2 - width * baud, 0.0)
        more["carrier_hz"] = float(rng.uniform(-1, 1) * min(0.25 * baud, room))
    if scheme.kind != "baseband":
        more["carrier_phase_deg"] = float(rng.uniform(0, 360))
    if rng.random() < 0.5:
        decibels = float(rng.uniform(-40.0, -(threshold + 5.0)))
        gain = 10 ** (decibels / 20)
        turn = np.exp(2j * np.pi * rng.random()) if scheme.kind != "baseband" else rng.choice([-1.0, 1.0])
        more["echoes"] = ((float(rng.uniform(0.2, 3.0)), complex(gain * turn)),)
    if rng.random() < 0.5:
        dc = float(rng.uniform(-0.2, 0.2))
        more["dc"] = dc if scheme.kind == "baseband" or passband else complex(dc, float(rng.uniform(-0.2, 0.2)))
    snr_db = float(rng.uniform(threshold + 3.0, 40.0))
    if below:
        snr_db = threshold - float(rng.uniform(4.0, 10.0))
    spec = TransmitSpec(
        scheme=scheme.name,
        symbol_rate_hz=baud,
        sample_rate_hz=RATE_HZ,
        pulse=pulse,
        symbols=SYMBOLS,
        seed=number + 1,
        delay_ui=float(rng.random() * 0.999),
        snr_db=snr_db,
        clock_ppm=float(rng.uniform(-100, 100)),
        **more,
    )
    from dataclasses import replace

    from dsp.transmitter.stream import Sender

    return replace(spec, gain=Sender(spec).gain * 10 ** float(rng.uniform(-3.0, 0.0)))


def judge_link(number: int, *, below: bool = False, openings: bool = True, references: bool = False) -> Verdict:
    """Make one link, identify it, and compare."""
    from dsp.identify import survey_links
    from dsp.transmitter import transmit

    spec = draw_link(number, below=below)
    sent = transmit(spec)
    samples = sent.samples
    shown = ("carrier_hz", "passband", "echoes", "dc", "modulation_index")
    verdict = {
        "number": number, "scheme": spec.scheme, "pulse": str(spec.pulse), "sps": spec.samples_per_symbol, "snr_db": spec.snr_db,
        "more": {name: value for name in shown if (value := getattr(spec, name))},
    }  # fmt: skip
    begun = time.perf_counter()
    findings = survey_links(samples, RATE_HZ)
    verdict["seconds"] = time.perf_counter() - begun
    if not findings.links:
        return Verdict(**verdict, reason=findings.reason)
    best = findings.links[0]
    true_rate = spec.symbol_rate_hz * (1 + 1e-6 * spec.clock_ppm)
    verdict |= {
        "found_scheme": best.link.scheme.name, "found_pulse": str(best.link.pulse), "confidence": best.scheme.confidence,
        "rate_ppm": (best.link.symbol_rate_hz / true_rate - 1) * 1e6,
        "sure": {
            "scheme": best.scheme.confidence, "rate": best.symbol_rate_hz.confidence, "pulse": best.pulse.confidence,
            **({"carrier": best.carrier_hz.confidence} if best.carrier_hz is not None else {}),
        },
    }  # fmt: skip
    if references and spec.pulse.family == "rrc" and spec.scheme not in FREQUENCY:
        found_hz = None if best.carrier_hz is None else best.carrier_hz.value
        verdict["accuracy"] = _accuracy(sent, spec, verdict["rate_ppm"], found_hz)
    head = samples[: int(JUDGED_SYMBOLS * RATE_HZ / best.link.symbol_rate_hz)]
    locked, opening, reason = _opening(head, best.identified)
    true = None
    if openings and _one_name(best.link.scheme.name) == _one_name(spec.scheme):
        from dataclasses import replace

        from dsp.link import find_scheme

        given = replace(
            best.identified,
            link=replace(best.link, scheme=find_scheme(spec.scheme), pulse=spec.pulse, symbol_rate_hz=true_rate),
        )
        true = _opening(head, given)[1]
    return Verdict(**verdict, locked=locked, opening_pct=opening, true_opening_pct=true, reason=reason)


def _accuracy(sent: Transmission, spec: TransmitSpec, rate_ppm: float, found_hz: float | None) -> Accuracy:
    import identification_references as references

    from dsp.link import find_scheme

    scheme = find_scheme(spec.scheme)
    true_rate = spec.symbol_rate_hz * (1 + 1e-6 * spec.clock_ppm)
    wave = references.analytic(sent.samples, spec)
    square = (references.square_law_rate(wave) * RATE_HZ / true_rate - 1) * 1e6
    own = power = None
    if scheme.kind == "carrier":
        if found_hz is not None:
            own = (found_hz - spec.carrier_hz) / true_rate
        if not scheme.stagger:
            # the wave stands about the true carrier; pi/4-DQPSK turns by an eighth on top
            turn = (
                references.power_law_carrier(references.symbols_of(wave, sent, spec), scheme.symmetry) - scheme.rotation
            )
            power = (turn + 0.5 / scheme.symmetry) % (1 / scheme.symmetry) - 0.5 / scheme.symmetry
    rolloff = spec.pulse.number or 1.0
    return Accuracy(
        rate_ppm, square, references.rate_bound_ppm(rolloff, SYMBOLS, spec.snr_db or math.inf),
        own, power, references.carrier_bound(SYMBOLS, spec.snr_db or math.inf),
    )  # fmt: skip


def _opening(samples: NDArray[Any], identified: Identified) -> tuple[bool, float | None, str]:
    from dsp.block import Block
    from dsp.chain import Chain, ChainOptions
    from dsp.figures import Figures

    chain = Chain(
        identified.link,
        complex_in=bool(np.iscomplexobj(samples)),
        centre_hz=identified.centre_hz,
        half_band_hz=identified.half_band_hz,
        options=ChainOptions(),
    )
    chain.push(Block(samples, 0))
    chain.finish()
    if chain.total is None:
        return False, None, chain.last_reason
    return True, Figures(chain.total, chain.context()).reading().opening_pct, ""


# -- what is no link ---------------------------------------------------------------------------------------------------------

Maker = Callable[[np.random.Generator, int, bool], NDArray[Any]]


def _white(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    return rng.standard_normal(n) + 1j * rng.standard_normal(n) if is_complex else rng.standard_normal(n)


def _coloured(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Noise through a raised-cosine band, a slope of 1/f, or a few resonances."""
    frequency = np.abs(np.fft.fftfreq(n))
    kind = rng.integers(3)
    if kind == 0:
        half, rolloff = rng.uniform(0.005, 0.3), rng.uniform(0.1, 1.0)
        edge = np.clip((frequency / half - 1 + rolloff) / (2 * rolloff), 0, 1)
        response = np.cos(np.pi / 2 * edge) + 1e-3
    elif kind == 1:
        response = 1.0 / np.maximum(frequency, 1e-4) ** rng.uniform(0.3, 1.0)
    else:
        response = 1e-2 + sum(
            1 / (1 + ((frequency - rng.uniform(0, 0.4)) / rng.uniform(0.001, 0.03)) ** 2) for _ in range(3)
        )
    wave = np.fft.ifft(np.fft.fft(_white(rng, n, is_complex)) * response)
    return wave if is_complex else wave.real


def _noisy(rng: np.random.Generator, wave: NDArray[Any], is_complex: bool) -> NDArray[Any]:
    """A wave with white noise 10 to 60 dB below it; its real part where the samples are real."""
    wave = wave if is_complex else np.real(wave)
    rms = math.sqrt(float(np.mean(np.abs(wave) ** 2)))
    return wave + rms * 10 ** (-rng.uniform(10, 60) / 20) * _white(rng, wave.size, is_complex)


def _tones(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """One to four tones."""
    t = np.arange(n)
    wave = sum(
        rng.uniform(0.3, 1) * np.exp(2j * np.pi * (rng.uniform(-0.45, 0.45) * t + rng.random()))
        for _ in range(rng.integers(1, 5))
    )
    return _noisy(rng, np.asarray(wave), is_complex)


def _tone_pairs(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Two tones of equal strength near each other."""
    t = np.arange(n)
    centre, apart = rng.uniform(-0.3, 0.3), np.exp(rng.uniform(math.log(1e-3), math.log(0.1)))
    pair = np.exp(2j * np.pi * (centre + apart / 2) * t) + np.exp(
        2j * np.pi * ((centre - apart / 2) * t + rng.random())
    )
    return _noisy(rng, pair, is_complex)


def _chirp(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """One sweep over the whole stretch."""
    t = np.arange(n)
    low, high = rng.uniform(-0.4, 0.4, 2)
    return _noisy(rng, np.exp(2j * np.pi * (low * t + (high - low) * t**2 / (2 * n))), is_complex)


def _chirps(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Sweeps that repeat, saw-toothed or up and down, phase running on or beginning anew."""
    t = np.arange(n, dtype=np.float64)
    period = np.exp(rng.uniform(math.log(30), math.log(n / 5)))
    low, span = rng.uniform(-0.4, 0.2), np.exp(rng.uniform(math.log(0.01), math.log(0.2)))
    place = t / period % 1.0
    if rng.random() < 0.4:
        place = 1 - np.abs(2 * place - 1)
    if rng.random() < 0.5:
        return _noisy(rng, np.exp(2j * np.pi * np.cumsum(low + span * place)), is_complex)
    return _noisy(rng, np.exp(2j * np.pi * period * (low * place + span * place**2 / 2)), is_complex)


def _speech(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Voiced stretches (glottal pulses of wandering pitch through formants) and hiss, in syllables; taken as sampled at 48 kHz."""
    from scipy.signal import lfilter

    rate = 48_000.0
    pitch = rng.uniform(90, 220) * np.exp(0.15 * np.cumsum(rng.standard_normal(n)) / math.sqrt(rate) * 2)
    pulses = np.diff(np.floor(np.cumsum(pitch / rate)), prepend=0.0)
    envelope = np.clip(np.sin(2 * np.pi * rng.uniform(2, 5) * np.arange(n) / rate + rng.random() * 6) + 0.3, 0, 1)
    hiss = np.clip(np.sin(2 * np.pi * rng.uniform(1, 3) * np.arange(n) / rate + rng.random() * 6) - 0.5, 0, 1)
    wave = pulses * envelope + 0.03 * rng.standard_normal(n) * hiss
    for formant, width in ((rng.uniform(300, 800), 80), (rng.uniform(900, 2200), 120), (rng.uniform(2300, 3200), 180)):
        radius = math.exp(-math.pi * width / rate)
        wave = lfilter([1.0], [1, -2 * radius * math.cos(2 * math.pi * formant / rate), radius**2], wave)
    if is_complex:
        return _noisy(
            rng, (wave / np.abs(wave).max()) * np.exp(2j * np.pi * rng.uniform(-0.2, 0.2) * np.arange(n)), True
        )
    return _noisy(rng, wave, False)


def _amplitude_modulated(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """A carrier with a tone or speech on its amplitude."""
    t = np.arange(n)
    if rng.random() < 0.5:
        message = np.sin(2 * np.pi * np.exp(rng.uniform(math.log(1e-4), math.log(0.05))) * t)
    else:
        message = _speech(rng, n, False)
        message /= np.abs(message).max()
    return _noisy(
        rng, (1 + rng.uniform(0.3, 1.0) * message) * np.exp(2j * np.pi * rng.uniform(0.02, 0.4) * t), is_complex
    )


def _frequency_modulated(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """A carrier with a tone or speech on its frequency."""
    message = np.sin(2 * np.pi * np.exp(rng.uniform(math.log(1e-4), math.log(0.05))) * np.arange(n))
    if rng.random() < 0.5:
        message = _speech(rng, n, False)
        message /= np.abs(message).max()
    return _noisy(
        rng, np.exp(2j * np.pi * np.cumsum(rng.uniform(0.1, 0.3) + rng.uniform(0.005, 0.08) * message)), is_complex
    )


def _silence(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Zeros, a constant, or a converter's last bit."""
    kind = rng.integers(3)
    if kind == 0:
        return np.zeros(n) * (1j if is_complex else 1)
    if kind == 1:
        return np.full(n, 0.25) + (0.1j if is_complex else 0)
    wave = _white(rng, n, is_complex) * 0.4
    return (np.rint(wave.real) + (1j * np.rint(wave.imag) if is_complex else 0)) / 32768


def _impulses(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Clicks at random or regular instants, each ringing."""
    from scipy.signal import lfilter

    wave = np.zeros(n)
    if rng.random() < 0.5:
        wave[rng.integers(0, n, max(n // int(rng.integers(50, 5000)), 5))] = 1.0
    else:
        wave[:: int(rng.integers(20, 2000))] = 1.0
    if rng.random() < 0.5:
        wave *= rng.uniform(0.2, 1, n)
    radius, angle = rng.uniform(0.7, 0.99), rng.uniform(0, 1.5)
    wave = lfilter([1.0], [1, -2 * radius * math.cos(angle), radius**2], wave)
    return _noisy(rng, wave * np.exp(2j * np.pi * rng.random()) if is_complex else wave, is_complex)


def _gated(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """Noise switched on and off at regular intervals: a clock without data."""
    period = np.exp(rng.uniform(math.log(20), math.log(5000)))
    gate = np.arange(n) / period % 1.0 < rng.uniform(0.2, 0.8)
    return _coloured(rng, n, is_complex) * gate


def _square(rng: np.random.Generator, n: int, is_complex: bool) -> NDArray[Any]:
    """A square or triangular wave: a clock, not data."""
    place = np.arange(n) / np.exp(rng.uniform(math.log(5), math.log(500))) % 1.0
    wave = np.where(place < rng.uniform(0.2, 0.8), 1.0, -1.0) if rng.random() < 0.6 else 4 * np.abs(place - 0.5) - 1
    if is_complex:
        return _noisy(rng, wave * np.exp(2j * np.pi * rng.uniform(-0.2, 0.2) * np.arange(n)), True)
    return _noisy(rng, wave, False)


NON_LINKS: dict[str, Maker] = {
    "white noise": _white, "coloured noise": _coloured, "tones": _tones, "tone pair": _tone_pairs, "chirp": _chirp,
    "repeated chirps": _chirps, "speech-like": _speech, "amplitude modulation": _amplitude_modulated,
    "frequency modulation": _frequency_modulated, "silence": _silence, "impulses": _impulses, "gated noise": _gated,
    "square wave": _square,
}  # fmt: skip


def draw_non_link(number: int) -> tuple[str, NDArray[Any]]:
    """The ``number``-th thing that is no link: its kind and samples, 100 000 to 400 000 of them, half of the cases I/Q."""
    rng = np.random.default_rng([30, number])
    kind = list(NON_LINKS)[number % len(NON_LINKS)]
    is_complex = bool(rng.integers(2))
    wave = NON_LINKS[kind](rng, int(rng.integers(100_000, 400_000)), is_complex)
    scale = 10 ** rng.uniform(-3, 0)
    return kind, np.asarray(wave * scale, dtype=np.complex64 if is_complex else np.float32)


@dataclass(frozen=True)
class Claim:
    """What was made of something that is no link; ``found`` is empty where nothing was claimed."""

    number: int
    kind: str
    is_complex: bool
    found: str
    seconds: float


def judge_non_link(number: int) -> Claim:
    """Make one thing that is no link and look for one in it."""
    from dsp.identify import survey_links

    kind, samples = draw_non_link(number)
    begun = time.perf_counter()
    links = survey_links(samples, RATE_HZ).links
    found = (
        f"{links[0].link.scheme.name} at {links[0].link.symbol_rate_hz:.6g} Bd, {links[0].link.pulse}" if links else ""
    )
    return Claim(number, kind, bool(np.iscomplexobj(samples)), found, time.perf_counter() - begun)


# -- the whole grid ----------------------------------------------------------------------------------------------------------


def run(
    links: Iterable[int],
    non_links: Iterable[int],
    below: Iterable[int],
    each: Callable[[Any], None],
    *,
    references: bool = False,
) -> dict[str, Any]:
    """Judge the cases of those numbers; ``each`` is told every verdict. Returns shares in per cent and counts."""
    verdicts, claims, faint = [], [], []
    for number in links:
        verdicts.append(judge_link(number, references=references))
        each(verdicts[-1])
    for number in non_links:
        claims.append(judge_non_link(number))
        each(claims[-1])
    for number in below:
        faint.append(judge_link(number, below=True, openings=False))
        each(faint[-1])
    return summary(verdicts, claims, faint)


def summary(verdicts: list[Verdict], claims: list[Claim], faint: list[Verdict]) -> dict[str, Any]:
    """The figures of merit of a run."""

    def share(good: Iterable[bool]) -> float | None:
        values = list(good)
        return 100.0 * sum(values) / len(values) if values else None

    ppm = [abs(v.rate_ppm) for v in verdicts if v.rate_ppm is not None and abs(v.rate_ppm) < 1000]
    return {
        "links": len(verdicts),
        "rate_pct": share(v.right_rate for v in verdicts),
        "scheme_pct": share(v.right_scheme for v in verdicts),
        "pulse_pct": share(v.right_pulse for v in verdicts),
        "locked_pct": share(v.locked for v in verdicts),
        "median_rate_error_ppm": float(np.median(ppm)) if ppm else None,
        "non_links": len(claims),
        "claimed": sum(bool(claim.found) for claim in claims),
        "claimed_kinds": dict(Counter(claim.kind for claim in claims if claim.found)),
        "below_threshold": len(faint),
        "below_threshold_null": sum(v.found_scheme is None for v in faint),
        "below_threshold_wrong": sum(
            v.found_scheme is not None and not (v.right_scheme and v.right_rate) for v in faint
        ),
        "seconds_each": float(np.mean([v.seconds for v in verdicts])) if verdicts else None,
        "accuracy": accuracy([v.accuracy for v in verdicts if v.accuracy is not None]),
        "calibration": calibration(verdicts),
    }


def accuracy(found: list[Accuracy]) -> dict[str, Any] | None:
    """Identification next to the textbook estimators: shares of links within 20 ppm and 1e-4 symbol rates, median error over the bound.

    An estimator without a bias that reaches the bound has a median error of 0.67 of it.
    """
    if not found:
        return None

    def told(errors: list[tuple[float | None, float]], within: float) -> dict[str, float]:
        known = [(abs(error), bound) for error, bound in errors if error is not None]
        return {
            "links": len(known),
            "right_pct": 100.0 * float(np.mean([error <= within for error, _ in known])),
            "median_error_over_bound": float(np.median([error / bound for error, bound in known])),
        }

    return {
        "rate": told([(a.rate_ppm, a.rate_bound_ppm) for a in found], 20.0),
        "rate by square-law line": told([(a.square_law_ppm, a.rate_bound_ppm) for a in found], 20.0),
        "carrier": told([(a.carrier, a.carrier_bound) for a in found], 1e-4),
        "carrier by power-law line": told([(a.power_law, a.carrier_bound) for a in found], 1e-4),
    }


def calibration(verdicts: list[Verdict]) -> dict[str, list[dict[str, float]]]:
    """How many were right of those said to be so sure, by part and by class of confidence."""
    right: dict[str, Callable[[Verdict], bool]] = {
        "scheme": lambda v: v.right_scheme, "rate": lambda v: v.right_rate, "pulse": lambda v: v.right_pulse,
    }  # fmt: skip
    edges = (0.0, 0.5, 0.8, 0.9, 0.97, 1.001)
    table: dict[str, list[dict[str, float]]] = {}
    for part, judge in right.items():
        rows = []
        for low, high in itertools.pairwise(edges):
            those = [v for v in verdicts if v.sure is not None and low <= v.sure[part] < high]
            if those:
                said = float(np.mean([v.sure[part] for v in those if v.sure is not None]))
                rows.append(
                    {
                        "links": len(those),
                        "said_pct": 100 * said,
                        "right_pct": 100 * float(np.mean([judge(v) for v in those])),
                    }
                )
        table[part] = rows
    return table


def _show(item: Verdict | Claim, *, all_of_them: bool) -> None:
    if isinstance(item, Claim):
        if item.found or all_of_them:
            print(
                f"non-link {item.number:4d} {item.kind:20s} {'I/Q ' if item.is_complex else 'real'} {item.seconds:5.2f} s: {item.found}"
            )
        return
    good = item.right_scheme and item.right_rate and item.locked and item.right_pulse
    if good and not all_of_them:
        return
    marks = "".join(
        letter if ok else letter.upper()
        for letter, ok in (
            ("r", item.right_rate),
            ("s", item.right_scheme),
            ("p", item.right_pulse),
            ("l", item.locked),
        )
    )
    ppm = "-" if item.rate_ppm is None else f"{item.rate_ppm:.1f} ppm"
    confidence = "" if item.confidence is None else f" ({item.confidence:.2f})"
    openings = [("-" if o is None else f"{o:.1f}") for o in (item.opening_pct, item.true_opening_pct)]
    print(
        f"{item.number:4d} {marks} {item.scheme:8s} {item.pulse:11s} sps {item.sps:6.2f} snr {item.snr_db:4.1f}: {item.found_scheme}"
        f"{confidence} {item.found_pulse} {ppm} opening {openings[0]} of {openings[1]}, {item.seconds:.2f} s {item.reason} {item.more}",
        flush=True,
    )


def main(arguments: list[str] | None = None) -> int:
    """Command line."""
    parser = argparse.ArgumentParser(description="Identifies seeded random links, and things that are no link.")
    parser.add_argument("--links", type=int, default=400)
    parser.add_argument("--non-links", type=int, default=400)
    parser.add_argument("--below", type=int, default=48, help="links below their threshold")
    parser.add_argument("--first", type=int, default=0, help="number of the first case")
    parser.add_argument("--step", type=int, default=1, help="take each so-manieth case")
    parser.add_argument("--case", type=int, action="append", help="this link only")
    parser.add_argument(
        "--references", action="store_true", help="textbook estimators on the same links, and the bounds"
    )
    parser.add_argument("--all", action="store_true", help="show the good ones too")
    parser.add_argument("--json", metavar="FILE", help="every verdict, as JSON lines")
    options = parser.parse_args(arguments)
    numbers = [options.case or [], [], []]
    if not options.case:
        numbers = [
            range(options.first, options.first + n * options.step, options.step)
            for n in (options.links, options.non_links, options.below)
        ]
    kept: list[dict[str, Any]] = []

    def each(item: Verdict | Claim) -> None:
        _show(item, all_of_them=options.all or bool(options.case))
        kept.append(asdict(item))

    figures = run(*numbers, each, references=options.references)
    if options.json:
        with Path(options.json).open("w", encoding="utf-8") as file:
            file.writelines(json.dumps(item, default=str) + "\n" for item in kept)
    print(json.dumps(figures, indent=1))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
