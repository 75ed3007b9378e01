"""Stretches of a stream kept by the way: few enough for constant memory, spread evenly over all of it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

LONGEST = 512  # symbols of one stretch
MOST = 48  # stretches; over that every other one is given up
EAGER, OFTEN = 32, 4  # stretches of a run that are all offered; after them one of so many


@dataclass(frozen=True, slots=True)
class Stretch:
    """Neighbouring symbols of one unbroken run, in level units.

    ``waves``: of each rail ``(2, n)``: at the decision instants and half a symbol after them; ``decided`` ``(rails, n)``. The
    first and last `dsp.eye.HALO` symbols are there as neighbours.
    """

    waves: tuple[NDArray[np.float32], ...]
    decided: NDArray[np.float32]


class Stretches:
    """At most `MOST` stretches of all that were offered, evenly spread over them, oldest first."""

    def __init__(self) -> None:
        self._kept: list[Stretch] = []
        self._offered = 0
        self._every = 1

    def __iter__(self) -> Iterator[Stretch]:
        return iter(self._kept)

    def __len__(self) -> int:
        return len(self._kept)

    def offer(self, stretch: Stretch, stands_for: int = 1) -> None:
        """Keep a stretch if its turn has come. ``stands_for`` counts those that it was chosen from."""
        if -self._offered % self._every < stands_for:
            self._kept.append(stretch)
        self._offered += stands_for
        if len(self._kept) > MOST:
            self._kept = self._kept[::2]
            self._every *= 2

    def merge(self, other: Stretches) -> None:
        """Offer another's stretches, which come after."""
        for stretch in other:
            self.offer(stretch, other._every)
