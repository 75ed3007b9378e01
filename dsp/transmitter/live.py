"""An endless transmission whose defects can be changed while it runs."""

import dataclasses
import math
from dataclasses import dataclass
from typing import Any, Final, cast

import numpy as np
from numpy.typing import NDArray

from dsp.block import Samples
from dsp.errors import DspError
from dsp.transmitter.spec import TransmitSpec
from dsp.transmitter.stream import Sender, Symbols, Wave, noise_per_unit
from dsp.transmitter.waveform import Floats, Rail, Shape, half_span

CHANGEABLE: Final = frozenset(
    (
        "snr_db",
        "carrier_hz",
        "clock_ppm",
        "clock_drift_ppm_s",
        "jitter_rms_ui",
        "jitter_sine_ui",
        "jitter_sine_hz",
        "phase_noise_deg",
        "echoes",
        "t_over_tau",
        "iq_gain_db",
        "iq_skew_deg",
        "dc",
        "clipping",
        "clip_at",
    )
)
_FADED: Final = frozenset(("echoes", "t_over_tau", "iq_gain_db", "iq_skew_deg", "dc", "clipping", "clip_at"))
_FADE_SYMBOLS = 16
_SWELL_SYMBOLS = 64  # in which sinusoidal jitter reaches a new peak
_MOST_PPM = 1e4
_LONGEST_TAIL = 345  # symbols: of a one-pole low-pass of T/tau = 0.1, twice
_FARTHEST_ECHO = 1000
_RENAME_AFTER = 1 << 20  # symbols; a multiple of 8, in which every turning frame repeats


@dataclass(frozen=True)
class _Path:
    """A way from symbols to samples."""

    spec: TransmitSpec
    shape: Shape
    rails: tuple[Rail, ...]

    @property
    def ahead(self) -> int:
        return self.shape.before + 3


