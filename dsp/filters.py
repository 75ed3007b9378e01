"""Streaming FIR filters on rails: state explicit, output independent of how the stream is cut."""

import math

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import filters as kernel
from dsp.errors import DspError
from dsp.tracking import Rails


def low_pass(pass_edge: float, stop_edge: float, attenuation_db: float = 70.0) -> NDArray[np.float64]:
    """Linear-phase low-pass, odd length, gain 1 at 0; edges in cycles a sample. Raises DspError unless 0 < pass < stop.

    Source: J. F. Kaiser's window design; formulas as in Oppenheim and Schafer, Discrete-Time Signal Processing, sec. 7.5
    (from memory).
    """
    if not 0.0 < pass_edge < stop_edge:
        raise DspError(f"low-pass edges must rise from 0, got {pass_edge!r} and {stop_edge!r}")
    width = 2 * math.pi * (stop_edge - pass_edge)
    half = math.ceil((attenuation_db - 7.95) / (2.285 * width) / 2)
    n = np.arange(-half, half + 1)
    centre = 0.5 * (pass_edge + stop_edge)
    taps = 2 * centre * np.sinc(2 * centre * n) * np.kaiser(n.size, 0.1102 * (attenuation_db - 8.7))
    return np.asarray(taps / taps.sum())


class RailFilter:
    """One FIR over every rail, with whole-number decimation or interpolation.

    Output ``i`` is centred on input ``i * decimate / interpolate - delay``; before the stream stand zeros. ``taps`` run at
    the input rate times ``interpolate`` and have gain ``interpolate`` taken care of.
    """

    def __init__(self, taps: NDArray[np.float64], rails: int, *, decimate: int = 1, interpolate: int = 1) -> None:
        if decimate > 1 and interpolate > 1:
            raise DspError("a rail filter either decimates or interpolates")
        self._decimate = decimate
        self._interpolate = interpolate
        length = -(-taps.size // interpolate)
        branches = []
        for branch in range(interpolate):
            part = taps[branch::interpolate] * interpolate
            padded = np.concatenate((part, np.zeros(length - part.size)))
            branches.append(np.ascontiguousarray(padded[::-1], dtype=np.float32))
        self._branches = branches
        self._rest: Rails = tuple(np.zeros(length - 1, np.float32) for _ in range(rails))
        self._ahead = 0  # samples still to come that no output needs: decimation by more than the taps reach over
        self.delay = (taps.size - 1) / 2 / interpolate  # in input samples
        self._identity = taps.size == 1 and decimate == interpolate == 1

    def push(self, rails: Rails) -> Rails:
        """Filter the next samples, one float32 array a rail; returns as many as are ready."""
        if self._identity:
            tap = self._branches[0][0]
            return rails if tap == 1.0 else tuple(rail * tap for rail in rails)
        results, rests = [], []
        span = self._branches[0].size
        skip = min(self._ahead, rails[0].size)
        if skip:
            rails = tuple(rail[skip:] for rail in rails)
        ahead = self._ahead - skip
        for rest, rail in zip(self._rest, rails, strict=True):
            samples = np.concatenate((rest, rail))
            ready = samples.size - span + 1
            if self._decimate > 1:
                count = max(-(-ready // self._decimate), 0)
                out = np.empty(count, np.float32)
                kernel.fir_decimate(samples, self._branches[0], self._decimate, out)
                used = count * self._decimate
                ahead = max(ahead, used - samples.size)
            else:
                used = max(ready, 0)
                parts = []
                for taps in self._branches:
                    part = np.empty(used, np.float32)
                    kernel.fir(samples, taps, part)
                    parts.append(part)
                out = parts[0] if len(parts) == 1 else np.stack(parts, axis=1).reshape(-1)
            results.append(out)
            rests.append(samples[used:].copy())
        self._rest = tuple(rests)
        self._ahead = ahead
        return tuple(results)


class ComplexFilter:
    """An FIR with complex taps over I/Q rails, as four real ones."""

    def __init__(self, taps: NDArray[np.complex128]) -> None:
        self._real = RailFilter(np.ascontiguousarray(taps.real), 2)
        self._imag = RailFilter(np.ascontiguousarray(taps.imag), 2)
        self.delay = self._real.delay

    def push(self, rails: Rails) -> Rails:
        """Filter the next samples of both rails."""
        rr, ri = self._real.push(rails)
        ir, ii = self._imag.push(rails)
        return rr - ii, ri + ir


def split(samples: NDArray[np.complex64]) -> Rails:
    """I and Q of complex64 samples ``(n,)`` as contiguous float32 rails."""
    out_i, out_q = np.empty(samples.size, np.float32), np.empty(samples.size, np.float32)
    kernel.split(samples, out_i, out_q)
    return out_i, out_q


class Oscillator:
    """Turns I/Q rails by ``-frequency`` cycles a sample, from phase 0 at the stream's start."""

    _RUN = 512

    def __init__(self, frequency: float) -> None:
        self._frequency = frequency
        self._position = 0
        self._turns = np.exp(-2j * np.pi * frequency * np.arange(self._RUN)).astype(np.complex64)

    def push(self, rails: Rails) -> Rails:
        """Shift the next samples."""
        if self._frequency == 0.0:
            return rails
        x_i, x_q = rails
        out_i, out_q = np.empty(x_i.size, np.float32), np.empty(x_i.size, np.float32)
        kernel.turn(x_i, x_q, self._frequency, self._position, self._turns, out_i, out_q)
        self._position += x_i.size
        return out_i, out_q
