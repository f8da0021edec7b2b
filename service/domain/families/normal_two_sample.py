"""Measurements in two arms, taken one at a time in any order: the difference of their means."""

import math
from collections.abc import Mapping, Sequence
from typing import ClassVar

import numpy as np

from service.domain.checks import Check, normality_check, order_checks, spread_check
from service.domain.families.base import Column, Increments, Start, Way, reals, refuse
from service.domain.families.normal_difference import NormalDifference
from service.sequential.double import Double
from service.sequential.region import Region
from service.sequential.two_samples import Arm, pairs_worth, reaching, variance_share

NAMES = ("a", "b")


class NormalTwoSample(NormalDifference):
    """
    One observation is one measurement and its arm, looked at when it is reported.

    The axis is the information on the difference, counted in pairs: as many in one arm as in the other are so many. The
    total is that times the difference of the averages. Nothing is known until both arms have a measurement.
    """

    name: ClassVar[str] = "normal_two_sample"
    counted: ClassVar[str] = "information times the difference of the averages"
    axis: ClassVar[str] = "information, in pairs"
    value_field: ClassVar[str] = "value"
    required: ClassVar[tuple[str, ...]] = ("arm",)
    words: ClassVar[Mapping[str, Mapping[str, float]]] = {"arm": {"a": 0.0, "b": 1.0}}
    has_exposure: ClassVar[bool] = True
    carries: ClassVar[tuple[str, ...]] = ("count_a", "sum_a", "count_b", "sum_b")
    no_bias: ClassVar[str | None] = "Depends on the arms in which later measurements would have been taken."

    @property
    def has_figures_of_units(self) -> bool:
        """Exact figures suppose a look after each pair, and pairs are not what the sample number counts."""
        return False

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value, arm = columns["value"], columns["arm"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        is_b, is_a, count = arm.values, 1.0 - arm.values, len(value.values)
        carried = (is_a, is_a * value.values, is_b, is_b * value.values)
        return Increments(np.ones(count, np.int64), np.zeros(count), np.zeros(count), carried)

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: of the measurements less the average of their arm, in the standard deviations of the arm."""
        is_a, of_a, is_b, of_b = seen.carried or (np.zeros(0),) * len(self.carries)
        residuals = np.zeros(len(is_a))
        for is_in, values, sigma in ((is_a, of_a, known["sigma_a"]), (is_b, of_b, known["sigma_b"])):
            inside = is_in > 0.0
            residuals[inside] = (values[inside] - np.mean(values[inside])) / sigma if np.any(inside) else 0.0
        noun = "measurements, each less the average of its arm,"
        spread = spread_check(residuals, 1.0, noun, averages=len(NAMES))
        return *order_checks(residuals, noun), spread, normality_check(residuals, noun)

    def place(self, sums: Sequence[Double], known: Mapping[str, float]) -> tuple[Double, Double]:
        """See `Family`."""
        count_a, sum_a, count_b, sum_b = sums
        a, b = Arm(count_a.value, sum_a), Arm(count_b.value, sum_b)
        progress, total = pairs_worth(a, b, known["sigma_a"], known["sigma_b"])
        return Double(progress, np.zeros_like(progress)), Double(total, np.zeros_like(total))

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        counts, sums = start.carried[::2], start.carried[1::2]
        if not any(counts):
            down, up = super().ways(region, start, known)
            return _of_a_pair(down), _of_a_pair(up)
        # The arm with fewer measurements comes next, b where they have as many.
        in_b = counts[0] >= counts[1]
        after = (counts[0] + (not in_b), counts[1] + in_b)
        zero = Double(np.zeros(1), np.zeros(1))
        a, b = (Arm(np.array([float(count)]), zero) for count in after)
        progress = float(pairs_worth(a, b, known["sigma_a"], known["sigma_b"])[0][0])
        limits = region.limits(np.array([progress]))
        share = variance_share(known["sigma_a"], known["sigma_b"])

        def way(limit: float, *, is_low: bool) -> Way | None:
            if not math.isfinite(limit):
                return None
            value = reaching(limit, (after[0], after[1]), (sums[0], sums[1]), share, in_b=in_b)
            bound = "at most" if is_low == in_b else "at least"
            words = f"a measurement in {NAMES[in_b]} of {bound} {value:.6g}"
            return Way(1, progress - start.progress, limit - start.total, words)

        return way(float(limits.lower[0]), is_low=True), way(float(limits.upper[0]), is_low=False)


def _of_a_pair(way: Way | None) -> Way | None:
    return way and Way(2, 1.0, way.total, way.words)
