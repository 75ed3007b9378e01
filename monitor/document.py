"""What a run has to say, as the JSON document and as lines of text."""

import dataclasses
import json
import math
from collections.abc import Iterator
from typing import Any

from dsp.reading import Reading
from monitor.session import Outcome

VERSION = "0.1.0"


def document(outcome: Outcome) -> dict[str, Any]:
    """The one JSON document of a run; figures that cannot be known are None."""
    info, link = outcome.source.info, outcome.link
    rate = info.sample_rate_hz
    seconds = outcome.seconds
    locked = outcome.acquired_at is not None and outcome.reading is not None
    per_second = outcome.samples / outcome.elapsed_s if outcome.elapsed_s > 0 else None
    reading = outcome.reading
    return {
        "lidwatch": VERSION,
        "source": {
            "uri": info.uri,
            "format": info.format,
            "sample_rate_hz": rate,
            "samples": outcome.samples,
            "seconds": seconds,
            "gaps": outcome.gaps,
            "samples_lost": outcome.samples_lost,
            "nonfinite": outcome.nonfinite,
            "clipped_pct": 100.0 * outcome.clipped / outcome.samples if outcome.samples else None,
            "notes": list(outcome.source.notes),
        },
        "link": {
            "scheme": link.scheme.name if link else None,
            "levels": link.scheme.levels if link else None,
            "symbol_rate_hz": link.symbol_rate_hz if link else None,
            "samples_per_symbol": link.samples_per_symbol if link else None,
            "pulse": str(link.pulse) if link else None,
            "carrier_hz": reading.carrier_hz if reading else None,
            "identified": list(outcome.identified),
        },
        "lock": {
            "timing": locked,
            "carrier": None if link is None or link.scheme.kind != "carrier" else locked,
            "locked_pct": 100.0 * outcome.locked_samples / outcome.samples if outcome.samples else 0.0,
            "slips": outcome.slips,
            "acquired_at_s": outcome.acquired_at / rate if locked and outcome.acquired_at is not None else None,
            "reason": None if locked else outcome.reason,
        },
        "reading": reading_document(reading),
        "windows": {
            "count": outcome.windows.count,
            "symbols_each": outcome.windows.symbols_each,
            "worst": reading_document(outcome.windows.worst),
        },
        "alarms": [],
        "speed": {
            "samples_per_s": per_second,
            "times_real_time": per_second / rate if per_second is not None else None,
            "coverage_pct": outcome.coverage_pct,
        },
    }


def reading_document(reading: Reading | None) -> dict[str, Any] | None:
    """A reading by its keys; anything not finite becomes None."""
    return None if reading is None else _finite(dataclasses.asdict(reading))


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def to_json(outcome: Outcome) -> str:
    """The document as JSON text, without NaN."""
    return json.dumps(_finite(document(outcome)), indent=2, allow_nan=False)


_LINES = (
    ("opening", "opening_pct", "{:.1f} %"),
    ("eye width", "width_ui", "{:.3f} UI"),
    ("best instant", "best_instant_ui", "{:+.3f} UI from the loop's"),
    ("noise margin", "noise_margin_db", "{:.1f} dB"),
    ("SNR", "snr_db", "{:.1f} dB"),
    ("MER", "mer_db", "{:.1f} dB"),
    ("EVM", "evm_pct", "{:.2f} %"),
    ("bit error rate, estimated", "ber", "{:.2g}"),
    ("crossing spread", "crossing_rms_ui", "{:.4f} UI rms"),
    ("clock", "clock_ppm", "{:+.2f} ppm"),
    ("clock jitter", "jitter_rms_ui", "{:.4f} UI rms"),
    ("carrier", "carrier_hz", "{:+.2f} Hz"),
    ("phase jitter", "phase_rms_deg", "{:.2f} deg rms"),
)


def text(outcome: Outcome) -> Iterator[str]:
    """The run in a few lines for a terminal."""
    info, link, reading = outcome.source.info, outcome.link, outcome.reading
    yield f"{info.uri}: {info.format}, {info.sample_rate_hz:g} Hz, {outcome.seconds:.3f} s"
    if link is not None:
        name = f"{link.name}: " if link.name else ""
        yield f"{name}{link.scheme.name} at {link.symbol_rate_hz:.6g} Bd, pulse {link.pulse}" + (
            f" (found: {', '.join(key.removesuffix('_hz').replace('_', ' ') for key in outcome.identified)})"
            if outcome.identified
            else ""
        )
    for note in outcome.source.notes:
        yield f"note: {note}"
    if outcome.nonfinite:
        yield f"note: {outcome.nonfinite} samples were not finite and count as 0"
    if outcome.clipped:
        yield f"note: {outcome.clipped} samples at the end stops ({100.0 * outcome.clipped / outcome.samples:.2g} %)"
    if reading is None or reading.opening_pct is None:
        yield f"no lock: {outcome.reason}"
        return
    share = 100.0 * outcome.locked_samples / outcome.samples
    yield f"locked {share:.1f} % of the time, {outcome.slips} slips, {reading.symbols} symbols"
    for label, key, form in _LINES:
        value = getattr(reading, key)
        if value is not None:
            yield f"  {label:26s} {form.format(value)}"
    worst = outcome.windows.worst
    if worst is not None and worst.opening_pct is not None:
        yield f"  worst of {outcome.windows.count} windows        {worst.opening_pct:.1f} % open"
