"""What stands behind the figures, in words and rows; no Qt here. What is not known is left out or said to be so."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from dsp.diagnosis import Diagnosis, EqualiserTrial, ErrorCurve, Response
from dsp.reading import Reading
from monitor.views.wording import Figure, plain, power_of_ten, rate_interval, signed

PageName = Literal["glance", "causes", "response", "errors", "decisions", "remedies", "figures"]
PAGES: tuple[PageName, ...] = ("glance", "causes", "response", "errors", "decisions", "remedies", "figures")
PAGE_TITLES: dict[PageName, str] = {
    "glance": "At a glance",
    "causes": "What closes the eye",
    "response": "Response of the link",
    "errors": "Error rate",
    "decisions": "Constellation",
    "remedies": "What would open it",
    "figures": "All figures",
}
# rates below this are drawn at it and told as below it
LEAST_BER = 1e-18
_LEAST_NEIGHBOUR = 0.01
NO_NEIGHBOUR = "No neighbour is stronger than −40 dB."


def next_page(page: PageName, *, back: bool = False) -> PageName:
    """The page after or before this one, round and round."""
    return PAGES[(PAGES.index(page) + (-1 if back else 1)) % len(PAGES)]


@dataclass(frozen=True, slots=True)
class Remedy:
    """What would change, in words, with the opening before and after in per cent where both are known."""

    words: str
    before_pct: float | None = None
    after_pct: float | None = None


def equaliser_words(trial: EqualiserTrial) -> str:
    """What the equaliser is: its kind and taps."""
    spacing = "" if math.isclose(trial.spacing_ui, 1.0) else f" {trial.spacing_ui:.3g} UI apart"
    if trial.kind == "linear":
        return f"Linear equaliser, {trial.taps.size} taps{spacing}"
    return f"Decision feedback, {trial.taps.size} + {trial.feedback.size} taps{spacing}"


def linear_trials(diagnosis: Diagnosis) -> list[EqualiserTrial]:
    """The linear equalisers that were tried, fewest taps first."""
    return sorted(
        (trial for trial in diagnosis.equalisers if trial.kind == "linear"), key=lambda trial: trial.taps.size
    )


def chosen_trials(reading: Reading, diagnosis: Diagnosis) -> list[EqualiserTrial]:
    """The linear equaliser that the reading names, or else the one that opens most, then those that feed decisions back."""
    linear = linear_trials(diagnosis)
    named = [t for t in linear if reading.equaliser is not None and t.taps.size == reading.equaliser.taps]
    best = named or sorted(linear, key=lambda trial: (-trial.opening_pct, trial.taps.size))
    return [*best[:1], *(trial for trial in diagnosis.equalisers if trial.kind != "linear")]


def remedies(reading: Reading, diagnosis: Diagnosis) -> list[Remedy]:
    """What would open the eye, as far as it was tried or reckoned: equalisers, signal, roll-off, thresholds, instant."""
    trials = chosen_trials(reading, diagnosis)
    rows = [Remedy(equaliser_words(trial), trial.before_pct, trial.opening_pct) for trial in trials]
    if diagnosis.opening_with_3db_more_pct is not None:
        rows.append(Remedy("3 dB more signal", diagnosis.opening_pct, diagnosis.opening_with_3db_more_pct))
    if diagnosis.fitting_roll_off is not None:
        rows.append(Remedy(f"A matched filter of roll-off {plain(diagnosis.fitting_roll_off, 2)} would fit better"))
    if diagnosis.best_thresholds:
        each = ", ".join(signed(value, 3) for value in diagnosis.best_thresholds)
        rows.append(
            Remedy(f"Best fixed {'threshold' if len(diagnosis.best_thresholds) == 1 else 'thresholds'}: {each}")
        )
    if reading.best_instant_ui is not None:
        rows.append(Remedy(f"Best instant: {signed(reading.best_instant_ui, 3)} UI from where the loop decides"))
    return rows


def strengths(response: Response) -> NDArray[np.float64]:
    """How strong each lag is against the cursor, whatever rail it comes from and goes to: rms over rails, shape ``(n,)``."""
    return np.asarray(np.sqrt(np.mean(np.sum(np.square(response.taps), axis=1), axis=0)))


def lag_words(lag: int) -> str:
    """Where a symbol stands against the one decided."""
    if lag == 0:
        return "the symbol itself"
    count = "1 symbol" if abs(lag) == 1 else f"{abs(lag)} symbols"
    return f"{count} {'late' if lag > 0 else 'early'}"


def strongest(response: Response, most: int) -> list[Figure]:
    """The strongest neighbours with their strength against the cursor; those below -40 dB are left out."""
    strength = np.where(response.lags == 0, 0.0, strengths(response))
    order = [int(k) for k in np.argsort(-strength)[:most] if strength[k] >= _LEAST_NEIGHBOUR]
    return [
        Figure(lag_words(int(response.lags[k])), f"{plain(20.0 * math.log10(float(strength[k])), 1)} dB") for k in order
    ]


def span_below(curve: ErrorCurve, ber: float) -> tuple[float, float] | None:
    """The stretch about the curve's least value in which it lies below ``ber``, straight in the logarithm; None where it nowhere does."""
    known = np.isfinite(curve.ber)
    at, level = curve.at[known], np.log10(np.maximum(curve.ber[known], 1e-300)) - math.log10(ber)
    if at.size == 0 or level.min() >= 0:
        return None
    best = int(np.argmin(level))
    ends = []
    for step in (-1, 1):
        here = best
        while 0 <= here + step < at.size and level[here + step] < 0:
            here += step
        end, beyond = float(at[here]), here + step
        if 0 <= beyond < at.size:
            end += float(level[here] / (level[here] - level[beyond]) * (at[beyond] - at[here]))
        ends.append(end)
    return ends[0], ends[1]


