"""Carriers that drift: an oscillator that runs along, so that the receive filter stays on the carrier and the loop lags behind nothing."""

import numpy as np
from numpy.typing import NDArray

from dsp._kernels import filters as kernel
from dsp.acquisition import STANDS_OUT, STILL_STANDS_OUT, parabola_through
from dsp.filters import Oscillator
from dsp.tracking import Rails, Track

# A loop of bandwidth BnT lags behind a drift d by d/K2 cycles: at BnT 0.005, by 0.4 degrees at the least that is looked after
_LEAST = 1e-7  # cycles a symbol, from one symbol to the next, over all phases looked at
_MOST = 3e-5
PART = 512  # symbols, between two looks
_EVERY = 16  # of so many symbols one phase is looked at
_LOOKED_AT = 128  # such phases
_CATCH_UP = 2048  # symbols in which the oscillator comes to where the carrier is

Floats = NDArray[np.float64]


class Steering:
    """Turns I/Q rails by a carrier, and learns from the loops' phases whether that drifts; then it runs along.

    ``carrier`` in cycles a rail sample and ``drift`` in cycles a rail sample, from one to the next, are those at the first sample.
    Filtered sample ``x`` is centred on rail sample ``x / interpolate - delay``. Without a drift it is a plain `Oscillator`.
    """

    def __init__(
        self, carrier: float, drift: float, *, rail_sps: float, interpolate: int, delay: float, rotation: float
    ) -> None:
        self._oscillator = Oscillator(carrier)
        self._sps = rail_sps
        self._interpolate = interpolate
        self._delay = delay
        self._rotation = rotation
        self._position = 0
        # where each stretch of constant drift begins: rail sample, phase, turn, drift
        self._knots = [(0, 0.0, 0.0, drift)]
        self.active = drift != 0.0
        self._symbols = 0
        self._places: Floats = np.zeros(0)  # rail samples
        self._phases: Floats = np.zeros(0)  # cycles, what the oscillator ran along included
        self._new = 0

    def push(self, rails: Rails) -> Rails:
        """Turn the next samples."""
        out = self._oscillator.push(rails)
        size = out[0].size
        self._position += size
        if not self.active or not size:
            return out
        at = np.arange(self._position - size, self._position, dtype=np.float64)
        turns = np.exp(-2j * np.pi * np.mod(self._along(at)[0], 1.0)).astype(np.complex64)
        out_i, out_q = np.empty_like(out[0]), np.empty_like(out[1])
        kernel.turn_each(out[0], out[1], turns, out_i, out_q)
        return out_i, out_q

    def follow(self, track: Track) -> Floats | None:
        """Take the loops' next phases; returns what of their turn the oscillator took, cycles a symbol, ``(n,)``; None: nothing."""
        n = track.values.shape[1]
        chosen = slice(-self._symbols % _EVERY, n, _EVERY)
        k = np.arange(self._symbols, self._symbols + n)[chosen]
        places, total = self._places_of(track, chosen), track.phases[:n][chosen] - self._rotation * k
        turns = None
        if self.active:
            phases, turns = self._along(self._places_of(track, slice(n)))
            total += phases[chosen]
        self._symbols += n
        self._places = np.concatenate((self._places, places))[-_LOOKED_AT:]
        self._phases = np.concatenate((self._phases, total))[-_LOOKED_AT:]
        self._new += k.size
        if self._new >= PART // _EVERY:
            self._new = 0
            self._learn()
        return turns

    def _places_of(self, track: Track, chosen: slice) -> Floats:
        """Rail samples on which some of the symbols are centred."""
        return np.asarray((track.base + track.instants[:-1][chosen]) / self._interpolate - self._delay)

    def _along(self, places: Floats) -> tuple[Floats, Floats]:
        """Phase (cycles) that the oscillator has run along by at rail samples, and its turn there, cycles a symbol."""
        starts = np.array([knot[0] for knot in self._knots], dtype=np.float64)
        index = np.clip(np.searchsorted(starts, places, side="right") - 1, 0, None)
        start, phase, turn, drift = np.asarray(self._knots, dtype=np.float64)[index].T
        ahead = places - start
        return phase + turn * ahead + 0.5 * drift * ahead**2, (turn + drift * ahead) * self._sps

    def _learn(self) -> None:
        """A parabola through the newest phases; where it says more than a line, run along."""
        k = (self._places - self._position) / self._sps  # symbols from now on
        if k.size < _LOOKED_AT // 2 and not self.active:
            return
        drift, line, parabola = parabola_through(k, self._phases)
        least = _LEAST * (_LOOKED_AT / k.size) ** 2
        stands_out = abs(drift) > least and parabola < (STILL_STANDS_OUT if self.active else STANDS_OUT) * line
        if not (self.active or stands_out):
            return
        (phase,), (turn,) = self._along(np.array([float(self._position)]))
        # the newest phases' turn, carried on to here
        near = k > k[-1] - PART
        slope = float(np.polyfit(k[near], self._phases[near], 1)[0]) - drift * float(k[near].mean())
        wanted = (drift if stands_out else 0.0) + (slope - turn) / _CATCH_UP
        wanted = min(max(wanted, -_MOST), _MOST)
        self.active = True
        self._knots.append((self._position, float(phase), float(turn) / self._sps, wanted / self._sps**2))
        # what the filter still holds may need the knots before
        self._knots = self._knots[-8:]
