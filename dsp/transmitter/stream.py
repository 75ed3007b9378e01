"""A transmission made block by block, in constant memory."""

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import cast

import numpy as np
from numpy.typing import NDArray

from dsp.block import Samples
from dsp.errors import DspError
from dsp.transmitter.bits import accumulate, map_bits, prbs
from dsp.transmitter.spec import TransmitSpec
from dsp.transmitter.waveform import Floats, Rail, Shape, pulse_energy

Wave = NDArray[np.float64] | NDArray[np.complex128]
_CHUNK = 1 << 16  # samples made at a time, always from multiples of it, so that no cut can change a sample


@dataclass(frozen=True, slots=True)
class Transmission:
    """A stretch of a stream, with the truth about it.

    Attributes
    ----------
    samples
        Shape ``(n,)``, float32 or complex64.
    symbols
        Ideal points of the symbols due in this stretch, shape ``(m,)``, in the level units of `dsp.link.Scheme.points`
        and its turning frame (pi4dqpsk: before the turn by 1/8 from symbol to symbol); float64 for one rail, complex128
        for two.
    instants
        When each symbol's pulse has its centre, in samples since the start of the *stream*, jitter included, shape
        ``(m,)``, float64. The Q rail of oqpsk is half a symbol later.
    bits
        ``scheme.bits`` a symbol, uint8, most significant first; empty for pam3.
    start
        Index of the first sample in the stream.
    gain
        Sample value of one level unit (frequency schemes: of the envelope).
    noise_rms
        Rms of the noise in a sample (of its complex value for I/Q), before clipping.
    """

    samples: Samples
    symbols: Wave
    instants: Floats
    bits: NDArray[np.uint8]
    start: int
    gain: float
    noise_rms: float


def transmit(spec: TransmitSpec) -> Transmission:
    """The whole stream that ``spec`` describes, at once."""
    return next(transmit_blocks(spec, spec.samples))


def transmit_blocks(spec: TransmitSpec, block_samples: int = _CHUNK) -> Iterator[Transmission]:
    """The same stream in blocks of ``block_samples`` (the last one shorter); the samples do not depend on the cut.

    Raises DspError at once if ``block_samples`` is below 1.
    """
    if block_samples < 1:
        raise DspError(f"block_samples must be 1 or more, got {block_samples!r}")
    return _cut(spec, block_samples)


def _cut(spec: TransmitSpec, size: int) -> Iterator[Transmission]:
    sender = Sender(spec)
    pending: list[Samples] = []
    held = 0
    made = 0
    for start in range(0, spec.samples, size):
        wanted = min(size, spec.samples - start)
        while held < wanted:
            chunk = sender.chunk(made, min(_CHUNK, spec.samples - made))
            pending.append(chunk)
            held += chunk.size
            made += chunk.size
        joined = cast("Samples", np.concatenate(pending)) if len(pending) > 1 else pending[0]
        pending = [joined[wanted:]]
        held -= wanted
        symbols, instants, bits = sender.due(start, start + wanted)
        samples: Samples = joined[:wanted].copy()
        yield Transmission(samples, symbols, instants, bits, start, sender.gain, sender.noise_rms)


def noise_per_unit(spec: TransmitSpec) -> float:
    """Rms of the noise in a sample (of its complex value for I/Q) at a gain of 1; 0 without noise."""
    if spec.snr_db is None:
        return 0.0
    scheme = spec.link_scheme
    frequency = scheme.kind == "frequency"
    energy = 1.0 if frequency else scheme.symbol_energy()
    spread = spec.samples_per_symbol
    if not frequency:
        spread = 1.0 if spec.pulse.family == "rc" else spread * pulse_energy(spec.pulse)
    return math.sqrt(energy * spread / 10 ** (spec.snr_db / 10)) * (0.5 if spec.passband else 1.0)


