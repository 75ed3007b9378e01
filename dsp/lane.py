"""Where work is done that need not be done at once."""

from collections.abc import Callable
from typing import Protocol


class Lane(Protocol):
    """Does work in order: at once, or in another thread."""

    def do(self, work: Callable[[], None]) -> None:
        """Do ``work`` after everything given before."""

    def wait(self) -> None:
        """Return when everything given is done; raise what it raised."""


class AtOnce:
    """A lane that works in the caller's thread."""

    def do(self, work: Callable[[], None]) -> None:
        """Do it now."""
        work()

    def wait(self) -> None:
        """Nothing is ever left to do."""
