"""Several watched links for the tests of the tiles: what they show is given, what they are told is noted."""

from dataclasses import replace

from monitor.state import LinkState, SeveralState
from tests.monitor.views.live_states import make_states

LINKS = (
    ("Skerry west", "busy", ""),
    ("Skerry east", "calm", ""),
    ("Quay relay with a rather long name", "no lock", ""),
    ("Lighthouse", "waiting", ""),
    ("Old mast", "ended", "tcp://old-mast.example:5555: the keys do not fit"),
)


class RecordingLinks:
    """A `monitor.views.control.WatchedLinks`; ``front`` is what the test says."""

    def __init__(self, links=LINKS, front=0):
        states = make_states()
        self.links = [
            LinkState(name, replace(states[kind], searching=failure) if failure else states[kind], failure)
            for name, kind, failure in links
        ]
        self.front, self.pinned = front, False
        self.told = []

    def several(self):
        return SeveralState(tuple(self.links), self.front, self.pinned)

    def state(self):
        return self.links[self.front].state

    def choose(self, number):
        self.front, self.pinned = number % len(self.links), True
        self.told.append(("choose", number))

    def step(self, by):
        self.front, self.pinned = (self.front + by) % len(self.links), True
        self.told.append(("step", by))

    def release(self):
        self.pinned = False
        self.told.append(("release",))

    def __getattr__(self, name):
        return lambda *more: self.told.append((name, *more))
