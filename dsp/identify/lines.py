"""Lines that a symbol clock or a carrier leaves in products of a spectrum with itself."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from dsp.identify.spectrum import Cells, Spectrum, fast_length

_LIMIT = 3.0  # a whitened bin is held to this many times its rms: what is left of bare tones
_BESIDE = 24  # bins about a line that its own leakage may fill
_DEPTHS = (1e-3, 0.15)
_FILLED = 0.25  # of a band that must stand out from the floor


@dataclass(frozen=True, slots=True)
class Line:
    """A line: cycles a sample, power over what noise of the same spectrum would put there, chance that noise did."""

    frequency: float
    ratio: float
    chance: float


def whitening(spectrum: Spectrum, low: float, high: float, depth: float) -> Cells:
    """Weight of each cell that makes the spectrum flat from ``low`` to ``high`` cycles a sample.

    0 elsewhere, near the floor, and where less than ``depth`` of the greater part is left.
    """
    frequencies = spectrum.frequencies
    inside = (frequencies > low) & (frequencies < high) & spectrum.full()
    if inside.any():
        inside &= spectrum.density > depth * float(np.quantile(spectrum.density[inside], 0.9))
    return np.where(inside, 1.0 / np.sqrt(np.maximum(spectrum.density, 1e-30)), 0.0)


def _limited(transform: NDArray[np.complex64]) -> NDArray[np.complex64]:
    magnitude = np.abs(transform)
    over = magnitude > _LIMIT
    transform[over] *= np.float32(_LIMIT) / magnitude[over]
    return transform


def _overlap(full: Cells, mirrored: bool, length: int) -> Cells:
    """How much of the cells ``full`` (0 or 1) meets itself at each shift, or its mirror image; circular in ``length``."""
    a = fft.fft(full, length)
    return np.maximum(fft.ifft(a * a if mirrored else a * np.conj(a)).real, 0.0)


class Products:
    """The whitened band of a spectrum, and the lines of its square and its power.

    In the power of a modulated wave stands a line at the symbol rate wherever its spectrum is wider than that; whitening makes its
    height the share of the band whose two ends are copies of each other, times the symbols. Source: W. A. Gardner, Exploitation of
    spectral redundancy in cyclostationary signals, IEEE Signal Processing Magazine 8(2), 1991 (from memory); the line itself is that
    of M. Oerder and H. Meyr, IEEE Trans. Commun. 36(5), 1988.
    """

    def __init__(self, spectrum: Spectrum, low: float, high: float, depth: float = 1e-3) -> None:
        weight = whitening(spectrum, low, high, depth)
        frequencies = spectrum.frequencies
        inside = np.flatnonzero(weight)
        # cells that stand out here and there are noise without a band
        self.empty = inside.size < 4 or inside.size < _FILLED * (inside[-1] - inside[0] + 1)
        if self.empty:
            return
        cell = spectrum.width / spectrum.size
        self._real = spectrum.is_real and low <= 0.0
        bottom = 0.0 if self._real else float(frequencies[inside[0]]) - cell
        top = float(frequencies[inside[-1]]) + cell
        self.centre = 0.0 if self._real else 0.5 * (bottom + top)
        half = 0.5 * (top - bottom)
        # the products' lines reach the band's whole width (real waves: twice their top), and must not wrap
        span = 4.2 * (top if self._real else half)
        self.length = fft.next_fast_len(max(math.ceil(span * spectrum.size), 64))
        self._size = spectrum.size
        cells = weight > 0
        if self._real:
            last = min(spectrum.bin_of(top), spectrum.transform.size - 1)
            part = np.zeros(self.length // 2 + 1, np.complex64)
            part[:last] = _limited(spectrum._weighted(0, last, weight))
            wave = np.asarray(fft.irfft(part, self.length), np.float32)
            self._wave: NDArray[np.complex64] | NDArray[np.float32] = wave
            two_sided = np.concatenate((cells[: math.ceil(top / cell)][::-1], cells[: math.ceil(top / cell)]))
            self._cells = two_sided.astype(np.float64)
        else:
            self._wave = np.asarray(
                fft.ifft(_limited(spectrum._placed(self.centre, half, self.length, weight))), np.complex64
            )
            first = int(np.searchsorted(frequencies, self.centre - half))
            stop = int(np.searchsorted(frequencies, self.centre + half))
            self._cells = cells[first:stop].astype(np.float64)
        self._cell = cell
        self._wave *= np.float32(math.sqrt(self.length))

    def clock_lines(self, lowest: float, highest: float, most: int = 6) -> list[Line]:
        """Lines of the power, strongest first, from ``lowest`` to ``highest`` cycles an input sample."""
        if self.empty:
            return []
        z = self._wave
        power = (z.real**2 + z.imag**2) if np.iscomplexobj(z) else z * z
        level = np.abs(fft.rfft(np.asarray(power, np.float32))) ** 2
        return self._peaks(
            level, self._expected(level.size, mirrored=False, two_sided=False), lowest, highest, most, 0.0
        )

    def square_lines(self, most: int = 6) -> list[Line]:
        """Lines of the square, strongest first; frequencies are those of the square in the input, so that a carrier's is twice its own."""
        if self.empty or self._real:
            return []
        level = np.abs(fft.fft(self._wave * self._wave)) ** 2
        expected = self._expected(level.size, mirrored=True, two_sided=True)
        return self._peaks(level, expected, -1.0, 1.0, most, 2 * self.centre)

    def _expected(self, size: int, *, mirrored: bool, two_sided: bool) -> Cells:
        """What noise of the whitened shape puts into each bin of a product's transform."""
        width = self._cell * self._size  # bins a cell
        count = fast_length(8 * self._cells.size)
        overlap = _overlap(self._cells, mirrored, count)
        if mirrored:
            # cell i and cell j meet at i + j: the middle of the band stands at twice its index
            shift = np.arange(size)
            signed = np.where(shift < size / 2, shift, shift - size)
            place = signed / width + (self._cells.size - 1)
            bins = np.interp(
                place, np.arange(2 * self._cells.size), overlap[: 2 * self._cells.size], left=0.0, right=0.0
            )
        else:
            bins = np.interp(
                np.arange(size) / width, np.arange(self._cells.size + 1), overlap[: self._cells.size + 1], right=0.0
            )
        pairs = bins * width * (2.0 if mirrored or self._real else 1.0)
        return np.maximum(pairs, 0.02 * float(pairs.max())) * 1.0

    def _peaks(
        self, level: Cells, expected: Cells, lowest: float, highest: float, most: int, offset: float
    ) -> list[Line]:
        n = level.size
        full = self.length
        index = np.arange(n)
        signed = np.where(index < full / 2, index, index - full) if n == full else index
        frequency = signed / self._size
        ratio = np.asarray(level / expected, dtype=np.float64)
        width = max(n // 256, 32)
        blocks = ratio[: n // width * width].reshape(-1, width)
        if blocks.shape[0]:
            local = np.mean(np.minimum(blocks, 8.0), axis=1)
            ratio[: blocks.size] /= np.repeat(np.maximum(local, 1.0), width)
        ratio[(frequency < lowest) | (frequency > highest)] = 0.0
        if n != full:
            ratio[:3] = 0.0
        found: list[Line] = []
        for _ in range(most):
            peak = int(np.argmax(ratio))
            if ratio[peak] < math.log(n) + 9.0:
                break
            # the local floor moves in steps: the bin that is highest in itself
            near = np.arange(peak - 2, peak + 3) % n
            peak = int(near[np.argmax(level[near])])
            left, middle, right = (math.sqrt(float(level[(peak + d) % n])) for d in (-1, 0, 1))
            # between two bins of a line without a window the ratio of magnitudes tells the place
            shift = right / (middle + right) if right > left else -left / (middle + left)
            chance = min(1.0, n * math.exp(-min(float(ratio[peak]), 700.0)))
            found.append(Line(float(frequency[peak]) + shift / self._size + offset, float(ratio[peak]), chance))
            ratio[np.arange(peak - _BESIDE, peak + _BESIDE + 1) % n] = 0.0
        return found


def clock_lines(
    spectrum: Spectrum, low: float, high: float, lowest: float, highest: float, depths: tuple[float, ...] = _DEPTHS
) -> list[Line]:
    """Lines of a symbol clock in the band ``low`` to ``high``, from ``lowest`` to ``highest`` cycles a sample.

    Sought twice, with much and with little of what stands beside the main lobe: the lobes of a square pulse take from its line what
    the main lobe gives, and at one width of the band all of it.
    """
    found: list[Line] = []
    for depth in depths:
        for line in Products(spectrum, low, high, depth).clock_lines(lowest, highest):
            known = next((f for f in found if abs(f.frequency - line.frequency) * spectrum.size < _BESIDE), None)
            if known is None:
                found.append(line)
            elif line.ratio > known.ratio:
                found[found.index(known)] = line
    return sorted(found, key=lambda line: -line.ratio)
