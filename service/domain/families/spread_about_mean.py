"""The spread of normal measurements whose mean is not known."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import ClassVar

import numpy as np

from service.domain.checks import Check, normality_check, order_checks
from service.domain.families.base import Column, Increments, Start, Way, plural, reals, refuse
from service.domain.families.normal_variance import NormalVariance
from service.sequential.double import Double, plus, two_product
from service.sequential.fixed_sample import FixedSample
from service.sequential.region import Region
from service.sequential.studentised import Sums, squares_about_mean
from service.sequential.ways import looks_to_lower

# A measurement that is not zero is at least this: squares keep all their digits.
SMALLEST_REAL = 1e-100


class SpreadAboutMean(NormalVariance):
    """
    One observation is one measurement; the total is the sum of the squared deviations from their own mean.

    The region runs over degrees of freedom, of which the first measurement brings none.
    """

    known: ClassVar[tuple[str, ...]] = ()
    may_know: ClassVar[tuple[str, ...]] = ("mean",)
    carries: ClassVar[tuple[str, ...]] = ("count", "sum", "squares", "squares_rest")
    fewest_units: ClassVar[int] = 2
    lost: ClassVar[int] = 1

    def idle_units(self, start: Start) -> int:
        """See `Family`: the first measurement."""
        return 0 if start.carried and start.carried[0] > 0.0 else self.lost

    def place(self, sums: Sequence[Double], known: Mapping[str, float]) -> tuple[Double, Double]:
        """See `Family`."""
        count, total, squares, rest = sums
        freedom = np.maximum(count.value - self.lost, 0.0)
        about_mean = squares_about_mean(Sums(count.value, total, plus(squares, rest)))
        return Double(freedom, np.zeros_like(freedom)), Double(about_mean, np.zeros_like(about_mean))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down = looks_to_lower(region, start.progress, start.total, 1.0)
        high = max(0.0, float(region.limits(np.array([start.progress + 1.0])).upper[0]) - start.total)
        if self.idle_units(start):
            apart = f"2 measurements at least {math.sqrt(2.0 * high):.6g} apart"
            return down and _to_come(down[0] + 1, down[1]), Way(2, None, high, apart)
        count, mean = start.carried[0], start.carried[1] / start.carried[0]
        # A measurement at a distance u from the mean of n adds u**2 * n/(n + 1).
        growth = (count + 1.0) / count
        far = f"a measurement at least {math.sqrt(high * growth):.6g} from {mean:.6g}"
        return down and _near(*down, mean, growth), Way(1, None, high, far)

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        found = super().fixed_sample(lower, upper, risks, known)
        return found and replace(found, size=found.size + self.lost)

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        size = np.abs(value.values)
        refuse(value.require((size == 0.0) | (size >= SMALLEST_REAL), "must be 0 or at least 1e-100 in magnitude"))
        square, count = two_product(value.values, value.values), len(value.values)
        carried = (np.ones(count), value.values, square.high, square.low)
        return Increments(np.ones(count, np.int64), np.zeros(count), np.zeros(count), carried)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: independent, without drift, of normal shape."""
        values = seen.carried[1] if seen.carried else np.zeros(0)
        return *order_checks(values, "measurements"), normality_check(values, "measurements")


def _near(count: int, squares: float, mean: float, growth: float) -> Way:
    if count > 1:
        return _to_come(count, squares)
    distance = math.sqrt(max(0.0, squares) * growth)
    return Way(1, None, squares, f"a measurement at most {distance:.6g} from {mean:.6g}")


def _to_come(count: int, squares: float) -> Way:
    words = f"{plural(count, 'measurement')} that raise the sum of squares about the average by at most {squares:.6g}"
    return Way(count, None, squares, words)
