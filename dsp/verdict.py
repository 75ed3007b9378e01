"""What the numbers say, in words: one sentence on what closes the eye most, and up to two on what else does.

No sentence says more than the figures that it is made of, and each of them is in it.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from dsp.diagnosis import Response
from dsp.reading import Reading

WORTH_TELLING = 5.0  # points
_CLEAN = 12.0  # points lost at the target, up to which an eye with no cause worth telling is called open
_HELPS = 3.0  # points of opening that a remedy must bring to be named
_ALONE = 0.7  # share of the ISI's energy from which one symbol is named for it
_TONE = 0.3  # share of the noise from which a tone is named for it
_NUMBERS = ("no", "one", "two", "three", "four", "five", "six", "seven", "eight", "nine", "ten", "eleven", "twelve")


@dataclass(frozen=True, slots=True)
class Evidence:
    """What the sentences are made of beside the reading. What is not known is None.

    ``timing_rms_ui``, ``phase_rms_deg``: jitter that closes the eye; ``tone_hz``, ``tone_pct``: an interfering tone as it shows at the
    symbol rate ``symbol_rate_hz`` and the points that it takes; ``opening_with_3db_more_pct``: with so much less noise.
    """

    target_ber: float
    symbol_rate_hz: float
    response: Response | None = None
    timing_rms_ui: float | None = None
    phase_rms_deg: float | None = None
    tone_hz: float | None = None
    tone_pct: float | None = None
    compression_db: float | None = None
    opening_with_3db_more_pct: float | None = None


def sentences(reading: Reading, evidence: Evidence) -> tuple[str, ...]:
    """The verdict, then at most two remarks; empty where there is no budget to tell of."""
    budget, at_target = reading.budget, reading.opening_at_ber_pct
    if budget is None or at_target is None or reading.opening_pct is None:
        return ()
    parts = {cause: getattr(budget, f"{cause}_pct") or 0.0 for cause in _TELL}
    causes = sorted((cause for cause in parts if parts[cause] >= WORTH_TELLING), key=lambda cause: -parts[cause])
    together = budget.unexplained_pct or 0.0
    rate = f"{evidence.target_ber:.0e}".replace("e-0", "e-")
    if not causes:
        if 100.0 - at_target <= _CLEAN:
            return (f"Nothing closes this eye: it stays {at_target:.0f} % open down to an error rate of {rate}.",)
        return (
            f"No single cause takes more than {WORTH_TELLING:.0f} of 100 points; together they leave the eye "
            f"{at_target:.0f} % open at an error rate of {rate}.",
        )
    first, *others = causes
    told = [_told(first, parts[first], reading, evidence, remedy=True)]
    told += [
        _told(cause, parts[cause], reading, evidence, remedy=False)
        for cause in others
        if parts[cause] >= 0.15 * parts[first]
    ][:2]
    if len(told) < 3 and together >= max(2.0 * WORTH_TELLING, 0.5 * parts[first]):
        told.append(
            f"Another {together:.0f} points are not any one cause's: they come back when several are mended together."
            if others
            else f"Another {together:.0f} points have no cause that these figures can name."
        )
    return tuple(told)


def _told(cause: str, points: float, reading: Reading, evidence: Evidence, *, remedy: bool) -> str:
    subject, verb = _TELL[cause](reading, evidence)
    takes = f"{verb} {points:.0f} of 100 points" if points < 99.5 else f"{verb} more than the whole opening"
    text = f"{subject} {takes}"
    help_text = _REMEDY[cause](reading, evidence) if remedy and cause in _REMEDY else ""
    return f"{text[0].upper()}{text[1:]}{help_text}."


def _isi(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    found = strongest(evidence.response) if evidence.response is not None else None
    if found is None:
        return "overlap of neighbouring symbols", "takes"
    lag, level_db, share = found
    far = _NUMBERS[abs(lag)] if abs(lag) < len(_NUMBERS) else str(abs(lag))
    if share < _ALONE:
        side = f"{far} symbol{'s' * (abs(lag) != 1)} {'late' if lag > 0 else 'early'}"
        return f"overlap of neighbouring symbols (the strongest {level_db:.1f} dB, {side})", "takes"
    if lag == 1:
        return f"what is left of the symbol before, {level_db:.1f} dB strong,", "takes"
    if lag == -1:
        return f"what shows of the next symbol already, {level_db:.1f} dB strong,", "takes"
    return f"an echo of {level_db:.1f} dB {far} symbols {'late' if lag > 0 else 'early'}", "takes"


def strongest(response: Response) -> tuple[int, float, float] | None:
    """Lag, level in dB and share of all ISI's energy of the symbol that disturbs most; None if none does."""
    taps = np.sum(response.taps**2, axis=(0, 1)) / response.taps.shape[0]
    taps = np.where(response.lags == 0, 0.0, taps)
    total = float(taps.sum())
    if total <= 0.0:
        return None
    top = int(np.argmax(taps))
    return int(response.lags[top]), 10.0 * math.log10(float(taps[top])), float(taps[top]) / total


