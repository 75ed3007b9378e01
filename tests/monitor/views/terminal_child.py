"""Runs the terminal view on this process's terminal, against a watched side that notes in a file what it was told."""

import sys
from pathlib import Path

from monitor.snapshot import Snapshot
from monitor.state import AlarmLine, LiveState, Mark
from monitor.views.terminal import run_terminal
from tests.monitor.views.synthetic_eyes import full_reading, make_eye


class NotedCalls:
    """A watched side; ``fails_after`` looks it raises."""

    def __init__(self, note, fails_after=None):
        self.note = note
        self.looks = 0
        self.fails_after = fails_after
        self.marks = ()
        self.ended = False
        image, eyes = make_eye(2, ("I", "Q"), symbols=60)
        self.snapshot = Snapshot(image, full_reading(image, eyes), "tcp://skerry-7.harbour.example:5555", "qpsk")

    def state(self):
        self.looks += 1
        if self.fails_after is not None and self.looks > self.fails_after:
            raise RuntimeError("the watched side broke")
        return LiveState(
            self.snapshot,
            seconds=self.looks / 10,
            locked=True,
            marks=self.marks,
            alarms=(AlarmLine("clipping", "high", "unacknowledged", 0.0, "now 2 %"),),
            rails=("I", "Q"),
            ended=self.ended,
        )

    def mark(self, name=""):
        self.marks = (*self.marks, Mark(1.0, name, 60.0, 59.0, 61.0))
        self.note("mark")

    def name_mark(self, name):
        self.note(f"name {name}")

    def clear(self):
        self.note("clear")

    def acknowledge(self):
        self.note("acknowledge")

    def shelve(self, seconds):
        self.note(f"shelve {seconds:g}")

    def set_persistence(self, seconds):
        self.note(f"persistence {seconds}")

    def report(self, path):
        path.write_text("<!DOCTYPE html>")
        self.note("report")

    def stop(self):
        self.note("stop")


def main():
    notes = Path(sys.argv[1])

    def note(text):
        with notes.open("a", encoding="utf-8") as file:
            file.write(text + "\n")

    fails_after = int(sys.argv[2]) if len(sys.argv) > 2 else None
    return run_terminal(NotedCalls(note, fails_after), pictures=notes.parent)


if __name__ == "__main__":
    sys.exit(main())
