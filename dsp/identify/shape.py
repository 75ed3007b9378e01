"""The pulse: first from the spectrum's shape, then from the response to the symbols decided."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar
from scipy.special import ndtr

from dsp.identify.spectrum import Spectrum
from dsp.link import Scheme
from dsp.pulses import Pulse, receive_filter

Floats = NDArray[np.float64]

PHASES = 16  # a symbol, at which a response is known
_LAGS = 10  # symbols on each side
_TRACES = 1500
_TRIM = 25.0  # times the median squared error, from where on a row is no symbol
_LIKELY = 0.03  # of an opening, by which the family that the spectrum's shape speaks for is preferred
_NEARLY = 0.01  # of an opening, within which two pulses are as good
_NO_OPENING = -1e3  # of a wave in which the symbols leave nothing
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
                    model = (
                        np.sinc(u) ** 2 if number is None else _cosine_band(u, number) ** (1 if family == "rrc" else 2)
                    )
                    misfit = _misfit(model, density, weight)
                    if best is None or misfit < best.misfit:
                        best = Shape(
                            Pulse(family, None if number is None else float(number)), about + float(offset), misfit
                        )
            assert best is not None
            # once more, finely
            if best.pulse.number is not None:
                numbers = list(np.clip(best.pulse.number + np.linspace(-0.04, 0.04, 5), 0.05, 1.0))
            if centre is not None:
                offsets = (best.centre - about) + np.linspace(-0.015, 0.015, 5) * rate
        if best is not None:
            found.append(best)
    return sorted(found, key=lambda shape: shape.misfit)


def _misfit(model: Floats, density: Floats, weight: Floats) -> float:
    """Rms of the weighted difference to the best multiple of ``model`` over a floor that is not negative."""
    a, b = weight * model, weight
    aa, ab, bb = float(a @ a), float(a @ b), float(b @ b)
    target = weight * density
    at, bt = float(a @ target), float(b @ target)
    determinant = aa * bb - ab * ab
    gain, floor = (
        ((bb * at - ab * bt) / determinant, (aa * bt - ab * at) / determinant) if determinant > 0 else (0.0, 0.0)
    )
    if floor < 0 or determinant <= 0:
        gain, floor = at / max(aa, 1e-30), 0.0
    residual = target - gain * a - floor * b
    return math.sqrt(float(np.mean(residual**2)))


@dataclass(frozen=True, slots=True)
class Response:
    """What one symbol puts into the wave before any receive filter, at `PHASES` a symbol, ``(2 * _LAGS + 1) * PHASES`` values.

    ``noise`` is the variance of what the symbols do not explain, a sample; ``band`` the one-sided band of the wave in symbol rates;
    ``zero`` the wave's middle between its levels.
    """

    wave: NDArray[np.complex128]
    noise: float
    band: float
    zero: float = 0.0


def response_of(sampled: NDArray[np.complex128], decided: NDArray[np.complex128], band: float) -> Response:
    """Least-squares response: ``sampled`` ``(PHASES, n)`` at the instants plus each phase less half a symbol, ``decided`` ``(n,)``."""
    n = decided.size
    lags = np.arange(-_LAGS, _LAGS + 1)
    rows = np.arange(_LAGS, n - _LAGS)
    design = np.stack([*(decided[rows - lag] for lag in lags), np.ones(rows.size, complex)], axis=1)
    target = sampled[:, rows].T
    solution, noise = trimmed_solution(design, target)  # lag, phase
    # a lag's values run from half a symbol before its instant to half a symbol behind: in order of time
    return Response(
        np.asarray(solution[:-1].ravel(), dtype=np.complex128), noise, band, float(np.mean(solution[-1].real))
    )


def trimmed_solution(
    design: NDArray[np.complex128], target: NDArray[np.complex128]
) -> tuple[NDArray[np.complex128], float]:
    """Least squares of ``target`` ``(n, k)`` on ``design`` ``(n, m)``, and the variance left.

    Once more without the rows that fit worst by far: gaps and the ends of bursts are no symbols.
    """
    keep = np.ones(target.shape[0], bool)
    for _ in range(2):
        some = design[keep]
        normal = some.conj().T @ some
        normal += 1e-9 * np.trace(normal).real / normal.shape[0] * np.eye(normal.shape[0])
        solution = np.linalg.solve(normal, some.conj().T @ target[keep])
        error = np.mean(np.abs(target - design @ solution) ** 2, axis=1)
        keep = error < _TRIM * float(np.median(error)) + 1e-18
    noise = float(np.mean(error[keep])) * keep.sum() / max(int(keep.sum()) - design.shape[1], 1)
    return np.asarray(solution), noise


def behind(response: Response, pulse: Pulse, energy: float) -> tuple[float, int, NDArray[np.complex128]]:
    """MER in dB of a receiver for ``pulse`` with symbols of mean ``energy``, its best phase, the response at symbol intervals there."""
    taps = np.asarray(receive_filter(pulse, float(PHASES)), dtype=np.float64)
    size = 2 ** math.ceil(math.log2(response.wave.size + taps.size))
    spectrum = np.fft.fft(taps, size)
    # four times as many phases, so that the best is met
    product = np.fft.fft(response.wave, size) * spectrum
    fine = np.zeros(4 * size, complex)
    fine[: size // 2], fine[-size // 2 :] = product[: size // 2], product[size // 2 :]
    start = 4 * (taps.size // 2)
    wave = 4 * np.fft.ifft(fine)[start : start + 4 * response.wave.size]
    frame = wave.reshape(-1, 4 * PHASES)
    # white noise of one-sided band B symbol rates, sampled at PHASES a symbol
    inside = np.abs(np.fft.fftfreq(size)) * PHASES < response.band
    noise = response.noise * float(np.mean(np.abs(spectrum[inside]) ** 2)) if inside.any() else response.noise
    main = np.argmax(np.abs(frame), axis=0)
    cursor = np.abs(frame[main, np.arange(frame.shape[1])]) ** 2
    isi = np.sum(np.abs(frame) ** 2, axis=0) - cursor
    ratio = energy * cursor / np.maximum(energy * isi + noise, 1e-30)
    best = int(np.argmax(ratio))
    return 10 * math.log10(max(float(ratio[best]), 1e-12)), best, frame[:, best]


def opening_behind(response: Response, pulse: Pulse, scheme: Scheme) -> float:
    """Opening, 1 for a perfect eye, of a rail behind the receive filter for ``pulse``: one trace in a thousand left outside on a side.

    The symbols' share is that of random symbols through the response, the noise Gaussian.
    """
    mer_db, _, taps = behind(response, pulse, scheme.symbol_energy())
    main = int(np.argmax(np.abs(taps)))
    if not abs(taps[main]) > 0:
        return _NO_OPENING
    scaled = taps / taps[main]
    scaled[main] = 0.0
    points = scheme.points()
    symbols = points[np.random.default_rng(1).integers(0, points.size, _TRACES)]
    isi = np.convolve(symbols, scaled, mode="same").real
    distance = 0.5 * float(np.min(np.diff(np.asarray(scheme.rail_levels))))
    # the rest of the MER is noise; half of it on a rail of a carrier
    total = scheme.symbol_energy() * 10 ** (-mer_db / 10)
    noise = max(total - scheme.symbol_energy() * float(np.sum(np.abs(scaled) ** 2)), 1e-9)
    sigma = math.sqrt(noise / (2 if scheme.kind == "carrier" else 1))
    low, high = 0.0, float(np.max(np.abs(isi))) + 5 * sigma
    for _ in range(18):
        middle = 0.5 * (low + high)
        if float(np.mean(ndtr((isi - middle) / sigma))) > 1e-3:
            low = middle
        else:
            high = middle
    return 1.0 - high / distance


def best_pulse(
    response: Response, scheme: Scheme, families: tuple[str, ...], expected: tuple[Pulse, ...]
) -> list[tuple[Pulse, float]]:
    """Each family's pulse whose receive filter opens the eye most, best first; a roll-off or BT is sought without a grid.

    Of a family, the pulse ``expected`` from the spectrum is kept where it does nearly as well.
    """
    found: list[tuple[Pulse, float]] = []
    known = {pulse.family: pulse for pulse in expected}
    for family in families:
        if family in ("rect", "none", "rc"):
            plain = Pulse(family, 0.5 if family == "rc" else None)  # type: ignore[arg-type]
            pulse = known.get(plain.family, plain)
            found.append((pulse, opening_behind(response, pulse, scheme)))
            continue
        low, high = (0.05, 1.0) if family == "rrc" else (0.2, 1.5)

        def merit(number: float, family: str = family) -> float:
            return opening_behind(response, Pulse(family, float(number)), scheme)  # type: ignore[arg-type]

        grid = np.linspace(low, high, 11)
        merits = [merit(number) for number in grid]
        top = int(np.argmax(merits))
        a, b = float(grid[max(top - 1, 0)]), float(grid[min(top + 1, 10)])
        number = round(
            float(minimize_scalar(lambda n: -merit(n), bounds=(a, b), method="bounded", options={"xatol": 2e-3}).x), 4
        )
        best = Pulse(family, number), merit(number)  # type: ignore[arg-type]
        expected_one = known.get(best[0].family)
        if expected_one is not None and (kept := merit(expected_one.number or 0.0)) > best[1] - _NEARLY:
            best = expected_one, kept
        found.append(best)
    likely = expected[0].family if expected else None
    return sorted(found, key=lambda item: -item[1] - (_LIKELY if item[0].family == likely else 0.0))
