"""The errors that end a run, each with the exit status it leaves."""

from typing import ClassVar


def printable(text: str) -> str:
    """Return ``text`` on one line, with control characters and undecodable bytes of file names written as escapes."""
    line = " ".join(text.split())
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in line)


class MonitorError(Exception):
    """What ends a run; its text is one line: what was wrong, where, and what to do."""

    exit_status: ClassVar[int] = 2

    def __init__(self, text: str) -> None:
        super().__init__(printable(text))


class InputError(MonitorError):
    """The input or the arguments are unusable."""

    exit_status = 2


class NothingToMeasure(MonitorError):
    """The input was read, and there was no lock or there were too few symbols."""

    exit_status = 3
