"""A live watch: one thread reads the source, one runs the engine, any number of views look at the newest state."""

import math
import queue
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

from dsp.block import Block
from dsp.identify import Wanted
from monitor.alarm_rules import built_in_alarms
from monitor.alarms import AlarmBoard, AlarmEvent
from monitor.engine import Engine, EngineOptions, Tap
from monitor.errors import MonitorError, printable
from monitor.journal import JournalStatus, Keeper
from monitor.snapshot import Snapshot
from monitor.sources.ring import ThreadedReader
from monitor.sources.stream import LiveSource
from monitor.sources.wire import DESCRIBING, StreamEvent
from monitor.state import AlarmLine, LiveState

_POLL_S = 0.05
# a new state for the views at most so often: with a new picture, without, and where nobody looks
_PUBLISH_DRAWN_S, _PUBLISH_S = 0.02, 0.033
_PUBLISH_UNSEEN_S = 0.25
_PIECE_S = 0.05  # what the engine is given at once
_PIECE_SAMPLES = 65536
_OLDEST_S = 0.4
# so long samples wait when work is to be left out, and when it can be taken up again
_LATE_S, _PROMPT_S = 0.2, 0.12
_LOOK_S = 0.1  # between two looks at what waits
_RELIEF_S, _RECOVERY_S = 0.25, 1.0  # at most one step of either in so long
_MOST_RECOVERY_S = 16.0  # where work was taken up again too soon, the next try comes after twice the time
_MOST_RELIEF = 4
_TROUBLE_AGAIN_S, _TROUBLE_OVER_S = 60.0, 2.0  # between two notices of one trouble; before it is told to be over
_JOIN_S = 10.0


