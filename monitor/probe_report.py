"""What was found in a stretch of samples: as lines, as a JSON document, as link files."""

import math
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TypeVar

from dsp.identify import Findings, FoundLink
from dsp.identify.findings import Guess
from monitor.document import Json
from monitor.errors import printable
from monitor.linkfile import LinkOptions, link_file_text
from monitor.listening import Heard
from monitor.version import version
from monitor.views.wording import plain, signed

T = TypeVar("T")

_LABEL, _VALUE, _SURE = 14, 24, 8
# symbol rates that are in use (common practice); others count as round with three digits
_USUAL_BD = (45.45, 1200, 2400, 4800, 9600, 14400, 19200, 28800, 33600, 38400, 57600, 115200, 1625e3 / 6)
_ROUND_PPM = 50.0
_LEAST_SURE = 0.5  # below it a part is written as a comment, and stays to be found


def text(heard: Heard, findings: Findings) -> Iterator[str]:
    """What was found, in lines: of the samples, then of each link a table with confidence and the next best."""
    yield printable(
        f"{heard.uri}: {heard.format}, {heard.sample_rate_hz:.12g} Hz; {heard.seconds:.3f} s from {heard.start_s:.3f} s"
    )
    yield ", ".join(_sample_words(heard, findings))
    for note in heard.notes:
        yield printable(f"note: {note}")
    for number, found in enumerate(findings.links, start=1):
        yield ""
        title = "" if len(findings.links) == 1 else f"link {number} of {len(findings.links)}"
        yield f"{title:{_LABEL + _VALUE + 2}}{'sure':>{_SURE}}  otherwise".rstrip()
        for label, value, confidence, other in _rows(found):
            sure = "" if confidence is None else f"{plain(100 * confidence, 0)} %"
            yield f"  {label:{_LABEL}}{value:{_VALUE}}{sure:>{_SURE}}  {other}".rstrip()
        for note in found.notes:
            yield "  " + printable(f"note: {note}")


def _sample_words(heard: Heard, findings: Findings) -> list[str]:
    words = []
    if findings.level_dbfs is None:
        return ["silence: all samples are 0"]
    words.append(f"level {plain(findings.level_dbfs, 1)} dBFS")
    if findings.peak_dbfs is not None:
        words.append(f"peak {plain(findings.peak_dbfs, 1)} dBFS")
    words.append(f"clipped {plain(_clipped_pct(heard, findings), 2)} %")
    dc = [signed(100 * value, 2) for value in _dc(heard, findings)]
    words.append(f"DC {dc[0]} %" if len(dc) == 1 else f"DC {dc[0]} % (I) {dc[1]} % (Q)")
    if heard.nonfinite:
        words.append(f"{heard.nonfinite} samples not finite")
    if heard.lost:
        words.append(f"{heard.lost} samples lost while listening")
    return words


def _dc(heard: Heard, findings: Findings) -> tuple[float, ...]:
    complex_in = heard.samples.dtype.kind == "c"
    return (findings.dc.real, findings.dc.imag) if complex_in else (findings.dc.real,)


def _clipped_pct(heard: Heard, findings: Findings) -> float:
    """Whichever says more: the format's end stops, or a flat top below them."""
    return max(findings.clipped_pct, 100.0 * heard.clipped / max(heard.samples.size, 1))


def _rows(found: FoundLink) -> Iterator[tuple[str, str, float | None, str]]:
    def row(label: str, guess: Guess[T], write: Callable[[T], str]) -> tuple[str, str, float | None, str]:
        other = "" if guess.runner_up is None else write(guess.runner_up)
        return label, write(guess.value), guess.confidence, other

    link = found.link
    yield row("Scheme", found.scheme, lambda scheme: scheme.name)
    yield row("Symbol rate", found.symbol_rate_hz, lambda rate: f"{_rate_text(rate)} Bd")
    yield row("Pulse", found.pulse, str)
    if found.carrier_hz is not None:
        yield row("Carrier", found.carrier_hz, lambda hz: f"{signed(hz, _decimals(found))} Hz")
    yield "SNR", "not known" if found.snr_db is None else f"{plain(found.snr_db, 1)} dB", None, ""
    yield "Bandwidth", f"{_hz_text(found.occupied_hz)} about {_hz_text(found.centre_hz)}", None, ""
    yield "Level", f"{plain(found.level_dbfs, 1)} dBFS", None, ""
    yield "Sampling", f"{link.samples_per_symbol:.4g} samples a symbol", None, ""
    if found.modulation_index is not None:
        yield "Tone spacing", f"{found.modulation_index:.3g} symbol rates", None, ""
    if found.mirrored is not None:
        yield "I and Q", "look swapped" if found.mirrored else "as they should be", None, ""


def _decimals(found: FoundLink) -> int:
    """A carrier is told to a hundred-thousandth of the symbol rate or so."""
    return min(max(5 - math.floor(math.log10(max(found.symbol_rate_hz.value, 1.0))), 0), 3)


def _rate_text(rate_hz: float) -> str:
    return f"{rate_hz:.8g}"


def _hz_text(hz: float) -> str:
    size = abs(hz)
    for unit, factor in (("MHz", 1e6), ("kHz", 1e3)):
        if size >= factor:
            return f"{hz / factor:.4g} {unit}".replace("-", "−")
    return f"{hz:.4g} Hz".replace("-", "−")


