import contextlib
import fcntl
import io
import os
import pty
import select
import shutil
import signal
import struct
import subprocess
import sys
import termios
import time
from pathlib import Path

import pytest

from monitor.views.terminal import TerminalView, run_terminal
from monitor.views.terminal_colours import Look
from tests.monitor.views.glass import Glass
from tests.monitor.views.terminal_child import NotedCalls

ROOT = Path(__file__).parents[3]
ENTERED, LEFT = b"\x1b[?1049h", b"\x1b[?1049l"


class Session:
    """A process on a pseudo-terminal of its own, and all that it sent."""

    def __init__(self, arguments, columns=80, rows=24, **environ):
        self.master, self.slave = pty.openpty()
        self.sent = b""
        self.resize(columns, rows)
        self.found = termios.tcgetattr(self.slave)
        kept = {name: value for name, value in os.environ.items() if name not in ("NO_COLOR", "COLORTERM")}
        self.process = subprocess.Popen(
            arguments,
            stdin=self.slave,
            stdout=self.slave,
            stderr=self.slave,
            cwd=ROOT,
            env=kept | {"TERM": "xterm-256color", "LC_ALL": "C.UTF-8", "PYTHONPATH": str(ROOT)} | environ,
            start_new_session=True,
            preexec_fn=lambda: fcntl.ioctl(0, termios.TIOCSCTTY, 0),
        )

    def resize(self, columns, rows):
        self.size, self.resized_at = (columns, rows), len(self.sent)
        fcntl.ioctl(self.slave, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))

    def read_until(self, wanted, seconds=20.0):
        """Read on until the bytes are there beyond what was read before; the test fails if they never are."""
        start = len(self.sent)
        end = time.monotonic() + seconds
        while wanted not in self.sent[start:]:
            assert time.monotonic() < end, f"never sent {wanted!r}, only {self.sent[start:][-400:]!r}"
            self.read(0.05)

    def see(self, wanted, seconds=20.0):
        """Read on until the words are on the screen."""
        end = time.monotonic() + seconds
        while wanted not in (text := self.screen()):
            assert time.monotonic() < end, f"{wanted!r} is not on the screen:\n{text}"
            self.read(0.05)

    def screen(self):
        """What the terminal shows of all that was sent, but for a sequence that is not complete."""
        glass = Glass(*self.size)
        whole = self.sent[: max(self.sent.rfind(b"\x1b"), 0)]
        start = whole.find(b"\x1b[2J", self.resized_at)
        glass.feed(whole[start:] if start >= 0 else b"")
        return "\n".join(glass.lines())

    def read(self, seconds):
        if select.select([self.master], [], [], seconds)[0]:
            with contextlib.suppress(OSError):
                self.sent += os.read(self.master, 65536)

    def type(self, data):
        os.write(self.master, data)

    def finish(self, seconds=20.0):
        """The exit status, once all that was sent is read."""
        end = time.monotonic() + seconds
        while self.process.poll() is None and time.monotonic() < end:
            self.read(0.05)
        while select.select([self.master], [], [], 0)[0]:
            self.read(0)
        return self.process.wait(0.1)

    def close(self):
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait()
        for fd in (self.master, self.slave):
            with contextlib.suppress(OSError):
                os.close(fd)


@pytest.fixture
def session(tmp_path):
    opened = []

    def start(*more, **how):
        child = [sys.executable, "-m", "tests.monitor.views.terminal_child", str(tmp_path / "notes"), *more]
        opened.append(Session(child, **how))
        return opened[-1]

    yield start
    for one in opened:
        one.close()


def wait_for(condition, seconds=20.0):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end
        time.sleep(0.02)


def notes_in(folder):
    return (folder / "notes").read_text(encoding="utf-8").splitlines()


def press_close(one):
    one.type(b"\x11")


def press_interrupt(one):
    one.type(b"\x03")


def send_terminate(one):
    one.process.send_signal(signal.SIGTERM)


def wait_only(one):
    pass


@pytest.mark.parametrize(
    ("end", "status", "more"),
    [
        (press_close, 0, ()),
        (press_interrupt, 130, ()),
        (send_terminate, 143, ()),
        (wait_only, 1, ("2",)),
    ],
    ids=["closed", "Ctrl-C", "SIGTERM", "exception"],
)
def test_the_terminal_is_left_as_it_was_found_however_the_view_ends(session, tmp_path, end, status, more):
    one = session(*more)
    one.see("Ctrl+Q")
    if not more:
        assert termios.tcgetattr(one.slave) != one.found
    end(one)
    assert one.finish() == status
    assert termios.tcgetattr(one.slave) == one.found
    after = one.sent[one.sent.rindex(LEFT) :]
    before = one.sent[: one.sent.rindex(LEFT)]
    assert ENTERED not in after
    # cursor and automatic wrap are on again, pasting is as before
    for taken, given in ((b"\x1b[?25l", b"\x1b[?25h"), (b"\x1b[?7l", b"\x1b[?7h"), (b"\x1b[?2004h", b"\x1b[?2004l")):
        assert before.rindex(given) > before.rindex(taken)
    assert notes_in(tmp_path)[-1] == "stop"


