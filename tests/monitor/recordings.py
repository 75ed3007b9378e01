"""Recordings for the tests of the application, made by the project's transmitter, and the program run on them."""

import io
import json
import math
import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from functools import lru_cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from dsp.block import Block
from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit
from monitor.sources import Source, SourceInfo

ROOT = Path(__file__).parents[2]
RATE, SYMBOL_RATE = 48000.0, 12000.0
RAW = ("--format", "cf32", "--rate", "48000")
RAW_REAL = ("--format", "rf32", "--rate", "48000")
QPSK = ("--symbol-rate", "12000", "--scheme", "qpsk", "--pulse", "rrc:0.35")
PAM2 = ("--symbol-rate", "12000", "--scheme", "pam2", "--pulse", "rrc:0.35")


@lru_cache
def qpsk(symbols: int = 3000, snr_db: float = 25.0, **more: float) -> NDArray[np.complex64]:
    """QPSK at 12000 baud and 48000 Hz, root raised cosine 0.35; read-only."""
    return _sent("qpsk", symbols, snr_db, **more)


@lru_cache
def pam2(symbols: int = 3000, snr_db: float = 25.0, **more: float) -> NDArray[np.float32]:
    """Two levels at 12000 baud and 48000 Hz, root raised cosine 0.35; read-only."""
    return _sent("pam2", symbols, snr_db, **more)


def _sent(scheme, symbols, snr_db, **more):
    spec = TransmitSpec(
        scheme=scheme,
        symbol_rate_hz=SYMBOL_RATE,
        sample_rate_hz=RATE,
        pulse=Pulse("rrc", 0.35),
        symbols=symbols,
        seed=5,
        snr_db=snr_db,
        **more,
    )
    samples = transmit(spec).samples
    samples.flags.writeable = False
    return samples


class InMemory(Source):
    """A source over arrays: one block each, all of one rate."""

    def __init__(self, *blocks: Block, rate: float = RATE, notes: tuple[str, ...] = (), later: tuple[str, ...] = ()):
        complex_samples = bool(blocks) and np.iscomplexobj(blocks[0].samples)
        total = sum(block.samples.size for block in blocks)
        self.info = SourceInfo("memory", "cf32_le", rate, complex_samples, total, None, notes)
        self.notes: list[str] = []
        self._blocks, self._later = blocks, later

    def blocks(self) -> Iterator[Block]:
        yield from self._blocks
        self.notes.extend(self._later)

    def close(self) -> None:
        pass


def raw(folder: Path, samples: NDArray, name: str = "recording.iq") -> str:
    """Write samples as raw float32; the path."""
    path = folder / name
    samples.tofile(path)
    return str(path)


def environment(**more: str) -> dict[str, str]:
    """For a child: finds the packages, and warnings are errors as in the tests themselves."""
    return {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONWARNINGS": "error", **more}


def command(*arguments: str) -> list[str]:
    return [sys.executable, "-m", "monitor.cli", *arguments]


def run_program(*arguments: str, stdin: bytes | None = None, **more) -> tuple[int, str, str]:
    """Run the command in a process of its own; status, standard output, standard error."""
    kind = {"stdin": subprocess.DEVNULL} if stdin is None else {"input": stdin}
    done = subprocess.run(command(*arguments), capture_output=True, env=environment(), timeout=120, **kind, **more)
    return done.returncode, done.stdout.decode(), done.stderr.decode()


def start_program(*arguments: str, **more) -> subprocess.Popen:
    """Start the command; Ctrl-C reaches it even where the tests run in the background."""
    return subprocess.Popen(
        command(*arguments),
        env=environment(),
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
        **more,
    )


def one_line(text: str) -> str:
    """The one line that ``text`` must be."""
    assert text.endswith("\n")
    assert text.count("\n") == 1, text
    assert "Traceback" not in text
    assert "internal fault" not in text
    return text[:-1]


def strict_json(text: str) -> dict:
    """The one document that ``text`` must be, without NaN or Infinity."""

    def refuse(constant):
        raise AssertionError(f"{constant} in JSON")

    return json.loads(text, parse_constant=refuse)


def wav_bytes(samples: NDArray, rate: int = 48000, subtype: str = "FLOAT") -> bytes:
    """A WAV file's content; samples (n,) or (n, channels)."""
    import soundfile

    buffer = io.BytesIO()
    soundfile.write(buffer, samples, rate, format="WAV", subtype=subtype)
    return buffer.getvalue()


def assert_alike(one, other):
    """The same document, but for the last digits of sums that a linear algebra library makes in another order with other threads."""
    if isinstance(one, dict):
        assert one.keys() == other.keys()
        for key in one:
            assert_alike(one[key], other[key])
    elif isinstance(one, list):
        assert len(one) == len(other)
        for a, b in zip(one, other, strict=True):
            assert_alike(a, b)
    elif isinstance(one, float) and isinstance(other, float):
        assert math.isclose(one, other, rel_tol=1e-6, abs_tol=1e-9), (one, other)
    else:
        assert one == other
