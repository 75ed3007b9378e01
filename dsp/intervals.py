"""How far figures may be off: the jackknife over stretches of the symbols, which minds that neighbours depend on each other."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import stdtrit

LEAST_STRETCHES = 4
LOGARITHMIC = frozenset({"ber"})  # figures whose error is a factor
EXTREME = frozenset(
    {"crossing_pattern_pp_ui"}
)  # that shrink as symbols are added: what is still to come off counts as error


@dataclass(frozen=True, slots=True)
class Estimate:
    """A figure with its standard error, and the degrees of freedom behind that; both of its logarithm where ``logarithmic``."""

    value: float
    error: float
    freedom: float
    logarithmic: bool = False

    def about(self, value: float | None) -> "Estimate":
        """The same error about a value that was found in another way."""
        return self if value is None else replace(self, value=float(value))

    def with_more(self, variance: float) -> "Estimate":
        """With the variance of something else beside, which is known well."""
        total = self.error**2 + variance
        if variance <= 0.0:
            return self
        # Satterthwaite's degrees of freedom; see `difference`
        freedom = min(self.freedom * (total / self.error**2) ** 2, 1e6) if self.error > 0.0 else 1e6
        return replace(self, error=math.sqrt(total), freedom=freedom)

    def interval(self) -> tuple[float, float]:
        """The 95 % interval, by Student's t."""
        reach = float(stdtrit(self.freedom, 0.975)) * self.error
        if self.logarithmic:
            return self.value * math.exp(-reach), self.value * math.exp(min(reach, 700.0))
        return self.value - reach, self.value + reach


def difference(now: Estimate, before: Estimate) -> Estimate:
    """How much a figure has changed between two times that share no symbols.

    Degrees of freedom by B. L. Welch, Biometrika 34, 1947, and F. E. Satterthwaite, Biometrics Bulletin 2, 1946 (from memory).
    """
    variance = now.error**2 + before.error**2
    parts = now.error**4 / now.freedom + before.error**4 / before.freedom
    freedom = max(variance**2 / parts, 1.0) if parts > 0 else now.freedom
    return Estimate(now.value - before.value, math.sqrt(variance), freedom)


def jackknife(
    whole: Mapping[str, float | None], without: Sequence[Mapping[str, float | None]], sizes: Sequence[int]
) -> dict[str, Estimate]:
    """Estimates of the figures in ``whole``, of which ``without[i]`` were computed without the stretch of ``sizes[i]`` symbols.

    None or not finite in any of them: no estimate. Source: F. M. T. A. Busing, E. Meijer, R. van der Leeden, Statistics and
    Computing 9, 1999, delete-m jackknife for unequal m (from memory); the stretches are long against the memory of link and loops.
    """
    if len(without) < LEAST_STRETCHES:
        return {}
    size = np.asarray(sizes, dtype=np.float64)
    parts = size.sum() / size
    # stretches of unequal length are worth fewer equal ones
    freedom = size.sum() ** 2 / float(size @ size) - 1.0
    found = {}
    for key, value in whole.items():
        values = [value, *(one[key] for one in without)]
        numbers = np.asarray([math.nan if one is None else one for one in values], dtype=np.float64)
        logarithmic = key in LOGARITHMIC
        if logarithmic:
            numbers = np.log(np.maximum(numbers, 1e-300))
        if not np.all(np.isfinite(numbers)) or value is None:
            continue
        pseudo = parts * numbers[0] - (parts - 1.0) * numbers[1:]
        centre = float(len(parts) * numbers[0] - np.sum((1.0 - 1.0 / parts) * numbers[1:]))
        variance = float(np.mean((pseudo - centre) ** 2 / (parts - 1.0)))
        if key in EXTREME:
            variance += (numbers[0] - centre) ** 2
        found[key] = Estimate(float(value), math.sqrt(variance), float(freedom), logarithmic)
    return found