class Watch:
    """Runs until the source ends, ``for_s`` seconds are over, `stop` is called or the engine fails.

    What views call is safe from any thread.

    ``tell`` is given, a line each, what happens to the journal, for where no view shows it. ``beside`` does what takes long, in another
    process at best; a thread does it if none is given.

    ``failure`` holds what ended it if that was an error; ``at_the_end`` is true when the source ended by itself.
    ``aside`` is set by whoever shows it in little only: new states then come less often.
    """

    def __init__(
        self,
        open_source: Callable[[], LiveSource],
        wanted: Wanted,
        options: EngineOptions,
        *,
        keeper: Keeper | None = None,
        source_text: str,
        tap: Tap | None = None,
        start_fields: Mapping[str, Any] | None = None,
        for_s: float | None = None,
        tell: Callable[[str], None] | None = None,
        beside: Executor | None = None,
    ) -> None:
        self._reader = ThreadedReader(open_source)
        self._wanted = wanted
        self._own = ThreadPoolExecutor(1, thread_name_prefix="lidwatch beside") if beside is None else None
        # what can wait is identified at once, so that a recording gives the same lines each time
        self._options = replace(options, aside=None if self._reader.patient else beside or self._own)
        self._keeper = keeper
        self._tell = tell
        self._trouble_told_at: float | None = None
        self._source_text = source_text
        self._tap = tap
        self._alarms = AlarmBoard(options.rules, built_in_alarms(options.stall_s))
        self._stalled = False
        self._acknowledged = threading.Event()
        self._owed = 0
        self._in_work = 0  # samples of the block that is being worked on
        self._published = 0.0
        self._late_at = self._stepped_at = 0.0  # when too much waited last; when the work was last changed for it
        self._looked: LiveState | None = None
        self._balanced_at = self._waited_s = 0.0
        self._falling_behind = False
        self._recovered_at, self._recovery_s = -math.inf, _RECOVERY_S
        self._quiet_since = 0.0
        self._start_fields = dict(start_fields or {})
        self._for_s = for_s
        self._engine: Engine | None = None
        self._commands: queue.SimpleQueue[Callable[[Engine], None]] = queue.SimpleQueue()
        self._notes: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._stop = threading.Event()
        self._over = threading.Event()
        self._began = False
        self._why = ""
        self._notices: list[str] = list(self._reader.warnings)
        self._state = LiveState(
            Snapshot(source_text=source_text, lock_text="waiting for samples"), searching="waiting for samples"
        )
        self.failure: MonitorError | None = None
        self.at_the_end = False
        self.aside = False
        self._thread = threading.Thread(target=self._run, name="lidwatch engine", daemon=True)

    @property
    def warnings(self) -> tuple[str, ...]:
        """What the user should know of the source at the start."""
        return self._reader.warnings

    def start(self) -> None:
        """Begin."""
        self._began = True
        self._thread.start()

    def wait(self, timeout_s: float | None = None) -> bool:
        """Wait for the end; whether it has come."""
        # not join: where Ctrl-C interrupts that, Python 3.11 takes the thread for ended
        return self._over.wait(timeout_s)

    @property
    def alarms(self) -> list[dict[str, Any]]:
        """Each time an alarm stood, as the JSON document lists them; after the end."""
        return self._alarms.record()

    # -- for views -----------------------------------------------------------------------------------------------------

    def state(self) -> LiveState:
        """The newest state."""
        self._looked = self._state
        return self._looked

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
        self._acknowledged.set()

    def shelve(self, seconds: float) -> None:
        """Keep the foremost alarm quiet for so long."""
        self._commands.put(lambda engine: engine.shelve(seconds))

    def set_persistence(self, seconds: float | None) -> None:
        """How long traces stay: 0 for the newest only, None for ever."""

        def apply(engine: Engine) -> None:
            engine.persistence_s = seconds

        self._commands.put(apply)

    def report(self, path: Path) -> None:
        """Write a report on the watch so far. From the thread that draws. Raises InputError."""
        from monitor.report import facts_of_watch, save_report

        identified = self._engine.identified if self._engine is not None else None
        limits = [rule.text for rule in self._options.rules]
        save_report(facts_of_watch(self._state, identified, self._options.chain, limits, self._alarms.record()), path)

    def note(self, text: str) -> None:
        """Something the user should see."""
        self._notes.put(text)

    def abandon(self) -> None:
        """End without having begun: the source is closed, and there is no line in the journal."""
        self._reader.close()
        self._end_own()

    def _end_own(self) -> None:
        if self._own is not None:
            self._own.shutdown(wait=False, cancel_futures=True)

    def ask_to_stop(self) -> None:
        """Let the watch end; returns at once."""
        self._stop.set()

    def stop(self) -> None:
        """End the watch; returns when the journal has its last line, or after some seconds."""
        self._stop.set()
        if self._began and threading.current_thread() is not self._thread and self._over.wait(_JOIN_S):
            self._thread.join()

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
            self._end_own()
            if self.failure is not None:
                self._notice(str(self.failure))
            try:
                self._last_line()
                self._publish(ended=True)
            finally:
                self._over.set()

    def _watch(self) -> None:
        began = self._quiet_since = time.monotonic()
        while not self._stop.is_set():
            if self._for_s is not None and time.monotonic() - began >= self._for_s:
                self._why = f"watched for {self._for_s:g} s"
                return
            # one block at a time: what waits meanwhile, the ring keeps from growing old
            items = self._reader.poll(_POLL_S, 1)
            for item in items:
                if isinstance(item, StreamEvent):
                    self._happened(item)
                else:
                    self._quiet_since = time.monotonic()
                    self._feed(item)
            if not items:
                if self._reader.ended:
                    self.at_the_end = True
                    self._why = self._why or "the source ended"
                    return
                if not self._reader.patient:
                    self._idle(time.monotonic() - self._quiet_since)
            self._attend()

    def _feed(self, block: Block) -> None:
        """A block in pieces, so that neither user nor views wait for a long one; what grew too old meanwhile is left out."""
        engine = self._engine
        if engine is None:
            return  # a source tells its rate before its first samples
        began = time.monotonic()
        oldest_s = math.inf if self._reader.patient else _OLDEST_S
        size = block.samples.size
        step = max(min(int(_PIECE_S * engine.sample_rate_hz), _PIECE_SAMPLES), 256)
        clipped = at = 0
        while at < size or (size == 0 and block.lost and not at):
            if at and self._reader.ring.held_s > 0 and time.monotonic() - began > oldest_s:
                self._owed += size - at
                self._in_work = 0
                return
            n = min(step, size - at)
            so_far = block.clipped * (at + n) // max(size, 1)
            if self._looked is self._state:
                engine.seen()
            lost = self._owed + (0 if at else block.lost)
            self._owed = 0
            engine.feed(
                Block(
                    block.samples[at : at + n], block.start + at, lost, so_far - clipped, 0 if at else block.nonfinite
                )
            )
            clipped = so_far
            at += max(n, 1)
            self._in_work = max(size - at, 0)
            self._attend()

    def _idle(self, for_s: float) -> None:
        if self._engine is not None:
            self._engine.idle(for_s)
            return
        self._tell_alarms(self._alarms.advance(for_s, 0))
        if for_s >= self._options.stall_s and not self._stalled:
            self._stalled = True
            self._tell_alarms(self._alarms.condition("no samples", True, for_s, 0, for_s))

    def _attend(self) -> None:
        """What the user asked for, and a new state when one is due."""
        engine = self._engine
        if self._acknowledged.is_set():
            self._acknowledged.clear()
            if engine is not None:
                engine.acknowledge()
            else:
                waited = time.monotonic() - self._quiet_since
                self._tell_alarms(self._alarms.acknowledge(None, waited, 0))
        while engine is not None:
            try:
                command = self._commands.get_nowait()
            except queue.Empty:
                break
            command(engine)
        while True:
            try:
                self._notice(self._notes.get_nowait())
            except queue.Empty:
                break
        now = time.monotonic()
        if engine is not None and not self._reader.patient:
            self._balance(engine, now)
        least_s = _PUBLISH_UNSEEN_S
        if self._options.display and not self.aside:
            least_s = _PUBLISH_DRAWN_S if engine is not None and engine.drawn else _PUBLISH_S
        if now - self._published >= least_s:
            self._published = now
            self._publish()

    def _waiting_s(self, engine: Engine) -> float:
        return self._reader.ring.held_s + self._in_work / engine.sample_rate_hz

    def _balance(self, engine: Engine, now: float) -> None:
        """Leave out work while too much waits, long before samples must be dropped; take it up again when all is prompt."""
        waiting_s = self._reader.ring.oldest_s  # by the clock: long messages are not late for being long
        if waiting_s > _PROMPT_S:
            self._late_at = now
        if now - self._balanced_at >= _LOOK_S:
            # one long piece of work, as the search for the lock is, is caught up with by itself
            self._falling_behind = min(self._waited_s, waiting_s) > _LATE_S and waiting_s >= self._waited_s
            self._balanced_at, self._waited_s = now, waiting_s
        if self._falling_behind:
            if engine.relief < _MOST_RELIEF and now - self._stepped_at >= _RELIEF_S:
                if now - self._recovered_at < _MOST_RECOVERY_S:
                    self._recovery_s = min(2 * self._recovery_s, _MOST_RECOVERY_S)
                self._stepped_at = now
                engine.relieve(engine.relief + 1)
        elif engine.relief and now - max(self._stepped_at, self._late_at) >= self._recovery_s:
            self._stepped_at = self._recovered_at = now
            engine.relieve(engine.relief - 1)

    def _notice(self, text: str) -> None:
        if self._engine is not None:
            self._engine.notice(text)
        else:
            self._notices = [*self._notices[-3:], text]

    def _tell_alarms(self, events: Iterable[AlarmEvent]) -> None:
        for event in events:
            self._keep("alarm", event.sample, event.seconds, event.fields())

    def _happened(self, event: StreamEvent) -> None:
        if event.kind in DESCRIBING and event.rate_hz is not None and event.format is not None:
            complex_in = event.format.startswith("c")
            source_text = f"{self._source_text} · {event.encoding or event.format} · {event.rate_hz:.10g} Hz"
            if self._tap is not None:
                self._tap.describe(event.rate_hz, complex_in=complex_in, centre_hz=event.centre_hz)
            if self._engine is None:
                self._engine = Engine(
                    self._wanted,
                    sample_rate_hz=event.rate_hz,
                    complex_in=complex_in,
                    options=self._options,
                    line=self._keep,
                    source_text=source_text,
                    alarms=self._alarms,
                    stalled=self._stalled,
                    tap=self._tap,
                )
                for text in self._notices:
                    self._engine.notice(text)
                self._notices = []
            elif event.kind != "centre":
                self._engine.source_text = source_text
                self._engine.changed(sample_rate_hz=event.rate_hz, complex_in=complex_in, why=event.text)
            return
        if event.kind == "ended":
            self._why = event.text
            return
        self._notice(event.text)
        if self._engine is not None and event.kind in ("torn", "garbage", "oversize", "overflow"):
            self._keep("gap", self._engine.position, self._engine.seconds, {"samples_lost": None, "why": event.text})

    def _keep(self, kind: str, sample: int, seconds: float, fields: Mapping[str, Any]) -> None:
        if self._keeper is None:
            return
        self._keeper.write(kind, sample, seconds, fields)
        if self._tell is not None:
            self._watch_journal(self._keeper.status, self._tell)

    def _watch_journal(self, status: JournalStatus, tell: Callable[[str], None]) -> None:
        """Tell of lines that cannot be written, once a minute at most, and when they can be again."""
        now = time.monotonic()
        told = self._trouble_told_at
        if status.trouble and (told is None or now - told >= _TROUBLE_AGAIN_S):
            self._trouble_told_at = now
            tell(status.text)
        elif told is not None and not status.trouble and not status.waiting and now - told >= _TROUBLE_OVER_S:
            self._trouble_told_at = None
            tell(status.text or "journal is written again")

    def _last_line(self) -> None:
        engine = self._engine
        totals = {
            "why": self._why or "stopped",
            "samples": engine.samples if engine is not None else 0,
            "samples_lost": engine.samples_lost if engine is not None else 0,
            "alarms_raised": engine.alarms.activations if engine is not None else 0,
        }
        position, seconds = (engine.position, engine.seconds) if engine is not None else (0, 0.0)
        self._keep("stop", position, seconds, totals)

    def _publish(self, *, ended: bool = False) -> None:
        status = self._keeper.status.text if self._keeper is not None else ""
        if self._engine is not None:
            state = self._engine.state(notices=self._notices, journal_text=status, ended=ended)
            self._state = replace(
                state,
                behind_s=state.behind_s + self._waiting_s(self._engine),
                searching=state.searching if self.failure is None or state.locked else str(self.failure),
            )
            return
        searching = self._state.searching
        if ended:
            searching = "no samples came" if self.failure is None else str(self.failure)
        self._state = replace(
            self._state,
            searching=searching,
            notices=tuple(self._notices),
            journal_text=status,
            ended=ended,
            alarms=tuple(
                AlarmLine(a.name, a.severity, a.state, a.since_s, a.text) for a in self._alarms.snapshot() if a.shown
            ),
        )
