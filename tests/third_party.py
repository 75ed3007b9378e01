"""Signals from transmitters that nobody here wrote, with the facts that are true of each.

Each function returns a `Sent`. Programs come from Debian's packages direwolf, minimodem and codec2; libraries are
liquid-dsp and komm. All are deterministic: the same call gives the same samples. Where a program is absent the test
is skipped, or fails if the environment says CI. The facts are checked by other means in test_third_party.py.
"""

import ctypes
import os
import shutil
import subprocess
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest
import soundfile
from numpy.typing import NDArray

TIDE = "Skerry gauge: water 2.41 m, falling 3 cm in 10 min; swell 0.6 m; battery 12.8 V. "


@dataclass(frozen=True)
class Sent:
    """A signal and what is true of it.

    ``samples`` has shape (n,), float32 or complex64, full scale of an integer format being 1.0; ``path`` is the file
    with the same samples, or None; ``format`` is ``wav`` or a SigMF datatype name. ``scheme`` and ``pulse`` are
    `lidwatch`'s names. ``carrier_hz`` is the offset from 0 Hz. ``tones_hz`` are the frequencies of an FSK signal,
    lowest first. ``bursts`` are (start, stop) sample indices of what is not silence. ``data`` is what was sent:
    bytes, or symbol indices, or None.
    """

    samples: NDArray[np.float32] | NDArray[np.complex64]
    sample_rate_hz: float
    symbol_rate_hz: float
    scheme: str
    pulse: str
    path: Path | None = None
    format: str = "none"
    carrier_hz: float = 0.0
    tones_hz: tuple[float, ...] = ()
    bursts: tuple[tuple[int, int], ...] = field(default=())
    data: object = None


def program(name: str, package: str) -> str:
    """The program's path; skips the test where it is absent, fails it where the environment says CI."""
    path = shutil.which(name)
    if path is None:
        reason = f"{name} is not installed (Debian package {package})"
        if os.environ.get("CI", "") not in ("", "0", "false"):
            pytest.fail(reason)
        pytest.skip(reason)
    return path


def _read(path: Path) -> NDArray[np.float32]:
    return soundfile.read(path, dtype="float32")[0]


def silences(samples: NDArray[np.float32], shortest: int) -> list[tuple[int, int]]:
    """(start, stop) of each run of at least ``shortest`` zeros."""
    edges = np.diff(np.concatenate(([0], (samples == 0).astype(np.int8), [0])))
    return [
        (int(a), int(b))
        for a, b in zip(np.flatnonzero(edges == 1), np.flatnonzero(edges == -1), strict=True)
        if b - a >= shortest
    ]


def direwolf_9600(folder: Path, sample_rate_hz: int = 48000, packets: int = 20, amplitude: int = 50) -> Sent:
    """Scrambled NRZI packets at 9600 baud, real baseband (``pam2``), 16-bit mono WAV, about 5 s by default.

    Between its levels +-amplitude/200 (0.25 by default) the waveform moves along half a cosine of one bit's length
    and otherwise stands still: the pulse is cos^2(pi t / 2 T), |t| <= T, so a receiver without a matched filter
    (pulse ``none``) finds a fully open eye, half a symbol from the zero crossings. A bit begins on a whole sample: at
    48000 Hz (5 samples a bit) all crossings lie in their place to 0.01 UI; at 44100 Hz (4.59375) they are spread
    evenly over one sample: 0.22 UI peak to peak, 0.063 UI rms, and that is in the transmitter.

    Every packet is a burst of 2481 or 2482 symbols: 32 flags (0x7E), 16 bytes of address, control and protocol, 255
    of text and a line feed, 2 of check sequence, stuffing, 2 flags. Scrambler 1 + x^12 + x^17. Before each burst, not
    behind the last, stand 3.3 to 3.5 ms (32 to 33 symbols) of exact zeros; the clock's phase jumps there by any
    number of samples. ``data`` holds the texts.
    """
    path = folder / f"direwolf_{sample_rate_hz}.wav"
    texts = [f"Report {number:03d}. {TIDE * 4}"[:254] + "." for number in range(packets)]
    messages = folder / "messages.txt"  # each line's end is sent along
    messages.write_text("".join(f"SKERRY-1>HARBOR:{text}\n" for text in texts), encoding="ascii")
    command = [program("gen_packets", "direwolf"), "-B", "9600", "-r", str(sample_rate_hz), "-a", str(amplitude)]
    subprocess.run([*command, "-o", path, messages], check=True, capture_output=True, stdin=subprocess.DEVNULL)
    samples = _read(path)
    quiet = silences(samples, int(20 * sample_rate_hz / 9600))
    ends = [start for start, _ in quiet[1:]] + [samples.size]
    bursts = tuple((stop, end) for (_, stop), end in zip(quiet, ends, strict=True))
    return Sent(samples, sample_rate_hz, 9600.0, "pam2", "none", path, "wav", bursts=bursts, data=texts)


