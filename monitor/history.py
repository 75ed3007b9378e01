"""What a watch remembers of a stream without end, in a fixed amount of memory: the newest in full, the older the coarser."""

from monitor.state import HistoryPoint

NEWEST = 1024  # points in full: some minutes
OLDER = 640  # points of each coarser tier
JOINED = 4  # points of a tier that make one of the next
TIERS = 8
MOST_EVENTS = 512


class History:
    """The opening over the whole stream: points as they were given at first, then in tiers each of which is coarser by `JOINED`."""

    def __init__(self) -> None:
        self._tiers: list[list[HistoryPoint]] = [[]]

    def add(self, seconds: float, opening_pct: float | None) -> None:
        """The newest reading; None: not known."""
        self._tiers[0].append(HistoryPoint(seconds, opening_pct, opening_pct, opening_pct))
        tier, most = 0, NEWEST
        while len(self._tiers[tier]) >= most + JOINED:
            full = self._tiers[tier]
            if tier + 1 == TIERS:
                # the last is for all that was before
                self._tiers[tier] = [join(full[at : at + JOINED]) for at in range(0, len(full), JOINED)]
                return
            if tier + 1 == len(self._tiers):
                self._tiers.append([])
            self._tiers[tier + 1].append(join(full[:JOINED]))
            del full[:JOINED]
            tier, most = tier + 1, OLDER

    def points(self) -> tuple[HistoryPoint, ...]:
        """All of them, oldest first."""
        return tuple(point for tier in reversed(self._tiers) for point in tier)


def join(points: list[HistoryPoint]) -> HistoryPoint:
    """One point for several, at the last one's time: mean, least and greatest of those that are known."""
    known = [p for p in points if p.opening_pct is not None]
    at = points[-1].seconds
    if not known:
        return HistoryPoint(at, None, None, None)
    return HistoryPoint(
        at,
        sum(p.opening_pct for p in known if p.opening_pct is not None) / len(known),
        min(p.least_pct for p in known if p.least_pct is not None),
        max(p.most_pct for p in known if p.most_pct is not None),
    )


class Gaps:
    """Where samples were lost: of the older ones those that lie closest to each other become one."""

    def __init__(self) -> None:
        self._at: list[float] = []

    def add(self, seconds: float) -> None:
        """Another."""
        self._at.append(seconds)
        if len(self._at) > MOST_EVENTS:
            half = self._at[: MOST_EVENTS // 2]
            del self._at[min(range(1, len(half)), key=lambda i: half[i] - half[i - 1])]

    def all(self) -> tuple[float, ...]:
        """Seconds of the stream, oldest first."""
        return tuple(self._at)


class Locks:
    """When lock was gained and lost: of the older ones the losses with the shortest lock between them become one."""

    def __init__(self) -> None:
        self._events: list[tuple[float, bool]] = []

    def add(self, seconds: float, gained: bool) -> None:
        """Another."""
        self._events.append((seconds, gained))
        if len(self._events) > MOST_EVENTS:
            half = self._events[: MOST_EVENTS // 2]
            between = [i for i in range(1, len(half) - 1) if half[i][1]]
            shortest = min(between, key=lambda i: half[i + 1][0] - half[i][0])
            del self._events[shortest : shortest + 2]

    def all(self) -> tuple[tuple[float, bool], ...]:
        """Seconds of the stream and whether it was gained, oldest first."""
        return tuple(self._events)
