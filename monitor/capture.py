"""Captures: for each alarm the samples around it as a SigMF recording, and the picture beside it."""

import queue
import re
import threading
from collections import deque
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from dsp.block import Block, Samples
from monitor.errors import InputError, MonitorError, printable
from monitor.journal import time_text
from monitor.snapshot import Snapshot
from monitor.version import version

MOST_BYTES: Final = 64 << 20
"""Most samples of one capture. Three times this is in memory at most: the newest, those that wait and those being written."""

LONGEST_S: Final = 3600.0
_LATE_S: Final = 0.5  # how far an alarm's sample may lie behind the newest one
_TOGETHER_S: Final = 0.05  # alarms raised within this share a capture
_MOST_STRETCHES: Final = 4096
_CLOSE_S: Final = 30.0


@dataclass(slots=True)
class _Alarm:
    sample: int
    record: Mapping[str, Any]
    end: int | None = None  # where it cleared


@dataclass(slots=True)
class _Pending:
    """A capture whose last samples have not come yet."""

    number: int
    first: int
    last: int
    raised_at: datetime
    newest: int  # the sample that came at ``raised_at``
    picture: Snapshot | None
    alarms: list[_Alarm] = field(default_factory=list)


@dataclass(frozen=True, slots=True)
class _Stretch:
    """Consecutive samples: index of the first in the stream, and among those received."""

    start: int
    received: int


@dataclass(frozen=True, slots=True)
class _Job:
    pending: _Pending
    stretches: tuple[tuple[int, Samples], ...]
    rate_hz: float
    centre_hz: float | None
    note: str

    @property
    def size(self) -> int:
        """Bytes of samples."""
        return sum(samples.nbytes for _, samples in self.stretches)


class Recent:
    """The newest samples of a stream, in a fixed amount of memory."""

    def __init__(self, capacity: int, *, complex_samples: bool) -> None:
        dtype = np.complex64 if complex_samples else np.float32
        self._ring: NDArray[Any] = np.empty(max(capacity, 1), dtype)
        self._received = 0
        self._stretches: deque[_Stretch] = deque()
        self.position = 0

    def add(self, block: Block) -> None:
        """Take the next samples; a copy is kept."""
        samples = block.samples
        if not self._stretches or block.start != self.position:
            self._stretches.append(_Stretch(block.start, self._received))
        self.position = block.start + samples.size
        size = self._ring.size
        kept = samples[-size:]
        at = (self._received + samples.size - kept.size) % size
        first = min(kept.size, size - at)
        self._ring[at : at + first] = kept[:first]
        self._ring[: kept.size - first] = kept[first:]
        self._received += samples.size
        while len(self._stretches) > 1 and (
            self._stretches[1].received <= self._received - size or len(self._stretches) > _MOST_STRETCHES
        ):
            self._stretches.popleft()

    def cut(self, first: int, last: int) -> tuple[tuple[int, Samples], ...]:
        """Copies of what is held of the samples from ``first`` up to ``last`` (excluded), with the stream index of each stretch."""
        size = self._ring.size
        oldest = self._received - size
        out: list[tuple[int, Samples]] = []
        ends = [*(stretch.received for stretch in list(self._stretches)[1:]), self._received]
        for stretch, end in zip(self._stretches, ends, strict=True):
            begin = max(stretch.received + first - stretch.start, stretch.received, oldest)
            end = min(stretch.received + last - stretch.start, end)
            if begin >= end:
                continue
            at, n = begin % size, end - begin
            part = np.concatenate((self._ring[at : at + n], self._ring[: max(at + n - size, 0)]))
            out.append((stretch.start + begin - stretch.received, part))
        return tuple(out)


