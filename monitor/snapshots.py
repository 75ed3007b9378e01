"""From what a run gathered to what a view shows."""

from monitor.session import Outcome
from monitor.snapshot import Snapshot


def snapshot_of(outcome: Outcome) -> Snapshot:
    """The whole run as one picture."""
    info, link, reading = outcome.source.info, outcome.link, outcome.reading
    locked = reading is not None and reading.opening_pct is not None
    notes = list(outcome.source.notes)
    if outcome.nonfinite:
        notes.append(f"{outcome.nonfinite} samples were not finite and count as 0")
    if outcome.clipped:
        notes.append(f"{outcome.clipped} samples stood at the end stops of their format")
    if outcome.samples_lost:
        notes.append(f"{outcome.samples_lost} samples lost in {outcome.gaps} gaps")
    if not locked and outcome.reason:
        notes.append(outcome.reason)
    words = ""
    if link is not None:
        name = f"{link.name}: " if link.name else ""
        words = f"{name}{link.scheme.name}, {link.symbol_rate_hz:.6g} Bd, pulse {link.pulse}"
    share = 100.0 * outcome.locked_samples / outcome.samples if outcome.samples else 0.0
    return Snapshot(
        image=outcome.image if locked else None,
        reading=reading if locked else None,
        source_text=f"{info.uri} · {info.format} · {info.sample_rate_hz:g} Hz",
        link_text=words,
        lock_text=f"locked {share:.1f} % of the time, {outcome.slips} slips" if locked else "no lock",
        notes=tuple(notes),
        seconds=outcome.seconds,
        coverage_pct=outcome.coverage_pct,
    )
