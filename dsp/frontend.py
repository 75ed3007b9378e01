"""From raw samples to rails at the working rate: rate change, frequency shift, frequency discriminator."""

import math
from dataclasses import dataclass

import numpy as np

from dsp.block import Samples
from dsp.errors import DspError
from dsp.filters import ComplexFilter, Oscillator, RailFilter, low_pass, split
from dsp.link import Link, Scheme
from dsp.pulses import Pulse, receive_filter
from dsp.tracking import CORNER_SPS, Rails

_MARGIN = 0.25  # carrier offset that the decimating filter lets through, in symbol rates


def wants_corners(scheme: Scheme, pulse: Pulse) -> bool:
    """Whether the wave may have corners that a few samples a symbol would round off."""
    return scheme.kind != "carrier" and not pulse.band_limited


@dataclass(frozen=True, slots=True)
class FrontPlan:
    """Rates on the way in.

    ``decimate`` input samples make one of the rails'; ``interpolate`` is what the matched filter then adds. ``shift`` is the
    frequency brought to 0 before decimation, ``half_band`` what is kept on either side, both in cycles an input sample.
    """

    complex_in: bool
    shift: float
    half_band: float
    decimate: int
    interpolate: int
    rail_sps: float
    sps: float


def plan(link: Link, *, complex_in: bool, centre: float = 0.0, half_band: float | None = None) -> FrontPlan:
    """Choose the rates for a link: 4 to 8 samples a symbol behind the matched filter, 16 to 64 where pulses are not band-limited.

    ``centre`` and ``half_band`` (cycles an input sample) place a passband or an FSK channel. Raises DspError where scheme and samples
    do not fit together.
    """
    sps = link.samples_per_symbol
    kind = link.scheme.kind
    if kind == "baseband" and complex_in:
        raise DspError(
            f"scheme {link.scheme.name} is a real baseband, but the samples are I/Q; take bpsk, or one channel"
        )
    corners = wants_corners(link.scheme, link.pulse)
    least = (
        2 * CORNER_SPS if corners else 4.0 if link.pulse.band_limited or link.pulse.family == "gauss" else CORNER_SPS
    )
    if half_band is None:
        half_band = min(
            (0.5 * (1 + (link.pulse.number or 1.0 if link.pulse.band_limited else 1.0)) + _MARGIN) / sps, 0.45
        )
    decimate = max(int(sps / least), 1)
    if kind == "frequency":
        # the discriminator widens the band: keep at least four times the channel's half band
        decimate = max(min(decimate, int(0.25 / half_band)), 1)
    rail_sps = sps / decimate
    interpolate = 1
    while rail_sps * interpolate < 4.0:
        interpolate *= 2
    return FrontPlan(complex_in, centre, half_band, decimate, interpolate, rail_sps, rail_sps * interpolate)


class FrontEnd:
    """Raw samples in, rails at ``plan.rail_sps`` samples a symbol out: one rail for baseband and FSK, two for a carrier.

    FSK rails are in cycles a symbol. ``delay`` is that of the filters, in input samples.
    """

    def __init__(self, link: Link, front: FrontPlan) -> None:
        self._kind = link.scheme.kind
        self._plan = front
        self._sps = front.rail_sps
        rails = 1 if self._kind == "baseband" else 2
        self._oscillator = Oscillator(front.shift)
        passband = not front.complex_in and rails == 2
        taps = np.ones(1)
        if front.decimate > 1 or passband or self._kind == "frequency":
            stop = 1.0 / front.decimate - front.half_band if front.decimate > 1 else 0.5
            if self._kind != "frequency" and not link.pulse.band_limited and not passband:
                edge, stop = 0.35 / front.decimate, 0.65 / front.decimate
            else:
                edge = front.half_band
            if passband:
                # the mirror image of a real wave lies at minus its carrier, or a sample rate above that
                image = min(2 * front.shift, 1.0 - 2 * front.shift)
                stop = min(stop, max(image - front.half_band, 1.2 * front.half_band))
            if self._kind == "frequency":
                stop = min(stop, 1.5 * front.half_band)
            if stop > edge:
                taps = low_pass(edge, stop)
        self._filter = RailFilter(taps, rails, decimate=front.decimate)
        self._last = np.complex64(0)
        self.delay = self._filter.delay
        self.decimate = front.decimate

    def push(self, samples: Samples) -> Rails:
        """Take the next samples, float32 or complex64 ``(n,)``."""
        if self._kind == "baseband":
            return self._filter.push((np.ascontiguousarray(samples, dtype=np.float32),))
        rails = self._filter.push(self._oscillator.push(split(np.ascontiguousarray(samples, dtype=np.complex64))))
        if self._kind == "carrier":
            return rails
        z = rails[0] + 1j * rails[1]
        turned = z * np.conj(np.concatenate(([self._last], z[:-1])))
        if z.size:
            self._last = z[-1]
        frequency = np.arctan2(turned.imag, turned.real) * np.float32(self._sps / (2 * math.pi))
        return (frequency.astype(np.float32, copy=False),)


def matched_filter(link: Link, front: FrontPlan) -> RailFilter | ComplexFilter:
    """The receive filter of a link at the working rate, interpolating where the rails come with fewer than 4 samples a symbol."""
    taps = receive_filter(link.pulse, front.sps)
    rails = 2 if link.scheme.kind == "carrier" else 1
    if np.iscomplexobj(taps):
        if rails == 1 or front.interpolate > 1:
            raise DspError("complex taps need I/Q at 4 or more samples a symbol")
        return ComplexFilter(np.asarray(taps, dtype=np.complex128))
    real = np.asarray(taps, dtype=np.float64)
    if front.interpolate > 1 and link.pulse.family in ("none", "rc", "taps", "rect"):
        keep = 0.5 / front.interpolate
        real = np.convolve(low_pass(0.85 * keep, 1.15 * keep), real)
    return RailFilter(real, rails, interpolate=front.interpolate)
