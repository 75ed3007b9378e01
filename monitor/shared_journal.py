"""One journal for several links, each written from its own thread under its own name."""

import threading
from collections.abc import Mapping
from typing import Any

from monitor.journal import Journal, JournalStatus, Sink


class ByLink:
    """A sink that hands each line to its link's own, in that link's thread, as its lines are written there."""

    def __init__(self, sinks: Mapping[str, Sink]) -> None:
        self._sinks = dict(sinks)

    def take(self, record: Mapping[str, Any], line: bytes) -> None:
        """One line; what is about no link is left out."""
        sink = self._sinks.get(str(record.get("link")))
        if sink is not None:
            sink.take(record, line)

    def close(self) -> None:
        """No more lines come."""
        for sink in self._sinks.values():
            sink.close()


class LinkJournal:
    """What one link writes: every line with ``link``, its name; what a ``start`` line says of the link stands under ``given``.

    ``lock`` is the journal's, the same for all its links. Closing is the journal's owner's business.
    """

    def __init__(self, journal: Journal, name: str, lock: threading.Lock) -> None:
        self._journal = journal
        self._name = name
        self._lock = lock

    @property
    def status(self) -> JournalStatus:
        """How the journal fares."""
        return self._journal.status

    def write(self, kind: str, sample: int | None, seconds: float | None, fields: Mapping[str, Any]) -> None:
        """Write one line, see `Journal.write`."""
        named = {"given" if key == "link" else key: value for key, value in fields.items()}
        with self._lock:
            self._journal.write(kind, sample, seconds, {"link": self._name, **named})
