"""The soak: a long stream at many times its speed through the real watch, and what it costs.

python tools/soak.py                  an hour of 48 kHz QPSK at 20 times its speed: memory flat, no line and no sample lost
python tools/soak.py --quick          the same for 40 s of stream at 4 times its speed
python tools/soak.py --greatest-rate  the greatest sample rate without loss, headless
python tools/soak.py --latency        from sample sent to state, QPSK at 1 Msample/s
python tools/soak.py --latency --shown   the same to the painted window at 1280x800, and how often it is painted

The transmitter is a process of its own that sends framed messages over ZeroMQ; the watch is `lidwatch watch`. Exit status: 0 all
held, 1 something did not, 2 nothing could be measured.
"""

import argparse
import json
import os
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parents[1]
sys.path.insert(0, str(ROOT))  # a clone that is not installed works too

SPS = 4
SYMBOLS = 32768  # of the loop that is sent again and again
SNR_DB = 25.0
MESSAGE_S = 0.01
RATES = (0.25e6, 0.5e6, 0.75e6, 1e6, 1.5e6, 2e6, 3e6, 4e6, 6e6, 8e6)
LATENCY_RATE = 1e6
LATENCY_LIMIT_S = 0.150
LEAST_FRAMES = 20.0  # a second
LEAST_FLAT_S = 30.0  # a shorter run says nothing of memory
NOTCH_SYMBOLS = 12  # silence that shows in the middle of the eye


class Unmeasured(Exception):
    """Nothing could be measured; the text is one line."""


def loop(symbols: int = SYMBOLS, snr_db: float = SNR_DB, seed: int = 7) -> NDArray[np.complex64]:
    """QPSK, root raised cosine 0.35, 4 samples a symbol, that joins its own beginning without a seam."""
    rng = np.random.default_rng(seed)
    size = symbols * SPS
    train = np.zeros(size, np.complex128)
    train[::SPS] = rng.choice([1, -1], symbols) + 1j * rng.choice([1, -1], symbols)
    f = np.abs(np.fft.fftfreq(size)) * SPS  # in symbol rates
    response = np.sqrt(
        np.where(f <= 0.325, 1.0, np.where(f >= 0.675, 0.0, 0.5 * (1 + np.cos(np.pi / 0.35 * (f - 0.325)))))
    )
    wave = np.fft.ifft(np.fft.fft(train) * response) * SPS
    noise = rng.normal(size=(size, 2)).view(np.complex128)[:, 0]
    # symbol energy behind the matched filter: 2 for points (+-1, +-1); of the noise only the share within the filter's band
    noise *= np.sqrt(2.0 / 10 ** (snr_db / 10) / 2.0 * SPS)
    return (0.25 * (wave + noise)).astype(np.complex64)


# -- the sender's process ----------------------------------------------------------------------------------------------