class Symbols:
    """The symbols in order, from index ``first`` on: before 0 they lead in, from 0 on they are the stream's own.

    The lead-in has generators of its own and is drawn backwards from symbol -1, so that its length changes nothing
    else.
    """

    def __init__(self, spec: TransmitSpec, first: int) -> None:
        self._spec = spec
        self._scheme = spec.link_scheme
        seeds = np.random.SeedSequence(spec.seed).spawn(7)
        generators = [np.random.Generator(np.random.PCG64(seed)) for seed in seeds]
        self.noise = generators[0]
        # of the lead-in and of the stream
        self._bits = generators[1], generators[2]
        self._jitter = generators[3], generators[4]
        self._phase = generators[5], generators[6]
        self._quadrant = 0
        self.next = first
        self._turned = 0.0

    def take(self, count: int) -> tuple[NDArray[np.uint8], NDArray[np.complex128]]:
        """Bits and points of the next ``count`` symbols: the whole lead-in at once, or from index 0 on."""
        scheme = self._scheme
        random = self._bits[self.next >= 0]
        if scheme.name == "pam3":
            index = random.integers(0, 3, size=count)
            index = index[::-1] if self.next < 0 else index
            bits = np.zeros(0, dtype=np.uint8)
        else:
            if self._spec.bits == "random":
                bits = random.integers(0, 2, size=count * scheme.bits).astype(np.uint8)
                bits = bits[::-1] if self.next < 0 else bits
            else:
                bits = prbs(int(self._spec.bits[4:]), count * scheme.bits, self.next * scheme.bits)
            index = map_bits(bits, scheme)
            if scheme.name == "pi4dqpsk":
                index, self._quadrant = accumulate(index, self._quadrant)
        self.next += count
        return bits, scheme.points()[index]

    def offsets(self, due: Floats, seconds: Floats) -> Floats:
        """Jitter in UI of the symbols due at ``due``."""
        spec = self._spec
        moves = np.zeros(due.size)
        if spec.jitter_rms_ui:
            moves += self.white(due) * spec.jitter_rms_ui
        if spec.jitter_sine_ui:
            moves += spec.jitter_sine_ui * np.sin(2 * np.pi * spec.jitter_sine_hz * seconds)
        return moves

    def white(self, due: Floats) -> Floats:
        """White jitter of rms 1 and at most 8 of the symbols due at ``due``."""
        return np.clip(self._normals(self._jitter, due), -8.0, 8.0)

    @staticmethod
    def _normals(pair: tuple[np.random.Generator, np.random.Generator], due: Floats) -> Floats:
        return pair[0].standard_normal(due.size)[::-1] if due[0] < 0 else pair[1].standard_normal(due.size)

    def turns(self, due: Floats) -> Floats:
        """Carrier phase in radians at the symbols due at ``due``."""
        return self.walk(due, self._spec.phase_noise_deg)

    def walk(self, due: Floats, step_deg: float) -> Floats:
        """The same with a step of ``step_deg`` rms."""
        steps = self._normals(self._phase, due) * math.radians(step_deg)
        walked = np.cumsum(np.concatenate(([self._turned], steps)))[1:]
        self._turned = float(walked[-1])
        return walked


