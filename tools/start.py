"""From a bare Python to the running program: makes .venv, installs, compiles the kernels, opens the demo.

    python3 tools/start.py          set up, then the demo
    python3 tools/start.py tests    set up, then the tests (what follows goes to pytest)
    python3 tools/start.py setup    set up for the tests, run nothing

Standard library only. What is already done and still fits is not done again. Exit status: that of what was run;
2 when the set-up cannot be completed (one line on standard error says why and what to do); 130 when interrupted.
"""

import argparse
import hashlib
import importlib.util
import json
import os
import re
import socket
import subprocess
import sys
import time
from collections.abc import Iterable, Sequence
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]

# The demo: arguments of `lidwatch`, run from the top of the project.
DEMO_LINK, DEMO_SCHEDULE = "recordings/gauge.toml", "recordings/gauge-day.toml"
DEMO_SIGNAL = (
    *("--scheme", "qpsk", "--symbol-rate", "9600", "--rate", "38400", "--pulse", "rrc:0.35"),
    *("--snr", "26", "--carrier", "130", "--clock", "-12", "--framed"),
)
DEMO_SECONDS = 12  # where nobody sits at the terminal

OLDEST = (3, 11)
VENV = ROOT / ".venv"
STAMP = VENV / "lidwatch-setup.json"
PIP_LOG = VENV / "lidwatch-install.log"

# Debian's and Ubuntu's package for each system library that Qt's wheels expect to find.
PACKAGES = {
    "libEGL.so.1": "libegl1",
    "libGL.so.1": "libgl1",
    "libGLX.so.0": "libglx0",
    "libOpenGL.so.0": "libopengl0",
    "libICE.so.6": "libice6",
    "libSM.so.6": "libsm6",
    "libX11-xcb.so.1": "libx11-xcb1",
    "libX11.so.6": "libx11-6",
    "libdbus-1.so.3": "libdbus-1-3",
    "libfontconfig.so.1": "libfontconfig1",
    "libfreetype.so.6": "libfreetype6",
    "libglib-2.0.so.0": "libglib2.0-0",
    "libgthread-2.0.so.0": "libglib2.0-0",
    "libwayland-client.so.0": "libwayland-client0",
    "libwayland-cursor.so.0": "libwayland-cursor0",
    "libwayland-egl.so.1": "libwayland-egl1",
    "libxcb-cursor.so.0": "libxcb-cursor0",
    "libxcb-icccm.so.4": "libxcb-icccm4",
    "libxcb-image.so.0": "libxcb-image0",
    "libxcb-keysyms.so.1": "libxcb-keysyms1",
    "libxcb-randr.so.0": "libxcb-randr0",
    "libxcb-render-util.so.0": "libxcb-render-util0",
    "libxcb-render.so.0": "libxcb-render0",
    "libxcb-shape.so.0": "libxcb-shape0",
    "libxcb-shm.so.0": "libxcb-shm0",
    "libxcb-sync.so.1": "libxcb-sync1",
    "libxcb-util.so.1": "libxcb-util1",
    "libxcb-xfixes.so.0": "libxcb-xfixes0",
    "libxcb-xkb.so.1": "libxcb-xkb1",
    "libxcb.so.1": "libxcb1",
    "libxkbcommon-x11.so.0": "libxkbcommon-x11-0",
    "libxkbcommon.so.0": "libxkbcommon0",
    "libz.so.1": "zlib1g",
    "libzstd.so.1": "libzstd1",
}
FONT_PACKAGE = "fonts-dejavu-core"

# Run in the environment: loads what the painter needs and lists the binaries whose libraries to look at.
_QT_PROBE = """
import importlib.util, json, os, sys
os.environ["QT_QPA_PLATFORM"] = "offscreen"
found = {"fonts": None, "error": None, "folder": os.path.dirname(importlib.util.find_spec("PySide6").origin)}
try:
    from PySide6 import QtGui, QtWidgets
    app = QtGui.QGuiApplication(sys.argv[:1])
    # Without fonts Qt still names families and draws boxes; a real font has a character map.
    found["fonts"] = QtGui.QRawFont.fromFont(QtGui.QFont()).fontTable("cmap").size() > 0
except ImportError as error:
    found["error"] = str(error)
print(json.dumps(found))
"""

# Run in the environment: explicit signatures make each module compile, or load its cache, when it is imported.
_WARM_UP = """
import importlib, sys, time
for name in sys.argv[1:]:
    print("start", name, flush=True)
    began = time.perf_counter()
    try:
        importlib.import_module("dsp._kernels." + name)
    except Exception as error:
        text = (str(error).strip() or "no reason given").splitlines()[0]
        print("failed", name, type(error).__name__ + ": " + text, flush=True)
        sys.exit(1)
    print("done", name, time.perf_counter() - began, flush=True)
"""


