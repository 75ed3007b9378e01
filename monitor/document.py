"""What a run has to say, as the JSON document and as lines of text."""

import dataclasses
import json
import math
from collections.abc import Iterator, Sequence
from typing import Any

from dsp.reading import Reading
from monitor.errors import printable
from monitor.session import Outcome
from monitor.version import version
from monitor.views.wording import budget_rows, figure_groups, interval_text, plain, sentence

# a value of the document; its arrays and objects hold more of them
Json = None | bool | int | float | str | list[Any] | dict[str, Any]

_LABEL_WIDTH, _VALUE_WIDTH = 24, 18


def document(outcome: Outcome) -> dict[str, Json]:
    """The one JSON document of a run; figures that cannot be known are None, as is anything not finite.

    Beside the keys that are promised there are ``source.notes``, the source's defects in words, and ``lock.reason``, why nothing was
    measured (None if something was), and ``intervals``, 95 % ones of the reading's figures by their keys.
    """
    info, link, reading = outcome.source.info, outcome.link, outcome.reading
    locked = reading is not None
    per_second = outcome.samples / outcome.elapsed_s if outcome.elapsed_s > 0 else None
    carrier_hz = reading.carrier_hz if reading is not None else None
    found: dict[str, Json] = {
        "lidwatch": version(),
        "source": {
            "uri": info.uri,
            "format": info.format,
            "sample_rate_hz": info.sample_rate_hz,
            "samples": outcome.samples,
            "seconds": outcome.seconds,
            "gaps": outcome.gaps,
            "samples_lost": outcome.samples_lost,
            "nonfinite": outcome.nonfinite,
            "clipped_pct": 100.0 * outcome.clipped / outcome.samples if outcome.samples else None,
            "notes": list(outcome.source_notes),
        },
        "link": {
            "scheme": link.scheme.name if link else None,
            "levels": link.scheme.levels if link else None,
            "symbol_rate_hz": link.symbol_rate_hz if link else None,
            "samples_per_symbol": link.samples_per_symbol if link else None,
            "pulse": str(link.pulse) if link else None,
            "carrier_hz": link.carrier_hz if link and carrier_hz is None else carrier_hz,
            "identified": list(outcome.identified),
        },
        "lock": {
            "timing": locked,
            "carrier": None if link is None or link.scheme.kind != "carrier" else locked,
            "locked_pct": outcome.locked_pct,
            "slips": outcome.slips,
            "acquired_at_s": None if outcome.acquired_at is None else outcome.acquired_at / info.sample_rate_hz,
            "reason": outcome.reason or None,
        },
        "reading": reading_document(reading),
        "intervals": {key: list(pair) for key, pair in outcome.intervals.items()},
        "windows": {
            "count": outcome.windows.count,
            "symbols_each": outcome.windows.symbols_each,
            "worst": reading_document(outcome.windows.worst),
        },
        "alarms": list(outcome.alarms),
        "speed": {
            "samples_per_s": per_second,
            "times_real_time": None if per_second is None else per_second / info.sample_rate_hz,
            "coverage_pct": outcome.coverage_pct,
        },
    }
    return {key: _finite(value) for key, value in found.items()}


def links_document(links: Sequence[tuple[str, Outcome | None, str]]) -> dict[str, Json]:
    """The one JSON document of several links, each with its name, outcome and error.

    ``links`` holds, in the user's order, the document of each as it would be by itself, with ``name`` and ``error`` (None if all went well)
    before it; of one that could not be measured these two only.
    """
    found: list[Json] = []
    for name, outcome, error in links:
        own = document(outcome) if outcome is not None else {}
        own.pop("lidwatch", None)
        found.append({"name": name, "error": error or None, **own})
    return {"lidwatch": version(), "links": found}


def reading_document(reading: Reading | None) -> dict[str, Json] | None:
    """A reading by its keys; anything not finite becomes None."""
    if reading is None:
        return None
    return {key: _finite(value) for key, value in dataclasses.asdict(reading).items()}


def _finite(value: Json | tuple[Any, ...]) -> Json:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def to_json(outcome: Outcome) -> str:
    """The document of a run as JSON text, ASCII only."""
    return json_text(document(outcome))


def json_text(found: dict[str, Json]) -> str:
    """A document as JSON text, ASCII only."""
    return json.dumps(found, indent=2, allow_nan=False)


def text(outcome: Outcome) -> Iterator[str]:
    """The run in a few lines for a terminal."""
    info = outcome.source.info
    yield printable(f"{info.uri}: {info.format}, {info.sample_rate_hz:.12g} Hz, {outcome.seconds:.3f} s")
    if outcome.link is not None:
        found = ", ".join(key.removesuffix("_hz").replace("_", " ") for key in outcome.identified)
        yield printable(link_text(outcome) + (f" (found: {found})" if found else ""))
    for note in outcome.notes:
        yield printable(f"note: {note}")
    reading = outcome.reading
    if reading is None or reading.opening_pct is None:
        yield printable(f"nothing to measure: {outcome.reason}")
        return
    yield f"{lock_text(outcome)}, {reading.symbols} symbols"
    interval = interval_text(reading)
    yield f"opening {plain(reading.opening_pct, 1)} %" + (f" ({interval})" if interval else "")
    if reading.verdict is not None:
        yield printable(sentence(reading.verdict))
        for remark in outcome.remarks:
            yield printable(sentence(remark))
    rows = budget_rows(reading.budget) if reading.budget is not None else []
    if rows:
        yield "What closes the eye, points of opening:"
        for label, points in rows:
            yield f"  {label:{_LABEL_WIDTH}}{plain(points, 1)}"
    intervals = outcome.intervals
    for group in figure_groups(reading, intervals):
        yield f"{group.title}:"
        for figure in group.figures:
            if figure.label.startswith("… 95 %") and "ber" in intervals:
                continue  # told beside the rate
            interval = f"({figure.interval})" if figure.interval else ""
            yield f"  {figure.label:{_LABEL_WIDTH}}{figure.value:{_VALUE_WIDTH}}{interval}".rstrip()
    worst = outcome.windows.worst
    if worst is not None and worst.opening_pct is not None:
        yield f"worst of {outcome.windows.count} windows: {plain(worst.opening_pct, 1)} % open"


def link_text(outcome: Outcome) -> str:
    """What the link is, in one line; empty if unknown."""
    link = outcome.link
    if link is None:
        return ""
    name = f"{link.name}: " if link.name else ""
    return f"{name}{link.scheme.name} at {link.symbol_rate_hz:.6g} Bd, pulse {link.pulse}"


def lock_text(outcome: Outcome) -> str:
    """Whether the loops held the link, in a few words."""
    if outcome.reading is None:
        return "no lock"
    slips = f"{outcome.slips} slip{'s' * (outcome.slips != 1)}"
    return f"locked {outcome.locked_pct:.1f} % of the time, {slips}"
