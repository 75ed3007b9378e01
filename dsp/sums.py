"""Arrays that are always added together, in one piece of memory."""

import math
from functools import cache

import numpy as np
from numpy.typing import NDArray


def laid_out(*shapes: tuple[int, ...]) -> tuple[NDArray[np.float64], list[NDArray[np.float64]]]:
    """A vector of zeros, and views of these shapes that share it out, one behind the other."""
    size, places = _places(shapes)
    whole = np.zeros(size)
    return whole, [whole[place].reshape(shape) for place, shape in zip(places, shapes, strict=True)]


@cache
def _places(shapes: tuple[tuple[int, ...], ...]) -> tuple[int, list[slice]]:
    places, at = [], 0
    for shape in shapes:
        places.append(slice(at, at + math.prod(shape)))
        at += math.prod(shape)
    return at, places