class SetupError(Exception):
    """The set-up cannot go on; the text is one line: what, where, what to do."""


def python_problem(version: "tuple[int, ...]", has_venv: bool) -> str:
    """What is wrong with this Python (its version, whether it can make environments); empty if nothing."""
    have = ".".join(str(part) for part in version[:2])
    if version[:2] < OLDEST:
        need = ".".join(str(part) for part in OLDEST)
        return f"Python {have} is too old: install {need} or newer, then e.g. python{need} tools/start.py"
    if not has_venv:
        mend = "on Debian, Ubuntu: sudo apt-get install -y python3-venv"
        return f"this Python ({have}) has no venv module: install it ({mend}) and run this again"
    return ""


def missing_libraries(ldd_output: str) -> "list[str]":
    """Names of the libraries that ``ldd`` did not find, each once, sorted."""
    return sorted(set(re.findall(r"^\s*(\S+) => not found", ldd_output, flags=re.MULTILINE)))


def library_of_import_error(text: str) -> "list[str]":
    """The library that the loader names in an ImportError's text, if any."""
    return re.findall(r"(lib[\w+.-]+\.so[.\d]*): cannot open shared object file", text)


def apt_command(libraries: "Iterable[str]", fonts_missing: bool = False) -> str:
    """The one Debian/Ubuntu command that brings the libraries; empty if no package is known for any of them."""
    packages = {PACKAGES[name] for name in libraries if name in PACKAGES}
    if fonts_missing:
        packages.add(FONT_PACKAGE)
    return "sudo apt-get install -y " + " ".join(sorted(packages)) if packages else ""


def pip_problem(output: str) -> str:
    """One line for what made pip fail, read from all it printed."""
    if "No space left on device" in output:
        return "the disk is full: make room and run this again"
    unreachable = "connection broken by|ConnectionError|ConnectTimeoutError|ReadTimeoutError|ProxyError|name resolution"
    if re.search(unreachable, output):
        return "no network: pip cannot reach its package index; connect (or set a proxy) and run this again"
    errors = re.findall(r"^\s*ERROR: (.+)$", output, flags=re.MULTILINE)
    reason = errors[-1].strip() if errors else "it gave no reason"
    return f"pip could not install the project: {reason}; all of its output is in {PIP_LOG}"


