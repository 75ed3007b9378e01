"""Symbol rate and carrier once more, from all symbols and what was decided: towards the bound of what can be known."""

import math
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from dsp.acquisition import raised_power
from dsp.identify.candidates import Candidate, Wave, symbol_wave, value_at
from dsp.identify.likelihood import decide
from dsp.identify.shape import trimmed_solution
from dsp.identify.spectrum import Spectrum

_MOST = 65_536  # symbols
_BLOCK = 256  # symbols whose phases and timings are averaged
_LEAST_BLOCKS = 8
_COHERENT = 0.6  # what a block's decisions must explain of its values
_LAGS = 6
_STEP = 0.1  # symbols to either side, at which a slope is taken
_CURVED = 0.2  # that the response must be at its top: of its height, a symbol squared
_MOST_LATE = 0.2  # symbols, at the ends of the stretch: beyond it the line was not the clock's, or the clock wanders

Values = NDArray[np.complex128]


def refined(spectrum: Spectrum, candidate: Candidate) -> Candidate:
    """The candidate with rate and centre by least squares over up to 65536 symbols; as it was where they do not all agree.

    The carrier's phase and the clock's lateness against the decisions, block by block, and a straight line through each: for symbols
    that are decided rightly that is the maximum-likelihood estimate. Source: U. Mengali and A. N. D'Andrea, Synchronization Techniques
    for Digital Receivers, 1997, ch. 3 and 7 (from memory). Staggered schemes and frequencies are left as they are.
    """
    scheme = candidate.scheme
    if scheme.kind == "frequency" or scheme.stagger or candidate.response is None:
        return candidate
    wave, filtered, first = symbol_wave(spectrum, candidate)
    reach = 2.0 * wave.sps + 8
    if not first.size:
        return candidate
    ahead = math.floor((float(first[0]) - reach) / wave.sps)
    count = int((filtered.size - reach - float(first[0])) / wave.sps) + ahead
    count = min(count, _MOST) // _BLOCK * _BLOCK
    if count < _LEAST_BLOCKS * _BLOCK:
        return candidate
    start = float(first[0]) - ahead * wave.sps if count < _MOST else float(first[0])
    count = min(count, int((filtered.size - reach - start) / wave.sps) // _BLOCK * _BLOCK)
    k = np.arange(count, dtype=np.float64)
    instants = start + wave.sps * k
    z = value_at(wave, instants, filtered)
    z = z / max(math.sqrt(float(np.mean(np.abs(z) ** 2))), 1e-30)
    turn, phase = 0.0, np.zeros(count)
    if scheme.kind == "carrier":
        power = raised_power(z * np.exp(-2j * np.pi * scheme.rotation * k), scheme.symmetry)
        slope, intercept = _line(power if scheme.symmetry == 2 else -power, scheme.symmetry)
        turn, phase = slope, slope * k + intercept + scheme.rotation * k
    for last in (False, True):
        upright = z * np.exp(-2j * np.pi * phase)
        if scheme.kind == "baseband":
            upright = upright - upright.mean()
        ideal = _decided(upright, candidate)
        product = upright * np.conj(ideal)
        if np.mean(_coherence(product, upright, ideal) > _COHERENT) < 0.9:
            return candidate
        if scheme.kind == "baseband":
            break
        slope, intercept = _line(product, 1)
        turn, phase = turn + slope, phase + slope * k + intercept
        if last:
            break
    late = _lateness(wave, filtered, instants, phase, ideal)
    rate = candidate.rate
    if late is not None and abs(late) * count / 2 < _MOST_LATE:
        rate = candidate.rate / (1.0 + late)
    centre = (
        candidate.centre if scheme.kind == "baseband" else spectrum.nearest(candidate.centre) + turn * candidate.rate
    )
    return replace(candidate, rate=rate, centre=centre)


def _blocks(values: NDArray[Any]) -> NDArray[Any]:
    return np.asarray(values.reshape(-1, _BLOCK).sum(axis=1))


def _line(values: Values, order: int) -> tuple[float, float]:
    """Slope and intercept, cycles, of the phases of ``values`` over their number, as an ``order``-th of what they show."""
    sums = _blocks(values)
    phases = np.unwrap(np.angle(sums)) / (2 * math.pi * order)
    places = (np.arange(sums.size) + 0.5) * _BLOCK - 0.5
    slope, intercept = np.polyfit(places, phases, 1, w=np.abs(sums))
    return float(slope), float(intercept)


def _decided(upright: Values, candidate: Candidate) -> Values:
    scheme = candidate.scheme
    share = 1.0 / (1.0 + 10 ** (-candidate.snr_db / 10))
    gain = math.sqrt(share / scheme.symbol_energy())
    rows = np.stack((upright.real, upright.imag)) if scheme.kind == "carrier" else upright.real[None]
    if scheme.kind == "baseband":
        gain *= math.sqrt(float(np.mean(rows**2)))
    decided = decide(rows, scheme, gain)[0] * gain
    return np.asarray(decided[0] + (1j * decided[1] if decided.shape[0] == 2 else 0j))


def _coherence(product: Values, upright: Values, ideal: Values) -> NDArray[np.float64]:
    norm = np.sqrt(_blocks(np.abs(upright) ** 2) * _blocks(np.abs(ideal) ** 2))
    return np.asarray(np.abs(_blocks(product)) / np.maximum(norm, 1e-30))


def _lateness(
    wave: Wave, filtered: Values, instants: NDArray[np.float64], phase: NDArray[np.float64], ideal: Values
) -> float | None:
    """How much later each symbol comes than its instant says, a symbol; None where the response is too flat to tell."""
    turn = np.exp(-2j * np.pi * phase)
    ahead, here, behind = (value_at(wave, instants + s * _STEP * wave.sps, filtered) * turn for s in (-1, 0, 1))
    slope = (behind - ahead) / (2 * _STEP)
    bend = (behind - 2 * here + ahead) / _STEP**2
    energy = float(np.mean(np.abs(ideal) ** 2))
    curve, height = (float(np.mean((np.conj(ideal) * values).real)) / energy for values in (bend, here))
    if not -curve > _CURVED * abs(height):
        return None
    # what the decided neighbours put into the slope is no lateness
    lags = [lag for lag in range(-_LAGS, _LAGS + 1) if lag]
    design = np.stack([np.roll(ideal, lag) for lag in lags], axis=1)
    some = slice(_LAGS, min(ideal.size - _LAGS, 8192))
    slope = slope - design @ trimmed_solution(design[some], slope[some, None])[0][:, 0]
    late = _blocks((np.conj(ideal) * slope).real) / np.maximum(_blocks(np.abs(ideal) ** 2), 1e-30) / -curve
    places = (np.arange(late.size) + 0.5) * _BLOCK
    return float(np.polyfit(places, late, 1)[0])
