"""The test transmitter: any scheme of the monitor with any defect, into a file, a pipe or a live stream.

python tools/transmit.py --scheme qpsk --symbol-rate 9600 --rate 48000 --pulse rrc:0.35 --seconds 2 --snr 20 out.wav

OUTPUT decides the format: .wav .flac .aiff .w64 .rf64 through the sound-file library (I/Q as two channels); .sigmf-meta
or .sigmf-data: a SigMF pair; anything else, and - for standard output: raw samples of --format. With --recipe the exact
command is kept beside the recording as NAME.recipe.txt. The same command gives the same samples.

tcp://HOST:PORT or ipc://PATH sends live over ZeroMQ at the true rate, until --seconds are over or for ever; so does - with
--live. While it sends, every defect can be changed: in a terminal by keys (? lists them; a letter chooses a defect, + and -
turn it, 0 ends it, space is silence, q ends), and by a --schedule file such as

    repeat = 60                  # seconds; leave it out for a single pass
    [[change]]
    at = 5                       # seconds of the stream; then any defect by the name of its option
    snr = 12
    over = 3                     # reach it gradually
    [[change]]
    at = 20
    echo = ["1.4:0.3@120"]       # "none" ends it
    silent = 0.5                 # seconds without a signal
    lose = 0.2                   # seconds that are not sent at all
"""

import argparse
import cmath
import contextlib
import math
import os
import shlex
import sys
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, BinaryIO, NoReturn

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))  # a clone that is not installed works too

from dsp.block import Samples
from dsp.errors import DspError
from dsp.link import SCHEMES, find_scheme
from dsp.pulses import Pulse
from dsp.transmitter import LiveTransmitter, Transmission, TransmitSpec, transmit_blocks
from monitor.errors import MonitorError, printable
from monitor.sources.endpoint import is_stream
from monitor.sources.formats import SampleFormat, parse_datatype
from monitor.sources.keys import Curve
from tools.transmit_live import (
    MESSAGE_S,
    Clock,
    LivePlan,
    PipeSink,
    Schedule,
    Sink,
    StreamOutput,
    StreamSink,
    Unusable,
    key_by_key,
    read_schedule,
    send_live,
    terminal_of,
)

SOUND = {".wav": "WAV", ".flac": "FLAC", ".aiff": "AIFF", ".aif": "AIFF", ".w64": "W64", ".rf64": "RF64"}
SIGMF = (".sigmf-meta", ".sigmf-data")


class _OneLineParser(argparse.ArgumentParser):
    def error(self, message: str) -> NoReturn:
        raise Unusable(f"{message}; see --help")


def _pair(text: str) -> tuple[float, str]:
    first, colon, second = text.partition(":")
    if not colon:
        raise argparse.ArgumentTypeError(f"{text!r} needs two values with a colon between them")
    try:
        return float(first), second
    except ValueError:
        raise argparse.ArgumentTypeError(f"{first!r} is not a number") from None


def _complex(text: str) -> complex:
    """``0.3``, ``0.3-0.2j`` or magnitude@degrees."""
    magnitude, at, degrees = text.partition("@")
    try:
        value = cmath.rect(float(magnitude), math.radians(float(degrees))) if at else complex(text.replace(" ", ""))
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"{text!r} is neither a number, a complex number nor magnitude@degrees"
        ) from None
    return value


def _echo(text: str) -> tuple[float, complex]:
    delay, gain = _pair(text)
    return delay, _complex(gain)


def _stretch(text: str) -> tuple[float, float]:
    start, duration = _pair(text)
    try:
        return start, float(duration)
    except ValueError:
        raise argparse.ArgumentTypeError(f"{duration!r} is not a number") from None


def _pulse(text: str) -> Pulse:
    try:
        return Pulse.parse(text)
    except DspError as error:
        raise argparse.ArgumentTypeError(str(error)) from None