class Capture:
    """Keeps the newest samples, and writes those around each alarm from a thread of its own.

    A `monitor.journal.Sink` for the alarms and a `monitor.engine.Tap` for the samples, both called in the engine's thread. What goes
    wrong is told, and never waited for.

    Parameters
    ----------
    folder
        Made if it is not there.
    before_s, after_s
        How much to keep of the time before and after an alarm was raised; cut, with a notice, where it would exceed `MOST_BYTES`.
    most
        How many captures; further alarms are left out, with one notice.
    tell
        Is given each notice, a line, from any thread.
    now
        The present time, aware of its zone, or None for a recording: its samples' time is not known.

    Attributes
    ----------
    picture
        What gives the state to draw when an alarm is raised.
    saved, missed
        Captures written, and those that could not be.

    Raises
    ------
    InputError
        The folder cannot be.
    """

    def __init__(
        self,
        folder: Path,
        *,
        before_s: float = 2.0,
        after_s: float = 2.0,
        most: int = 100,
        tell: Callable[[str], None],
        now: Callable[[], datetime] | None = None,
    ) -> None:
        if before_s + after_s <= 0:
            raise InputError("a capture of no samples: give --capture-before or --capture-after above 0")
        if before_s + after_s > LONGEST_S:
            raise InputError(f"a capture holds at most {LONGEST_S:g} s, got {before_s + after_s:g}")
        self.picture: Callable[[], Snapshot | None] = lambda: None
        self.saved = self.missed = 0
        self._folder = folder
        self._asked_s = (before_s, after_s)
        self._most = most
        self.tell = tell
        self._now = now
        self._count = 0
        self._full_told = False
        self._recent: Recent | None = None
        self._rate = 0.0
        self._complex = False
        self._centre: float | None = None
        self._before = self._after = 0
        self._note = ""
        self._pending: list[_Pending] = []
        self._jobs: queue.SimpleQueue[_Job | None] = queue.SimpleQueue()
        self._waiting = 0  # bytes in the queue
        self._waiting_lock = threading.Lock()
        self._make_folder()
        self._pictures = self._can_paint()
        self._thread = threading.Thread(target=self._write_all, name="lidwatch capture", daemon=True)
        self._thread.start()

    def _make_folder(self) -> None:
        where = f"--capture {self._folder}"
        try:
            if self._folder.exists() and not self._folder.is_dir():
                raise InputError(f"{where}: is a file; give a folder's name")
            if not self._folder.parent.is_dir():
                raise InputError(f"{where}: there is no folder {self._folder.parent}; make it first")
            self._folder.mkdir(exist_ok=True)
        except OSError as error:
            self.tell(f"captures cannot be written: {error.strerror or error}")
        except ValueError:
            raise InputError(f"{where}: no folder can have this name") from None

    def _can_paint(self) -> bool:
        """Qt's first use must be in the main thread."""
        from monitor.views.painter import ensure_application

        try:
            ensure_application()
        except InputError as error:
            self.tell(f"captures without pictures: {error}")
            return False
        return True

    # -- the engine's thread -------------------------------------------------------------------------------------------

    def describe(self, sample_rate_hz: float, *, complex_in: bool, centre_hz: float | None) -> None:
        """What the samples are from here on; a capture that waits for more ends here."""
        if self._recent is not None and (sample_rate_hz, complex_in, centre_hz) == (
            self._rate,
            self._complex,
            self._centre,
        ):
            return
        self._complete(at_once=True)
        self._rate, self._complex, self._centre = sample_rate_hz, complex_in, centre_hz
        before, after = self._asked_s
        most_s = MOST_BYTES / ((8 if complex_in else 4) * sample_rate_hz)
        self._note = ""
        if before + after > most_s:
            share = most_s / (before + after)
            before, after = before * share, after * share
            self._note = f"{before:.3g} s before and {after:.3g} s after: {MOST_BYTES >> 20} MiB hold no more"
            self.tell(f"captures are cut to {self._note}")
        self._before, self._after = round(before * sample_rate_hz), round(after * sample_rate_hz)
        capacity = self._before + self._after + round(_LATE_S * sample_rate_hz) + 65536
        self._recent = Recent(capacity, complex_samples=complex_in)

    def block(self, block: Block) -> None:
        """Keep the next samples."""
        if self._recent is not None:
            self._recent.add(block)
            self._complete()

    def take(self, record: Mapping[str, Any], line: bytes) -> None:
        """A line of the journal: an alarm that was raised begins a capture."""
        if record.get("kind") != "alarm" or self._recent is None or not isinstance(record.get("sample"), int):
            return
        sample = record["sample"]
        if record.get("state") == "cleared":
            for pending in self._pending:
                for alarm in pending.alarms:
                    if alarm.record.get("rule") == record.get("rule") and alarm.end is None:
                        alarm.end = sample
        if record.get("state") != "raised":
            return
        alarm = _Alarm(sample, dict(record))
        if self._pending and sample - self._pending[-1].alarms[0].sample <= _TOGETHER_S * self._rate:
            self._pending[-1].alarms.append(alarm)
            return
        for pending in self._pending:
            pending.alarms.append(alarm)
        if self._count >= self._most:
            if not self._full_told:
                self._full_told = True
                self.tell(f"no more captures: there are {self._most}; --capture-most allows more")
            return
        self._count += 1
        now = self._now() if self._now is not None else datetime.now(UTC)
        self._pending.append(
            _Pending(
                self._count,
                max(sample - self._before, 0),
                sample + self._after,
                now,
                self._recent.position,
                self._seen(),
                [alarm],
            )
        )
        self._complete()

    def _seen(self) -> Snapshot | None:
        return self.picture() if self._pictures else None

    def _complete(self, *, at_once: bool = False) -> None:
        """Hand on each capture that has all its samples."""
        while self._pending and self._recent is not None:
            pending = self._pending[0]
            if self._recent.position < pending.last and not at_once:
                return
            self._pending.pop(0)
            stretches = self._recent.cut(pending.first, pending.last)
            if not stretches:
                continue
            self._hand_over(_Job(pending, stretches, self._rate, self._centre, self._note))

    def _hand_over(self, job: _Job) -> None:
        with self._waiting_lock:
            fits = not self._waiting or self._waiting + job.size <= MOST_BYTES
            if fits:
                self._waiting += job.size
        if fits:
            self._jobs.put(job)
        else:
            self._missed("the disk is too slow")

    def _missed(self, why: str) -> None:
        self.missed += 1
        more = f" ({self.missed} so far)" if self.missed > 1 else ""
        self.tell(f"capture not saved{more}: {why}")

    def close(self) -> None:
        """Write what is there of captures that wait for more, and end the thread; waits half a minute at most."""
        self._complete(at_once=True)
        self._jobs.put(None)
        self._thread.join(_CLOSE_S)

    # -- the writing thread --------------------------------------------------------------------------------------------

    def _write_all(self) -> None:
        while (job := self._jobs.get()) is not None:
            made: list[Path] = []
            with self._waiting_lock:
                self._waiting -= job.size
            try:
                self._write(job, made)
            except OSError as error:
                self._remove(made)
                self._missed(error.strerror or str(error))
            except Exception as error:  # noqa: BLE001  # a thread that ended would lose every later capture
                self._remove(made)
                self._missed(printable(repr(error)))
            else:
                self.saved += 1
            del job

    def _remove(self, paths: list[Path]) -> None:
        for path in paths:
            with suppress(OSError):
                path.unlink()

    def _write(self, job: _Job, made: list[Path]) -> None:
        self._folder.mkdir(exist_ok=True)
        stem = self._data(job, made)
        pending = job.pending
        if pending.picture is not None:
            from monitor.views.painter import save_picture

            picture = stem.with_name(f"{stem.name}.png")
            made.append(picture)
            try:
                save_picture(pending.picture, picture)
            except MonitorError as error:
                self._remove([made.pop()])
                self.tell(f"capture without its picture: {error}")
        made.append(stem.with_name(f"{stem.name}.sigmf-meta"))
        _write_meta(job, stem, timed=self._now is not None)

    def _data(self, job: _Job, made: list[Path]) -> Path:
        """Write the samples under a name that is new; the name without its ending."""
        pending = job.pending
        rule = re.sub(r"[^A-Za-z0-9_]+", "-", str(pending.alarms[0].record.get("rule", "")).split("<")[0].split(">")[0])
        name = f"{pending.raised_at.astimezone(UTC):%Y%m%dT%H%M%SZ}-{pending.number:03d}-{rule.strip('-')}"
        for again in range(1000):
            stem = self._folder / (f"{name}-{again}" if again else name)
            path = stem.with_name(f"{stem.name}.sigmf-data")
            try:
                with path.open("xb") as file:
                    made.append(path)
                    for _, samples in job.stretches:
                        little = samples.astype(samples.dtype.newbyteorder("<"), copy=False)
                        file.write(little.data)
            except FileExistsError:
                continue
            return stem
        raise FileExistsError(f"{name} is there a thousand times")


