"""What the user says of a link: options of the command line over a link file."""

import io
import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any, Final

from dsp.errors import DspError
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from monitor.errors import InputError
from monitor.limits import LOOP_BANDWIDTH, TIMINGS, Timing

_TABLES: Final = ("link", "alarm")
_NUMBERS: Final = ("symbol_rate_hz", "carrier_hz", "loop_bandwidth")
_TEXTS: Final = ("name", "scheme", "pulse", "timing")
_MOST_BYTES: Final = 1 << 20
_MOST_TAPS: Final = 4096


@dataclass(frozen=True, slots=True)
class LinkOptions:
    """The link as typed, in the units of the names (``loop_bandwidth`` BnT, per symbol); None: not given."""

    symbol_rate_hz: float | None = None
    scheme: str | None = None
    pulse: str | None = None
    carrier_hz: float | None = None
    timing: Timing | None = None
    loop_bandwidth: float | None = None
    name: str | None = None

    def over(self, other: "LinkOptions") -> "LinkOptions":
        """These options, filled up with another's."""
        given = {f.name: value for f in fields(self) if (value := getattr(self, f.name)) is not None}
        return replace(other, **given)

    def wanted(self) -> Wanted:
        """As `dsp.identify` takes it. Raises InputError for an unknown scheme or pulse."""
        try:
            scheme = None if self.scheme is None else find_scheme(self.scheme)
            pulse = None if self.pulse is None else read_pulse(self.pulse)
        except DspError as error:
            raise InputError(str(error)) from None
        return Wanted(scheme, self.symbol_rate_hz, pulse, self.carrier_hz, self.name or "")


@dataclass(frozen=True, slots=True)
class LinkFile:
    """A link file's content: the link, and the tables of its alarm rules as they stand."""

    link: LinkOptions
    alarms: tuple[dict[str, Any], ...] = ()

    @property
    def n_alarms(self) -> int:
        """How many alarm rules there are."""
        return len(self.alarms)


def read_pulse(text: str) -> Pulse:
    """A pulse as typed; ``taps:FILE`` reads a .npy file or text with one tap a line, # begins a remark. Raises DspError or InputError."""
    if not text.startswith("taps:"):
        return Pulse.parse(text)
    path = Path(text.removeprefix("taps:"))
    try:
        taps = _read_taps(path, _read_bytes(path))
    except OSError as error:
        raise InputError(f"taps {path}: {error.strerror or error}; check the path") from None
    except (ValueError, TypeError, EOFError, MemoryError) as error:
        raise InputError(
            f"taps {path}: no taps there ({error}); give a .npy file or text with one tap a line"
        ) from None
    if not taps or not all(math.isfinite(tap.real) and math.isfinite(tap.imag) for tap in taps):
        raise InputError(f"taps {path}: taps must be finite numbers, at least one")
    if not any(taps):
        raise InputError(f"taps {path}: all taps are 0, nothing would come through")
    if len(taps) > _MOST_TAPS:
        raise InputError(f"taps {path}: {len(taps)} taps; at most {_MOST_TAPS} are taken")
    return Pulse("taps", taps=tuple(taps))


def read_link_file(path: Path) -> LinkFile:
    """A link file: TOML with a table ``[link]`` and any number of ``[[alarm]]``. Raises InputError."""
    where = f"link file {path}"
    try:
        content = tomllib.loads(_read_bytes(path).decode("utf-8"))
    except OSError as error:
        raise InputError(f"{where}: {error.strerror or error}; check the path") from None
    except (
        ValueError,
        RecursionError,
    ) as error:  # TOML's and UTF-8's errors are ValueErrors, as is a zero byte in a name
        raise InputError(f"{where}: not TOML ({error})") from None
    unknown = sorted(set(content) - set(_TABLES))
    if unknown:
        raise InputError(f"{where}: {unknown[0]!r} has no meaning here; a link file has [link] and [[alarm]]")
    table, alarms = content.get("link", {}), content.get("alarm", [])
    if not isinstance(table, dict):
        raise InputError(f"{where}: [link] must be a table")
    if not isinstance(alarms, list) or not all(isinstance(alarm, dict) for alarm in alarms):
        raise InputError(f"{where}: alarms must be tables; write each as [[alarm]]")
    link = _link_of(table, path, where)
    try:
        link.wanted()
    except InputError as error:
        raise InputError(f"{where}: {error}") from None
    return LinkFile(link, tuple(alarms))