def build_parser() -> argparse.ArgumentParser:
    """Every option of `TransmitSpec`, one to one, and what describes the output."""
    parser = _OneLineParser(
        prog="transmit", description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter, allow_abbrev=False
    )
    add = parser.add_argument
    add("output", metavar="OUTPUT", help="file, - (standard output), tcp://HOST:PORT or ipc://PATH")
    link = parser.add_argument_group("the link")
    add = link.add_argument
    add("--scheme", required=True, metavar="NAME", help=" ".join(SCHEMES))
    add("--symbol-rate", required=True, type=float, metavar="HZ")
    add("--rate", required=True, type=float, metavar="HZ", help="sample rate; 2 to 2000 samples a symbol, any ratio")
    add("--pulse", required=True, type=_pulse, metavar="NAME", help="rrc:A rc:A rect gauss:BT, as transmitted")
    length = link.add_mutually_exclusive_group()
    length.add_argument("--symbols", type=int, metavar="N")
    length.add_argument("--seconds", type=float, metavar="S")
    add("--seed", type=int, default=1, metavar="N", help="of all that is random (1)")
    add("--bits", default="random", metavar="NAME", help="random, or prbs7 prbs9 prbs15 prbs23 of ITU-T O.150")
    add(
        "--index", type=float, metavar="H", help="modulation index of a frequency scheme: tone spacing over symbol rate"
    )
    add("--carrier", type=float, default=0.0, metavar="HZ", help="offset of the carrier")
    add("--carrier-phase", type=float, default=0.0, metavar="DEG")
    add("--passband", action="store_true", help="real samples about the carrier instead of I/Q")
    defects = parser.add_argument_group("defects")
    add = defects.add_argument
    add("--snr", type=float, metavar="DB", help="symbol energy over noise behind the matched filter; none: no noise")
    add("--delay", type=float, default=0.0, metavar="UI", help="later start of the first symbol, 0 to 1")
    add("--clock", type=float, default=0.0, metavar="PPM", help="clock error, positive: faster symbols")
    add("--drift", type=float, default=0.0, metavar="PPM/S", help="growth of the clock error")
    add("--jitter", type=float, default=0.0, metavar="UI", help="rms of white jitter, symbol by symbol")
    add("--jitter-sine", type=_stretch, default=(0.0, 0.0), metavar="UI:HZ", help="peak and frequency of a sine")
    add(
        "--phase-noise",
        type=float,
        default=0.0,
        metavar="DEG",
        help="rms step of the carrier phase from symbol to symbol",
    )
    add(
        "--echo",
        type=_echo,
        action="append",
        default=[],
        metavar="UI:GAIN",
        help="gain 0.3, 0.3-0.2j or 0.3@-60; repeatable",
    )
    add("--t-over-tau", type=float, metavar="R", help="one-pole low-pass of time constant tau: symbol period over tau")
    add("--iq-gain", type=float, default=0.0, metavar="DB", help="gain of Q over I")
    add("--iq-skew", type=float, default=0.0, metavar="DEG", help="share of I in Q, as an angle")
    add("--dc", type=_complex, default=0j, metavar="LEVELS", help="constant added, in level units")
    add("--gain", type=float, metavar="G", help="sample value of one level unit; none: peaks stay below 0.9")
    add("--clip", metavar="KIND:LEVEL", help="soft or hard, at a sample value")
    add(
        "--dropout",
        type=_stretch,
        action="append",
        default=[],
        metavar="START:SECONDS",
        help="transmitter silent; repeatable",
    )
    out = parser.add_argument_group("the output")
    add = out.add_argument
    add("--format", metavar="NAME", help="SigMF datatype of raw and SigMF samples (cf32_le or rf32_le)")
    add("--subtype", default="PCM_16", metavar="NAME", help="sound files: PCM_16 (default) PCM_24 FLOAT and so on")
    add("--frequency", type=float, metavar="HZ", help="SigMF: radio frequency of the recording's centre, noted only")
    add("--description", metavar="TEXT", help="SigMF: what the recording shows, noted only")
    add("--recipe", action="store_true", help="keep this command beside the recording as NAME.recipe.txt")
    live = parser.add_argument_group("live")
    add = live.add_argument
    add("--live", action="store_true", help="standard output too at the true rate, with keys and schedule")
    add("--socket", choices=("pub", "push"), default="pub", help="publish to all (default), or push to one of them")
    add("--connect", action="store_true", help="connect to the address instead of binding it")
    add("--topic", default="", metavar="TEXT", help="a part of this text before each message")
    add("--framed", action="store_true", help="a header with index, rate and format before the samples")
    add("--message", type=int, metavar="N", help="samples in a message (20 ms)")
    add("--wait", action="store_true", help="begin when a receiver is there")
    add("--schedule", metavar="FILE.toml", help="changes at their times")
    add("--no-keys", action="store_true", help="do not listen to the terminal")
    add("--secret-key", type=Path, metavar="FILE", help="encrypt: own NAME.key_secret")
    add("--server-key", type=Path, metavar="FILE", help="with --connect: the receiver's NAME.key")
    add("--client-keys", type=Path, metavar="FOLDER", help="binding: the NAME.key files of those who may connect")
    return parser


