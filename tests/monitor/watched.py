"""Streams and engines for the tests of the watch: short, seeded, with the lines they gave."""

from itertools import pairwise

import numpy as np

from dsp.block import Block
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from monitor.alarm_rules import parse_rules
from monitor.engine import Engine, EngineOptions
from tests.monitor.recordings import RATE, SYMBOL_RATE, qpsk

QPSK_LINK = Wanted(scheme=find_scheme("qpsk"), symbol_rate_hz=SYMBOL_RATE, pulse=Pulse("rrc", 0.35))


def rules(*texts, **more):
    return parse_rules([{"rule": text, **more} for text in texts])


def stretches(*snrs, symbols=12_000):
    """Stretches of one second each, one SNR in dB after the other; one transmission, so that the clock goes on."""
    parts = [qpsk(symbols * len(snrs), snr)[i * symbols * 4 : (i + 1) * symbols * 4] for i, snr in enumerate(snrs)]
    return np.concatenate(parts)


class Watched:
    """An engine with its journal as a list of ``(kind, sample, seconds, fields)``."""

    def __init__(self, wanted=QPSK_LINK, *, rate=RATE, complex_in=True, tap=None, **options):
        self.lines = []
        options.setdefault("display", False)
        self.engine = Engine(
            wanted,
            sample_rate_hz=rate,
            complex_in=complex_in,
            options=EngineOptions(**options),
            line=lambda kind, sample, seconds, fields: self.lines.append((kind, sample, seconds, dict(fields))),
            tap=tap,
        )
        self._at = 0

    def feed(self, samples, *, cuts=None, step=4800, lost=0, clipped=0):
        """Feed in blocks of ``step``, or cut at ``cuts``; ``lost`` before the first, ``clipped`` in the first."""
        self._at += lost
        places = [0, *(cuts if cuts is not None else range(step, samples.size, step)), samples.size]
        for number, (a, b) in enumerate(pairwise(places)):
            first = number == 0
            self.engine.feed(Block(samples[a:b], self._at, lost if first else 0, clipped if first else 0))
            self._at += b - a
        return self

    def finish(self):
        self.engine.finish()
        return self

    def of(self, kind, **fields):
        """The lines of one kind whose fields have these values."""
        return [line for line in self.lines if line[0] == kind and all(line[3].get(k) == v for k, v in fields.items())]

    def raised(self):
        return [(line[3]["rule"], line[3]["state"]) for line in self.of("alarm")]
