"""The spectrum of a whole stretch: its smoothed density, where it stands above the floor, and cuts of it as waves of a lower rate."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft

from dsp.block import Samples
from dsp.identify.findings import Band

_CELLS = 4096
_LEAST_CELLS = 32  # that a band should fill
_DEPTH = 2e-3  # of the strong cells' density, down to which a cell belongs to a link
_FULL = 1.5  # times the floor, from where on a cell is more than noise

Cells = NDArray[np.float64]


def fast_length(size: int) -> int:
    """The greatest length up to ``size`` whose transform is quick."""
    step = max(size // 2048, 1)
    for length in range(size, max(size - 64 * step, 0), -step):
        if int(fft.next_fast_len(length)) == length:
            return length
    return int(2 ** math.floor(math.log2(max(size, 1))))


@dataclass(frozen=True, slots=True)
class Spectrum:
    """Transform of a stretch of ``size`` samples, and its power density in cells.

    ``transform`` runs from -1/2 to 1/2 cycles a sample (real samples: from 0 to 1/2) in ``bins`` bins; ``density`` is its squared
    magnitude averaged over cells of ``width`` bins. ``is_real`` says whether the samples were.
    """

    transform: NDArray[np.complex64]
    density: Cells
    width: int
    size: int
    is_real: bool
    floor: float

    @property
    def frequencies(self) -> Cells:
        """Middle of each cell, cycles a sample."""
        first = 0.0 if self.is_real else -(self.size // 2) / self.size
        return first + (np.arange(self.density.size) + 0.5) * self.width / self.size

    def full(self, times: float = _FULL) -> NDArray[np.bool_]:
        """Which cells stand above the floor."""
        kernel = np.ones(3) / 3
        return np.asarray(np.convolve(self.density, kernel, mode="same") > times * self.floor)

    def power(self, band: Band) -> float:
        """What stands above the floor in a band, in the unit of the density."""
        inside = np.abs(self.frequencies - band.centre) < band.half
        return float(np.sum(np.maximum(self.density[inside] - self.floor, 0.0)))

    def total(self, band: Band) -> float:
        """All power in a band: the sum of its bins' squared magnitudes."""
        inside = np.abs(self.frequencies - band.centre) < band.half
        return float(np.sum(self.density[inside])) * self.width

    def holding(self, band: Band, share: float = 0.99) -> Band:
        """The part of a band that holds a ``share`` of its power above the floor, as much left out on either side."""
        inside = np.abs(self.frequencies - band.centre) < band.half
        sums = np.cumsum(np.maximum(self.density[inside] - self.floor, 0.0))
        if not inside.any() or not sums[-1] > 0:
            return band
        edge = 0.5 * (1.0 - share)
        low, high = np.interp((edge, 1.0 - edge), sums / sums[-1], self.frequencies[inside])
        half = max(0.5 * float(high - low), self.width / self.size)
        return Band(0.5 * float(low + high), half)

    def densest(self, width: float, low: float, high: float) -> float:
        """Centre of the window of ``width`` cycles a sample between ``low`` and ``high`` that holds the most power."""
        frequencies = self.frequencies
        cells = max(round(width * self.size / self.width), 1)
        inside = (frequencies > low - width) & (frequencies < high + width)
        # a bare tone or a DC offset does not decide
        limit = 4 * float(np.median(self.density[inside])) + 2 * float(np.quantile(self.density[inside], 0.75))
        sums = np.convolve(np.minimum(self.density, limit), np.ones(cells), mode="same")
        sums[~((frequencies > low) & (frequencies < high))] = 0.0
        near = np.flatnonzero(sums > 0.999 * sums.max())
        if not near.size:
            return 0.5 * (low + high)
        return float(frequencies[near].mean()) - (0.5 * self.width / self.size if cells % 2 == 0 else 0.0)

    def bin_of(self, frequency: float) -> int:
        """The bin at a frequency, unbounded."""
        return round(frequency * self.size) + (0 if self.is_real else self.size // 2)

    def nearest(self, frequency: float) -> float:
        """The frequency of the nearest bin: where `wave` has its 0."""
        return round(frequency * self.size) / self.size

    def wave(self, centre: float, half: float, length: int, weight: Cells | None = None) -> NDArray[np.complex64]:
        """The band ``centre`` +- ``half``, brought to 0 as a complex wave of ``length`` samples over the same time.

        The bin `nearest` to the centre becomes 0. ``weight`` by cell. Real samples give the analytic wave.
        ``length`` should be at least ``2 * half * size``.
        """
        return np.asarray(fft.ifft(self._placed(centre, half, length, weight)), dtype=np.complex64) * np.float32(
            length / self.size
        )

    def envelope_spread(self, centre: float, half: float) -> float:
        """Variance of a band's envelope power over its squared mean, the floor's share taken out; 0 for a constant envelope.

        For a constant envelope in Gaussian noise of share ``v`` of the power the variance is ``1 - (1 - v)**2`` (derived).
        """
        length = fft.next_fast_len(max(math.ceil(4.4 * half * self.size), 256))
        power = np.abs(self.wave(centre, half, length)[length // 16 : -length // 16]).astype(np.float64) ** 2
        mean = float(np.mean(power))
        inside = np.abs(self.frequencies - centre) < half
        share = min(self.floor * float(np.sum(inside)) / max(float(self.density[inside].sum()), 1e-30), 0.95)
        spread = float(np.var(power)) / max(mean, 1e-30) ** 2
        return (spread - 1.0 + (1.0 - share) ** 2) / (1.0 - share) ** 2

    def real_wave(self, top: float, length: int, weight: Cells | None = None) -> NDArray[np.float32]:
        """Real samples below ``top`` cycles a sample as a real wave of ``length`` samples over the same time."""
        last = min(self.bin_of(top), self.transform.size - 1, length // 2)
        part = np.zeros(length // 2 + 1, np.complex64)
        part[:last] = self._weighted(0, last, weight)
        return np.asarray(fft.irfft(part, length), dtype=np.float32) * np.float32(length / self.size)

    def _weighted(self, first: int, stop: int, weight: Cells | None) -> NDArray[np.complex64]:
        part = self.transform[first:stop]
        if weight is None:
            return part
        return part * _by_bin(weight, self.width, first, stop)

    def _placed(self, centre: float, half: float, length: int, weight: Cells | None) -> NDArray[np.complex64]:
        middle = self.bin_of(centre)
        reach = min(math.ceil(half * self.size), length // 2 - 1)
        first, stop = max(middle - reach, 0), min(middle + reach, self.transform.size)
        out = np.zeros(length, np.complex64)
        if stop <= first:
            return out
        part = self._weighted(first, stop, weight)
        positive = max(middle - first, 0)
        out[: part.size - positive] = part[positive:]
        if positive:
            out[length - positive :] = part[:positive]
        return out


def _by_bin(cells: Cells, width: int, first: int, stop: int) -> NDArray[np.float32]:
    low, high = first // width, min((stop - 1) // width, cells.size - 1)
    spread = np.repeat(cells[low : high + 1].astype(np.float32), width)[first - low * width :][: stop - first]
    return np.pad(spread, (0, stop - first - spread.size), mode="edge") if spread.size < stop - first else spread


def spectrum_of(samples: Samples) -> Spectrum | None:
    """The spectrum of a stretch; None for fewer than 512 samples or silence."""
    if samples.size < 512:
        return None
    size = fast_length(samples.size)
    some = samples[:size]
    is_real = not np.iscomplexobj(some)
    transform = fft.rfft(np.real(some)) if is_real else fft.fftshift(fft.fft(some))
    transform[0 if is_real else size // 2] = 0.0  # a DC offset is no part of any link
    power = transform.real.astype(np.float32) ** 2 + transform.imag.astype(np.float32) ** 2
    if not float(power.max()) > 0:
        return None
    cells = min(_CELLS // 2 if is_real else _CELLS, max(transform.size // 64, 64))
    while True:
        width = max(transform.size // cells, 16)
        count = transform.size // width
        density = power[: count * width].reshape(count, width).mean(axis=1, dtype=np.float64)
        # smoothed, so that the least of many cells is not taken for the mean of all
        steady = max(count // 64, 1)
        smooth = density[: count // steady * steady].reshape(-1, steady).mean(axis=1)
        floor = max(float(np.quantile(smooth, 0.1)), 1e-12 * float(density.max()))
        filled = int(np.sum(density > max(4 * floor, 0.05 * float(np.quantile(density, 1 - 8 / density.size)))))
        if filled >= _LEAST_CELLS or width <= 32:
            break
        cells *= 4
    return Spectrum(np.asarray(transform, dtype=np.complex64), density, width, size, is_real, floor)


def segments(spectrum: Spectrum, most: int = 6, depth: float = _DEPTH) -> list[Band]:
    """Stretches of the spectrum that stand above the floor, the most powerful first; narrow nulls within are bridged.

    What lies further below the strong cells than ``depth`` belongs to none: side lobes, images.
    """
    falling = np.sort(spectrum.density)[::-1]
    power = np.cumsum(falling)
    strong = float(falling[int(np.searchsorted(power, 0.5 * power[-1]))])
    full = spectrum.full(2.0) & (spectrum.density > depth * strong)
    edges = np.flatnonzero(np.diff(np.concatenate(([0], full.astype(np.int8), [0]))))
    runs = [[int(a), int(b)] for a, b in zip(edges[::2], edges[1::2], strict=True)]
    joined: list[list[int]] = []
    for run in runs:
        if joined and run[0] - joined[-1][1] <= 2 + 0.08 * max(run[1] - run[0], joined[-1][1] - joined[-1][0]):
            joined[-1][1] = run[1]
        else:
            joined.append(run)
    excess = np.maximum(spectrum.density - spectrum.floor, 0.0)
    total = float(excess.sum())
    ranked = sorted(joined, key=lambda run: -float(excess[run[0] : run[1]].sum()))
    frequencies = spectrum.frequencies
    cell = spectrum.width / spectrum.size
    found = []
    for low, high in ranked[:most]:
        if float(excess[low:high].sum()) < 1e-3 * total or high - low < 4:
            continue
        start, stop = frequencies[low] - cell / 2, frequencies[high - 1] + cell / 2
        found.append(Band(0.5 * (start + stop), 0.5 * (stop - start)))
    return found


def band_about(samples: Samples, frequency: float) -> Band | None:
    """What holds 99 % of the power in the stretch of the spectrum about a frequency (cycles a sample); None where nothing stands out."""
    spectrum = spectrum_of(samples)
    if spectrum is None:
        return None
    about = (band for band in segments(spectrum) if abs(band.centre - frequency) < band.half)
    return next((spectrum.holding(band) for band in about), None)


def occupied_band(samples: Samples) -> Band | None:
    """The band that holds 99 % of the power above the spectrum's floor; None for silence."""
    if samples.size < 256:
        return None
    length = 4096 if samples.size >= 8192 else samples.size // 8
    pieces = samples[: samples.size // length * length].reshape(-1, length)
    if not pieces.size:
        return None
    density = np.zeros(length)
    window = np.hanning(length)
    for piece in pieces[:256]:
        density += np.abs(np.fft.fft(piece * window)) ** 2
    if not density.sum() > 0:
        return None
    if np.isrealobj(samples):
        density = density[: length // 2]
        frequency = np.arange(length // 2) / length
    else:
        density = np.fft.fftshift(density)
        frequency = np.fft.fftshift(np.fft.fftfreq(length))
    smooth = np.convolve(density, np.ones(9) / 9, mode="same")
    floor = np.quantile(smooth, 0.2)
    excess = np.where(smooth > 4 * floor, density - floor, 0.0)
    if not excess.sum() > 0:
        excess = density
    share = np.cumsum(np.maximum(excess, 0.0))
    share /= share[-1]
    low, high = (float(np.interp(s, share, frequency)) for s in (0.005, 0.995))
    return Band(0.5 * (low + high), max(0.5 * (high - low), 2.0 / length))
