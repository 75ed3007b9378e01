"""What a person can do while watching: the actions, their keys and words, for every view; no Qt here.

What is wanted often lies on keys that a gloved thumb finds without looking: the long bars and the corners of the keyboard.
Nothing that cannot be taken back lies on a single key.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Literal, Protocol

from monitor.state import LiveState, SeveralState


class Watched(Protocol):
    """The engine's side of a view. Every call but `report` returns at once and may come from any thread."""

    def state(self) -> LiveState:
        """The newest state."""
        ...

    def mark(self, name: str = "") -> None:
        """Note the present reading, before something is turned."""
        ...

    def name_mark(self, name: str) -> None:
        """Give the last mark a name."""
        ...

    def clear(self) -> None:
        """Begin the eye anew: what persists of older traces is dropped."""
        ...

    def acknowledge(self) -> None:
        """All alarms shown have been seen."""
        ...

    def shelve(self, seconds: float) -> None:
        """Keep the foremost alarm quiet for so long."""
        ...

    def set_persistence(self, seconds: float | None) -> None:
        """How long traces stay: 0 for the newest only, None for ever."""
        ...

    def report(self, path: Path) -> None:
        """Write a report on the watch so far; the one call that takes its time. Raises InputError."""
        ...

    def stop(self) -> None:
        """End the watch; may be called twice."""
        ...


class WatchedLinks(Watched, Protocol):
    """Several links, of which one is in front; what `Watched` says is said of that one."""

    def several(self) -> SeveralState:
        """The newest state of all."""
        ...

    def choose(self, number: int) -> None:
        """Keep one link in front, counted from 0."""
        ...

    def step(self, by: int) -> None:
        """Keep the link so many further in front, round the end."""
        ...

    def release(self) -> None:
        """The worst link to the front again, whichever it is from then on."""
        ...


ActionName = Literal[
    "mark",
    "name",
    "acknowledge",
    "shelve",
    "hold",
    "clear",
    "rail",
    "page",
    "back",
    "longer",
    "shorter",
    "newest",
    "further",
    "nearer",
    "save",
    "report",
    "larger",
    "smaller",
    "theme",
    "tone",
    "help",
    "close",
]
MenuName = Literal["Measure", "Alarm", "View", "Watch"]


@dataclass(frozen=True, slots=True)
class Action:
    """One thing to do.

    Attributes
    ----------
    keys
        The first is the one to show. A printable key is itself, in capitals, and counts with or without Shift; the others are
        Space, Enter, Backspace, Tab, Escape, Up, Down, Left, Right, PageUp, PageDown, F1 and Ctrl+ with a letter.
    words
        For the menu, short.
    what
        For the help: one phrase that says what comes of it.
    window_only
        Means nothing in a terminal.
    """

    name: ActionName
    keys: tuple[str, ...]
    words: str
    what: str
    menu: MenuName
    window_only: bool = False


ACTIONS: tuple[Action, ...] = (
    Action(
        "mark",
        ("Space",),
        "Mark now",
        "store the reading, to tell the change since",
        "Measure",
    ),
    Action("name", ("N",), "Name the mark…", "write down what was turned", "Measure"),
    Action(
        "hold",
        ("Escape", "H"),
        "Hold the picture",
        "stand still, and go on; nothing is lost",
        "Measure",
    ),
    Action("clear", ("Backspace",), "Clear the eye", "drop the older traces and begin anew", "Measure"),
    Action("acknowledge", ("Enter",), "Acknowledge alarms", "all alarms shown have been seen", "Alarm"),
    Action("shelve", ("Z",), "Shelve alarm for 10 minutes", "keep the foremost alarm quiet for 10 minutes", "Alarm"),
    Action("rail", ("Tab",), "Next rail", "both rails, I alone, Q alone", "View"),
    Action(
        "page",
        ("P", "PageDown"),
        "Next page",
        "causes, response, error rate, constellation, remedies",
        "View",
    ),
    Action("back", ("B", "PageUp"), "Page before", "and back again", "View"),
    Action("longer", ("Up",), "Traces stay longer", "older traces fade more slowly, at last never", "View"),
    Action("shorter", ("Down",), "Traces stay shorter", "older traces fade faster, at last at once", "View"),
    Action("newest", ("0",), "Newest traces only", "no persistence at all", "View"),
    Action("further", ("Left",), "Longer history", "look further back", "View", window_only=True),
    Action("nearer", ("Right",), "Shorter history", "look at the last minutes more closely", "View", window_only=True),
    Action("larger", ("+", "="), "Larger text", "for reading from further away", "View", window_only=True),
    Action("smaller", ("-",), "Smaller text", "more room for the eye", "View", window_only=True),
    Action("theme", ("L",), "Light or dark", "for daylight or for the night", "View", window_only=True),
    Action("save", ("S",), "Save picture", "a PNG file of what is shown", "Watch"),
    Action("report", ("R",), "Save report", "an HTML page with all that is known so far", "Watch"),
    Action("tone", ("T",), "Tone", "a tone that rises as the eye opens", "Watch"),
    Action("help", ("F1", "?"), "Keys", "show or hide this list", "Watch"),
    Action("close", ("Ctrl+Q",), "End the watch", "the journal gets its last line", "Watch"),
)
MENUS: tuple[MenuName, ...] = ("Measure", "Alarm", "View", "Watch")