def document(heard: Heard, findings: Findings) -> dict[str, Json]:
    """The JSON document; what cannot be known is None."""
    return {
        "lidwatch": version(),
        "source": {
            "uri": heard.uri,
            "format": heard.format,
            "sample_rate_hz": heard.sample_rate_hz,
            "samples": int(heard.samples.size),
            "seconds": heard.seconds,
            "start_s": heard.start_s,
            "samples_lost": heard.lost,
            "nonfinite": heard.nonfinite,
            "notes": list(heard.notes),
        },
        "samples": {
            "level_dbfs": findings.level_dbfs,
            "peak_dbfs": findings.peak_dbfs,
            "clipped_pct": _clipped_pct(heard, findings),
            "dc_pct": [100.0 * value for value in _dc(heard, findings)],
        },
        "links": [_link_document(found) for found in findings.links],
        "reason": findings.reason or None,
    }


def _link_document(found: FoundLink) -> Json:
    def guess(part: Guess[T], value: Callable[[T], Json]) -> Json:
        other = None if part.runner_up is None else value(part.runner_up)
        return {"value": value(part.value), "confidence": part.confidence, "runner_up": other}

    return {
        "scheme": guess(found.scheme, lambda scheme: scheme.name),
        "symbol_rate_hz": guess(found.symbol_rate_hz, float),
        "pulse": guess(found.pulse, str),
        "carrier_hz": None if found.carrier_hz is None else guess(found.carrier_hz, float),
        "snr_db": found.snr_db,
        "samples_per_symbol": found.link.samples_per_symbol,
        "centre_hz": found.centre_hz,
        "occupied_hz": found.occupied_hz,
        "level_dbfs": found.level_dbfs,
        "modulation_index": found.modulation_index,
        "iq_swapped": found.mirrored,
        "notes": list(found.notes),
    }


def link_file_texts(heard: Heard, findings: Findings, given: LinkOptions) -> list[str]:
    """A link file for each link, strongest first, as `monitor.linkfile.read_link_file` takes it; limits as comments."""
    return [
        _link_file_of(heard, found, given, number, len(findings.links))
        for number, found in enumerate(findings.links, start=1)
    ]


def _link_file_of(heard: Heard, found: FoundLink, given: LinkOptions, number: int, count: int) -> str:
    rate, remark = (
        nominal_rate(found.symbol_rate_hz.value) if given.symbol_rate_hz is None else (given.symbol_rate_hz, "given")
    )
    name = given.name or ("" if count == 1 else f"link {number}")
    options = LinkOptions(
        symbol_rate_hz=rate,
        scheme=found.scheme.value.name,
        pulse=str(found.pulse.value) if given.pulse is None else _standing(given.pulse),
        carrier_hz=None if found.carrier_hz is None else round(found.carrier_hz.value, _decimals(found)),
        timing=given.timing,
        loop_bandwidth=given.loop_bandwidth,
        name=name or None,
    )
    snr = "" if found.snr_db is None else f", SNR {found.snr_db:.1f} dB"
    head = [
        f"Found by lidwatch probe in {heard.seconds:.3g} s of {heard.uri}{snr}.",
        *(f"{note}" for note in found.notes),
    ]
    remarks = {
        "symbol_rate_hz": remark,
        "scheme": _remark(found.scheme, lambda scheme: scheme.name),
        "pulse": _remark(found.pulse, str) if given.pulse is None else "given",
        "carrier_hz": "from the centre of the recording",
    }
    snr_limit = 15.0 if found.snr_db is None else max(round(found.snr_db - 6.0), 1)
    alarms: tuple[dict[str, str | float], ...] = (
        {"rule": "opening_pct < 40", "clear": 45, "hold_s": 2.0, "release_s": 5.0, "severity": "high"},
        {"rule": f"snr_db < {snr_limit:g}", "clear": snr_limit + 1, "hold_s": 5.0, "severity": "medium"},
    )
    doubtful = [
        key
        for key, guess, own in (("scheme", found.scheme, given.scheme), ("pulse", found.pulse, given.pulse))
        if guess.confidence < _LEAST_SURE and own is None
    ]
    return link_file_text(options, head=head, remarks=remarks, doubtful=doubtful, example_alarms=alarms)


def _standing(pulse: str) -> str:
    """A pulse as given, a file of taps by its whole path: the link file may lie in another folder."""
    path = pulse.removeprefix("taps:")
    return pulse if path == pulse else f"taps:{Path(path).absolute()}"


def _remark(guess: Guess[T], write: Callable[[T], str]) -> str:
    other = "" if guess.runner_up is None else f", else {write(guess.runner_up)}"
    return f"{100 * guess.confidence:.0f} % sure{other}"


def nominal_rate(measured_hz: float) -> tuple[float, str]:
    """The round or usual symbol rate that a measured one is meant to be, and a remark; as measured where there is none within 50 ppm.

    A link's clock is off by some ppm; only against the rate that was meant does a reading tell how much.
    """
    digits = 3 - math.ceil(math.log10(measured_hz))
    for candidate in (round(measured_hz, digits), *_USUAL_BD):
        ppm = 1e6 * (measured_hz / candidate - 1.0) if candidate > 0 else math.inf
        if abs(ppm) <= _ROUND_PPM:
            return candidate, f"measured {measured_hz:.8g}, {ppm:+.1f} ppm"
    return float(f"{measured_hz:.8g}"), "as measured"
