"""The journal: what happened to a watched stream, a line each, kept through full disks, kills and weeks."""

import csv
import dataclasses
import io
import json
import math
import re
from collections import deque
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from types import TracebackType
from typing import Any, Final, Protocol, Self

from dsp.reading import READING_KEYS
from monitor.errors import InputError
from monitor.line_file import LineFile

KINDS: Final = ("start", "reading", "alarm", "gap", "lock", "mark", "stop")
CSV_COLUMNS: Final = ("time", "sample", "seconds", *READING_KEYS)

_FIRST_KEYS: Final = ("kind", "time", "sample", "seconds")
_JSON_BEGIN: Final = b'{"kind": '
_KEPT_KINDS: Final = ("start", "alarm", "mark", "stop")  # rare, and nothing later says the same
_MOST_KEPT: Final = 1000
_MOST_CUT_TEXT: Final = 4000
_RETRY_ROTATION: Final = timedelta(minutes=1)
_DAY: Final = re.compile(rb"(\d{4}-\d\d-\d\d)T\d\d:")
# valid in JSON as they are, but many a tool takes them for line ends
_LINE_ENDS: Final = {0x85: "\\u0085", 0x2028: "\\u2028", 0x2029: "\\u2029"}


@dataclass(frozen=True, slots=True)
class Rotation:
    """When a new file begins: before one would grow beyond ``most_bytes``, and with each new UTC day if ``daily``."""

    most_bytes: int | None = None
    daily: bool = False

    def __post_init__(self) -> None:
        if self.most_bytes is not None and self.most_bytes < 1:
            raise InputError(f"a journal's part must hold at least 1 byte, got {self.most_bytes}")


@dataclass(frozen=True, slots=True)
class JournalStatus:
    """How the journal fares.

    ``lines`` written; ``lost``: not written, and never will be; ``waiting``: not written yet; ``parts`` set aside; ``trouble``: why the
    last line could not be written, empty if it was.
    """

    path: Path | None
    lines: int
    lost: int
    waiting: int
    parts: int
    trouble: str

    @property
    def text(self) -> str:
        """One line for a view; empty while all is well."""
        missing = []
        if self.lost:
            missing.append(f"{self.lost} {_plural(self.lost, 'line')} lost")
        if self.waiting:
            missing.append(f"{self.waiting} waiting to be written")
        if self.trouble:
            return "; ".join((f"journal not written: {self.trouble}", *missing))
        return "; ".join(("journal is written again", *missing)) if missing else ""


class Sink(Protocol):
    """Where each line goes beside the file. Never raises, never waits."""

    def take(self, record: Mapping[str, Any], line: bytes) -> None:
        """One line: as keys and values, and as it is written, without the line's end."""

    def close(self) -> None:
        """No more lines come."""


class Keeper(Protocol):
    """What a watch writes its lines to."""

    @property
    def status(self) -> JournalStatus:
        """How the journal fares now."""
        ...

    def write(self, kind: str, sample: int | None, seconds: float | None, fields: Mapping[str, Any]) -> None:
        """Write one line."""
        ...


