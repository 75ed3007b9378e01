"""What is said on standard error."""

import io
import sys
import time

from monitor.terminal import ProgressBar, SlowStartNotice, on_terminal, say


class Screen(io.StringIO):
    """A terminal that keeps what it is told."""

    def isatty(self):
        return True


def screen_for(monkeypatch):
    """Called from within a test: the framework replaces the stream between set-up and test."""
    made = Screen()
    monkeypatch.setattr(sys, "stderr", made)
    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.setenv("COLUMNS", "120")
    return made


def test_one_line_is_said_whatever_is_in_it(capsys):
    say("two\nlines \x1b[31m and a \udcff byte")
    captured = capsys.readouterr()
    assert captured.err == "two lines \\x1b[31m and a \\udcff byte\n"
    assert captured.out == ""


def test_a_terminal_without_the_signs_gets_escapes(monkeypatch):
    bytes_written = io.BytesIO()
    monkeypatch.setattr(sys, "stderr", io.TextIOWrapper(bytes_written, "ascii", write_through=True))
    say("10⁻⁶")
    assert bytes_written.getvalue() == b"10\\u207b\\u2076\n"


def test_nothing_is_said_where_nobody_is(monkeypatch, capsys):
    monkeypatch.setattr(sys, "stderr", None)
    say("lost")
    assert not on_terminal()
    assert capsys.readouterr().out == ""


def test_the_bar_shows_share_rate_and_time_left(monkeypatch):
    screen = screen_for(monkeypatch)
    with ProgressBar(4_000_000) as bar:
        bar.advance(1_000_000)
        time.sleep(0.02)
        bar.advance(2_000_000)
        time.sleep(0.15)  # the bar draws itself ten times a second
    shown = screen.getvalue()
    assert "looking for the link" in shown
    assert "measuring" in shown
    assert "50 %" in shown
    assert "Msample/s" in shown
    assert "0:00:0" in shown
    assert "left" in shown


def test_a_stream_of_unknown_length_shows_samples_and_no_time_left(monkeypatch):
    screen = screen_for(monkeypatch)
    with ProgressBar(None) as bar:
        bar.advance(123_456)
        time.sleep(0.15)
    shown = screen.getvalue()
    assert "123456 samples" in shown
    assert "left" not in shown


def test_off_a_terminal_there_is_no_bar(capsys):
    with ProgressBar(1000) as bar:
        bar.advance(500)
    assert capsys.readouterr() == ("", "")


def test_a_slow_start_is_explained_on_a_terminal_only(monkeypatch):
    screen = screen_for(monkeypatch)
    with SlowStartNotice(after_s=0.01):
        time.sleep(0.1)
    assert "the first run compiles its loops" in screen.getvalue()
    assert screen.getvalue().count("\n") == 1


def test_a_fast_start_says_nothing(monkeypatch):
    screen = screen_for(monkeypatch)
    with SlowStartNotice(after_s=10.0):
        pass
    assert screen.getvalue() == ""


def test_off_a_terminal_a_slow_start_says_nothing(capsys):
    with SlowStartNotice(after_s=0.01):
        time.sleep(0.05)
    assert capsys.readouterr().err == ""