def link_file_text(
    options: LinkOptions,
    *,
    head: Sequence[str] = (),
    remarks: Mapping[str, str] | None = None,
    doubtful: Sequence[str] = (),
    example_alarms: Sequence[Mapping[str, str | float]] = (),
) -> str:
    """A link file that `read_link_file` reads back as ``options``.

    ``head`` stands above as comments, ``remarks`` behind the keys they are about; ``doubtful`` keys and ``example_alarms`` are comments
    that need only their signs taken away.
    """
    remarks = remarks or {}
    lines = [f"# {_one_line(text)}" for text in head]
    lines.append("[link]")
    for key in (*_TEXTS[:1], *_NUMBERS[:1], *_TEXTS[1:3], *_NUMBERS[1:2], *_TEXTS[3:], *_NUMBERS[2:]):
        value = getattr(options, key)
        if value is not None:
            remark = remarks.get(key)
            sign = "# " if key in doubtful else ""
            lines.append(f"{sign}{key} = {_toml(value)}" + (f"  # {_one_line(remark)}" if remark else ""))
    if example_alarms:
        lines += ["", "# Limits, for you to think about: take the signs away from those that you want."]
    for alarm in example_alarms:
        lines += ["# [[alarm]]", *(f"# {key} = {_toml(value)}" for key, value in alarm.items()), ""]
    return "\n".join(lines).rstrip("\n") + "\n"


def _one_line(text: str) -> str:
    return "".join(c if c.isprintable() else " " for c in " ".join(text.split()))


def _toml(value: str | float) -> str:
    if not isinstance(value, str):
        return repr(value if isinstance(value, int) else float(value))  # numpy's numbers write themselves otherwise
    escaped = "".join(
        c if c.isprintable() and c not in '"\\' else f"\\{c}" if c in '"\\' else f"\\U{ord(c):08x}" for c in value
    )
    return f'"{escaped}"'


def _link_of(table: dict[str, Any], path: Path, where: str) -> LinkOptions:
    known = (*_TEXTS, *_NUMBERS)
    given: dict[str, Any] = {}
    for key, value in table.items():
        if key not in known:
            raise InputError(f"{where}: {key!r} is not a key of [link]; take {', '.join(known)}")
        if value == "auto" and key != "name":
            continue
        if key in _NUMBERS:
            given[key] = _number(key, value, where)
        elif isinstance(value, str):
            given[key] = value
        else:
            raise InputError(f"{where}: {key} must be text, got {value!r}")
    if given.get("timing", TIMINGS[0]) not in TIMINGS:
        raise InputError(f"{where}: timing {given['timing']!r} is not known; take auto, {', '.join(TIMINGS)}")
    pulse = given.get("pulse", "")
    if pulse.startswith("taps:"):  # a file named in a file lies beside it
        given["pulse"] = f"taps:{path.parent / pulse.removeprefix('taps:')}"
    return LinkOptions(**given)


def _number(key: str, value: object, where: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise InputError(f"{where}: {key} must be a number, got {value!r}")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise InputError(f"{where}: {key} must be finite, got {value!r}")
    if key == "symbol_rate_hz" and number <= 0:
        raise InputError(f"{where}: {key} must be above 0, got {value!r}")
    low, high = LOOP_BANDWIDTH
    if key == "loop_bandwidth" and not low <= number <= high:
        raise InputError(f"{where}: {key} must lie between {low:g} and {high:g}, got {value!r}")
    return number


def _read_bytes(path: Path) -> bytes:
    """The content of a small file; raises OSError, and ValueError where there is more than anyone would type."""
    with path.open("rb") as file:
        content = file.read(_MOST_BYTES + 1)
    if len(content) > _MOST_BYTES:
        raise ValueError(f"more than {_MOST_BYTES} bytes")
    return content


def _read_taps(path: Path, content: bytes) -> list[complex]:
    if path.suffix == ".npy":
        import numpy as np

        return [complex(tap) for tap in np.load(io.BytesIO(content), allow_pickle=False).ravel()]
    lines = [line.partition("#")[0].strip() for line in content.decode("utf-8").splitlines()]
    return [complex(line.replace(" ", "")) for line in lines if line]