LinkActionName = Literal["next link", "previous link", "worst link"]


@dataclass(frozen=True, slots=True)
class LinkAction:
    """One thing to do where there are several links; the parts are those of `Action`."""

    name: LinkActionName
    keys: tuple[str, ...]
    words: str
    what: str


LINK_ACTIONS: tuple[LinkAction, ...] = (
    LinkAction("next link", (".",), "Next link", "bring it to the front, and keep it there"),
    LinkAction("previous link", (",",), "Previous link", "bring it to the front, and keep it there"),
    LinkAction("worst link", ("W",), "Worst link in front", "whichever it is from now on"),
)

SHELVE_SECONDS = 600.0
PERSISTENCE_STEPS: tuple[float | None, ...] = (0.0, 0.5, 1.0, 2.0, 5.0, 10.0, 30.0, None)
DEFAULT_PERSISTENCE: float | None = 2.0
HISTORY_STEPS: tuple[float | None, ...] = (60.0, 600.0, 3600.0, 86400.0, None)
TEXT_STEPS = (1.0, 1.2, 1.45, 1.75, 2.1)


def free_name(folder: Path, suffix: str) -> Path:
    """A name of this second for a picture or report in the folder, that no file has yet."""
    path = folder / f"lidwatch-{datetime.now().astimezone():%Y%m%d-%H%M%S}{suffix}"
    number = 1
    while path.exists():
        number += 1
        path = path.with_name(f"{path.stem.rsplit('_', 1)[0]}_{number}{suffix}")
    return path


def action_for(key: str) -> Action | None:
    """The action on a key, or None; a letter counts in either case."""
    wanted = key.upper() if len(key) == 1 else key
    return next((action for action in ACTIONS if wanted in action.keys), None)


def link_action_for(key: str) -> LinkAction | None:
    """The action on a key where there are several links, or None."""
    wanted = key.upper() if len(key) == 1 else key
    return next((action for action in LINK_ACTIONS if wanted in action.keys), None)


def step_persistence(seconds: float | None, *, longer: bool) -> float | None:
    """The next longer or shorter persistence; at either end it stays. None is endless."""
    return _step(PERSISTENCE_STEPS, seconds, longer)


def step_history(seconds: float | None, *, longer: bool) -> float | None:
    """The next longer or shorter stretch of the history; at either end it stays. None is the whole watch."""
    return _step(HISTORY_STEPS, seconds, longer)


def step_text(zoom: float, *, larger: bool) -> float:
    """The next larger or smaller text; at either end it stays."""
    return _step(TEXT_STEPS, zoom, larger) or zoom


def _step(steps: Sequence[float | None], value: float | None, up: bool) -> float | None:
    order = [math.inf if step is None else step for step in steps]
    now = math.inf if value is None else value
    beyond = [step for step in order if (step > now if up else step < now)]
    if not beyond:
        return value
    step = beyond[0] if up else beyond[-1]
    return None if step == math.inf else step


def persistence_words(seconds: float | None) -> str:
    """How long traces stay, in words."""
    if seconds is None:
        return "traces stay"
    if seconds == 0:
        return "newest traces only"
    return f"traces fade in {seconds:g} s"


def next_rail(shown: int | None, rails: Sequence[str]) -> int | None:
    """From all rails (None) to the first alone, the second alone, and round again; None where there is but one."""
    if len(rails) < 2:
        return None
    if shown is None:
        return 0
    return shown + 1 if shown + 1 < len(rails) else None
