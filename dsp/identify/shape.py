"""The pulse: first from the spectrum's shape, then from the response to the symbols decided."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from dsp.identify.spectrum import Spectrum
from dsp.pulses import Pulse, receive_filter

Floats = NDArray[np.float64]

PHASES = 16  # a symbol, at which a response is known
_LAGS = 10  # symbols on each side
_ROLLOFFS = np.arange(0.05, 1.001, 0.05)


@dataclass(frozen=True, slots=True)
class Shape:
    """A spectrum's shape: pulse, centre (cycles a sample), and rms of the misfit relative to the density."""

    pulse: Pulse
    centre: float
    misfit: float


def _cosine_band(f: Floats, rolloff: float) -> Floats:
    """Spectrum of the raised-cosine pulse over frequency in symbol rates: Proakis and Salehi, 5th ed., sec. 9.2-1."""
    edge = np.clip((np.abs(f) - 0.5 * (1 - rolloff)) / rolloff, 0.0, 1.0)
    return np.asarray(0.5 * (1 + np.cos(np.pi * edge)))


def spectrum_shapes(spectrum: Spectrum, rate: float, centre: float | None, reach: float = 1.5) -> list[Shape]:
    """Each family's best fit (rrc, rc, rect) to the density about ``centre`` (None: real baseband), least misfit first.

    ``rate`` in symbols a sample; cells within ``reach`` symbol rates count.
    """
    frequencies = spectrum.frequencies
    about = 0.0 if centre is None else centre
    near = np.abs(frequencies - about) < reach * rate
    near[0] = False
    if np.sum(near) < 8:
        return []
    f, density = frequencies[near], spectrum.density[near]
    if density.size > 600:
        step = density.size // 400
        usable = density.size // step * step
        f = f[:usable].reshape(-1, step).mean(axis=1)
        # the median: lines of a DC offset or of interference are no part of the shape
        density = np.median(density[:usable].reshape(-1, step), axis=1)
    weight = 1.0 / (density + 0.02 * float(density.max()))
    found: list[Shape] = []
    for family in ("rrc", "rc", "rect"):
        best: Shape | None = None
        numbers = [None] if family == "rect" else list(_ROLLOFFS)
        offsets = (0.0,) if centre is None else np.linspace(-0.12, 0.12, 13) * rate
        for _ in range(2):
            for number in numbers:
                for offset in offsets:
                    u = (f - about - offset) / rate
                    model = np.sinc(u) ** 2 if number is None else _cosine_band(u, number) ** (1 if family == "rrc" else 2)
                    misfit = _misfit(model, density, weight)
                    if best is None or misfit < best.misfit:
                        best = Shape(Pulse(family, None if number is None else float(number)), about + float(offset), misfit)
            assert best is not None
            # once more, finely
            if best.pulse.number is not None:
                numbers = list(np.clip(best.pulse.number + np.linspace(-0.04, 0.04, 5), 0.05, 1.0))
            if centre is not None:
                offsets = (best.centre - about) + np.linspace(-0.015, 0.015, 5) * rate
        found.append(best)
    return sorted(found, key=lambda shape: shape.misfit)


def _misfit(model: Floats, density: Floats, weight: Floats) -> float:
    """Rms of the weighted difference to the best multiple of ``model`` over a floor that is not negative."""
    a, b = weight * model, weight
    aa, ab, bb = float(a @ a), float(a @ b), float(b @ b)
    target = weight * density
    at, bt = float(a @ target), float(b @ target)
    determinant = aa * bb - ab * ab
    gain, floor = ((bb * at - ab * bt) / determinant, (aa * bt - ab * at) / determinant) if determinant > 0 else (0.0, 0.0)
    if floor < 0 or determinant <= 0:
        gain, floor = at / max(aa, 1e-30), 0.0
    residual = target - gain * a - floor * b
    return math.sqrt(float(np.mean(residual**2)))


@dataclass(frozen=True, slots=True)
class Response:
    """What one symbol puts into the wave before any receive filter, at `PHASES` a symbol, ``(2 * _LAGS + 1) * PHASES`` values.

    ``noise`` is the variance of what the symbols do not explain, a sample; ``band`` the one-sided band of the wave in symbol rates.
    """

    wave: NDArray[np.complex128]
    noise: float
    band: float