def test_a_hang_up_ends_the_view_and_the_watch(session, tmp_path):
    one = session()
    one.see("Ctrl+Q")
    os.close(one.slave)
    os.close(one.master)
    assert one.process.wait(20) == 129
    assert notes_in(tmp_path) == ["stop"]


@pytest.mark.skipif(shutil.which("bash") is None, reason="needs a shell with job control")
def test_the_view_stops_and_goes_on_with_the_terminal_given_back_meanwhile(tmp_path):
    notes = tmp_path / "notes"
    child = f"{sys.executable} -m tests.monitor.views.terminal_child {notes}"
    one = Session(["bash", "--norc", "-mc", f"{child}; stty -a; echo stopped $?; fg; echo ended $?"])
    try:
        one.see("Ctrl+Q")
        one.type(b"\x1a")
        one.read_until(b"stopped")
        text = one.sent[one.sent.rindex(LEFT) :]
        assert b" icanon" in text
        assert b" ixon" in text
        one.resized_at = one.sent.index(b"stopped")
        one.see("Ctrl+Q")
        assert ENTERED in one.sent[one.resized_at :]
        one.type(b" ")
        one.see("marked")
        one.type(b"\x11")
        one.read_until(b"ended 0")
        assert termios.tcgetattr(one.slave) == one.found
        assert notes.read_text().splitlines() == ["mark", "stop"]
    finally:
        one.close()


def test_every_key_does_what_the_list_of_keys_says(session, tmp_path):
    one = session()
    one.see("Ctrl+Q")
    for key, answer in (
        (b" ", "marked"),
        (b"n", "Name of mark 1"),
        (b"\x1b[200~gain\r\nup\x1b[201~ \xc3\xa9\x7f!\r", "called gain up !"),
        (b"\r", "alarms acknowledged"),
        (b"Z", "quiet for 10 minutes"),
        (b"\x7f", "begins anew"),
        (b"\x1b[A", "traces fade in 5 s"),
        (b"\x1bOB", "traces fade in 2 s"),
        (b"0", "newest traces only"),
        (b"?", "store the reading"),
        (b"\x1bOP", "I rail"),
        (b"h", "held at"),
        (b"\x1b", "Escape hold"),
        (b"s", "picture saved"),
        (b"r", "report saved"),
        (b"t", "only in the window"),
    ):
        one.type(key)
        one.see(answer)
    one.type(b"\t")
    one.read(0.5)
    press_close(one)
    assert one.finish() == 0
    assert notes_in(tmp_path) == [
        "mark",
        "name gain up !",
        "acknowledge",
        "shelve 600",
        "clear",
        "persistence 5.0",
        "persistence 2.0",
        "persistence 0.0",
        "report",
        "stop",
    ]
    assert len(list(tmp_path.glob("lidwatch-*.html"))) == 1
    picture = next(tmp_path.glob("lidwatch-*.png"))
    assert picture.read_bytes().startswith(b"\x89PNG")


def test_pasted_text_presses_no_keys(session, tmp_path):
    one = session()
    one.see("Ctrl+Q")
    one.type(b"\x1b[200~ z\x7f\r\x1b[201~")
    one.type(b"0")
    one.see("newest")
    press_close(one)
    assert one.finish() == 0
    assert notes_in(tmp_path) == ["persistence 0.0", "stop"]


def test_a_new_size_is_drawn_at_once_and_one_too_small_says_so(session):
    one = session(columns=100, rows=30)
    one.see("Ctrl+Q")
    one.resize(40, 12)
    one.see("40 × 12")
    one.resize(120, 40)
    one.see("Ctrl+Q end")
    press_close(one)
    assert one.finish() == 0


def test_samples_on_standard_input_leave_the_keys_to_the_terminal(tmp_path):
    notes = tmp_path / "notes"
    child = f"{sys.executable} -m tests.monitor.views.terminal_child {notes}"
    one = Session(["sh", "-c", f"sleep 60 | {child}"])
    try:
        one.see("Ctrl+Q")
        one.type(b"\x11")
        one.read_until(LEFT)
        wait_for(lambda: notes.exists() and notes.read_text() == "stop\n")
        assert termios.tcgetattr(one.slave) == one.found
    finally:
        with contextlib.suppress(ProcessLookupError):
            os.killpg(one.process.pid, signal.SIGTERM)
        one.close()


