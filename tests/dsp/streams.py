"""Streams and runs for the tests of the chain: short, seeded, with the truth beside them."""

from itertools import pairwise

import numpy as np

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse
from dsp.transmitter import TransmitSpec, transmit

BAUD = 1e4


def send(scheme, sps=4.0, pulse="rrc:0.35", symbols=6000, **more):
    """A transmission at 10 000 symbols a second."""
    return transmit(
        TransmitSpec(
            scheme=scheme,
            symbol_rate_hz=BAUD,
            sample_rate_hz=BAUD * sps,
            pulse=Pulse.parse(pulse),
            symbols=symbols,
            **more,
        )
    )


def link_of(scheme, sps=4.0, pulse="rrc:0.35"):
    return Link(find_scheme(scheme), BAUD * sps, BAUD, Pulse.parse(pulse))


def chain_for(link, samples, *, centre_hz=0.0, half_band_hz=None, on_window=None, **options):
    return Chain(
        link,
        complex_in=bool(np.iscomplexobj(samples)),
        centre_hz=centre_hz,
        half_band_hz=half_band_hz,
        options=ChainOptions(**options),
        on_window=on_window,
    )


def blocks_of(samples, cuts=(), gaps=None):
    """The samples cut at ``cuts``; ``gaps`` maps a place to how many samples are missing there."""
    gaps = gaps or {}
    places = [0, *sorted({*(min(c, samples.size) for c in cuts), *gaps}), samples.size]
    lost = 0
    for a, b in pairwise(places):
        missing = gaps.get(a, 0) if a else 0
        lost += missing
        yield Block(samples[a:b], a + lost, lost=missing)


def run(link, samples, cuts=(), gaps=None, **options):
    """A chain that has seen all of ``samples``."""
    chain = chain_for(link, samples, **options)
    for block in blocks_of(samples, cuts, gaps):
        chain.push(block)
    chain.finish()
    return chain
