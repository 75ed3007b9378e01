"""What the user says of a link: options of the command line over a link file."""

import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from dsp.errors import DspError
from dsp.identify import Wanted
from dsp.link import find_scheme
from dsp.pulses import Pulse
from monitor.errors import InputError

_KEYS = {"name", "symbol_rate_hz", "scheme", "pulse", "carrier_hz", "timing", "loop_bandwidth"}
TIMINGS = ("gardner", "mueller-muller", "derivative")


@dataclass(frozen=True, slots=True)
class LinkOptions:
    """The link as typed; None or "auto": not given."""

    symbol_rate_hz: float | None = None
    scheme: str | None = None
    pulse: str | None = None
    carrier_hz: float | None = None
    timing: str | None = None
    loop_bandwidth: float | None = None
    name: str = ""

    def over(self, other: "LinkOptions") -> "LinkOptions":
        """These options, filled up with another's."""
        mine = {key: value for key in self.__slots__ if (value := getattr(self, key)) not in (None, "", "auto")}
        theirs = {key: getattr(other, key) for key in self.__slots__}
        return LinkOptions(**{**theirs, **mine})

    def wanted(self) -> Wanted:
        """As `dsp.identify` takes it. Raises InputError for an unknown scheme or pulse."""
        try:
            scheme = None if self.scheme in (None, "auto") else find_scheme(str(self.scheme))
            pulse = None if self.pulse in (None, "auto") else read_pulse(str(self.pulse))
        except DspError as error:
            raise InputError(str(error)) from None
        return Wanted(scheme, self.symbol_rate_hz, pulse, self.carrier_hz, self.name)


def read_pulse(text: str) -> Pulse:
    """A pulse as typed; ``taps:FILE`` reads a .npy file or text with one tap a line. Raises DspError or InputError."""
    if not text.startswith("taps:"):
        return Pulse.parse(text)
    import numpy as np

    path = Path(text.removeprefix("taps:"))
    try:
        if path.suffix == ".npy":
            values = np.load(path, allow_pickle=False).ravel()
        else:
            values = np.array(
                [complex(line.replace(" ", "")) for line in path.read_text("utf-8").split("\n") if line.strip()]
            )
    except (OSError, ValueError) as error:
        raise InputError(
            f"--pulse {text}: no taps there ({error}); give a .npy file or text with one tap a line"
        ) from None
    if values.size == 0 or not np.all(np.isfinite(values)):
        raise InputError(f"--pulse {text}: taps must be finite numbers, at least one")
    return Pulse("taps", taps=tuple(complex(v) for v in values))


def read_link_file(path: Path) -> LinkOptions:
    """The ``[link]`` part of a link file. Raises InputError."""
    try:
        content = tomllib.loads(path.read_text("utf-8"))
    except OSError as error:
        raise InputError(f"link file {path}: {error.strerror or error}; check the path") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(f"link file {path}: not TOML ({error})") from None
    table: Any = content.get("link", {})
    if not isinstance(table, dict):
        raise InputError(f"link file {path}: [link] must be a table")
    unknown = sorted(set(table) - _KEYS)
    if unknown:
        raise InputError(f"link file {path}: {unknown[0]!r} is not a key of [link]; take {', '.join(sorted(_KEYS))}")
    values = {}
    for key, value in table.items():
        number = key in ("symbol_rate_hz", "carrier_hz", "loop_bandwidth")
        if value == "auto":
            continue
        if number and (isinstance(value, bool) or not isinstance(value, int | float)):
            raise InputError(f"link file {path}: {key} must be a number, got {value!r}")
        if not number and not isinstance(value, str):
            raise InputError(f"link file {path}: {key} must be text, got {value!r}")
        values[key] = float(value) if number else value
    return LinkOptions(**values)
