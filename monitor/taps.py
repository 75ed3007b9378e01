"""Taps of the equaliser that a reading names, as a file: text, one tap a line, which ``--pulse taps:FILE`` takes again."""

from pathlib import Path

from dsp.equaliser import receive_taps
from dsp.errors import DspError
from monitor.errors import InputError
from monitor.session import Outcome
from monitor.version import version


def save_taps(outcome: Outcome, path: Path) -> None:
    """Write receive filter and equaliser in one, after lines of explanation that begin with #. Raises InputError."""
    link, reading, diagnosis = outcome.link, outcome.reading, outcome.diagnosis
    chosen = reading.equaliser if reading is not None else None
    if link is None or chosen is None or diagnosis is None:
        raise InputError(f"--save-taps {path}: too few symbols were measured for an equaliser; record for longer")
    trial = next(trial for trial in diagnosis.equalisers if trial.taps.size == chosen.taps and trial.kind == "linear")
    try:
        taps, per_symbol = receive_taps(trial, link, complex_in=outcome.source.info.complex_samples)
    except DspError as error:
        raise InputError(f"--save-taps {path}: {error}") from None
    lines = [
        f"# lidwatch {version()}: receive filter of pulse {link.pulse} and an equaliser of {chosen.taps} taps in one",
        f"# {link.scheme.name} at {link.symbol_rate_hz:.12g} Bd, {per_symbol:.12g} taps a symbol, carrier taken out before",
        f"# opening of symbols it was not fitted on: {trial.before_pct:.1f} % without it, {trial.opening_pct:.1f} % with it",
        *(f"{tap.real!r}{tap.imag:+}j" if isinstance(tap, complex) else repr(tap) for tap in taps.tolist()),
    ]
    try:
        path.write_text("\n".join(lines) + "\n", encoding="ascii")
    except OSError as error:
        raise InputError(f"--save-taps {path}: {error.strerror or error}; choose another place") from None