def progress_line(done: int, total: int, name: str, seconds: "float | None" = None) -> str:
    """One line of the warm-up, e.g. ``kernels 3/9 [######------------] raster 1.4 s``."""
    bar = "#" * (18 * done // total) if total else ""
    spent = "..." if seconds is None else f"{seconds:.1f} s"
    return f"kernels {done}/{total} [{bar:-<18}] {name} {spent}"


def fingerprint(paths: "Iterable[Path]", *facts: str) -> str:
    """A digest of the files' contents and of some facts; a missing file counts as such."""
    digest = hashlib.sha256()
    for fact in facts:
        digest.update(fact.encode() + b"\0")
    for path in paths:
        digest.update(path.name.encode() + b"\0")
        digest.update(path.read_bytes() if path.exists() else b"missing")
    return digest.hexdigest()


def kernel_fingerprint(folder: Path) -> str:
    """A digest of what numba's cache depends on: the kernel files' names, sizes, times of change; its folder."""
    facts = [os.environ.get("NUMBA_CACHE_DIR", "")]
    for path in sorted(folder.glob("*.py")):
        status = path.stat()
        facts.append(f"{path.name} {status.st_size} {status.st_mtime_ns}")
    return fingerprint([], *facts)


def kernel_modules(folder: Path) -> "list[str]":
    """Names of the kernel modules, sorted."""
    return sorted(path.stem for path in folder.glob("*.py") if path.stem != "__init__")


def read_stamp(path: Path) -> "dict[str, str]":
    """What an earlier run noted; empty if there is none or it cannot be read."""
    try:
        noted = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return noted if isinstance(noted, dict) else {}


def write_stamp(path: Path, **notes: str) -> None:
    """Add notes to those of earlier runs."""
    path.write_text(json.dumps({**read_stamp(path), **notes}, indent=1), encoding="utf-8")


def say(text: str) -> None:
    """Tell the user what goes on; on standard error, for standard output belongs to what is run."""
    print(text, file=sys.stderr, flush=True)


def in_venv(name: str) -> Path:
    """A program of the environment."""
    return VENV / ("Scripts" if os.name == "nt" else "bin") / (name + (".exe" if os.name == "nt" else ""))


def make_venv() -> None:
    """Make .venv, or make it anew if its Python no longer runs or is too old."""
    python = in_venv("python")
    if python.exists():
        check = f"import sys, pip; sys.exit(sys.version_info[:2] < {OLDEST})"
        if (
            subprocess.run([python, "-c", check], stdin=subprocess.DEVNULL, capture_output=True, check=False).returncode
            == 0
        ):
            return
        say(f"{VENV} no longer works: making it anew")
    else:
        say(f"making {VENV}")
    command = [sys.executable, "-m", "venv", "--clear", str(VENV)]
    made = subprocess.run(command, stdin=subprocess.DEVNULL, capture_output=True, text=True, check=False)
    if made.returncode == 0:
        return
    output = made.stdout + made.stderr
    if "ensurepip" in output:
        raise SetupError(python_problem(tuple(sys.version_info[:3]), has_venv=False))
    reason = next((line.strip() for line in reversed(output.splitlines()) if line.strip()), "it gave no reason")
    raise SetupError(f"cannot make {VENV}: {reason}")


def install(with_tests: bool) -> None:
    """Install the project editable, unless that was done for this pyproject.toml already."""
    mark = fingerprint([ROOT / "pyproject.toml"], str(ROOT), sys.version)
    wanted = {"test": mark} if with_tests else {"run": mark}
    noted = read_stamp(STAMP)
    if mark in ([noted.get("test")] if with_tests else [noted.get("run"), noted.get("test")]):
        return
    say("installing (the first time brings several hundred MB: some minutes)")
    target = f"{ROOT}[test]" if with_tests else str(ROOT)
    command = [
        str(in_venv("python")),
        "-m",
        "pip",
        "install",
        "--disable-pip-version-check",
        "--no-input",
        "--retries",
        "2",
        "-e",
        target,
    ]
    began = time.perf_counter()
    output = []
    with subprocess.Popen(
        command, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, errors="replace"
    ) as pip:
        for line in pip.stdout or ():
            output.append(line)
            found = re.match(r"(Collecting|Building|Installing|Downloading|Using cached)\b.{0,90}", line.strip())
            if found:
                show(f"pip: {found.group()}")
    show("")
    PIP_LOG.write_text("".join(output), encoding="utf-8")
    if pip.returncode:
        raise SetupError(pip_problem("".join(output)))
    write_stamp(STAMP, **wanted)
    say(f"installed in {time.perf_counter() - began:.0f} s")


def show(text: str) -> None:
    """Overwrite the progress line on a terminal; elsewhere nothing. Empty text clears it."""
    if sys.stderr.isatty():
        print("\r\x1b[2K" + text, end="", file=sys.stderr, flush=True)


def warm_kernels() -> None:
    """Compile every kernel into numba's cache, one after the other, unless they are there already."""
    folder = ROOT / "dsp" / "_kernels"
    names = kernel_modules(folder)
    if not names or read_stamp(STAMP).get("kernels") == kernel_fingerprint(folder):
        return
    say(f"compiling {len(names)} kernel modules, once")
    done, failure = 0, ""
    with subprocess.Popen(
        [in_venv("python"), "-c", _WARM_UP, *names],
        cwd=ROOT,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        text=True,
        errors="replace",
    ) as worker:
        for line in worker.stdout or ():
            word, _, rest = line.strip().partition(" ")
            name, _, detail = rest.partition(" ")
            if word == "start":
                show(progress_line(done, len(names), name))
            elif word == "done":
                done += 1
                show("")
                say(progress_line(done, len(names), name, float(detail)))
            elif word == "failed":
                failure = f"kernel module dsp/_kernels/{name}.py does not compile: {detail}"
    show("")
    if worker.returncode:
        raise SetupError(
            failure or f"compiling the kernels ended with status {worker.returncode} after {done} of {len(names)}"
        )
    write_stamp(STAMP, kernels=kernel_fingerprint(folder))


def qt_problem() -> str:
    """Why Qt cannot paint here, with the command that mends it; empty if it can."""
    probe = subprocess.run(
        [in_venv("python"), "-c", _QT_PROBE], stdin=subprocess.DEVNULL, capture_output=True, text=True, check=False
    )
    try:
        found = json.loads(probe.stdout.strip().splitlines()[-1])
    except (IndexError, ValueError):
        reason = next(
            (line for line in reversed(probe.stderr.splitlines()) if line.strip()), f"status {probe.returncode}"
        )
        return f"Qt does not start: {reason}"
    if found["error"] is None and found["fonts"]:
        return ""
    libraries = set(library_of_import_error(found["error"] or ""))
    folder = Path(found["folder"])
    needed = [*folder.glob("Qt*.abi3.so"), folder / "Qt/plugins/platforms/libqoffscreen.so"]
    painter = [path for path in needed if path.name.split(".")[0] in ("QtCore", "QtGui", "QtWidgets", "libqoffscreen")]
    try:
        ldd = subprocess.run(["ldd", *painter], stdin=subprocess.DEVNULL, capture_output=True, text=True, check=False)
        libraries.update(missing_libraries(ldd.stdout))
    except OSError:
        pass  # no ldd here: the loader's own message names one library at least
    fonts_missing = found["fonts"] is False or "libfontconfig.so.1" in libraries
    if found["error"] and not libraries:
        return f"Qt does not load: {found['error'].splitlines()[0]}"
    what = f"missing system libraries: {', '.join(sorted(libraries))}" if libraries else "no fonts are installed"
    command = apt_command(libraries, fonts_missing)
    return f"{what}; on Debian, Ubuntu: {command}" if command else what


def run(command: "Sequence[str | Path]") -> int:
    """Run a program of the environment from the top of the project; its exit status."""
    stdin = None if sys.stdin is not None and sys.stdin.isatty() else subprocess.DEVNULL
    return subprocess.run(command, cwd=ROOT, stdin=stdin, check=False).returncode


def demo() -> int:
    """Run the demo: a transmitter whose signal suffers by a schedule, and the watch beside it. Without a terminal: for some seconds."""
    for name in (DEMO_LINK, DEMO_SCHEDULE):
        if not (ROOT / name).exists():
            raise SetupError(f"{ROOT / name} is missing: the checkout is incomplete, fetch it again")
    address = f"tcp://127.0.0.1:{free_port()}"
    watch = ["watch", address, "--link", DEMO_LINK]
    attended = sys.stdin is not None and sys.stdin.isatty()
    display = sys.platform in ("win32", "darwin") or os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY")
    problem = qt_problem() if display else "there is no display"
    if problem:
        say(f"no window: {problem}; showing the watch as text")
        watch += ["--view", "terminal"]
    if not attended:
        watch += ["--for", str(DEMO_SECONDS)]
    sender = [in_venv("python"), "tools/transmit.py", *DEMO_SIGNAL, "--schedule", DEMO_SCHEDULE, "--no-keys", address]
    say("python tools/transmit.py " + " ".join(sender[2:]))
    say("lidwatch " + " ".join(watch))
    with subprocess.Popen(sender, cwd=ROOT, stdin=subprocess.DEVNULL, stderr=subprocess.DEVNULL) as transmitter:
        try:
            return run([in_venv("lidwatch"), *watch])
        finally:
            transmitter.terminate()


def free_port() -> int:
    """A TCP port of this machine that nothing listens on."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def tests(arguments: "Sequence[str]") -> int:
    """Run pytest on two processes."""
    problem = qt_problem()
    if problem:
        say(f"tests that paint will not run: {problem}")
    os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")
    return run([in_venv("python"), "-m", "pytest", "-n", "2", *arguments])


def main(arguments: "Sequence[str]") -> int:
    """Set up and run what was asked for."""
    parser = argparse.ArgumentParser(
        prog="start.py", description="Sets the program up and opens the demo, or runs the tests."
    )
    parser.add_argument(
        "what", nargs="?", choices=("demo", "tests", "setup"), default="demo", help="after the set-up (default: demo)"
    )
    parser.add_argument("rest", nargs=argparse.REMAINDER, help="tests: arguments for pytest")
    options = parser.parse_args(arguments)
    if options.rest and options.what != "tests":
        parser.error(f"{options.what} takes no arguments, got {' '.join(options.rest)}")
    try:
        has_venv = all(importlib.util.find_spec(name) for name in ("venv", "ensurepip"))
        problem = python_problem(tuple(sys.version_info[:3]), has_venv)
        if problem:
            raise SetupError(problem)
        make_venv()
        install(with_tests=options.what != "demo")
        warm_kernels()
        if options.what == "setup":
            return 0
        return tests(options.rest) if options.what == "tests" else demo()
    except SetupError as error:
        say(f"start: {error}")
        return 2
    except OSError as error:
        say(f"start: {error.strerror or error}{': ' + str(error.filename) if error.filename else ''}")
        return 2
    except KeyboardInterrupt:
        say("\nstart: interrupted")
        return 130


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