PLAIN = {
    "snr": "snr_db",
    "carrier": "carrier_hz",
    "clock": "clock_ppm",
    "drift": "clock_drift_ppm_s",
    "jitter": "jitter_rms_ui",
    "phase-noise": "phase_noise_deg",
    "t-over-tau": "t_over_tau",
    "iq-gain": "iq_gain_db",
    "iq-skew": "iq_skew_deg",
}
MAY_BE_NONE = ("snr", "t-over-tau")


def changes_from(name: str, value: object) -> dict[str, Any]:
    """What a schedule's ``name = value`` asks of `dsp.transmitter.LiveTransmitter.change`; raises Unusable."""
    none = value == "none"
    try:
        if name in PLAIN:
            if none and name in MAY_BE_NONE:
                return {PLAIN[name]: None}
            return {PLAIN[name]: _number(value)}
        if name == "jitter-sine":
            peak, hz = _stretch(str(value))
            return {"jitter_sine_ui": peak, "jitter_sine_hz": hz}
        if name == "echo":
            listed = [] if none else value if isinstance(value, list) else [value]
            return {"echoes": tuple(_echo(str(item)) for item in listed)}
        if name == "dc":
            level = _complex(str(value))
            return {"dc": level if level.imag else level.real}
        if name == "clip":
            kind, level_text = ("none", "1") if none else _clip(str(value))
            return {"clipping": kind, "clip_at": float(level_text)}
    except (argparse.ArgumentTypeError, ValueError) as error:
        raise Unusable(f"{name} = {value!r}: {error}") from None
    names = " ".join((*PLAIN, "jitter-sine", "echo", "dc", "clip", "silent", "lose", "over"))
    raise Unusable(f"{name} is not known; take some of {names}")


