"""The program that is run for each alarm: real programs, run by the interpreter of the tests."""

import json
import os
import queue
import shlex
import sys
import threading
import time
from datetime import UTC, datetime

import pytest

from monitor.alarm_command import AlarmCommand
from monitor.errors import InputError
from monitor.journal import Journal

NOW = datetime(2026, 12, 1, 12, tzinfo=UTC)
RAISED = {"kind": "alarm", "state": "raised"}


def program(code, *arguments):
    return shlex.join([sys.executable, "-S", "-c", code, *map(str, arguments)])


def waited_for(what, timeout_s=10.0):
    deadline = time.monotonic() + timeout_s
    while time.monotonic() < deadline:
        if what():
            return True
        time.sleep(0.01)
    return False


@pytest.fixture
def failures():
    return queue.Queue()


def test_the_program_gets_the_journals_line_on_its_standard_input(tmp_path, failures):
    code = "import sys; open(sys.argv[1], 'ab').write(sys.stdin.buffer.read())"
    command = AlarmCommand(program(code, tmp_path / "it's here"), failed=failures.put, most=1)
    with Journal(tmp_path / "watch.jsonl", now=lambda: NOW, sinks=[command]) as journal:
        journal.write("reading", 0, 0.0, {})
        for state in ("raised", "acknowledged", "cleared", "shelved"):
            journal.write("alarm", 480, 0.01, {"state": state, "rule": "opening_pct < 40", "note": "skjær"})
    lines = [json.loads(line) for line in (tmp_path / "it's here").read_bytes().splitlines()]
    assert [line["state"] for line in lines] == ["raised", "cleared"]
    assert lines[0] == json.loads((tmp_path / "watch.jsonl").read_text().splitlines()[1])
    assert failures.empty()


def test_what_the_program_writes_reaches_no_screen(capfd, failures):
    command = AlarmCommand(program("import sys; print('out'); print('err', file=sys.stderr)"), failed=failures.put)
    command.take(RAISED, b"{}")
    command.close()
    assert capfd.readouterr() == ("", "")
    assert failures.empty()


def test_a_program_that_reads_nothing_and_one_that_dies_are_no_error_of_ours(failures):
    command = AlarmCommand(program("pass"), failed=failures.put)
    command.take(RAISED, b"x" * 1_000_000)
    command.close()
    assert failures.empty()


@pytest.mark.parametrize(
    ("code", "says"),
    [
        ("raise SystemExit(3)", "ended with status 3"),
        ("import os; os.kill(os.getpid(), 9)", "ended by SIGKILL"),
    ],
)
def test_a_program_that_fails_is_told_of(code, says, failures):
    command = AlarmCommand(program(code), failed=failures.put)
    command.take(RAISED, b"{}")
    command.close()
    text = failures.get_nowait()
    assert text.startswith("on-alarm program ")
    assert text.endswith(says)


def test_a_program_deleted_meanwhile_is_told_of(tmp_path, failures):
    script = tmp_path / "buzz"
    script.write_text("#!/bin/sh\n")
    script.chmod(0o755)
    command = AlarmCommand(str(script), failed=failures.put)
    script.unlink()
    command.take(RAISED, b"{}")
    command.close()
    assert failures.get_nowait().endswith("not started: No such file or directory")


@pytest.mark.skipif(not hasattr(os, "killpg"), reason="no process groups")
def test_a_program_out_of_time_is_killed_with_all_it_started(tmp_path, failures):
    code = (
        "import os, subprocess, sys, time\n"
        "child = subprocess.Popen([sys.executable, '-S', '-c', 'import time; time.sleep(60)'])\n"
        "open(sys.argv[1] + '~', 'w').write(f'{child.pid}')\n"
        "os.rename(sys.argv[1] + '~', sys.argv[1])\n"
        "time.sleep(60)\n"
    )
    command = AlarmCommand(program(code, tmp_path / "pid"), failed=failures.put, timeout_s=1.0)
    command.take(RAISED, b"{}")
    assert failures.get(timeout=10).endswith("killed after 1 s")
    child = int((tmp_path / "pid").read_text())
    assert waited_for(lambda: not alive(child))
    command.close()


def alive(pid):
    try:
        with open(f"/proc/{pid}/stat") as file:
            return file.read().rpartition(")")[2].split()[0] != "Z"
    except FileNotFoundError:
        return False


def test_the_caller_never_waits_and_only_so_many_run_at_once(tmp_path, failures):
    code = (
        "import os, sys, time\n"
        "name = os.path.join(sys.argv[1], str(os.getpid()))\n"
        "open(name, 'w').close()\n"
        "while not os.path.exists(sys.argv[2]): time.sleep(0.01)\n"
    )
    running, go = tmp_path / "running", tmp_path / "go"
    running.mkdir()
    command = AlarmCommand(program(code, running, go), failed=failures.put, most=2)
    started = time.monotonic()
    for _ in range(5):
        command.take(RAISED, b"{}")
    assert time.monotonic() - started < 1.0
    assert waited_for(lambda: len(list(running.iterdir())) == 2)
    time.sleep(0.1)
    assert len(list(running.iterdir())) == 2
    go.touch()
    command.close()
    assert len(list(running.iterdir())) == 5
    assert failures.empty()


def test_what_comes_too_fast_is_told_of_and_the_end_does_not_wait_for_ever(failures):
    command = AlarmCommand(program("import time; time.sleep(60)"), failed=failures.put, most=1)
    for _ in range(110):
        command.take(RAISED, b"{}")
    assert "100 alarms wait for it already" in failures.get_nowait()
    started = time.monotonic()
    command.close(grace_s=0.2)
    assert time.monotonic() - started < 5.0
    command.take(RAISED, b"{}")
    command.close()
    told = list(failures.queue)
    assert sum("not run for" in text for text in told) == 1
    assert any("ended by SIGKILL" in text for text in told)
    assert not [thread for thread in threading.enumerate() if thread.name == "on-alarm"]


@pytest.mark.parametrize(
    ("command", "says"),
    [
        ("", "is empty"),
        ("  ", "is empty"),
        ("echo 'skerry", "No closing quotation; check the quotes"),
        ("nosuchprogram-at-all -x", "there is no program 'nosuchprogram-at-all'"),
        ("echo \0", "there is no program"),
    ],
)
def test_a_command_that_cannot_be_run_is_refused_at_once(command, says, failures):
    with pytest.raises(InputError, match=says):
        AlarmCommand(command, failed=failures.put)


def test_a_file_that_may_not_be_run_is_no_program(tmp_path, failures):
    (tmp_path / "buzz").write_text("#!/bin/sh\n")
    with pytest.raises(InputError, match=r"there is no program .*check its path and that it may be run"):
        AlarmCommand(str(tmp_path / "buzz"), failed=failures.put)


def test_no_shell_reads_the_command(tmp_path, failures):
    code = "import sys; open(sys.argv[1], 'w').write(sys.argv[2])"
    command = AlarmCommand(program(code, tmp_path / "seen", "$HOME; `id` > x"), failed=failures.put)
    command.take(RAISED, b"{}")
    command.close()
    assert (tmp_path / "seen").read_text() == "$HOME; `id` > x"
