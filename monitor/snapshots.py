"""From what a run gathered to what a view shows."""

from monitor.document import link_text, lock_text
from monitor.errors import printable
from monitor.session import Outcome
from monitor.snapshot import Snapshot


def snapshot_of(outcome: Outcome) -> Snapshot:
    """The whole run as one picture; without a lock, the reason among the notes and no figures."""
    info = outcome.source.info
    notes = outcome.notes if outcome.measured else (*outcome.notes, f"nothing to measure: {outcome.reason}")
    return Snapshot(
        image=outcome.image if outcome.measured else None,
        reading=outcome.reading if outcome.measured else None,
        diagnosis=outcome.diagnosis if outcome.measured else None,
        source_text=printable(f"{info.uri} · {info.format} · {info.sample_rate_hz:.12g} Hz"),
        link_text=printable(link_text(outcome)),
        lock_text=lock_text(outcome),
        notes=tuple(printable(note) for note in notes),
        seconds=outcome.seconds,
        coverage_pct=outcome.coverage_pct,
    )
