"""A link of the test transmitter, measured by the whole chain: what the accuracy tests share."""

from dataclasses import dataclass
from functools import cache

import numpy as np

from dsp.block import Block
from dsp.chain import Chain, ChainOptions
from dsp.eye import EyeSums
from dsp.figures import Figures
from dsp.link import Link, find_scheme
from dsp.pulses import Pulse
from dsp.reading import Reading
from dsp.transmitter import TransmitSpec, transmit

RATE = 9600.0  # symbols a second, wherever it does not matter


@dataclass(frozen=True)
class Measured:
    """What came out: ``total`` is None, and so are the figures, where there was no lock."""

    chain: Chain
    total: EyeSums | None
    figures: Figures | None
    reading: Reading


def measure(samples, link: Link, **options) -> Measured:
    """The samples' reading; ``options`` are those of `ChainOptions`."""
    chain = Chain(link, complex_in=bool(np.iscomplexobj(samples)), options=ChainOptions(**options))
    chain.push(Block(samples, 0))
    chain.finish()
    if chain.total is None:
        return Measured(chain, None, None, Reading(symbols=0))
    figures = Figures(chain.total, chain.context())
    return Measured(chain, chain.total, figures, figures.reading())


def spec_for(scheme: str, sent: str, sps: float, symbols: int, **more) -> TransmitSpec:
    """A transmission at `RATE`; ``sent`` is the pulse by name, ``more`` the rest of `TransmitSpec`."""
    return TransmitSpec(
        scheme=scheme,
        symbol_rate_hz=RATE,
        sample_rate_hz=RATE * sps,
        pulse=Pulse.parse(sent),
        symbols=symbols,
        **more,
    )


def link_for(spec: TransmitSpec, received: str | None = None) -> Link:
    """The link as the receiver is told it: the transmitter's own pulse, or the one named."""
    pulse = spec.pulse if received is None else Pulse.parse(received)
    return Link(find_scheme(spec.scheme), spec.sample_rate_hz, spec.symbol_rate_hz, pulse)


@cache
def sent(spec: TransmitSpec):
    """The transmission, made once."""
    return transmit(spec)


def over_the_air(spec: TransmitSpec, received: str | None = None, **options) -> Measured:
    """Make the transmission and measure it."""
    return measure(sent(spec).samples, link_for(spec, received), **options)