class Sender:
    """Makes the samples of one unchanging specification."""

    def __init__(self, spec: TransmitSpec) -> None:
        self._spec = spec
        self._scheme = spec.link_scheme
        self._shape = Shape.of(spec)
        self._centre = 0.5 - 0.5 / spec.samples_per_symbol + spec.delay_ui
        far_echo = max((delay for delay, _ in spec.echoes), default=0.0)
        self._behind = self._shape.after + math.ceil(far_echo) + 3
        self._ahead = self._shape.before + 3
        first = -self._behind - 2
        self._symbols = Symbols(spec, first)
        self._rails = [Rail(self._shape, first) for _ in range(2 if self._complex else 1)]
        self._theta = np.zeros(0)
        self._theta_first = first
        self._waiting_points = np.zeros(0, dtype=np.complex128)
        self._waiting_instants = np.zeros(0)
        self._waiting_bits = np.zeros(0, dtype=np.uint8)
        self._waiting_first = 0
        self.noise_rms = 0.0
        self.gain = 1.0
        self._set_levels()

    @property
    def _complex(self) -> bool:
        return self._scheme.rails == 2

    def _set_levels(self) -> None:
        spec, scheme = self._spec, self._scheme
        frequency = scheme.kind == "frequency"
        per_unit = noise_per_unit(spec)
        peak = 1.0
        if not frequency:
            turned = scheme.rotation or spec.carrier_hz or spec.carrier_phase_deg or spec.phase_noise_deg or spec.echoes
            points = scheme.points()
            level = float(np.max(np.abs(points.real)))
            if scheme.rails == 2:
                level *= math.sqrt(2.0) if turned else 1.0
            peak = level * self._shape.overshoot
        peak *= 1.0 + sum(abs(gain) for _, gain in spec.echoes)
        if spec.iq_gain_db or spec.iq_skew_deg:
            skew = math.radians(spec.iq_skew_deg)
            peak *= max(1.0, 10 ** (spec.iq_gain_db / 20) * (abs(math.cos(skew)) + abs(math.sin(skew))))
        peak += max(abs(complex(spec.dc).real), abs(complex(spec.dc).imag))
        peak += 5.0 * per_unit * (1.0 if spec.real else math.sqrt(0.5))
        self.gain = 0.9 / peak if spec.gain is None else spec.gain
        self.noise_rms = per_unit * self.gain

    def _clock(self, n: Floats) -> Floats:
        """Symbols of the transmitter's clock at sample ``n``, 0 at symbol 0."""
        spec = self._spec
        t = n / spec.sample_rate_hz
        drift = 0.5e-6 * spec.clock_drift_ppm_s * t
        return n / spec.samples_per_symbol * (1.0 + 1e-6 * spec.clock_ppm + drift) - self._centre

    def _when(self, u: Floats) -> Floats:
        """Sample at which the transmitter's clock shows ``u``: the inverse of `_clock`."""
        spec = self._spec
        sps = spec.samples_per_symbol
        rate = 1.0 + 1e-6 * spec.clock_ppm
        bend = 1e-6 * spec.clock_drift_ppm_s / spec.symbol_rate_hz
        due = u + self._centre
        return 2.0 * due * sps / (rate + np.sqrt(rate**2 + 2.0 * bend * due))

    def _extend(self, stop: int) -> None:
        while self._symbols.next < stop:
            start = self._symbols.next
            count = (min(stop, 0) if start < 0 else stop) - start
            bits, points = self._symbols.take(count)
            due = np.arange(start, start + count, dtype=np.float64)
            moves = np.zeros(count)
            if self._spec.jittered:
                moves = self._symbols.offsets(due, self._when(due) / self._spec.sample_rate_hz)
            sent = points
            if self._scheme.rotation:
                sent = points * np.exp(2j * np.pi * ((due * self._scheme.rotation) % 1.0))
            self._rails[0].extend(np.ascontiguousarray(sent.real), moves)
            if self._complex:
                self._rails[1].extend(np.ascontiguousarray(sent.imag), moves)
            if self._spec.phase_noise_deg:
                self._theta = np.concatenate((self._theta, self._symbols.turns(due)))
            if start >= 0:
                self._waiting_points = np.concatenate((self._waiting_points, points))
                self._waiting_bits = np.concatenate((self._waiting_bits, bits))
                self._waiting_instants = np.concatenate((self._waiting_instants, self._when(due + moves)))

    def due(self, start: int, stop: int) -> tuple[Wave, Floats, NDArray[np.uint8]]:
        """Points, instants, bits of the symbols that the clock, without jitter, puts from ``start`` to ``stop``."""
        first, last = (max(0, math.ceil(u)) for u in self._clock(np.array([start, stop], dtype=np.float64)))
        count = last - first
        skip = first - self._waiting_first
        points = self._waiting_points[skip : skip + count]
        instants = self._waiting_instants[skip : skip + count]
        per_symbol = 0 if self._scheme.name == "pam3" else self._scheme.bits
        bits = self._waiting_bits[skip * per_symbol : (skip + count) * per_symbol]
        self._waiting_points = self._waiting_points[skip + count :].copy()
        self._waiting_instants = self._waiting_instants[skip + count :].copy()
        self._waiting_bits = self._waiting_bits[(skip + count) * per_symbol :].copy()
        self._waiting_first = last
        return (points.copy() if self._complex else points.real.copy()), instants.copy(), bits.copy()

    def _envelope(self, u: Floats) -> Wave:
        """The transmitter's output at ``u``, before the channel."""
        main = self._rails[0].at(u)
        if self._scheme.kind == "baseband":
            return main
        if self._scheme.kind == "frequency":
            phase = np.pi * self._spec.index * main
            wave = np.cos(phase) + 1j * np.sin(phase)
        elif self._complex:
            wave = main + 1j * self._rails[1].at(u - self._scheme.stagger if self._scheme.stagger else u)
        else:
            wave = main.astype(np.complex128)
        if self._spec.iq_gain_db or self._spec.iq_skew_deg:
            skew = math.radians(self._spec.iq_skew_deg)
            gain = 10 ** (self._spec.iq_gain_db / 20)
            wave = wave.real + 1j * gain * (wave.imag * math.cos(skew) + wave.real * math.sin(skew))
        return wave

    def chunk(self, start: int, count: int) -> Samples:
        """Samples ``start`` to ``start + count``; to be asked for in order, ``start`` a multiple of the chunk."""
        spec = self._spec
        n = np.arange(start, start + count, dtype=np.float64)
        u = self._clock(n)
        self._extend(math.floor(u[-1]) + self._ahead + 1)
        wave: Wave = self._envelope(u)
        for delay, gain in spec.echoes:
            late = self._envelope(u - delay)
            wave = cast("Wave", wave + late * (gain if np.iscomplexobj(late) else complex(gain).real))
        if self._scheme.kind != "baseband":
            wave = self._on_carrier(wave, n, u)
        for begin, duration in spec.dropouts:
            wave[(n >= begin * spec.sample_rate_hz) & (n < (begin + duration) * spec.sample_rate_hz)] = 0.0
        self._forget(math.floor(self._clock(np.array([start + count], dtype=np.float64))[0]) - self._behind)
        return self._at_output(wave)

    def _on_carrier(self, wave: Wave, n: Floats, u: Floats) -> Wave:
        spec = self._spec
        if not (spec.carrier_hz or spec.carrier_phase_deg or spec.phase_noise_deg):
            return wave
        phase = 2 * np.pi * ((n * (spec.carrier_hz / spec.sample_rate_hz)) % 1.0) + math.radians(spec.carrier_phase_deg)
        if spec.phase_noise_deg:
            whole = np.floor(u)
            at = whole.astype(np.int64) - self._theta_first
            phase += self._theta[at] + (u - whole) * (self._theta[at + 1] - self._theta[at])
        if spec.passband:
            return wave.real * np.cos(phase) - wave.imag * np.sin(phase)
        return wave * (np.cos(phase) + 1j * np.sin(phase))

    def _at_output(self, wave: Wave) -> Samples:
        spec = self._spec
        scaled: Wave = wave * self.gain
        if self.noise_rms:
            if spec.real:
                scaled = scaled + self._symbols.noise.standard_normal(scaled.size) * self.noise_rms
            else:
                noise = self._symbols.noise.standard_normal(2 * scaled.size).view(np.complex128)
                scaled = scaled + noise * (self.noise_rms * math.sqrt(0.5))
        if spec.dc:
            scaled = cast("Wave", scaled + self.gain * (complex(spec.dc).real if spec.real else complex(spec.dc)))
        if spec.real:
            return self._clipped(scaled.real).astype(np.float32)
        rails = np.ascontiguousarray(scaled, dtype=np.complex128).view(np.float64)
        return self._clipped(rails).view(np.complex128).astype(np.complex64)

    def _clipped(self, real: Floats) -> Floats:
        spec = self._spec
        if spec.clipping == "hard":
            return np.clip(real, -spec.clip_at, spec.clip_at)
        if spec.clipping == "soft":
            return np.asarray(spec.clip_at * np.tanh(real / spec.clip_at))
        return real

    def _forget(self, first: int) -> None:
        for rail in self._rails:
            rail.drop(first)
        if self._spec.phase_noise_deg and first > self._theta_first:
            self._theta = self._theta[first - self._theta_first :].copy()
            self._theta_first = first