def _number(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise ValueError("must be a number")
    return float(value)


def _clip(text: str) -> tuple[str, str]:
    kind, _, level = text.partition(":")
    if kind not in ("soft", "hard") or not level:
        raise ValueError("needs soft:LEVEL, hard:LEVEL or none")
    return kind, level


def spec_from(arguments: argparse.Namespace) -> TransmitSpec:
    """The specification that the options ask for; raises DspError or Unusable."""
    symbols = arguments.symbols
    if symbols is None and arguments.seconds is None:
        if not is_live(arguments):
            raise Unusable("say how long: --seconds S or --symbols N")
        symbols = 1
    if symbols is None:
        if not 0 < arguments.seconds < 1e9:
            raise Unusable(f"--seconds must be above 0, got {arguments.seconds:g}")
        if not 0 < arguments.symbol_rate < 1e15:
            raise Unusable(f"--symbol-rate must be above 0 Hz, got {arguments.symbol_rate:g}")
        symbols = max(1, round(arguments.seconds * arguments.symbol_rate))
    clipping, clip_at = "none", 1.0
    if arguments.clip is not None:
        clipping, _, level = arguments.clip.partition(":")
        try:
            clip_at = float(level)
        except ValueError:
            raise Unusable(f"--clip needs soft:LEVEL or hard:LEVEL, got {arguments.clip!r}") from None
    real = arguments.passband or find_scheme(arguments.scheme).kind == "baseband"
    return TransmitSpec(
        scheme=arguments.scheme,
        symbol_rate_hz=arguments.symbol_rate,
        sample_rate_hz=arguments.rate,
        pulse=arguments.pulse,
        symbols=symbols,
        seed=arguments.seed,
        bits=arguments.bits,
        delay_ui=arguments.delay,
        snr_db=arguments.snr,
        modulation_index=arguments.index,
        carrier_hz=arguments.carrier,
        carrier_phase_deg=arguments.carrier_phase,
        passband=arguments.passband,
        clock_ppm=arguments.clock,
        clock_drift_ppm_s=arguments.drift,
        jitter_rms_ui=arguments.jitter,
        jitter_sine_ui=arguments.jitter_sine[0],
        jitter_sine_hz=arguments.jitter_sine[1],
        phase_noise_deg=arguments.phase_noise,
        echoes=tuple(arguments.echo),
        t_over_tau=arguments.t_over_tau,
        iq_gain_db=arguments.iq_gain,
        iq_skew_deg=arguments.iq_skew,
        dc=arguments.dc.real if real and not arguments.dc.imag else arguments.dc,
        gain=arguments.gain,
        clipping=clipping,  # type: ignore[arg-type]  # refused at run time by TransmitSpec
        clip_at=clip_at,
        dropouts=tuple(arguments.dropout),
    )


def is_live(arguments: argparse.Namespace) -> bool:
    """Whether the samples go out at their true rate."""
    return is_stream(arguments.output) or (arguments.live and arguments.output == "-")


def encode(samples: Samples, form: SampleFormat) -> bytes:
    """Bytes of one block; 1.0 is 2**(bits - 1), as `monitor` reads it, and integers stop at their ends."""
    values = samples.view(np.float32)
    stored = np.dtype(f"{'>' if form.big_endian else '<'}{form.kind}{form.bits // 8}")
    if form.kind == "f":
        return values.astype(stored).tobytes()
    half = float(1 << (form.bits - 1))
    codes = np.clip(np.rint(values.astype(np.float64) * half), -half, half - 1)
    return (codes + half if form.kind == "u" else codes).astype(stored).tobytes()


def _format(name: str | None, spec: TransmitSpec) -> SampleFormat:
    form = parse_datatype(name or ("rf32_le" if spec.real else "cf32_le"))
    if form.complex_samples == spec.real:
        have, need = ("real", "r") if spec.real else ("I/Q", "c")
        raise Unusable(f"--format {form.name} does not fit: these samples are {have}; take {need}{form.name[1:]}")
    return form


def stem_of(output: Path) -> Path:
    """The recording's path without its ending."""
    return output.with_name(output.name[: -len(output.suffix)]) if output.suffix else output


def _write_raw(stream: BinaryIO, blocks: Iterator[Transmission], form: SampleFormat) -> None:
    for block in blocks:
        stream.write(encode(block.samples, form))
    stream.flush()


def _write_sound(path: Path, spec: TransmitSpec, blocks: Iterator[Transmission], subtype: str) -> None:
    import soundfile

    rate = round(spec.sample_rate_hz)
    if rate != spec.sample_rate_hz:
        raise Unusable(
            f"--rate {spec.sample_rate_hz:g} is not whole, which a sound file needs; take a SigMF pair or raw"
        )
    container = SOUND[path.suffix.lower()]
    if not soundfile.check_format(container, subtype):
        raise Unusable(f"--subtype {subtype} does not go into {container}")
    with soundfile.SoundFile(path, "w", rate, 1 if spec.real else 2, subtype, format=container) as file:
        for block in blocks:
            file.write(block.samples if spec.real else block.samples.view(np.float32).reshape(-1, 2))


def _write_sigmf(path: Path, spec: TransmitSpec, blocks: Iterator[Transmission], arguments: argparse.Namespace) -> None:
    from sigmf import SigMFFile

    form = _format(arguments.format, spec)
    stem = stem_of(path)
    data = stem.with_name(stem.name + ".sigmf-data")
    with data.open("wb") as stream:
        _write_raw(stream, blocks, form)
    facts = {
        "core:datatype": form.name,
        "core:sample_rate": spec.sample_rate_hz,
        "core:recorder": "lidwatch tools/transmit.py",
    }
    if arguments.description:
        facts["core:description"] = arguments.description
    meta = SigMFFile(data_file=str(data), global_info=facts)
    meta.add_capture(0, {} if arguments.frequency is None else {"core:frequency": arguments.frequency})
    meta.tofile(str(stem.with_name(stem.name + ".sigmf-meta")), overwrite=True)


def write(arguments: argparse.Namespace, command: Sequence[str]) -> None:
    """Make the recording; raises DspError, MonitorError, Unusable or OSError."""
    spec = spec_from(arguments)
    if is_live(arguments):
        _send(arguments, spec)
        return
    _refuse_live_options(arguments)
    blocks = transmit_blocks(spec)
    if arguments.output == "-":
        if arguments.recipe:
            raise Unusable("--recipe needs a file to stand beside, not standard output")
        _write_raw(sys.stdout.buffer, blocks, _format(arguments.format, spec))
        return
    path = Path(arguments.output)
    suffix = path.suffix.lower()
    if suffix in SOUND:
        if arguments.format:
            raise Unusable(
                f"--format is for raw and SigMF samples; a sound file takes --subtype, got {arguments.format}"
            )
        _write_sound(path, spec, blocks, arguments.subtype)
    elif suffix in SIGMF:
        _write_sigmf(path, spec, blocks, arguments)
    else:
        form = _format(arguments.format, spec)
        with path.open("wb") as stream:
            _write_raw(stream, blocks, form)
    if arguments.recipe:
        stem = stem_of(path)
        text = shlex.join(["python", "tools/transmit.py", *command])
        stem.with_name(stem.name + ".recipe.txt").write_text(text + "\n", encoding="utf-8")


def _refuse_live_options(arguments: argparse.Namespace) -> None:
    given = [
        "--" + name.replace("_", "-")
        for name in ("live", "connect", "topic", "framed", "message", "wait", "schedule", "secret_key")
        if getattr(arguments, name)
    ]
    if given:
        raise Unusable(f"{given[0]} is for live streams: tcp://HOST:PORT, ipc://PATH, or - with --live")


def _send(arguments: argparse.Namespace, spec: TransmitSpec) -> None:
    if arguments.recipe:
        raise Unusable("--recipe needs a file to stand beside, not a live stream")
    form = _format(arguments.format, spec)
    message = arguments.message
    if message is None:
        message = max(1, round(spec.sample_rate_hz * MESSAGE_S))
    if not 1 <= message <= 1 << 26:
        raise Unusable(f"--message must be 1 to {1 << 26} samples, got {message}")
    endless = arguments.symbols is None and arguments.seconds is None
    schedule = Schedule() if arguments.schedule is None else read_schedule(arguments.schedule, changes_from)
    plan = LivePlan(
        spec,
        lambda samples: encode(samples, form),
        message,
        None if endless else spec.samples,
        schedule,
        arguments.wait,
    )
    LiveTransmitter(spec).block(message)  # loads the kernels, so that a receiver that connects need not wait
    sink = _sink(arguments, spec, form, message)
    try:
        terminal = None if arguments.no_keys else terminal_of(sys.stdin)
        with key_by_key(terminal):
            send_live(plan, sink, Clock(terminal), say, keys=terminal is not None)
    finally:
        sink.close()


def _sink(arguments: argparse.Namespace, spec: TransmitSpec, form: SampleFormat, message: int) -> Sink:
    if arguments.output == "-":
        return PipeSink(sys.stdout.buffer)
    curve = None
    if arguments.secret_key is not None:
        curve = Curve(arguments.secret_key, arguments.server_key, arguments.client_keys)
    elif arguments.server_key is not None or arguments.client_keys is not None:
        raise Unusable("--server-key and --client-keys need --secret-key too")
    sink = StreamSink(
        StreamOutput(
            arguments.output,
            push=arguments.socket == "push",
            connect=arguments.connect,
            topic=arguments.topic,
            framed=arguments.framed,
            curve=curve,
            rate_hz=spec.sample_rate_hz,
            format=form.name,
            centre_hz=arguments.frequency,
            message_s=message / spec.sample_rate_hz,
        )
    )
    if sink.warning:
        say(sink.warning)
    say(f"sending at {sink.endpoint}" if not arguments.connect else f"sending to {sink.endpoint}")
    return sink


def say(text: str) -> None:
    """One line on standard error."""
    print(f"transmit: {printable(text)}", file=sys.stderr)


def main(command: Sequence[str] | None = None) -> int:
    """Run the command; the exit status: 0, 2 for what cannot be used, 130 interrupted."""
    words = list(sys.argv[1:] if command is None else command)
    try:
        write(build_parser().parse_args(words), words)
    except (DspError, MonitorError, Unusable) as error:
        say(str(error))
        return 2
    except BrokenPipeError:
        # whoever read standard output has had enough; keep the interpreter from flushing into the closed pipe
        with contextlib.suppress(OSError):
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except (OSError, RuntimeError) as error:  # soundfile's errors are RuntimeErrors
        say(f"cannot write the output: {error}")
        return 2
    except KeyboardInterrupt:
        say("interrupted")
        return 130
    return 0


if __name__ == "__main__":
    sys.exit(main())