def send(address: str, rate: float, speed: float, seconds: float, notches: bool) -> int:
    """Bind a PUSH socket and send; tells on standard output how late it was, and when each notch left (monotonic clock)."""
    import zmq

    from monitor.sources.wire import FrameHeader

    samples = loop()
    size = samples.size
    step = max(round(rate * speed * MESSAGE_S), 1)
    ring = np.concatenate([samples, samples[: step % size], *([samples] * (step // size))])
    total = round(rate * seconds)
    rng = np.random.default_rng(11)
    told: list[float] = []
    next_notch = round(3.0 * rate)
    context = zmq.Context()
    push = context.socket(zmq.PUSH)
    push.sndhwm = 1000
    push.linger = 10_000
    push.bind(address)
    push.poll(20_000, zmq.POLLOUT)
    began = time.monotonic()
    latest = 0.0
    at = 0
    try:
        while at < total:
            n = min(step, total - at)
            part = ring[at % size : at % size + n]
            width = NOTCH_SYMBOLS * SPS
            notch = notches and next_notch < at + n - width
            if notch:
                part = part.copy()
                place = max(next_notch - at, 0)
                part[place : place + width] = 0
                next_notch = at + place + round(rng.uniform(0.25, 0.4) * rate)
            due = began + (at + n) / (rate * speed)
            while (wait := due - time.monotonic()) > 0:
                time.sleep(wait)
            latest = max(latest, -wait)
            header = FrameHeader("soak", at, rate, "cf32_le").to_bytes()
            if notch:
                told.append(time.monotonic())
            push.send_multipart([header, part.tobytes()])
            at += n
    except KeyboardInterrupt:
        pass
    push.close()
    context.term()
    sys.stdout.write(
        json.dumps({"sent": at, "late_s": latest, "took_s": time.monotonic() - began, "notches": told}) + "\n"
    )
    return 0


@contextmanager
def sender(
    address: str, rate: float, speed: float, seconds: float, *, notches: bool = False
) -> Iterator[subprocess.Popen[str]]:
    """The transmitter as a process of its own; ended at the latest when the context is left."""
    command = [sys.executable, str(Path(__file__)), "--send", address, "--rate", str(rate), "--speed", str(speed)]
    command += ["--seconds", str(seconds), *(["--notches"] if notches else [])]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
    try:
        yield process
    finally:
        with suppress(ProcessLookupError):
            process.kill()
        process.wait()
        assert process.stdout is not None
        process.stdout.close()


# -- the watch's process -----------------------------------------------------------------------------------------------


def watch_command(address: str, rate: float, journal: Path, window: int | None) -> list[str]:
    """`lidwatch watch` without a view on the sender's link."""
    command = [sys.executable, "-m", "monitor.cli", "watch", address, "--socket", "pull", "--view", "none"]
    command += ["--scheme", "qpsk", "--symbol-rate", str(rate / SPS), "--pulse", "rrc:0.35", "--journal", str(journal)]
    return command + (["--window", str(window)] if window else [])


def resident_mb(pid: int) -> float | None:
    """Memory in use, in MB; None where the system does not tell or the process is gone."""
    with suppress(OSError, StopIteration), open(f"/proc/{pid}/status") as file:
        return int(next(line for line in file if line.startswith("VmRSS")).split()[1]) / 1000
    return None


def lines_of(journal: Path) -> list[dict[str, Any]]:
    """All whole lines."""
    if not journal.exists():
        return []
    return [json.loads(line) for line in journal.read_text().splitlines(keepends=True) if line.endswith("\n")]


class Tail:
    """The sample that a growing journal has come to."""

    def __init__(self, journal: Path) -> None:
        self._path, self._at, self.sample = journal, 0, 0

    def look(self) -> int:
        """Read what is new."""
        with suppress(FileNotFoundError), self._path.open("rb") as file:
            file.seek(self._at)
            data = file.read()
            whole = data[: data.rfind(b"\n") + 1]
            self._at += len(whole)
            for line in whole.splitlines():
                record = json.loads(line)
                if record["kind"] in ("reading", "gap"):
                    self.sample = max(self.sample, record["sample"] or 0)
        return self.sample


def run(rate: float, speed: float, seconds: float, window: int | None, progress: bool = True) -> dict[str, Any]:
    """One soak; what was seen."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    with tempfile.TemporaryDirectory(prefix="soak-") as folder:
        address, journal = f"ipc://{folder}/samples", Path(folder) / "soak.jsonl"
        with sender(address, rate, speed, seconds) as transmitter:
            watch = subprocess.Popen(
                watch_command(address, rate, journal, window), env=environment, stderr=subprocess.PIPE, text=True
            )
            memory: list[float] = []
            tail = Tail(journal)
            told = time.monotonic()
            try:
                quiet_since = None
                while watch.poll() is None:
                    with suppress(subprocess.TimeoutExpired):
                        watch.wait(0.25)
                    if (now_mb := resident_mb(watch.pid)) is not None:
                        memory.append(now_mb)
                    sample = tail.look()
                    if progress and time.monotonic() - told > 10:
                        told = time.monotonic()
                        show(f"  {sample / rate:8.0f} s of stream, {memory[-1] if memory else 0:6.1f} MB")
                    if transmitter.poll() is not None:
                        quiet_since = quiet_since or time.monotonic()
                        if time.monotonic() - quiet_since > 1.5:
                            watch.send_signal(signal.SIGTERM)
                            watch.wait(20)
                assert watch.stderr is not None
                said = watch.stderr.read()
            finally:
                if watch.poll() is None:
                    watch.kill()
                watch.wait()
                assert watch.stderr is not None
                watch.stderr.close()
            assert transmitter.stdout is not None
            if transmitter.poll() is None:
                raise Unmeasured(f"the watch ended before the stream: {said.strip()[-200:]}")
            sent = json.loads(transmitter.stdout.readline())
        lines = lines_of(journal)
    return judged(lines, sent, memory, rate, said)


def judged(
    lines: Sequence[dict[str, Any]], sent: dict[str, Any], memory: Sequence[float], rate: float, said: str
) -> dict[str, Any]:
    """The figures of a run."""
    stop = lines[-1] if lines and lines[-1]["kind"] == "stop" else None
    if stop is None:
        raise Unmeasured(f"the journal has no stop line: {said.strip()[-200:]}")
    readings = [line for line in lines if line["kind"] == "reading"]
    seen = {int(line["seconds"]) for line in readings}
    missing = [second for second in range(1, int(sent["sent"] / rate)) if second not in seen]
    quarter = max(len(memory) // 4, 1)
    # the first quarter is warming up
    early, late = memory[quarter : 2 * quarter], memory[-quarter:]
    return {
        "stream_s": sent["sent"] / rate,
        "took_s": sent["took_s"],
        "speed": sent["sent"] / rate / sent["took_s"],
        "sender_late_s": sent["late_s"],
        "samples_sent": sent["sent"],
        "samples_measured": stop["samples"],
        "samples_lost": stop["samples_lost"],
        "readings": len(readings),
        "readings_missing": len(missing),
        "locks_lost": sum(line["kind"] == "lock" and line["state"] == "lost" for line in lines) - 1,
        "memory_mb": [float(np.median(part)) for part in (early, late) if part],
        "memory_most_mb": max(memory, default=None),
    }


def faults(found: dict[str, Any]) -> list[str]:
    """What did not hold, a line each."""
    out = []
    if found["samples_lost"] or found["samples_measured"] != found["samples_sent"]:
        out.append(
            f"{found['samples_lost']} samples lost, {found['samples_measured']} of {found['samples_sent']} measured"
        )
    if found["readings_missing"]:
        out.append(f"{found['readings_missing']} readings missing")
    if len(found["memory_mb"]) == 2 and found["took_s"] >= LEAST_FLAT_S:
        early, late = found["memory_mb"]
        if late > early + max(4.0, 0.03 * early):
            out.append(f"memory grew from {early:.1f} to {late:.1f} MB")
    return out


# -- latency -----------------------------------------------------------------------------------------------------------


class Sight:
    """When traces came to the middle of the eye, as states are seen one after the other."""

    def __init__(self) -> None:
        self.times: list[float] = []
        self.behind_s = 0.0
        self.looks: list[float] = []
        self._last: Any = None
        self._dark = True

    def see(self, state: Any) -> None:  # noqa: ANN401
        """Look at a state, now; one that was seen already says nothing."""
        if state is self._last:
            return
        self._last = state
        now = time.monotonic()
        self.looks.append(now)
        self.behind_s = max(self.behind_s, state.behind_s)
        dark = not _notched(state.snapshot.image)
        if self._dark and not dark:
            self.times.append(now)
        self._dark = dark


def follow(running: Any, over: Callable[[], bool]) -> Sight:  # noqa: ANN401
    """States as they are made, until it is over."""
    sight = Sight()
    while not over():
        sight.see(running.state())
        time.sleep(0.001)
    return sight


def follow_window(running: Any, over: Callable[[], bool], choices: Path) -> Sight:  # noqa: ANN401
    """States as the window has painted them, until it is over."""
    from PySide6.QtCore import QEvent, QObject, QTimer
    from PySide6.QtWidgets import QApplication

    from monitor.views.painter import ensure_application
    from monitor.views.window import LiveWindow, choose_painter

    class Painted(QObject):
        """Looks when a paint is done."""

        def eventFilter(self, watched: QObject, event: QEvent) -> bool:
            view = window.face.view
            if event.type() == QEvent.Type.Paint and view is not None:
                QTimer.singleShot(0, lambda: sight.see(view.state))
            return False

    ensure_application()
    application = QApplication.instance()
    assert application is not None
    sight, painted = Sight(), Painted()
    window = LiveWindow(running, title="soak", painter=choose_painter("auto"), choices=choices, until=over)
    window.face.installEventFilter(painted)
    window.resize(1280, 800)
    window.show()
    application.exec()
    window.close()
    return sight


def latency(seconds: float, rate: float = LATENCY_RATE, shown: bool = False) -> dict[str, Any]:
    """Seconds from when a message is sent to the first state whose picture shows it, for silences at random places.

    ``shown``: to when the window has painted that state.
    """
    from threadpoolctl import threadpool_limits

    from dsp.identify import Wanted
    from dsp.link import find_scheme
    from dsp.pulses import Pulse
    from monitor.engine import EngineOptions
    from monitor.showing import prepared
    from monitor.sources.stream import StreamOptions, open_stream
    from monitor.watch import Watch

    threadpool_limits(1)  # as `lidwatch watch` does
    wanted = Wanted(scheme=find_scheme("qpsk"), symbol_rate_hz=rate / SPS, pulse=Pulse("rrc", 0.35))
    with (
        tempfile.TemporaryDirectory(prefix="soak-") as folder,
        prepared("window" if shown else "none", beside=True) as beside,
    ):
        address = f"ipc://{folder}/samples"
        with sender(address, rate, 1.0, seconds, notches=True) as transmitter:
            running = Watch(
                lambda: open_stream(address, StreamOptions(socket="pull")),
                wanted,
                EngineOptions(),
                source_text=address,
                beside=beside,
            )

            def over() -> bool:
                return transmitter.poll() is not None or running.failure is not None

            running.start()
            if shown:
                from monitor.views.choices import Choices, save_choices

                choices = Path(folder) / "window.ini"
                save_choices(choices, Choices(persistence=0.0))
                sight = follow_window(running, over, choices)
            else:
                running.set_persistence(0.0)
                sight = follow(running, over)
            running.stop()
            if running.failure is not None:
                raise Unmeasured(str(running.failure))
            assert transmitter.stdout is not None
            told = json.loads(transmitter.stdout.readline())
    times = np.array(sight.times)
    found = []
    for left in told["notches"]:
        after = times[(times > left) & (times < left + 0.25)]
        found.append(float(after[0] - left) if after.size else np.inf)
    if not found:
        raise Unmeasured("no mark was sent; give --seconds 10 or more")
    values = np.array(found)
    return {
        "rate_hz": rate,
        "marks": len(found),
        "marks_not_seen": int(np.isinf(values).sum()),
        "median_s": float(np.median(values)),
        "p95_s": float(np.quantile(values, 0.95, method="higher")),
        "within_limit_pct": 100.0 * float(np.mean(values <= LATENCY_LIMIT_S)),
        "states_per_s": (len(sight.looks) - 1) / (sight.looks[-1] - sight.looks[0]),
        "behind_most_s": sight.behind_s,
        "samples_lost": running.state().samples_lost,
        "sender_late_s": told["late_s"],
    }


def _notched(image: Any) -> bool:  # noqa: ANN401
    """Whether traces run through the middle of the eye at the decision instant."""
    if image is None:
        return False
    column = int(np.argmin(np.abs(image.column_ui)))
    middle = np.abs(image.row_level) < 0.1
    return bool(image.density[:, column, middle].sum() > 0)


# -- the command -------------------------------------------------------------------------------------------------------


def show(text: str) -> None:
    """A line, at once."""
    print(text, flush=True)


def greatest(seconds: float) -> dict[str, Any]:
    """Rates upwards until samples are lost."""
    best = None
    tried = []
    for rate in RATES:
        found = run(rate, 1.0, seconds, None, progress=False)
        tried.append({"rate_hz": rate, "samples_lost": found["samples_lost"], "sender_late_s": found["sender_late_s"]})
        show(
            f"  {rate / 1e6:5.2f} Msample/s: {found['samples_lost']} lost, sender {found['sender_late_s'] * 1e3:.0f} ms late"
        )
        if found["samples_lost"] or found["samples_measured"] != found["samples_sent"]:
            break
        if found["sender_late_s"] > 0.5:
            show("  the sender cannot send faster")
            break
        best = rate
    return {"greatest_rate_hz": best, "tried": tried}


def build_parser() -> argparse.ArgumentParser:
    """The options."""
    parser = argparse.ArgumentParser(
        prog="soak", description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter, allow_abbrev=False
    )
    add = parser.add_argument
    add("--seconds", type=float, metavar="S", help="of stream (3600; --greatest-rate: 5 for each rate; --latency: 30)")
    add("--rate", type=float, default=48000.0, metavar="HZ", help="sample rate of the stream (48000)")
    add("--speed", type=float, metavar="N", help="times real time (20)")
    add("--window", type=int, metavar="SYMBOLS", help="of a reading (default: lidwatch's own)")
    add("--quick", action="store_true", help="40 s of stream at 4 times its speed")
    add("--greatest-rate", action="store_true", help="the greatest rate without loss, headless")
    add("--latency", action="store_true", help="from sample to state, QPSK at 1 Msample/s")
    add("--shown", action="store_true", help="--latency: to the painted window, which is open")
    add("--json", action="store_true", help="one JSON document at the end")
    add("--send", metavar="ADDRESS", help=argparse.SUPPRESS)
    add("--notches", action="store_true", help=argparse.SUPPRESS)
    return parser


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; the exit status."""
    given = build_parser().parse_args(arguments)
    if given.send is not None:
        return send(given.send, given.rate, given.speed, given.seconds, given.notches)
    try:
        if given.greatest_rate:
            show("the greatest rate without loss, QPSK, 4 samples a symbol, headless:")
            found = greatest(given.seconds or 5.0)
            wrong = [] if found["greatest_rate_hz"] else ["samples are lost at every rate"]
        elif given.latency:
            found = latency(given.seconds or 30.0, shown=given.shown)
            wrong = []
            if given.shown and found["states_per_s"] < LEAST_FRAMES:
                wrong.append(f"only {found['states_per_s']:.1f} frames a second")
            if found["within_limit_pct"] < 95.0:
                wrong.append(
                    f"only {found['within_limit_pct']:.1f} % of the marks shown within {LATENCY_LIMIT_S * 1e3:.0f} ms"
                )
            if found["samples_lost"]:
                wrong.append(f"{found['samples_lost']} samples lost")
        else:
            seconds = given.seconds or (40.0 if given.quick else 3600.0)
            speed = given.speed or (4.0 if given.quick else 20.0)
            show(f"{seconds:g} s of QPSK at {given.rate:g} Hz, {speed:g} times its speed:")
            found = run(given.rate, speed, seconds, given.window)
            wrong = faults(found)
    except Unmeasured as error:
        print(f"soak: {error}", file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        print("soak: interrupted", file=sys.stderr)
        return 130
    if given.json:
        show(json.dumps({**found, "faults": wrong}))
    else:
        for name, value in found.items():
            show(f"  {name:18} {value}")
        for fault in wrong:
            show(f"  NOT HELD: {fault}")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