class Journal:
    """Writes a line for everything that happens. Owned by one thread.

    Each line is written and flushed when `write` returns, an alarm's line is on the disk. Nothing that happens to the disk is raised:
    `status` tells it, and when lines can be written again, first those that waited are (alarms, marks, start and stop; at most 1000, the
    oldest are given up), then one of kind ``gap`` with ``lines_lost``.

    Parameters
    ----------
    path
        ``.csv``: readings only, as RFC 4180 with the columns `CSV_COLUMNS`, what is no single number or text as JSON in its cell. Any
        other: JSON Lines. A journal that is there is appended to; a line cut off by a kill is replaced by one that tells of it (CSV: taken
        away). None: no file, only the sinks.
    now
        The present time, aware of its zone.
    rotation
        When to set the file aside as a part: ``watch.20261201T050020Z-000001.jsonl``, the UTC time when it was closed. The parts in the
        order of their names and then the file are the whole journal.
    sinks
        Get every line, whether the disk took it or not, after the disk. Closed with the journal.
    links
        There are several links: every line has ``link``, the name of the one that it is about, null where it is about none.

    Raises
    ------
    InputError
        There is no such folder, the path is a folder, holds something else than a journal, or is written by another program.
    """

    def __init__(
        self,
        path: Path | None,
        *,
        now: Callable[[], datetime],
        rotation: Rotation | None = None,
        sinks: Sequence[Sink] = (),
        links: bool = False,
    ) -> None:
        self._now = now
        self._links = links
        self._columns = ("link", *CSV_COLUMNS) if links else CSV_COLUMNS
        self._rotation = rotation or Rotation()
        self._sinks = tuple(sinks)
        self._csv = path is not None and path.suffix.lower() == ".csv"
        self._lines = self._lost = self._untold = self._parts = 0
        self._trouble = self._rotation_trouble = self._why = ""
        self._waiting: deque[tuple[str, bytes]] = deque()
        self._day: date | None = None
        self._rotation_failed_at: datetime | None = None
        self._file: LineFile | None = None
        if path is not None:
            header = (",".join(self._columns) + "\r\n").encode("ascii")
            _check(path, header if self._csv else _JSON_BEGIN)
            self._file = (
                LineFile(path, header=header, mend=lambda fragment: b"")
                if self._csv
                else LineFile(path, mend=self._mended)
            )
            try:
                self._file.ready()
            except BlockingIOError:
                raise InputError(f"journal {path}: another program is writing it; give another name") from None
            except OSError as error:
                self._trouble = _reason(error)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    @property
    def status(self) -> JournalStatus:
        """How it fares now."""
        return JournalStatus(
            None if self._file is None else self._file.path,
            self._lines,
            self._lost,
            len(self._waiting),
            self._parts,
            self._trouble or self._rotation_trouble,
        )

    def write(self, kind: str, sample: int | None, seconds: float | None, fields: Mapping[str, Any]) -> None:
        """Write one line.

        Parameters
        ----------
        kind
            One of `KINDS`.
        sample, seconds
            Index in the stream and seconds since its start; None if they cannot be known.
        fields
            The rest, by key; kind, time, sample and seconds among them are left out. NaN and Inf become null; what JSON does not know
            is written as text.
        """
        now = self._now()
        record, line = self._made(kind, now, sample, seconds, fields)
        if self._file is not None and (kind == "reading" or not self._csv):
            self._store(
                self._file, kind, _csv_row(record, self._columns) if self._csv else line + b"\n", now, sample, seconds
            )
        self._hand_on(record, line)

    def close(self) -> None:
        """Write what still waits, if it can be, and close file and sinks."""
        if self._file is not None:
            if self._waiting or self._untold:
                try:
                    self._catch_up(self._file, self._now(), None, None)
                except OSError as error:
                    self._trouble = _reason(error)
            self._file.close()
        for sink in self._sinks:
            sink.close()

    # -- the file ------------------------------------------------------------------------------------------------------

    def _store(
        self, file: LineFile, kind: str, line: bytes, now: datetime, sample: int | None, seconds: float | None
    ) -> None:
        try:
            if self._waiting or self._untold:
                self._catch_up(file, now, sample, seconds)
            self._append(file, kind, line, now)
        except OSError as error:
            self._trouble = self._why = _reason(error)
            if kind in _KEPT_KINDS:
                self._waiting.append((kind, line))
                if len(self._waiting) <= _MOST_KEPT:
                    return
                self._waiting.popleft()
            self._lost += 1
            self._untold += 1
        else:
            self._trouble = ""

    def _catch_up(self, file: LineFile, now: datetime, sample: int | None, seconds: float | None) -> None:
        """Write what waits, then how much was lost. Raises OSError; what was written till then waits no more."""
        while self._waiting:
            self._append(file, *self._waiting[0], now)
            self._waiting.popleft()
        if self._untold and not self._csv:
            why = f"the journal could not be written: {self._why}"
            fields = {"samples_lost": 0, "lines_lost": self._untold, "why": why}
            record, line = self._made("gap", now, sample, seconds, fields)
            self._append(file, "gap", line + b"\n", now)
            self._hand_on(record, line)
        self._untold = 0

    def _append(self, file: LineFile, kind: str, line: bytes, now: datetime) -> None:
        if file.ready() or self._day is None:
            self._day = _day_of(file.newest) or now.astimezone(UTC).date()
        self._rotate_if_due(file, len(line), now)
        file.append(line, durable=kind == "alarm")
        self._lines += 1

    def _rotate_if_due(self, file: LineFile, coming: int, now: datetime) -> None:
        size, most, today = file.size, self._rotation.most_bytes, now.astimezone(UTC).date()
        full = most is not None and size + coming > most
        new_day = self._rotation.daily and self._day is not None and today > self._day
        if not size:
            self._day, self._rotation_trouble = today, ""
            return
        if not (full or new_day):
            return
        if self._rotation_failed_at is not None and abs(self._rotation_failed_at - now) < _RETRY_ROTATION:
            return
        try:
            file.set_aside(now)
        except OSError as error:
            self._rotation_trouble = f"cannot begin a new file: {_reason(error)}"
            self._rotation_failed_at = now
        else:
            self._rotation_trouble, self._rotation_failed_at = "", None
            self._parts += 1
            self._day = today

    # -- lines ---------------------------------------------------------------------------------------------------------

    def _made(
        self, kind: str, now: datetime, sample: int | None, seconds: float | None, fields: Mapping[str, Any]
    ) -> tuple[dict[str, Any], bytes]:
        record = {"kind": kind, "time": time_text(now), "sample": _plain(sample), "seconds": _plain(seconds)}
        if self._links:
            record["link"] = None
        record |= {str(key): _plain(value) for key, value in fields.items() if key not in _FIRST_KEYS}
        text = json.dumps(record, ensure_ascii=False, allow_nan=False)
        return record, text.translate(_LINE_ENDS).encode("utf-8")

    def _mended(self, fragment: bytes) -> bytes:
        """What stands in the file instead of a line that was cut off."""
        try:
            whole = isinstance(json.loads(fragment), dict)
        except ValueError:
            whole = False
        if whole:
            return fragment + b"\n"
        # after a power cut a file may end in zero bytes
        cut_line = fragment.decode("utf-8", "replace").strip("\0")[:_MOST_CUT_TEXT]
        why = "the program ended while it wrote this line"
        fields = {"samples_lost": 0, "lines_lost": 1, "why": why, "cut_line": cut_line}
        return self._made("gap", self._now(), None, None, fields)[1] + b"\n"

    def _hand_on(self, record: Mapping[str, Any], line: bytes) -> None:
        for sink in self._sinks:
            sink.take(record, line)