def error_figures(reading: Reading, diagnosis: Diagnosis) -> list[Figure]:
    """Error rate with its interval, and the jitter's two parts; what is not known says so."""
    low, high = reading.ber_low, reading.ber_high
    interval = "not known" if low is None or high is None else rate_interval(low, high)
    rows = [
        Figure("Bit error rate", "not known" if reading.ber is None else power_of_ten(reading.ber)),
        Figure("… 95 %", interval),
    ]
    jitter = diagnosis.jitter
    if jitter is None:
        return [*rows, Figure("Jitter in parts", "not known")]
    return [
        *rows,
        Figure("Deterministic jitter", f"{plain(jitter.deterministic_pp_ui, 3)} UI pp"),
        Figure("Random jitter", f"{plain(jitter.random_rms_ui, 4)} UI rms"),
        Figure(f"Total at {power_of_ten(jitter.at_ber)}", f"{plain(jitter.total_pp_ui, 3)} UI pp"),
    ]


def cause_figures(diagnosis: Diagnosis) -> list[Figure]:
    """What tells more of a cause than its points: a tone's frequency, compression and what it does to the phase."""
    rows = []
    if diagnosis.tone_hz is not None:
        rows.append(Figure("Tone in the noise", f"{plain(diagnosis.tone_hz, 1)} Hz"))
    if diagnosis.compression_db is not None:
        rows.append(Figure("Compression at the outer level", f"{plain(diagnosis.compression_db, 2)} dB"))
    if diagnosis.am_pm_deg is not None:
        rows.append(Figure("Phase turned with amplitude", f"{signed(diagnosis.am_pm_deg, 1)}°"))
    return rows


def decades(curves: Sequence[ErrorCurve], target: float | None) -> tuple[int, int]:
    """The axis of error rates as powers of ten, from 0 to below the least of curves and target, not far below the target or 1e-12."""
    least = [float(np.nanmin(curve.ber)) for curve in curves if np.isfinite(curve.ber).any()]
    if target is not None:
        least.append(target)
    bottom = LEAST_BER if target is None else max(1e-6 * target, LEAST_BER)
    lowest = max(min(least, default=1e-6), 10.0 * bottom)
    return min(round(math.log10(lowest) - 1.0 - 0.49), -4), 0
