"""A stretch of samples on its way through the chain, with what is known of its losses."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Samples = NDArray[np.float32] | NDArray[np.complex64]


@dataclass(frozen=True, slots=True)
class Block:
    """Consecutive samples of one stream.

    Attributes
    ----------
    samples
        Shape ``(n,)``, float32 (real) or complex64 (I/Q), C-contiguous, finite; full scale of an integer format is 1.0.
    start
        Index of the first sample in the stream; lost samples count, so that ``start`` keeps time.
    lost
        Samples missing just before this block.
    clipped, nonfinite
        Samples of this block at the format's end stops, and samples that were NaN or Inf and were set to 0.
    """

    samples: Samples
    start: int
    lost: int = 0
    clipped: int = 0
    nonfinite: int = 0