class LiveTransmitter:
    """Blocks of one endless stream, in order; between two of them its defects may change.

    Without changes it gives what `dsp.transmitter.transmit` gives, to rounding. A change holds from the next block on.
    Symbol clock, carrier, phase noise and sinusoidal jitter go on from the phase they have reached; echoes, low-pass,
    I/Q imbalance, DC and clipping fade over 16 symbols, and a change during a fade waits for its end. Jitter and phase
    noise of the symbols whose pulses have begun (for rrc some hundred) were drawn already. The level
    (`gain`) stays as it was at the start.

    Parameters
    ----------
    spec
        The link and its first defects; ``symbols`` is ignored.

    Attributes
    ----------
    spec
        What is in force.
    position
        Samples made so far.
    gain
        Sample value of one level unit.
    silent
        Nothing is sent, only the noise stays; may be set between blocks.
    """

    def __init__(self, spec: TransmitSpec) -> None:
        self.gain = Sender(spec).gain
        self.spec = dataclasses.replace(spec, symbols=1)
        self.position = 0
        self.silent = False
        self._scheme = spec.link_scheme
        self._wanted: dict[str, Any] = {}
        self._ppm = spec.clock_ppm
        self._turn = 0.0  # of the carrier, cycles
        self._sine = 0.0  # phase of the jitter, radians
        self._peak, self._peak_wanted, self._swelling = spec.jitter_sine_ui, spec.jitter_sine_ui, 0
        self._u = -(0.5 - 0.5 / spec.samples_per_symbol + spec.delay_ui)
        self._behind = math.ceil(half_span(spec.pulse)) + _LONGEST_TAIL + _FARTHEST_ECHO + 40
        self._first = -self._behind
        self._base = 0  # index in the stream of the symbol that is now counted as 0
        self._symbols = Symbols(spec, self._first)
        empty = np.zeros(0)
        self._values = [empty for _ in range(2 if self._scheme.rails == 2 else 1)]
        self._moves, self._theta = empty, empty
        self._theta_last = 0.0
        self._old: _Path | None = None
        self._faded = 0
        self._path = self._build(self.spec)

    @property
    def clock_ppm(self) -> float:
        """Present error of the symbol clock, drift included; it stops at 10 000 ppm either way."""
        return self._ppm

    @property
    def noise_rms(self) -> float:
        """Rms of the noise in a sample (of its complex value for I/Q), before clipping."""
        return noise_per_unit(self.spec) * self.gain

    def change(self, **changes: Any) -> None:  # noqa: ANN401 - fields of TransmitSpec
        """Ask for other values of some of `CHANGEABLE`, fields of `TransmitSpec`, from the next block on.

        Raises DspError, and changes nothing, for a field that cannot change or a value that cannot be.
        """
        for name in changes:
            if name not in CHANGEABLE:
                raise DspError(
                    f"{name} cannot change while the transmitter runs; these can: {' '.join(sorted(CHANGEABLE))}"
                )
        wanted = {**self._wanted, **changes}
        dataclasses.replace(self.spec, **wanted)
        self._wanted = wanted

    def block(self, count: int) -> Samples:
        """The next ``count`` samples, 1 or more: float32 or complex64, shape ``(count,)``."""
        if count < 1:
            raise DspError(f"count must be 1 or more, got {count!r}")
        self._settle_paths()
        n = np.arange(count, dtype=np.float64)
        u = self._clock(n)
        self._extend(math.floor(u[-1]) + max(path.ahead for path in self._paths()) + 1)
        weight = self._weight(count)
        wave = self._channel(u, weight)
        if self._scheme.kind != "baseband":
            wave = self._on_carrier(wave, n, u)
        self._interrupt(wave, n)
        out = self._at_output(wave, weight)
        self._advance(count)
        return out

    # changes

    def _settle_paths(self) -> None:
        fade = max(1, round(_FADE_SYMBOLS * self.spec.samples_per_symbol))
        if self._old is not None and self._faded >= fade:
            self._old = None
        if self._old is None and self._wanted:
            self._take_up(self._wanted)
            self._wanted = {}
        elif self._path.shape.way in ("pulse", "step") and self._at_rest():
            self._path = self._build(self.spec)  # all symbols are back on their grid: the fast way gives the same

    def _at_rest(self) -> bool:
        return not (self.spec.jittered or self._swelling or self._moves.any())

    def _take_up(self, changes: dict[str, Any]) -> None:
        before, spec = self.spec, dataclasses.replace(self.spec, **changes)
        # the symbols up to here have their jitter already: the sine goes on from the next one
        following = np.array([self._symbols.next - self._base], dtype=np.float64)
        reached = before.jitter_sine_hz * float(self._when(following)[0])
        if spec.jitter_sine_ui != self._peak_wanted:
            self._peak_wanted, self._swelling = spec.jitter_sine_ui, _SWELL_SYMBOLS
        self.spec = spec
        self._ppm = spec.clock_ppm if "clock_ppm" in changes else self._ppm
        self._sine += 2 * math.pi * (reached - spec.jitter_sine_hz * float(self._when(following)[0]))
        differing = {name for name in changes if getattr(spec, name) != getattr(before, name)}
        old = self._path
        if differing & {"t_over_tau", "jitter_rms_ui", "jitter_sine_ui"}:
            self._path = self._build(spec)
            if self._scheme.kind == "frequency":
                for new_rail, old_rail in zip(self._path.rails, old.rails, strict=True):
                    new_rail.lift(old_rail.total - new_rail.total)
        else:
            self._path = _Path(spec, old.shape, old.rails)
        if differing & _FADED:
            self._old, self._faded = old, 0

    def _build(self, spec: TransmitSpec) -> _Path:
        """Rails that go on from the symbols kept, in the shape that the present jitter needs."""
        largest = float(np.abs(self._moves).max()) if self._moves.size else 0.0
        peak = max(self._peak, self._peak_wanted)
        moving = spec.jitter_rms_ui > 0.0 or peak > 0.0 or largest > 0.0
        plain = dataclasses.replace(spec, jitter_rms_ui=0.01 if moving else 0.0, jitter_sine_ui=0.0)
        shape = Shape.of(plain)
        if moving:
            reach = 1 + math.ceil(max(largest, peak + 8 * spec.jitter_rms_ui))
            shape = dataclasses.replace(shape, reach=reach)
        rails = tuple(Rail(shape, self._first) for _ in self._values)
        if self._moves.size:
            for rail, values in zip(rails, self._values, strict=True):
                rail.extend(values, self._moves)
        return _Path(spec, shape, rails)

    def _paths(self) -> tuple[_Path, ...]:
        return (self._path,) if self._old is None else (self._path, self._old)

    def _all_rails(self) -> list[tuple[int, Rail]]:
        """Every rail once, with the number of its values."""
        pairs = [pair for path in self._paths() for pair in enumerate(path.rails)]
        return list({id(rail): (number, rail) for number, rail in pairs}.values())

    def _weight(self, count: int) -> Floats | None:
        """Share of the new path in each sample; None if there is no other."""
        if self._old is None:
            return None
        fade = max(1, round(_FADE_SYMBOLS * self.spec.samples_per_symbol))
        weight = np.minimum((self._faded + 1.0 + np.arange(count)) / fade, 1.0)
        self._faded += count
        return weight

    # clock and symbols

    def _clock(self, n: Floats) -> Floats:
        """Symbols of the transmitter's clock at sample ``n`` of the block."""
        spec = self.spec
        drift = 0.5e-6 * spec.clock_drift_ppm_s * n / spec.sample_rate_hz
        return self._u + n / spec.samples_per_symbol * (1.0 + 1e-6 * self._ppm + drift)

    def _when(self, u: Floats) -> Floats:
        """Seconds after the block's start at which the clock shows ``u``: the inverse of `_clock`."""
        rate = 1.0 + 1e-6 * self._ppm
        bend = 1e-6 * self.spec.clock_drift_ppm_s / self.spec.symbol_rate_hz
        due = u - self._u
        return 2.0 * due / (rate + np.sqrt(np.maximum(rate**2 + 2.0 * bend * due, 0.0))) / self.spec.symbol_rate_hz

    def _extend(self, stop: int) -> None:
        last = stop + self._base
        while self._symbols.next < last:
            start = self._symbols.next
            count = (min(last, 0) if start < 0 else last) - start
            _, points = self._symbols.take(count)
            stream_due = np.arange(start, start + count, dtype=np.float64)
            due = stream_due - self._base
            moves = self._offsets(stream_due, due)
            if self._scheme.rotation:
                points = points * np.exp(2j * np.pi * ((due * self._scheme.rotation) % 1.0))
            parts = (points.real, points.imag)[: len(self._values)]
            for number, part in enumerate(parts):
                self._values[number] = np.concatenate((self._values[number], part))
            self._moves = np.concatenate((self._moves, moves))
            for number, rail in self._all_rails():
                rail.extend(np.ascontiguousarray(parts[number]), moves)
            theta = np.full(count, self._theta_last)
            if self.spec.phase_noise_deg:
                theta = self._symbols.walk(stream_due, self.spec.phase_noise_deg)
                self._theta_last = float(theta[-1])
            self._theta = np.concatenate((self._theta, theta))

    def _offsets(self, stream_due: Floats, due: Floats) -> Floats:
        spec = self.spec
        moves = np.zeros(due.size)
        if spec.jitter_rms_ui:
            moves += self._symbols.white(stream_due) * spec.jitter_rms_ui
        if self._peak or self._peak_wanted:
            phase = self._sine + 2 * np.pi * spec.jitter_sine_hz * self._when(due)
            moves += self._swell(due.size) * np.sin(phase)
        return moves

    def _swell(self, count: int) -> Floats:
        """Peak of the sinusoidal jitter at each of the next ``count`` symbols."""
        if not self._swelling:
            return np.full(count, self._peak)
        done = np.minimum(np.arange(1, count + 1) / self._swelling, 1.0)
        peaks = self._peak + (self._peak_wanted - self._peak) * done
        self._swelling = max(0, self._swelling - count)
        self._peak = float(peaks[-1]) if self._swelling else self._peak_wanted
        return peaks

    def _advance(self, count: int) -> None:
        spec = self.spec
        seconds = count / spec.sample_rate_hz
        self._u = float(self._clock(np.array([float(count)]))[0])
        ppm = self._ppm + spec.clock_drift_ppm_s * seconds
        self._ppm = min(max(ppm, -_MOST_PPM), _MOST_PPM)
        self._turn = (self._turn + count * (spec.carrier_hz / spec.sample_rate_hz)) % 1.0
        self._sine = (self._sine + 2 * math.pi * spec.jitter_sine_hz * seconds) % (2 * math.pi)
        self.position += count
        keep = math.floor(self._u) - self._behind
        if keep > self._first:
            gone = keep - self._first
            self._values = [values[gone:].copy() for values in self._values]
            self._moves, self._theta = self._moves[gone:].copy(), self._theta[gone:].copy()
            self._first = keep
            for _, rail in self._all_rails():
                rail.drop(keep)
        if self._u > _RENAME_AFTER:
            for _, rail in self._all_rails():
                rail.rename(_RENAME_AFTER)
            self._u -= _RENAME_AFTER
            self._first -= _RENAME_AFTER
            self._base += _RENAME_AFTER

    # waveform

    def _mains(self, u: Floats, weight: Floats | None) -> list[Floats]:
        """Each rail at ``u``."""
        out = []
        for number, rail in enumerate(self._path.rails):
            at = u - self._scheme.stagger if number and self._scheme.stagger else u
            wave = rail.at(at)
            if weight is not None and self._old is not None and self._old.rails is not self._path.rails:
                wave = weight * wave + (1.0 - weight) * self._old.rails[number].at(at)
            out.append(wave)
        return out

    def _modulated(self, spec: TransmitSpec, mains: list[Floats]) -> Wave:
        """The transmitter's output, before the channel."""
        kind = self._scheme.kind
        if kind == "baseband":
            return mains[0]
        if kind == "frequency":
            phase = np.pi * spec.index * mains[0]
            wave: NDArray[np.complex128] = np.exp(1j * phase)
        else:
            wave = mains[0] + 1j * (mains[1] if len(mains) > 1 else np.zeros(1))
        if spec.iq_gain_db or spec.iq_skew_deg:
            skew, gain = math.radians(spec.iq_skew_deg), 10 ** (spec.iq_gain_db / 20)
            wave = wave.real + (1j * gain) * (wave.imag * math.cos(skew) + wave.real * math.sin(skew))
        return wave

    def _channel(self, u: Floats, weight: Floats | None) -> Wave:
        real = self._scheme.kind == "baseband"
        shares: list[tuple[_Path, Floats | float]] = [(self._path, 1.0 if weight is None else weight)]
        if self._old is not None and weight is not None:
            shares.append((self._old, 1.0 - weight))
        wanted: dict[float, list[tuple[TransmitSpec, complex, Floats | float]]] = {}
        for path, share in shares:
            for delay, gain in ((0.0, 1.0), *path.spec.echoes):
                wanted.setdefault(delay, []).append((path.spec, gain, share))
        total: Wave = np.zeros(u.size) if real else np.zeros(u.size, dtype=np.complex128)
        for delay, terms in wanted.items():
            mains = self._mains(u - delay if delay else u, weight)
            for spec, gain, share in terms:
                factor = complex(gain).real if real else gain
                total = cast("Wave", total + self._modulated(spec, mains) * (factor * share))
        return total

    def _on_carrier(self, wave: Wave, n: Floats, u: Floats) -> Wave:
        spec = self.spec
        phase = 2 * np.pi * ((self._turn + n * (spec.carrier_hz / spec.sample_rate_hz)) % 1.0)
        phase += math.radians(spec.carrier_phase_deg)
        whole = np.floor(u)
        at = whole.astype(np.int64) - self._first
        phase += self._theta[at] + (u - whole) * (self._theta[at + 1] - self._theta[at])
        if spec.passband:
            return cast("Wave", wave.real * np.cos(phase) - wave.imag * np.sin(phase))
        return wave * (np.cos(phase) + 1j * np.sin(phase))

    def _interrupt(self, wave: Wave, n: Floats) -> None:
        if self.silent:
            wave[:] = 0.0
        rate = self.spec.sample_rate_hz
        for begin, duration in self.spec.dropouts:
            wave[(n + self.position >= begin * rate) & (n + self.position < (begin + duration) * rate)] = 0.0

    def _at_output(self, wave: Wave, weight: Floats | None) -> Samples:
        spec, rms = self.spec, self.noise_rms
        scaled: Wave = wave * self.gain
        if rms:
            noise = self._symbols.noise
            if spec.real:
                scaled = scaled + noise.standard_normal(scaled.size) * rms
            else:
                scaled = scaled + noise.standard_normal(2 * scaled.size).view(np.complex128) * (rms * math.sqrt(0.5))
        new = self._finished(spec, scaled)
        if self._old is not None and weight is not None:
            old = self._finished(self._old.spec, scaled)
            new = new * weight + old * (1.0 - weight)
        return new.real.astype(np.float32) if spec.real else new.astype(np.complex64)

    def _finished(self, spec: TransmitSpec, scaled: Wave) -> Wave:
        """With DC, clipped."""
        if spec.dc:
            scaled = cast("Wave", scaled + self.gain * (complex(spec.dc).real if spec.real else complex(spec.dc)))
        if spec.clipping == "none":
            return scaled
        rails: Floats = np.ascontiguousarray(scaled).view(np.float64)
        hard = spec.clipping == "hard"
        rails = np.clip(rails, -spec.clip_at, spec.clip_at) if hard else spec.clip_at * np.tanh(rails / spec.clip_at)
        return rails if spec.real else rails.view(np.complex128)