MINIMODEM_TONES = {
    300: (1070.0, 1270.0),
    1200: (1200.0, 2200.0),
}  # space and mark of Bell 103, mark and space of Bell 202


def minimodem_afsk(
    folder: Path, baud: int = 1200, sample_rate_hz: int = 48000, seconds: float = 6.0, volume: float = 0.5
) -> Sent:
    """Asynchronous characters (8-N-1, least significant bit first) as audio tones (``fsk2``), 16-bit mono WAV.

    Bell 103 tones at 300 baud (space 1070, mark 1270 Hz: modulation index 2/3), Bell 202 tones at 1200 baud (mark
    1200, space 2200 Hz: index 5/6). Phase is continuous, frequency switches at once (pulse ``rect``). No silence; two
    bits of mark go before the first character and two after the last. The program rounds a bit to whole samples, so
    at 44100 Hz its 1200 baud are 44100/37 = 1191.89 baud: ``symbol_rate_hz`` says the true one. Amplitude is
    ``volume`` (the program's own default of 1.0 touches the format's end stops).
    """
    path = folder / f"minimodem_{baud}_{sample_rate_hz}.wav"
    path.unlink(missing_ok=True)
    bit_samples = int(sample_rate_hz / baud + 0.5)
    count = int(seconds * sample_rate_hz / bit_samples / 10)
    text = (TIDE * (count // len(TIDE) + 1))[:count].encode("ascii")
    command = [program("minimodem", "minimodem"), "--tx", "-q", "-8", "-v", str(volume), "-R", str(sample_rate_hz)]
    subprocess.run([*command, "-f", path, str(baud)], input=text, check=True, capture_output=True)
    samples = _read(path)
    return Sent(
        samples,
        sample_rate_hz,
        sample_rate_hz / bit_samples,
        "fsk2",
        "rect",
        path,
        "wav",
        tones_hz=MINIMODEM_TONES[baud],
        bursts=((0, samples.size),),
        data=text,
    )


def codec2_fsk(
    folder: Path,
    levels: int = 2,
    is_complex: bool = True,
    sample_rate_hz: int = 48000,
    symbol_rate_hz: int = 4800,
    lowest_hz: int | None = None,
    spacing_hz: int | None = None,
    symbols: int = 9600,
    seed: int = 1,
) -> Sent:
    """Random symbols as 2 or 4 tones (``fsk2``, ``fsk4``), raw 16-bit, ``ci16_le`` or ``ri16_le``; 2 s by default.

    Tone m stands at ``lowest_hz`` + m ``spacing_hz``; two bits make a tone of four in natural order (00 the lowest,
    11 the highest: not Gray). Phase is continuous, frequency switches at once (pulse ``rect``), a symbol is a whole
    number of samples (the program needs that). No silence, no preamble; exactly ``symbols`` symbols of constant
    envelope 0.305 (10000/32768). Unless given, the spacing is the symbol rate (modulation index 1) and a complex
    signal is centred on 0 Hz; a real one begins at 1.5 times the symbol rate. ``carrier_hz`` is the mean of the
    tones.
    """
    spacing = symbol_rate_hz if spacing_hz is None else spacing_hz
    if lowest_hz is None:
        lowest_hz = -(levels - 1) * spacing // 2 if is_complex else 3 * symbol_rate_hz // 2
    indices = np.random.default_rng(seed).integers(0, levels, symbols)
    bits = indices if levels == 2 else np.column_stack((indices >> 1, indices & 1)).ravel()
    name = "ci16_le" if is_complex else "ri16_le"
    amplitude = "20000" if is_complex else "10000"  # the program halves it in its complex form
    source, path = folder / "bits.u8", folder / f"fsk{levels}.{name}"
    source.write_bytes(bits.astype(np.uint8).tobytes())
    command = [program("fsk_mod", "codec2"), *(["-c"] if is_complex else []), "-a", amplitude, "--", str(levels)]
    numbers = [str(sample_rate_hz), str(symbol_rate_hz), str(lowest_hz), str(spacing)]
    subprocess.run([*command, *numbers, source, path], check=True, capture_output=True, stdin=subprocess.DEVNULL)
    raw = np.fromfile(path, dtype="<i2").astype(np.float32) / np.float32(32768)
    samples = raw.view(np.complex64) if is_complex else raw
    tones = tuple(float(lowest_hz + m * spacing) for m in range(levels))
    return Sent(
        samples,
        sample_rate_hz,
        symbol_rate_hz,
        f"fsk{levels}",
        "rect",
        path,
        name,
        carrier_hz=float(np.mean(tones)),
        tones_hz=tones,
        bursts=((0, samples.size),),
        data=indices,
    )


LIQUID_SCHEMES = {"bpsk": "bpsk", "qpsk": "qpsk", "8psk": "psk8", "16qam": "qam16", "64qam": "qam64"}


def liquid_stream(
    scheme: str = "qpsk",
    samples_per_symbol: float = 4.0,
    rolloff: float = 0.35,
    symbols: int = 20000,
    carrier: float = 0.0,
    seed: int = 1,
) -> Sent:
    """Random symbols through a root raised cosine, complex64, mean power 1; from liquid-dsp's `symstreamr`.

    ``samples_per_symbol`` may be any number from 2; the library makes it by an arbitrary-rate resampler and holds it
    as a float32, so ``symbol_rate_hz`` carries the last digits. ``sample_rate_hz`` is 48000. ``carrier`` is in cycles
    a symbol (the library's oscillator turns the signal). The pulse reaches 16 symbols to each side; behind a matched
    filter of 20 symbols to each side the MER is above 50 dB. The stream's filters start empty: the first 33 symbols
    build up. liquid-dsp draws the symbols from the C library's ``rand``, which is seeded here; they are not known.
    """
    liquid = pytest.importorskip("liquid")
    ctypes.CDLL(None).srand(seed)
    stream = liquid.symstreamr(
        ftype="rrcos", bw=1.0 / samples_per_symbol, m=16, beta=rolloff, ms=LIQUID_SCHEMES[scheme]
    )
    samples_per_symbol = 1.0 / float(stream.bw)
    samples = stream.generate(int(symbols * samples_per_symbol))
    if carrier:
        step = np.float32(2 * np.pi * carrier / samples_per_symbol)
        samples = liquid.nco(0.0, float(step)).mix_up(samples)
        carrier = float(step) / (2 * np.pi) * samples_per_symbol
    rate = 48000.0
    symbol_rate = rate / samples_per_symbol
    return Sent(
        np.ascontiguousarray(samples, dtype=np.complex64),
        rate,
        symbol_rate,
        scheme,
        f"rrc:{rolloff:g}",
        carrier_hz=carrier * symbol_rate,
        bursts=((int(33 * samples_per_symbol), samples.size),),
    )


def liquid_gmsk(samples_per_symbol: int = 8, bt: float = 0.5, symbols: int = 8000, seed: int = 1) -> Sent:
    """Random bits as Gaussian minimum shift keying, complex64 of constant envelope 1; from liquid-dsp's `gmskmod`.

    The frequency pulse has bandwidth-time product ``bt``, reaches 4 symbols to each side and delays the bits by 4
    symbols (bit k is centred on sample ``samples_per_symbol`` * (k + 4)); modulation index 1/2, so the frequency's
    levels are -+1/4 cycle a symbol. ``sample_rate_hz`` is 48000. ``data`` holds the bits.
    """
    liquid = pytest.importorskip("liquid")
    library = ctypes.CDLL(liquid.__file__)
    library.gmskmod_create.restype = ctypes.c_void_p
    library.gmskmod_create.argtypes = [ctypes.c_uint, ctypes.c_uint, ctypes.c_float]
    library.gmskmod_modulate.argtypes = [ctypes.c_void_p, ctypes.c_uint, ctypes.c_void_p]
    library.gmskmod_destroy.argtypes = [ctypes.c_void_p]
    bits = np.random.default_rng(seed).integers(0, 2, symbols)
    samples = np.zeros(symbols * samples_per_symbol, dtype=np.complex64)
    modulator = library.gmskmod_create(samples_per_symbol, 4, bt)
    for k, bit in enumerate(bits.tolist()):
        library.gmskmod_modulate(modulator, bit, samples[k * samples_per_symbol :].ctypes.data)
    library.gmskmod_destroy(modulator)
    rate = 48000.0
    return Sent(
        samples,
        rate,
        rate / samples_per_symbol,
        "gmsk",
        f"gauss:{bt:g}",
        tones_hz=(-rate / samples_per_symbol / 4, rate / samples_per_symbol / 4),
        bursts=((0, samples.size),),
        data=bits,
    )


def komm_stream(
    scheme: str = "qpsk",
    samples_per_symbol: int = 4,
    pulse: str = "rrc:0.35",
    symbols: int = 10000,
    seed: int = 1,
) -> Sent:
    """Random symbols of komm's constellations through komm's pulses; complex64, or float32 for PAM; mean symbol
    energy 1.

    ``scheme``: ``pam2 pam4 pam8 bpsk qpsk 8psk 16qam 64qam``; ``pulse``: ``rrc:a`` and ``rc:a`` (16 symbols to each
    side) or ``rect`` (one symbol long). Whole samples a symbol. Symbol k is centred on sample ``samples_per_symbol``
    * k (rect: it starts there); the convolution's tails are cut off. ``sample_rate_hz`` is 48000. ``data`` holds the
    constellation's points that were sent, at the scale of the samples (for rrc behind the matched filter).
    """
    komm = pytest.importorskip("komm")
    family, _, number = pulse.partition(":")
    order = {"bpsk": 2, "qpsk": 4}.get(scheme) or int("".join(c for c in scheme if c.isdigit()))
    if scheme.startswith("pam"):
        constellation = komm.PAMConstellation(order)
    elif scheme.endswith("qam"):
        constellation = komm.QAMConstellation(order)
    else:
        constellation = komm.PSKConstellation(order, phase_offset=0.0 if scheme == "bpsk" else 0.5 / order)
    if family == "rect":
        taps = komm.RectangularPulse().taps(samples_per_symbol, span=(0, 1))
        taps, first = taps[:samples_per_symbol], 0
    else:
        shape = komm.RaisedCosinePulse(float(number))
        shape = shape.root() if family == "rrc" else shape
        taps, first = shape.taps(samples_per_symbol, span=(-16, 16)), 16 * samples_per_symbol
    indices = np.random.default_rng(seed).integers(0, order, symbols)
    points = constellation.indices_to_symbols(indices) / np.sqrt(constellation.mean_energy())
    impulses = komm.sampling_rate_expand(points, samples_per_symbol)
    samples = np.convolve(impulses, taps)[first : first + symbols * samples_per_symbol]
    dtype = np.float32 if scheme.startswith("pam") else np.complex64
    rate = 48000.0
    return Sent(
        np.ascontiguousarray(samples, dtype=dtype),
        rate,
        rate / samples_per_symbol,
        scheme,
        pulse,
        bursts=((0, samples.size),),
        data=points,
    )


def keep(sent: Sent, path: Path) -> Path:
    """Write a library's stream as raw float32, ``rf32_le`` or ``cf32_le``, for what reads files."""
    sent.samples.astype(sent.samples.dtype.newbyteorder("<")).tofile(path)
    return path