def response_of(sampled: NDArray[np.complex128], decided: NDArray[np.complex128], band: float) -> Response:
    """Least-squares response: ``sampled`` ``(PHASES, n)`` at the instants plus each phase less half a symbol, ``decided`` ``(n,)``."""
    n = decided.size
    lags = np.arange(-_LAGS, _LAGS + 1)
    rows = np.arange(_LAGS, n - _LAGS)
    design = np.stack([decided[rows - lag] for lag in lags], axis=1)
    target = sampled[:, rows].T
    normal = design.conj().T @ design + 1e-6 * n * np.mean(np.abs(decided) ** 2) * np.eye(lags.size)
    solution = np.linalg.solve(normal, design.conj().T @ target)  # lag, phase
    noise = float(np.mean(np.abs(target - design @ solution) ** 2)) * n / max(n - lags.size, 1)
    return Response(solution.ravel(), noise, band)


def behind(response: Response, pulse: Pulse) -> tuple[float, int, NDArray[np.complex128]]:
    """MER in dB that a receiver for ``pulse`` would have, which phase is its best, and the response at symbol intervals there."""
    taps = np.asarray(receive_filter(pulse, float(PHASES)), dtype=np.float64)
    wave = np.convolve(response.wave, taps, mode="same") if taps.size < response.wave.size else np.convolve(
        taps, response.wave, mode="same"
    )
    if wave.size != response.wave.size:
        excess = wave.size - response.wave.size
        wave = wave[excess // 2 : excess // 2 + response.wave.size]
    frame = wave.reshape(-1, PHASES)
    # white noise of one-sided band B symbol rates, sampled at PHASES a symbol
    spectrum = np.abs(np.fft.fft(taps, 2048)) ** 2
    inside = np.abs(np.fft.fftfreq(2048)) * PHASES < response.band
    noise = response.noise * float(np.mean(spectrum[inside])) if inside.any() else response.noise
    main = np.argmax(np.abs(frame), axis=0)
    cursor = np.abs(frame[main, np.arange(PHASES)]) ** 2
    isi = np.sum(np.abs(frame) ** 2, axis=0) - cursor
    ratio = cursor / np.maximum(isi + noise, 1e-30)
    best = int(np.argmax(ratio))
    return 10 * math.log10(max(float(ratio[best]), 1e-12)), best, frame[:, best]


def best_pulse(response: Response, first: Pulse, families: tuple[str, ...]) -> list[tuple[Pulse, float]]:
    """Each family's pulse with the best MER behind its receive filter, best first; a roll-off or BT is sought without a grid."""
    found: list[tuple[Pulse, float]] = []
    for family in families:
        if family in ("rect", "none"):
            pulse = Pulse(family)  # type: ignore[arg-type]
            found.append((pulse, behind(response, pulse)[0]))
            continue
        low, high = (0.05, 1.0) if family in ("rrc", "rc") else (0.2, 1.5)

        def merit(number: float, family: str = family) -> float:
            return behind(response, Pulse(family, number))[0]  # type: ignore[arg-type]

        grid = np.linspace(low, high, 11)
        merits = [merit(float(number)) for number in grid]
        top = int(np.argmax(merits))
        a, b = float(grid[max(top - 1, 0)]), float(grid[min(top + 1, 10)])
        number = _golden(merit, a, b)
        found.append((Pulse(family, round(number, 4)), merit(number)))  # type: ignore[arg-type]
    return sorted(found, key=lambda item: -item[1])


def _golden(merit: "object", low: float, high: float, rounds: int = 12) -> float:
    """Place of the greatest merit between two numbers, by golden section."""
    share = (math.sqrt(5) - 1) / 2
    a, b = low, high
    c, d = b - share * (b - a), a + share * (b - a)
    at_c, at_d = merit(c), merit(d)  # type: ignore[operator]
    for _ in range(rounds):
        if at_c > at_d:
            b, d, at_d = d, c, at_c
            c = b - share * (b - a)
            at_c = merit(c)  # type: ignore[operator]
        else:
            a, c, at_c = c, d, at_d
            d = a + share * (b - a)
            at_d = merit(d)  # type: ignore[operator]
    return 0.5 * (a + b)