def time_text(moment: datetime) -> str:
    """A time as RFC 3339 in UTC with microseconds: ``2026-12-01T05:00:20.000000Z``."""
    return moment.astimezone(UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def _check(path: Path, begin: bytes) -> None:
    where = f"journal {path}"
    if "\0" in str(path):
        raise InputError(f"{where}: no file can have this name")
    try:
        if path.is_dir():
            raise InputError(f"{where}: is a folder; give a file's name")
        if not path.parent.is_dir():
            raise InputError(f"{where}: there is no folder {path.parent}; make it first")
        if not path.is_file():
            return
        with path.open("rb") as file:
            found = file.read(len(begin))
    except OSError:
        return  # the status tells it, as of any trouble
    if not begin.startswith(found):
        what = "is a table with other columns" if path.suffix.lower() == ".csv" else "is not a journal"
        raise InputError(f"{where}: {what}; nothing is added to it, give another name")


def _plain(value: Any) -> Any:  # noqa: ANN401  # whatever a field holds
    """The value as JSON knows it."""
    if value is None or isinstance(value, bool | int):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, str):
        return value.encode("utf-8", "backslashreplace").decode("utf-8")  # undecodable bytes of file names
    if isinstance(value, Mapping):
        return {_plain(str(key)): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [_plain(item) for item in value]
    if isinstance(value, datetime):
        return time_text(value)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: _plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if hasattr(value, "tolist"):  # numpy's arrays and scalars
        return _plain(value.tolist())
    return _plain(str(value))


def _csv_row(record: Mapping[str, Any], columns: Sequence[str]) -> bytes:
    row = io.StringIO(newline="")
    csv.writer(row, lineterminator="\r\n").writerow([_cell(record.get(column)) for column in columns])
    return row.getvalue().encode("utf-8")


def _cell(value: Any) -> str:  # noqa: ANN401
    if value is None:
        return ""
    if isinstance(value, str):
        return " ".join(value.splitlines())  # so that a line of the file is a reading, and a cut one is told
    return json.dumps(value, ensure_ascii=False)


def _day_of(line: bytes) -> date | None:
    match = _DAY.search(line[:100])
    try:
        return None if match is None else date.fromisoformat(match[1].decode("ascii"))
    except ValueError:
        return None


def _reason(error: OSError) -> str:
    return error.strerror or str(error)


def _plural(count: int, noun: str) -> str:
    return noun if count == 1 else f"{noun}s"
