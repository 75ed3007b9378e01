"""What a live view is told: one immutable state, made anew for each look."""

from dataclasses import dataclass
from typing import Literal

from dsp.reading import Reading
from monitor.snapshot import Snapshot

Verdict = Literal["better", "worse", "no significant change"]


@dataclass(frozen=True, slots=True)
class HistoryPoint:
    """The opening over one stretch of the stream, with its least and greatest value; None while there was no lock."""

    seconds: float
    opening_pct: float | None
    least_pct: float | None
    most_pct: float | None


@dataclass(frozen=True, slots=True)
class Mark:
    """What the user noted: when, under which name, and the opening then with its 95 % interval."""

    seconds: float
    name: str
    opening_pct: float | None
    low_pct: float | None
    high_pct: float | None


@dataclass(frozen=True, slots=True)
class Change:
    """The opening now against the last mark's, with a 95 % interval of the difference, in points."""

    points: float
    low: float
    high: float
    verdict: Verdict


@dataclass(frozen=True, slots=True)
class AlarmLine:
    """One alarm that is not normal, as a view shows it."""

    name: str
    severity: str
    state: str
    since_s: float
    text: str


@dataclass(frozen=True, slots=True)
class LiveState:
    """The state of one watched stream.

    ``snapshot`` is what the picture shows. ``history`` spans the whole stream, oldest first. ``gaps_s`` and ``locks`` (seconds, gained)
    lie on the history's time axis. ``searching`` says in words what is tried while there is no lock; ``behind_s`` is how old the newest
    figure's samples are against the newest that arrived.
    """

    snapshot: Snapshot
    seconds: float = 0.0
    locked: bool = False
    searching: str = ""
    history: tuple[HistoryPoint, ...] = ()
    marks: tuple[Mark, ...] = ()
    gaps_s: tuple[float, ...] = ()
    locks: tuple[tuple[float, bool], ...] = ()
    alarms: tuple[AlarmLine, ...] = ()
    change: Change | None = None
    best: Reading | None = None
    best_at_s: float | None = None
    samples_lost: int = 0
    behind_s: float = 0.0
    notices: tuple[str, ...] = ()
    journal_text: str = ""
    ended: bool = False
    rails: tuple[str, ...] = ("",)


@dataclass(frozen=True, slots=True)
class LinkState:
    """One of several links: its name, its state, and what ended it if that was an error."""

    name: str
    state: LiveState
    failure: str = ""


@dataclass(frozen=True, slots=True)
class SeveralState:
    """Several links in the user's order; ``front`` is the one shown large, ``pinned`` if the user chose it."""

    links: tuple[LinkState, ...]
    front: int = 0
    pinned: bool = False
