"""What may be said of the loops, on the command line and in a link file; no imports, so that options are checked at once."""

from typing import Final, Literal

Timing = Literal["gardner", "mueller-muller", "derivative"]
TIMINGS: Final[tuple[Timing, ...]] = ("gardner", "mueller-muller", "derivative")
LOOP_BANDWIDTH: Final = (1e-5, 0.05)  # BnT, per symbol
