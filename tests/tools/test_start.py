import ast
import importlib.util
import os
import socket
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

START = Path(__file__).parents[2] / "tools" / "start.py"


@pytest.fixture(scope="module")
def start():
    spec = importlib.util.spec_from_file_location("start_under_test", START)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_the_file_parses_on_a_python_too_old_for_the_project():
    ast.parse(START.read_text(encoding="utf-8"), feature_version=(3, 7))


def test_an_old_python_is_named_with_the_version_needed(start):
    text = start.python_problem((3, 9, 2), has_venv=True)
    assert "3.9" in text
    assert "3.11" in text
    assert "\n" not in text


def test_a_python_without_venv_is_told_the_package(start):
    assert "apt-get install -y python3-venv" in start.python_problem((3, 12, 0), has_venv=False)


@pytest.mark.parametrize("version", [(3, 11, 0), (3, 14, 1), (4, 0, 0)])
def test_a_python_that_will_do_has_no_problem(start, version):
    assert start.python_problem(version, has_venv=True) == ""


LDD = """/opt/QtGui.abi3.so:
\tlinux-vdso.so.1 (0x00007ffc)
\tlibxkbcommon.so.0 => not found
\tlibEGL.so.1 => not found
\tlibc.so.6 => /lib/x86_64-linux-gnu/libc.so.6 (0x00007f)
\tlibEGL.so.1 => not found
"""


def test_missing_libraries_are_read_from_ldd_once_each(start):
    assert start.missing_libraries(LDD) == ["libEGL.so.1", "libxkbcommon.so.0"]


def test_the_loader_s_message_names_the_library(start):
    text = "libEGL.so.1: cannot open shared object file: No such file or directory"
    assert start.library_of_import_error(text) == ["libEGL.so.1"]
    assert start.library_of_import_error("No module named 'PySide6'") == []


def test_one_apt_command_brings_all_libraries_and_fonts(start):
    command = start.apt_command(["libxkbcommon.so.0", "libEGL.so.1", "libunheard-of.so.7"], fonts_missing=True)
    assert command == "sudo apt-get install -y fonts-dejavu-core libegl1 libxkbcommon0"


def test_no_apt_command_is_invented_for_an_unknown_library(start):
    assert start.apt_command(["libunheard-of.so.7"]) == ""


@pytest.mark.skipif(not Path("/usr/bin/dpkg-query").exists(), reason="not a Debian system")
def test_the_packages_agree_with_the_package_database(start):
    """Debian's own file lists say which package a library of this machine comes from."""
    checked = 0
    for library, package in start.PACKAGES.items():
        found = subprocess.run(["dpkg-query", "-S", f"*/{library}"], capture_output=True, text=True, check=False)
        owners = {owner.strip() for line in found.stdout.splitlines() for owner in line.split(": /")[0].split(",")}
        if owners:
            checked += 1
            assert any(owner.split(":")[0].removesuffix("t64") == package for owner in owners), (library, owners)
    assert checked >= 3


@pytest.mark.parametrize(
    ("output", "words"),
    [
        (
            "WARNING: Retrying ... NewConnectionError(... [Errno 101] Network is unreachable)\nERROR: No matching d",
            "no network",
        ),
        ("  Temporary failure in name resolution\nERROR: Could not find a version that satisfies numpy", "no network"),
        ("ERROR: Could not install packages due to an OSError: [Errno 28] No space left on device", "disk is full"),
        ("Collecting x\nERROR: first\nERROR: Failed to build llvmlite\n", "Failed to build llvmlite"),
        ("      ERROR: No matching distribution found for hatchling\n      [end of output]", "for hatchling"),
        ("WARNING: Retrying (Retry(total=1)) after connection broken by 'NameResolutionError(...)'", "no network"),
        ("", "no reason"),
    ],
)
def test_what_made_pip_fail_becomes_one_line(start, output, words):
    text = start.pip_problem(output)
    assert words in text
    assert "\n" not in text


def test_the_demo_s_files_are_in_the_checkout(start):
    for name in (start.DEMO_LINK, start.DEMO_SCHEDULE):
        assert (START.parents[1] / name).exists()


def test_the_demo_s_link_is_the_one_that_its_transmitter_sends(start):
    link = tomllib.loads((START.parents[1] / start.DEMO_LINK).read_text(encoding="utf-8"))["link"]
    signal = dict(zip(start.DEMO_SIGNAL[:-1:2], start.DEMO_SIGNAL[1::2], strict=True))
    assert (link["scheme"], link["pulse"]) == (signal["--scheme"], signal["--pulse"])
    assert link["symbol_rate_hz"] == float(signal["--symbol-rate"])


def test_a_free_port_can_be_listened_on(start):
    with socket.create_server(("127.0.0.1", start.free_port())) as server:
        assert server.getsockname()[1] > 1023


def test_the_progress_line_counts_the_kernels(start):
    assert start.progress_line(3, 9, "raster", 1.44) == "kernels 3/9 [######------------] raster 1.4 s"
    assert start.progress_line(9, 9, "raster", 0.0).count("#") == 18


def test_every_kernel_module_is_listed(start, tmp_path):
    for name in ("__init__.py", "raster.py", "filters.py", "notes.txt"):
        (tmp_path / name).touch()
    assert start.kernel_modules(tmp_path) == ["filters", "raster"]


def test_the_fingerprint_changes_with_a_file_and_with_a_fact(start, tmp_path):
    path = tmp_path / "pyproject.toml"
    absent = start.fingerprint([path], "here")
    path.write_text("a")
    one = start.fingerprint([path], "here")
    assert one == start.fingerprint([path], "here")
    path.write_text("b")
    assert len({absent, one, start.fingerprint([path], "here"), start.fingerprint([path], "there")}) == 4


def test_the_kernels_are_compiled_again_when_one_of_them_was_touched(start, tmp_path):
    kernel = tmp_path / "raster.py"
    kernel.write_text("a")
    before = start.kernel_fingerprint(tmp_path)
    assert before == start.kernel_fingerprint(tmp_path)
    os.utime(kernel, ns=(1, 1))
    assert start.kernel_fingerprint(tmp_path) != before


def test_a_stamp_gathers_notes_and_a_damaged_one_counts_as_none(start, tmp_path):
    path = tmp_path / "stamp.json"
    assert start.read_stamp(path) == {}
    start.write_stamp(path, run="a")
    start.write_stamp(path, kernels="b")
    assert start.read_stamp(path) == {"run": "a", "kernels": "b"}
    path.write_text("[1")
    assert start.read_stamp(path) == {}
    path.write_text("[1]")
    assert start.read_stamp(path) == {}


def test_a_mistyped_request_is_one_error_with_status_2():
    done = subprocess.run([sys.executable, START, "tset"], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "tset" in done.stderr
    assert "Traceback" not in done.stderr
