"""What to send and what is wrong with it."""

import math
from dataclasses import dataclass
from typing import Literal, get_args

from dsp.errors import DspError
from dsp.link import Link, Scheme, find_scheme
from dsp.pulses import Pulse

BitSource = Literal["random", "prbs7", "prbs9", "prbs15", "prbs23"]
Clipping = Literal["none", "soft", "hard"]
_INDEX = {"fsk2": 1.0, "fsk4": 1.0, "gfsk": 0.5, "msk": 0.5, "gmsk": 0.5}
_FREQUENCY_PULSE = {"msk": "rect", "gmsk": "gauss", "gfsk": "gauss"}


@dataclass(frozen=True, kw_only=True)
class TransmitSpec:
    """A stream to be made: one link and its defects. Raises DspError for what cannot be made.

    The symbols go through, in this order: pulse with jitter, one-pole low-pass, I/Q imbalance, echoes, carrier and
    phase noise, drop-outs, (real passband), noise, DC, gain, clipping.

    Attributes
    ----------
    scheme
        Name from `dsp.link.SCHEMES`.
    symbol_rate_hz, sample_rate_hz
        Nominal rates; any ratio from 2 to 2000 samples a symbol.
    pulse
        Transmit pulse: rrc (unit energy), rc (1 at 0), rect (1), gauss (rect behind a Gaussian low-pass). For frequency
        schemes the pulse of the frequency, area 1 UI. rect and gauss are held from edge to edge, and jitter moves the
        edges.
    symbols
        How many symbols long the stream is at nominal rate: ``round(symbols * sample_rate_hz / symbol_rate_hz)``
        samples.
    seed
        Of all that is random.
    bits
        ``random`` or a sequence of ITU-T O.150; symbol 0 takes its first bits. pam3 takes random levels only.
    delay_ui
        Later start of symbol 0, 0 to 1; at 0 its instant is sample ``(samples per symbol - 1) / 2``, so that no edge of
        a rectangular pulse at a whole number of samples a symbol falls on a sample.
    snr_db
        None: no noise. Otherwise white noise such that ``E|a|**2`` over the variance of the noise behind the receive
        filter
        (`dsp.pulses.receive_filter`, gain 1 for the symbols) is this: Es/N0 of the transmit pulse, N0 the variance
        density of the complex noise (real baseband: of the real noise). Per sample that is ``gain**2 * E|a|**2 * E_g *
        sps / snr``, E_g the transmit pulse's energy in UI; for rc, whose receiver has no filter, ``gain**2 * E|a|**2 /
        snr``; for frequency schemes
        (envelope 1) ``gain**2 * sps / snr``. Real passband: a quarter of the complex one, so that the band about the
        carrier has the same Es/N0. Taken from the signal before one-pole low-pass, echoes, I/Q imbalance and clipping.
    modulation_index
        Frequency schemes: distance of neighbouring tones over the symbol rate, h; None: 1 (fsk2, fsk4) or 0.5; msk,
        gmsk: 0.5 only.
    carrier_hz, carrier_phase_deg
        Offset of the carrier and its phase at sample 0.
    passband
        Real output ``Re{x exp(j 2 pi carrier_hz t)}`` instead of I/Q.
    clock_ppm, clock_drift_ppm_s
        Error of the transmitter's clock and its growth: positive is faster symbols. It drives symbols and pulses alike.
    jitter_rms_ui
        White Gaussian jitter of each symbol.
    jitter_sine_ui, jitter_sine_hz
        Peak and frequency of sinusoidal jitter.
    phase_noise_deg
        Rms step from symbol to symbol of the carrier phase's random walk.
    echoes
        ``(delay in UI, gain)`` each; the gain is complex for I/Q.
    t_over_tau
        T/tau of a one-pole low-pass (for frequency schemes: ahead of the modulator); None: no low-pass. Closed form for
        rect.
    iq_gain_db, iq_skew_deg
        ``y_Q = g (x_Q cos skew + x_I sin skew)``, ``y_I = x_I``, on the transmitter's side of the carrier.
    dc
        Added constant in level units (frequency schemes: in units of the envelope); complex for I/Q.
    gain
        Sample value of one level unit (of the envelope); None: such that no noise-free sample and no noise below 5
        sigma passes 0.9.
    clipping, clip_at
        Of each rail, last of all: ``hard`` at ``clip_at``, ``soft``: ``clip_at * tanh(x / clip_at)``, in sample values.
    dropouts
        ``(start, duration)`` in seconds where the transmitter is silent; the noise stays.
    """

    scheme: str
    symbol_rate_hz: float
    sample_rate_hz: float
    pulse: Pulse
    symbols: int
    seed: int = 1
    bits: BitSource = "random"
    delay_ui: float = 0.0
    snr_db: float | None = None
    modulation_index: float | None = None
    carrier_hz: float = 0.0
    carrier_phase_deg: float = 0.0
    passband: bool = False
    clock_ppm: float = 0.0
    clock_drift_ppm_s: float = 0.0
    jitter_rms_ui: float = 0.0
    jitter_sine_ui: float = 0.0
    jitter_sine_hz: float = 0.0
    phase_noise_deg: float = 0.0
    echoes: tuple[tuple[float, complex], ...] = ()
    t_over_tau: float | None = None
    iq_gain_db: float = 0.0
    iq_skew_deg: float = 0.0
    dc: complex = 0.0
    gain: float | None = None
    clipping: Clipping = "none"
    clip_at: float = 1.0
    dropouts: tuple[tuple[float, float], ...] = ()

    def __post_init__(self) -> None:
        scheme = find_scheme(self.scheme)
        Link(scheme, self.sample_rate_hz, self.symbol_rate_hz, self.pulse)
        if self.pulse.family in ("none", "taps"):
            raise DspError(f"pulse {self.pulse} cannot be sent; take rrc:A, rc:A, rect or gauss:BT")
        if self.symbols < 1:
            raise DspError(f"symbols must be 1 or more, got {self.symbols!r}")
        if self.seed < 0:
            raise DspError(f"seed must be 0 or more, got {self.seed!r}")
        if self.bits not in get_args(BitSource):
            raise DspError(f"bits must be one of {' '.join(get_args(BitSource))}, got {self.bits!r}")
        if scheme.name == "pam3" and self.bits != "random":
            raise DspError(f"bits must be random for pam3, whose three levels hold no whole bits, got {self.bits!r}")
        if self.clipping not in get_args(Clipping):
            raise DspError(f"clipping must be one of {' '.join(get_args(Clipping))}, got {self.clipping!r}")
        self._check_ranges()
        self._check_kind(scheme)

    def _check_ranges(self) -> None:
        half = self.sample_rate_hz / 2
        for name, low, high in (
            ("delay_ui", 0.0, math.nextafter(1.0, 0.0)),
            ("snr_db", -30.0, 200.0),
            ("modulation_index", 0.05, 20.0),
            ("carrier_hz", -half, half),
            ("carrier_phase_deg", -360.0, 360.0),
            ("clock_ppm", -1e4, 1e4),
            ("clock_drift_ppm_s", -1e4, 1e4),
            ("jitter_rms_ui", 0.0, 0.25),
            ("jitter_sine_ui", 0.0, 10.0),
            ("jitter_sine_hz", 0.0, self.symbol_rate_hz / 2),
            ("phase_noise_deg", 0.0, 90.0),
            ("t_over_tau", 0.1, 100.0),
            ("iq_gain_db", -20.0, 20.0),
            ("iq_skew_deg", -80.0, 80.0),
            ("gain", 1e-9, 1e9),
            ("clip_at", 1e-9, 1e9),
        ):
            value = getattr(self, name)
            if value is not None and not low <= value <= high:
                raise DspError(f"{name} must be {low:g} to {high:g}, got {value!r}")
        seconds = self.symbols / self.symbol_rate_hz
        if abs(self.clock_ppm + self.clock_drift_ppm_s * seconds) > 1e5:
            raise DspError(f"clock_drift_ppm_s {self.clock_drift_ppm_s:g} takes the clock 10 % off in {seconds:g} s")
        for delay, gain in self.echoes:
            if not (0.0 <= delay <= 1000.0 and abs(gain) <= 10.0):
                raise DspError(f"echoes need a delay of 0 to 1000 UI and a gain up to 10, got {(delay, gain)!r}")
        for start, duration in self.dropouts:
            if not (start >= 0.0 and duration >= 0.0):
                raise DspError(f"dropouts need a start and a duration of 0 s or more, got {(start, duration)!r}")
        if not abs(self.dc) <= 1e6:
            raise DspError(f"dc must be finite, got {self.dc!r}")

    def _check_kind(self, scheme: Scheme) -> None:
        if scheme.kind == "frequency":
            need = _FREQUENCY_PULSE.get(scheme.name)
            if need is not None and self.pulse.family != need:
                raise DspError(f"{scheme.name} needs a {need} pulse, got {self.pulse}")
            if scheme.name in ("msk", "gmsk") and self.index != 0.5:
                raise DspError(f"{scheme.name} has a modulation_index of 0.5, got {self.modulation_index!r}")
        elif self.modulation_index is not None:
            raise DspError(f"modulation_index is for frequency schemes, not for {scheme.name}")
        real = scheme.kind == "baseband"
        if real and (self.carrier_hz or self.carrier_phase_deg or self.passband or self.phase_noise_deg):
            raise DspError(f"carrier, passband and phase noise need a scheme with a carrier, not {scheme.name}")
        if real and (self.iq_gain_db or self.iq_skew_deg):
            raise DspError(f"I/Q gain and skew need a scheme with a carrier, not {scheme.name}")
        if real and any(complex(gain).imag for _, gain in self.echoes):
            raise DspError(f"echoes of {scheme.name}, which is real, need real gains")
        if (real or self.passband) and complex(self.dc).imag:
            raise DspError(f"dc of a real stream must be real, got {self.dc!r}")
        if self.passband and self.carrier_hz <= 0.0:
            raise DspError(f"passband needs a carrier_hz above 0, got {self.carrier_hz!r}")

    @property
    def link_scheme(self) -> Scheme:
        """The scheme named."""
        return find_scheme(self.scheme)

    @property
    def index(self) -> float:
        """Modulation index h in force; 0 where there is none."""
        return _INDEX.get(self.link_scheme.name, 0.0) if self.modulation_index is None else self.modulation_index

    @property
    def samples_per_symbol(self) -> float:
        """Nominal."""
        return self.sample_rate_hz / self.symbol_rate_hz

    @property
    def samples(self) -> int:
        """Length of the stream."""
        return max(1, round(self.symbols * self.samples_per_symbol))

    @property
    def real(self) -> bool:
        """Whether the stream is real (float32) rather than I/Q (complex64)."""
        return self.passband or self.link_scheme.kind == "baseband"

    @property
    def jittered(self) -> bool:
        """Whether symbols leave the regular grid of the transmitter's clock."""
        return self.jitter_rms_ui > 0.0 or self.jitter_sine_ui > 0.0