def test_a_terminal_that_takes_nothing_does_not_stop_the_keys(session, tmp_path):
    one = session(columns=300, rows=90)
    wait_for(lambda: termios.tcgetattr(one.slave) != one.found)
    time.sleep(0.5)  # the picture does not fit into the terminal's own memory, and nobody reads it
    one.type(b" ")
    wait_for(lambda: (tmp_path / "notes").exists() and notes_in(tmp_path) == ["mark"])
    press_close(one)
    assert one.finish() == 0


def test_an_unchanging_picture_costs_few_bytes(session):
    one = session()
    one.see("Ctrl+Q")
    one.read(0.3)
    start = len(one.sent)
    end = time.monotonic() + 1.0
    while time.monotonic() < end:
        one.read(0.1)
    # the clock in the corner goes on, ten times a second at most
    assert len(one.sent) - start < 10 * 60
    press_close(one)
    one.finish()


class Clock:
    def __init__(self):
        self.time = 0.0

    def __call__(self):
        self.time += 0.3
        return self.time


def test_without_a_terminal_a_line_of_figures_comes_a_second_until_the_stream_ends():
    notes = []
    watched = NotedCalls(notes.append)
    out = io.StringIO()
    write = out.write

    def write_and_end(text):
        watched.ended = watched.looks >= 3
        return write(text)

    out.write = write_and_end
    assert run_terminal(watched, stdout=out, now=Clock(), environ={"LC_ALL": "C.UTF-8", "TERM": "xterm"}) == 0
    lines = out.getvalue().splitlines()
    assert len(lines) == 4
    assert all("opening" in line and "SNR 24.6 dB" in line and "alarm, high: clipping" in line for line in lines)
    assert "\x1b" not in out.getvalue()
    assert notes == ["stop"]


def test_lines_end_when_nobody_reads_them():
    notes = []

    class Closed(io.StringIO):
        def write(self, text):
            raise BrokenPipeError

    assert run_terminal(NotedCalls(notes.append), stdout=Closed(), environ={}) == 0
    assert notes == ["stop"]


def test_a_dumb_terminal_gets_lines(session):
    one = session(TERM="dumb")
    one.read_until(b"SNR 24.6 dB")
    press_interrupt(one)
    assert one.finish() == 130
    assert b"\x1b" not in one.sent


class TestView:
    @pytest.fixture
    def told(self):
        return []

    @pytest.fixture
    def view(self, told, tmp_path):
        self.clock = 0.0
        return TerminalView(NotedCalls(told.append), Look(), lambda: self.clock, tmp_path)

    def text(self, view):
        return "\n".join(view.picture(100, 30).lines())

    def test_a_held_picture_stands_still_but_for_its_alarms(self, view):
        view.picture(80, 24)
        view.press("Escape")
        held = view.picture(80, 24).lines()
        for _ in range(30):
            later = view.picture(80, 24).lines()
        assert later == held
        assert "held" in later[-1]
        assert "go on" in later[-1]

    def test_no_name_is_asked_for_before_there_is_a_mark(self, view):
        view.press("n")
        assert "no mark to name yet" in self.text(view)

    def test_escape_leaves_the_name_as_it_was(self, view, told):
        for key in ("Space", "N", "x", "Escape"):
            view.press(key)
        assert told == ["mark"]
        assert "Name of mark" not in self.text(view)

    def test_a_name_is_cut_at_eighty_characters(self, view, told):
        for key in ("Space", "N", *"x" * 200, "Enter"):
            view.press(key)
        assert told == ["mark", "name " + "x" * 80]

    def test_remarks_go_after_some_seconds(self, view):
        view.press("Backspace")
        assert "begins anew" in self.text(view)
        self.clock = 60.0
        assert "begins anew" not in self.text(view)

    def test_keys_of_the_window_alone_do_nothing(self, view, told):
        before = view.picture(80, 24).lines()[2:]
        for key in ("+", "-", "l", "x", "Left", "Ctrl+K"):
            view.press(key)
        assert view.picture(80, 24).lines()[2:] == before
        assert not told

    def test_tab_shows_the_rails_one_by_one(self, view):
        def titles():
            return [name for name in ("I rail", "Q rail") if name in self.text(view)]

        found = [titles()]
        for _ in range(3):
            view.press("Tab")
            found.append(titles())
        assert found == [["I rail", "Q rail"], ["I rail"], ["Q rail"], ["I rail", "Q rail"]]

    def test_a_picture_that_cannot_be_written_is_a_remark(self, told, tmp_path):
        view = TerminalView(NotedCalls(told.append), Look(), lambda: 0.0, tmp_path / "missing")
        view.press("s")
        assert "picture not saved" in self.text(view)