def _noise(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    budget = reading.budget
    noise = budget.noise_pct if budget is not None else None
    if evidence.tone_hz is not None and evidence.tone_pct is not None and noise and evidence.tone_pct > _TONE * noise:
        return (
            f"noise, {evidence.tone_pct:.0f} points of it from an interfering tone seen at {_hertz(evidence.tone_hz)} "
            f"(give or take whole multiples of {_hertz(evidence.symbol_rate_hz)}),",
            "takes",
        )
    snr = f" (SNR {reading.snr_db:.1f} dB)" if reading.snr_db is not None else ""
    return f"noise{snr}", "takes"


def _timing(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    if reading.periodic_jitter_ui is not None and reading.periodic_jitter_hz is not None:
        swing = f"{reading.periodic_jitter_ui:.3f} UI at {_hertz(reading.periodic_jitter_hz)}"
        return f"timing jitter, with a swing of {swing},", "takes"
    rms = f" of {evidence.timing_rms_ui:.3f} UI rms" if evidence.timing_rms_ui is not None else ""
    return f"timing jitter{rms}", "takes"


def _phase(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    rms = f" of {evidence.phase_rms_deg:.1f} degrees rms" if evidence.phase_rms_deg is not None else ""
    return f"phase jitter{rms} of the carrier", "takes"


def _levels(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    linearity = f" (linearity {reading.level_linearity:.2f})" if reading.level_linearity is not None else ""
    return f"uneven levels{linearity}", "take"


def _imbalance(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    if reading.iq_gain_db is None or reading.iq_skew_deg is None:
        return "imbalance of I and Q", "takes"
    return f"imbalance of I and Q ({reading.iq_gain_db:+.1f} dB, {reading.iq_skew_deg:+.1f} degrees)", "takes"


def _clipping(reading: Reading, evidence: Evidence) -> tuple[str, str]:
    if evidence.compression_db is None or evidence.compression_db < 0.05:
        return "clipping or compression", "takes"
    return f"clipping or compression (outermost level {evidence.compression_db:.1f} dB low)", "takes"


def _by_equaliser(reading: Reading, evidence: Evidence) -> str:
    equaliser, opening = reading.equaliser, reading.opening_pct
    if equaliser is None or opening is None or equaliser.opening_pct - opening < _HELPS:
        return ""
    article = "an" if equaliser.taps == 11 else "a"
    better = f"from {opening:.0f} to {equaliser.opening_pct:.0f} %"
    return f"; {article} {equaliser.taps}-tap equaliser would bring the opening {better}"


def _by_signal(reading: Reading, evidence: Evidence) -> str:
    more, opening = evidence.opening_with_3db_more_pct, reading.opening_pct
    if more is None or opening is None or more - opening < _HELPS:
        return ""
    return f"; 3 dB more signal would bring the opening from {opening:.0f} to {more:.0f} %"


_Teller = Callable[[Reading, Evidence], tuple[str, str]]
_TELL: dict[str, _Teller] = {
    "isi": _isi, "noise": _noise, "timing": _timing, "phase": _phase, "levels": _levels, "iq": _imbalance, "clipping": _clipping,
}  # fmt: skip
_REMEDY: dict[str, Callable[[Reading, Evidence], str]] = {"isi": _by_equaliser, "noise": _by_signal}


def _hertz(value: float) -> str:
    size = abs(value)
    if size >= 1e6:
        return f"{value / 1e6:.6g} MHz"
    return f"{value / 1e3:.5g} kHz" if size >= 1e4 else f"{value:.4g} Hz"
