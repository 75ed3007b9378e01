"""The live state in words; no Qt here."""

from dsp.reading import Reading
from monitor.state import AlarmLine, LiveState
from monitor.views.wording import Figure, figure_groups, plain, signed

# an alarm in one of these states asks for nothing
_QUIET = ("acknowledged", "shelved")


def clock(seconds: float) -> str:
    """A place in the stream: ``3:12``, ``1:02:03`` or ``2 d 4:05:06``."""
    whole = int(seconds)
    minutes, rest = divmod(whole, 60)
    hours, minutes = divmod(minutes, 60)
    days, hours = divmod(hours, 24)
    if days:
        return f"{days} d {hours}:{minutes:02d}:{rest:02d}"
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def ago(seconds: float) -> str:
    """How long ago: ``12 s ago``, ``3 min ago``, ``2 h 05 min ago``."""
    if seconds < 100:
        return f"{max(int(seconds), 0)} s ago"
    minutes = int(seconds // 60)
    return f"{minutes} min ago" if minutes < 60 else f"{minutes // 60} h {minutes % 60:02d} min ago"


def span_words(seconds: float | None) -> str:
    """What the strip of the history covers."""
    if seconds is None:
        return "the whole watch"
    if seconds < 3600:
        return "the last minute" if seconds == 60 else f"the last {seconds / 60:g} minutes"
    return "the last hour" if seconds == 3600 else f"the last {seconds / 3600:g} hours"


def mark_words(name: str, number: int) -> str:
    """What a mark is called: its name, or its number where it has none."""
    return f"“{name}”" if name else f"mark {number}"


def change_lines(state: LiveState) -> tuple[str, str, str]:
    """The change since the last mark: the word, the points, and against what with which interval; may be empty."""
    if not state.marks:
        return "", "", "Mark the reading before you turn something: Space"
    mark, change = state.marks[-1], state.change
    since = f"since {mark_words(mark.name, len(state.marks))}, {ago(state.seconds - mark.seconds)}"
    if change is None:
        why = "measuring" if state.locked else "no lock"
        if mark.opening_pct is None:
            why = "no opening was known then"
        return "", "", f"{since}: {why}"
    interval = f"{signed(change.low, 1)} to {signed(change.high, 1)}"
    return change.verdict, f"{signed(change.points, 1)} points", f"{since} · 95 %: {interval}"


def best_words(state: LiveState) -> str:
    """The best reading so far, as a target; empty before there is one."""
    best = state.best
    if best is None or best.opening_pct is None:
        return ""
    at = f" at {clock(state.best_at_s)}" if state.best_at_s is not None else ""
    return f"Best so far {plain(best.opening_pct, 1)} %{at}"


def no_eye_lines(state: LiveState) -> tuple[str, str]:
    """In the eye's place: a heading of a few words and a sentence."""
    losses = [at for at, gained in state.locks if not gained]
    if state.ended:
        return "The stream has ended", state.searching
    if state.locked:
        return "Locked", "Locked; the first reading is on its way."
    heading = f"Lock lost at {clock(losses[-1])}" if losses else "Searching"
    return heading, state.searching or "Waiting for samples."


def calls(alarm: AlarmLine) -> bool:
    """Whether the alarm still asks to be seen."""
    return alarm.state not in _QUIET


_STATES = {
    "unacknowledged": "raised",
    "returned": "not acknowledged, raised",
    "latched": "not acknowledged, raised",
    "acknowledged": "acknowledged, raised",
    "shelved": "shelved, raised",
}


def alarm_words(alarm: AlarmLine) -> str:
    """What is wrong, whether somebody has seen it, and when it began."""
    state = _STATES.get(alarm.state, alarm.state)
    over = "over, " if alarm.state in ("returned", "latched") else ""
    return f"{alarm.name}  ·  {over}{state} at {clock(alarm.since_s)}"


_ORDER = {"high": 0, "medium": 1, "low": 2}


def by_urgency(alarms: tuple[AlarmLine, ...]) -> list[AlarmLine]:
    """Those that call first, then the severer, then the newer."""
    return sorted(alarms, key=lambda a: (not calls(a), _ORDER.get(a.severity, 3), -a.since_s))


def health_words(state: LiveState) -> str:
    """Length, loss, delay, coverage and symbols of what is shown, in one line: what matters most comes first."""
    snapshot = state.snapshot
    parts = [clock(state.seconds)]
    if state.samples_lost:
        parts.append(f"{plain(state.samples_lost, 0)} samples lost")
    if state.behind_s >= 0.3:
        parts.append(f"{plain(state.behind_s, 1)} s behind")
    if snapshot.coverage_pct is not None and snapshot.image is not None and snapshot.coverage_pct < 99.5:
        parts.append(f"{plain(snapshot.coverage_pct, 0)} % of traces drawn")
    if snapshot.reading is not None:
        parts.append(f"{plain(snapshot.reading.symbols, 0)} symbols")
    return "  ·  ".join(parts)


def key_figures(reading: Reading) -> tuple[Figure, ...]:
    """The figures that a hand at work looks for, the most telling first; those that are known."""
    known = {figure.label: figure for group in figure_groups(reading) for figure in group.figures}
    return tuple(known[label] for label in _KEY_FIGURES if label in known)


_KEY_FIGURES = (
    "SNR",
    "Noise margin",
    "Width",
    "Bit error rate",
    "MER",
    "EVM",
    "Carrier",
    "Clock offset",
    "Clock jitter",
    "Phase jitter",
    "Best instant",
    "Opening at target rate",
)
