"""What a tile says of a link, in words; no Qt here."""

import math
from dataclasses import dataclass

from dsp.picture import EyeImage
from dsp.reading import Reading
from monitor.state import LinkState
from monitor.views.live_wording import by_urgency, calls, clock, key_figures
from monitor.views.wording import plain


@dataclass(frozen=True, slots=True)
class TileWords:
    """``state``: in the figure's place where there is none; ``foot``: the last line, the alarm first if one calls."""

    state: str
    foot: str


def tile_words(link: LinkState) -> TileWords:
    """What a tile says of a link beside its name and figure."""
    state = link.state
    if link.failure:
        return TileWords("Failed", link.failure)
    calling = [alarm for alarm in by_urgency(state.alarms) if calls(alarm)]
    if state.ended:
        word = "Ended"
    elif state.locked:
        word = "Locked"
    else:
        word = "No lock" if state.locks else "Searching" if state.seconds else "Waiting"
    if calling:
        many = f"{len(calling)} alarms: " if len(calling) > 1 else ""
        return TileWords(word, f"{many}{calling[0].name}, {clock(calling[0].since_s)}")
    reading = state.snapshot.reading
    if reading is None:
        return TileWords(word, state.searching)
    parts = [f"{figure.label} {figure.value}" for figure in key_figures(reading)[:1]]
    quiet = len(state.alarms)
    if quiet:
        parts.insert(0, "1 alarm seen" if quiet == 1 else f"{quiet} alarms seen")
    if state.ended:
        parts.insert(0, "ended")
    if state.samples_lost:
        parts.append(f"{plain(state.samples_lost, 0)} lost")
    return TileWords(word, "  ·  ".join(parts))


def shown_opening(link: LinkState) -> float | None:
    """The opening that a tile shows; None where there is none, or none any more because the watch failed."""
    reading = link.state.snapshot.reading
    opening = reading.opening_pct if reading is not None and not link.failure else None
    return opening if opening is not None and math.isfinite(opening) else None


def closing_rail(image: EyeImage, reading: Reading | None) -> int:
    """The rail with the least open eye, of those in the image."""
    if reading is None or not reading.eyes:
        return 0
    each = max(len(image.levels) - 1, 1)
    openings = [eye.opening_pct for eye in reading.eyes]
    known = [(opening, number) for number, opening in enumerate(openings) if opening is not None]
    return min(min(known)[1] // each, len(image.rails) - 1) if known else 0