def _write_meta(job: _Job, stem: Path, *, timed: bool) -> None:
    from sigmf import SigMFFile

    pending = job.pending
    first = pending.alarms[0].record
    about = f"around the alarm {first.get('rule')}, raised at {_seconds(first)} of the stream"
    meta = SigMFFile(
        data_file=str(stem.with_name(f"{stem.name}.sigmf-data")),
        global_info={
            "core:datatype": "cf32_le" if np.iscomplexobj(job.stretches[0][1]) else "rf32_le",
            "core:sample_rate": job.rate_hz,
            "core:recorder": f"lidwatch {version()}",
            "core:description": about + (f"; cut to {job.note}" if job.note else ""),
        },
    )
    at = 0
    places: list[tuple[int, int, int]] = []  # place in the file, index in the stream, length
    for start, samples in job.stretches:
        capture: dict[str, Any] = {"core:global_index": start}
        if job.centre_hz is not None:
            capture["core:frequency"] = job.centre_hz
        if timed:
            when = pending.raised_at - timedelta(seconds=(pending.newest - start) / job.rate_hz)
            capture["core:datetime"] = time_text(when)
        meta.add_capture(at, capture)
        places.append((at, start, samples.size))
        at += samples.size
    for alarm in pending.alarms:
        begin = min(_place(places, alarm.sample), at - 1)
        end = at if alarm.end is None else max(min(_place(places, alarm.end), at), begin + 1)
        words = {"core:label": str(alarm.record.get("rule")), "core:comment": _comment(alarm.record)}
        meta.add_annotation(begin, end - begin, words)
    meta.tofile(str(stem.with_name(f"{stem.name}.sigmf-meta")))


def _place(places: list[tuple[int, int, int]], sample: int) -> int:
    """Where a sample of the stream lies in the file, or would."""
    place = 0
    for at, start, size in places:
        if sample >= start:
            place = at + min(sample - start, size)
    return place


def _comment(record: Mapping[str, Any]) -> str:
    text = f"{record.get('severity')} alarm raised at {_seconds(record)}"
    unit = f" {record['unit']}" if record.get("unit") else ""
    if isinstance(record.get("value"), (int, float)):
        text += f": {record['value']:.6g}{unit}"
    if isinstance(record.get("limit"), (int, float)):
        text += f", limit {record['limit']:.6g}{unit}"
    return text


def _seconds(record: Mapping[str, Any]) -> str:
    seconds = record.get("seconds")
    return f"{seconds:.3f} s" if isinstance(seconds, (int, float)) else "an unknown time"
