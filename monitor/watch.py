"""A live watch: one thread reads the source, one runs the engine, any number of views look at the newest state."""

import queue
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from typing import Any

from dsp.block import Block
from dsp.identify import Wanted
from monitor.engine import Engine, EngineOptions
from monitor.errors import MonitorError, printable
from monitor.journal import Journal
from monitor.snapshot import Snapshot
from monitor.sources.ring import ThreadedReader
from monitor.sources.stream import LiveSource
from monitor.sources.wire import DESCRIBING, StreamEvent
from monitor.state import LiveState

_POLL_S = 0.05
_PUBLISH_S = 0.033  # a new state for the views at most so often
_JOIN_S = 10.0


class Watch:
    """Runs until the source ends, ``for_s`` seconds are over, `stop` is called or the engine fails.

    What views call is safe from any thread.

    ``failure`` holds what ended it if that was an error.
    """

    def __init__(
        self,
        open_source: Callable[[], LiveSource],
        wanted: Wanted,
        options: EngineOptions,
        *,
        keeper: Journal | None = None,
        source_text: str,
        on_block: Callable[[Block], None] | None = None,
        start_fields: Mapping[str, Any] | None = None,
        for_s: float | None = None,
    ) -> None:
        self._reader = ThreadedReader(open_source)
        self._wanted = wanted
        self._aside = ThreadPoolExecutor(1, thread_name_prefix="lidwatch identify")
        self._options = replace(options, aside=self._aside)
        self._keeper = keeper
        self._source_text = source_text
        self._on_block = on_block
        self._start_fields = dict(start_fields or {})
        self._for_s = for_s
        self._engine: Engine | None = None
        self._commands: queue.SimpleQueue[Callable[[Engine], None]] = queue.SimpleQueue()
        self._stop = threading.Event()
        self._why = "stopped"
        self._notices: list[str] = list(self._reader.warnings)
        self._state = LiveState(
            Snapshot(source_text=source_text, lock_text="waiting for samples"), searching="waiting for samples"
        )
        self.failure: MonitorError | None = None
        self._thread = threading.Thread(target=self._run, name="lidwatch engine", daemon=True)

    @property
    def warnings(self) -> tuple[str, ...]:
        """What the user should know of the source at the start."""
        return self._reader.warnings

    def start(self) -> None:
        """Begin."""
        self._thread.start()

    def wait(self, timeout_s: float | None = None) -> bool:
        """Wait for the end; whether it has come."""
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    # -- for views -----------------------------------------------------------------------------------------------------

    def state(self) -> LiveState:
        """The newest state."""
        return self._state

    def mark(self, name: str = "") -> None:
        """Note the present reading."""
        self._commands.put(lambda engine: engine.mark(name))

    def name_mark(self, name: str) -> None:
        """Give the last mark a name."""
        self._commands.put(lambda engine: engine.name_mark(name))

    def clear(self) -> None:
        """Begin the eye anew."""
        self._commands.put(lambda engine: engine.clear())

    def acknowledge(self) -> None:
        """All alarms shown have been seen."""
        self._commands.put(lambda engine: engine.acknowledge())

    def shelve(self, seconds: float) -> None:
        """Keep the foremost alarm quiet for so long."""
        self._commands.put(lambda engine: engine.shelve(seconds))

    def set_persistence(self, seconds: float | None) -> None:
        """How long traces stay: 0 for the newest only, None for ever."""

        def apply(engine: Engine) -> None:
            engine.persistence_s = seconds

        self._commands.put(apply)

    def stop(self) -> None:
        """End the watch; returns when the journal has its last line, or after some seconds."""
        self._stop.set()
        if self._thread.is_alive() and threading.current_thread() is not self._thread:
            self._thread.join(_JOIN_S)

    # -- the engine's thread -------------------------------------------------------------------------------------------

    def _run(self) -> None:
        self._keep("start", 0, 0.0, self._start_fields)
        try:
            self._watch()
            if self._engine is not None:
                self._engine.finish()
        except MonitorError as error:
            self.failure, self._why = error, str(error)
        except Exception as error:  # noqa: BLE001  # a thread that ends in silence would look like a quiet link
            self.failure = MonitorError(printable(f"the watch failed: {error!r}"))
            self.failure.__cause__ = error
            self._why = str(self.failure)
        finally:
            self._reader.close()
            self._aside.shutdown(wait=False, cancel_futures=True)
            self._last_line()
            self._publish(ended=True)

    def _watch(self) -> None:
        quiet_since = began = time.monotonic()
        published = 0.0
        while not self._stop.is_set():
            if self._for_s is not None and time.monotonic() - began >= self._for_s:
                self._why = f"watched for {self._for_s:g} s"
                return
            items = self._reader.poll(_POLL_S)
            now = time.monotonic()
            for item in items:
                if isinstance(item, StreamEvent):
                    self._happened(item)
                elif self._engine is not None:
                    quiet_since = now
                    if self._on_block is not None:
                        self._on_block(item)
                    self._engine.feed(item)
            engine = self._engine
            if engine is not None:
                while True:
                    try:
                        command = self._commands.get_nowait()
                    except queue.Empty:
                        break
                    command(engine)
                if not items:
                    engine.idle(now - quiet_since)
            if not items and self._reader.ended:
                self._why = "the source ended"
                return
            if now - published >= _PUBLISH_S:
                published = now
                self._publish()

    def _happened(self, event: StreamEvent) -> None:
        if event.kind in DESCRIBING and event.rate_hz is not None and event.format is not None:
            complex_in = event.format.startswith("c")
            if self._engine is None:
                self._engine = Engine(
                    self._wanted,
                    sample_rate_hz=event.rate_hz,
                    complex_in=complex_in,
                    options=self._options,
                    line=self._keep,
                    source_text=f"{self._source_text} · {event.format} · {event.rate_hz:g} Hz",
                )
            elif event.kind != "centre":
                self._engine.changed(sample_rate_hz=event.rate_hz, complex_in=complex_in, why=event.text)
            return
        if event.kind == "ended":
            return
        if self._engine is not None:
            self._engine.notice(event.text)
            if event.kind in ("torn", "garbage", "oversize", "overflow"):
                self._keep(
                    "gap", self._engine.position, self._engine.seconds, {"samples_lost": None, "why": event.text}
                )
        else:
            self._notices = [*self._notices[-3:], event.text]

    def _keep(self, kind: str, sample: int, seconds: float, fields: Mapping[str, Any]) -> None:
        if self._keeper is not None:
            self._keeper.write(kind, sample, seconds, fields)

    def _last_line(self) -> None:
        engine = self._engine
        totals = {
            "why": self._why,
            "samples": engine.position - engine.samples_lost if engine is not None else 0,
            "samples_lost": engine.samples_lost if engine is not None else 0,
            "alarms_raised": engine.alarms.activations if engine is not None else 0,
        }
        position, seconds = (engine.position, engine.seconds) if engine is not None else (0, 0.0)
        self._keep("stop", position, seconds, totals)

    def _publish(self, *, ended: bool = False) -> None:
        status = self._keeper.status.text if self._keeper is not None else ""
        if self._engine is None:
            return
        self._state = self._engine.state(notices=self._notices, journal_text=status, ended=ended)
