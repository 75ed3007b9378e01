"""Several watches at once: one stalls or fails and the others go on; the worst is in front unless the user chose another."""

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from monitor.errors import MonitorError
from monitor.links import named_file
from monitor.state import LinkState, LiveState, SeveralState
from monitor.watch import Watch

# another link comes to the front when it has been worse by so many points for so long
MARGIN_PCT, MARGIN_S = 2.0, 2.0
_QUIET = ("acknowledged", "shelved")
_RANKS = {"high": 3, "medium": 2, "low": 1}


@dataclass(frozen=True, slots=True, order=True)
class Badness:
    """How badly a link stands, worse is greater: failed, then the severest alarm nobody has seen, then lock, then the opening."""

    failed: bool
    calling: int
    unlocked: bool
    closed_pct: float


def badness(link: LinkState) -> Badness:
    """How badly a link stands. A stream that came to its end as it should is no worse than others."""
    state = link.state
    calling = max((_RANKS.get(alarm.severity, 0) for alarm in state.alarms if alarm.state not in _QUIET), default=0)
    reading = state.snapshot.reading
    opening = reading.opening_pct if reading is not None else None
    closed = 100.0 - opening if opening is not None and math.isfinite(opening) else 0.0
    return Badness(bool(link.failure), calling, not (state.locked or state.ended), closed)


class Foremost:
    """Which link is in front: the worst, or the one that the user chose. A small lead must last, so that the view does not flicker."""

    def __init__(self, links: int, now: Callable[[], float] = time.monotonic) -> None:
        self._links = links
        self._now = now
        self._rival: tuple[int, float] | None = None
        self._at_once = False
        self.front = 0
        self.pinned = False

    def choose(self, number: int) -> None:
        """Keep one in front."""
        self.front, self.pinned, self._rival = number % self._links, True, None

    def release(self) -> None:
        """The worst to the front again, at the next look."""
        self.pinned, self._at_once = False, True

    def look(self, states: Sequence[LinkState]) -> int:
        """Which one is in front now."""
        if self.pinned:
            return self.front
        found = [badness(state) for state in states]
        # the front one stays where another is no worse
        worst = max(range(self._links), key=lambda number: (found[number], number == self.front))
        if self._at_once:
            self.front, self._at_once, self._rival = worst, False, None
            return self.front
        mine, other = found[self.front], found[worst]
        if worst == self.front or (_class(other) == _class(mine) and other.closed_pct - mine.closed_pct < MARGIN_PCT):
            self._rival = None
            return self.front
        now = self._now()
        if self._rival is None or self._rival[0] != worst:
            self._rival = worst, now
        if now - self._rival[1] >= MARGIN_S:
            self.front, self._rival = worst, None
        return self.front


def _class(found: Badness) -> tuple[bool, int, bool]:
    return found.failed, found.calling, found.unlocked


class SeveralWatches:
    """The watches of several links, as one `monitor.views.control.WatchedLinks`: what is done is done to the link in front.

    Views call from one thread.
    """

    def __init__(self, watches: Sequence[tuple[str, Watch]]) -> None:
        self._names = [name for name, _ in watches]
        self._watches = [watch for _, watch in watches]
        self._foremost = Foremost(len(watches))

    def start(self) -> None:
        """Begin all."""
        for watch in self._watches:
            watch.start()

    def wait(self, failed: Callable[[str, MonitorError], None]) -> None:
        """Wait for the end of all; ``failed`` is given name and error of each that fails, when it does."""
        waiting = list(range(len(self._watches)))
        while waiting:
            for number in tuple(waiting):
                watch = self._watches[number]
                if not watch.wait(0.1):
                    continue
                waiting.remove(number)
                if watch.failure is not None:
                    failed(self._names[number], watch.failure)

    @property
    def over(self) -> bool:
        """Whether all have ended."""
        return all(watch.wait(0.0) for watch in self._watches)

    @property
    def watches(self) -> tuple[Watch, ...]:
        """Each of them, in the user's order."""
        return tuple(self._watches)

    @property
    def failures(self) -> list[tuple[str, MonitorError]]:
        """Those that an error ended."""
        pairs = zip(self._names, self._watches, strict=True)
        return [(name, watch.failure) for name, watch in pairs if watch.failure is not None]

    # -- for views -----------------------------------------------------------------------------------------------------

    def several(self) -> SeveralState:
        """The newest state of all."""
        links = tuple(_link_state(name, watch) for name, watch in zip(self._names, self._watches, strict=True))
        front = self._foremost.look(links)
        for number, watch in enumerate(self._watches):
            watch.aside = number != front
        return SeveralState(links, front, self._foremost.pinned)

    def choose(self, number: int) -> None:
        """Keep one link in front, counted from 0 and round the end."""
        self._foremost.choose(number)

    def step(self, by: int) -> None:
        """Keep the next link, or another so many further, in front."""
        self._foremost.choose(self._foremost.front + by)

    def release(self) -> None:
        """The worst link to the front again."""
        self._foremost.release()

    def note(self, text: str) -> None:
        """Something the user should see, whichever link is in front."""
        for watch in self._watches:
            watch.note(text)

    def state(self) -> LiveState:
        """The newest state of the link in front."""
        several = self.several()
        return several.links[several.front].state

    def mark(self, name: str = "") -> None:
        """Note the present reading of the link in front, which stays there: somebody is about to turn something on it."""
        self._foremost.choose(self._foremost.front)
        self._front.mark(name)

    def name_mark(self, name: str) -> None:
        """Give its last mark a name."""
        self._front.name_mark(name)

    def clear(self) -> None:
        """Begin its eye anew."""
        self._front.clear()

    def acknowledge(self) -> None:
        """All its alarms have been seen."""
        self._front.acknowledge()

    def shelve(self, seconds: float) -> None:
        """Keep its foremost alarm quiet for so long."""
        self._front.shelve(seconds)

    def set_persistence(self, seconds: float | None) -> None:
        """How long traces stay, in every eye."""
        for watch in self._watches:
            watch.set_persistence(seconds)

    def report(self, path: Path) -> None:
        """A report on the link in front. Raises InputError."""
        self._front.report(path)

    def report_each(self, path: Path) -> None:
        """A report on every link, the link's name in the file's. Raises InputError."""
        for name, watch in zip(self._names, self._watches, strict=True):
            watch.report(named_file(path, name))

    def stop(self) -> None:
        """End all watches."""
        for watch in self._watches:
            watch.ask_to_stop()
        for watch in self._watches:
            watch.stop()

    @property
    def _front(self) -> Watch:
        return self._watches[self._foremost.front]


def _link_state(name: str, watch: Watch) -> LinkState:
    state = watch.state()
    failure = "" if watch.failure is None else str(watch.failure)
    return LinkState(name, replace(state, searching=failure) if failure else state, failure)
