"""The state of one watched stream at one moment: all that a view is told."""

from dataclasses import dataclass

from dsp.diagnosis import Diagnosis
from dsp.picture import EyeImage
from dsp.reading import Reading


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What every view shows; ready-made words and figures, nothing left to compute.

    Attributes
    ----------
    image
        The eye; None when there is none to draw.
    reading
        The newest figures; None when nothing could be measured.
    source_text, link_text, lock_text
        Where the samples come from, what the link is, and whether the loops hold it: one line each, may be empty.
    notes
        Defects and remarks, a sentence each; without lock, what was tried.
    seconds
        Length of the stream seen so far, in seconds of the stream.
    coverage_pct
        Share of the symbols whose trace is in the eye; below 100 when the machine could not keep up.
    diagnosis
        What stands behind the figures, up to a second older than they; None as they are.
    """

    image: EyeImage | None = None
    reading: Reading | None = None
    source_text: str = ""
    link_text: str = ""
    lock_text: str = ""
    notes: tuple[str, ...] = ()
    seconds: float | None = None
    coverage_pct: float | None = None
    diagnosis: Diagnosis | None = None
