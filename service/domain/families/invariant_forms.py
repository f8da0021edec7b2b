"""Measurements of unknown spread in an invariant plan: single, in pairs, and in two arms one at a time."""

from collections.abc import Mapping, Sequence
from typing import ClassVar

import numpy as np

from service.domain.checks import Check, equal_spread_check, normality_check, order_checks
from service.domain.errors import Fault
from service.domain.families.base import Column, Increments, Start, reals, refuse
from service.domain.families.invariant import Coming, Invariant, Known, sums_of
from service.sequential.double import Double, FloatArray, minus, plus, two_product, two_sum
from service.sequential.invariant import Looks, one_sample, two_samples
from service.sequential.invariant_ways import after_one_sample, after_two_samples
from service.sequential.studentised import Studentised, Sums, squares_about_mean
from service.sequential.studentised import one_sample as studentised_one
from service.sequential.studentised import two_samples as studentised_two

# A difference that is not zero is at least this: squares keep all their digits.
SMALLEST_REAL = 1e-100
ARMS = ("a", "b")


class InvariantNormal(Invariant):
    """One observation is one measurement."""

    name: ClassVar[str] = "normal"
    parameter: ClassVar[str] = "standardised mean, (mean - reference)/sigma"
    may_know: ClassVar[tuple[str, ...]] = ("reference",)
    carries: ClassVar[tuple[str, ...]] = ("count", "sum", "sum_rest", "squares", "squares_rest")
    fewest_units: ClassVar[int] = 2
    noun: ClassVar[str] = "a measurement"
    plural: ClassVar[str] = "measurements"

    def studied(self, sums: Sequence[Double]) -> tuple[Looks, Studentised]:
        """See `Invariant`."""
        return one_sample(sums[0].value), studentised_one(_one(sums))

    def balanced(self, units: FloatArray) -> Looks:
        """See `Invariant`."""
        return one_sample(units)

    def coming(self, start: Start, known: Known) -> Coming | None:
        """See `Invariant`."""
        count = start.carried[0]
        if count < 1.0:
            return None
        sums = _one(sums_of(start))
        mean = float(sums.total.value[0]) / count
        following = after_one_sample(count, mean, float(squares_about_mean(sums)[0]))
        return Coming(one_sample(np.array([count + 1.0])), following, known["reference"] + mean, self.noun)

    def increments(self, columns: Mapping[str, Column], known: Known) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        difference = two_sum(value.values, np.full_like(value.values, -known["reference"]))
        refuse(_tiny(value, difference.high, "must be the reference or at least 1e-100 away from it"))
        return _increments(difference)

    def checks(self, seen: Increments, known: Known) -> tuple[Check, ...]:
        """See `Family`: independent, without drift, of normal shape; any spread will do."""
        values = seen.carried[1] if seen.carried else np.zeros(0)
        return *order_checks(values, self.plural), normality_check(values, self.plural)

    def units_of(self, sums: Sequence[Double]) -> Double:
        """See `Invariant`."""
        return sums[0]


class InvariantDifference(InvariantNormal):
    """One observation is a measurement in each arm; their differences b - a are one sample."""

    name: ClassVar[str] = "normal_difference"
    parameter: ClassVar[str] = "standardised mean of the differences b less a, (mean - reference)/sigma"
    axis: ClassVar[str] = "pairs"
    value_field: ClassVar[str] = "a"
    required: ClassVar[tuple[str, ...]] = ("b",)
    noun: ClassVar[str] = "a pair whose b less a is a value"
    plural: ClassVar[str] = "differences b less a"

    def increments(self, columns: Mapping[str, Column], known: Known) -> Increments:
        """See `Family`."""
        a, b = columns["a"], columns["b"]
        refuse([fault for arm in (a, b) for fault in reals(arm, "must be a number", np.isfinite(arm.values))])
        reference = np.full_like(a.values, known["reference"])
        difference = minus(two_sum(b.values, -a.values), Double(reference, np.zeros_like(reference)))
        rule = "must give, less a and the reference, zero or at least 1e-100"
        refuse(_tiny(b, difference.high, rule))
        return _increments(difference)


class InvariantTwoSample(Invariant):
    """One observation is one measurement and its arm; both arms have one unknown spread."""

    name: ClassVar[str] = "normal_two_sample"
    parameter: ClassVar[str] = "standardised difference of the means, (mean of b - mean of a)/sigma"
    required: ClassVar[tuple[str, ...]] = ("arm",)
    words: ClassVar[Mapping[str, Mapping[str, float]]] = {"arm": {"a": 0.0, "b": 1.0}}
    carries: ClassVar[tuple[str, ...]] = tuple(
        f"{name}_{arm}" for arm in ARMS for name in ("count", "sum", "squares", "squares_rest")
    )
    samples: ClassVar[int] = 2
    fewest_units: ClassVar[int] = 4
    looks_at_arms: ClassVar[bool] = True

    def studied(self, sums: Sequence[Double]) -> tuple[Looks, Studentised]:
        """See `Invariant`."""
        a, b = _arms(sums)
        return two_samples(a.count, b.count), studentised_two(a, b)

    def balanced(self, units: FloatArray) -> Looks:
        """See `Invariant`."""
        return two_samples(np.ceil(units / 2.0), np.floor(units / 2.0))

    def truncation_rule(self, sample_number: float) -> str | None:
        """See `Family`."""
        fewest = super().truncation_rule(sample_number)
        return fewest or ("must be even: as many in each arm" if sample_number % 2.0 else None)

    def coming(self, start: Start, known: Known) -> Coming | None:
        """See `Invariant`; in the arm with fewer measurements, b where they have as many."""
        arms = _arms(sums_of(start))
        counts = float(arms[0].count[0]), float(arms[1].count[0])
        in_b = counts[0] >= counts[1]
        own, other = (arms[1], arms[0]) if in_b else (arms[0], arms[1])
        n, m = float(own.count[0]), float(other.count[0])
        if m < 1.0 or n + m < 2.0:  # noqa: PLR2004
            return None
        average = float(own.total.value[0]) / n if n else 0.0
        # In units of the other arm's average the sums would cancel; the averages do so less.
        difference = average - float(other.total.value[0]) / m
        squares = float(squares_about_mean(own)[0] + squares_about_mean(other)[0])
        following = after_two_samples((m, n), difference, squares)
        after = np.array([n + 1.0]), np.array([m])
        return Coming(two_samples(*after), following, average, f"a measurement in {ARMS[in_b]}", is_mirrored=not in_b)

    def increments(self, columns: Mapping[str, Column], known: Known) -> Increments:
        """See `Family`."""
        value, is_b = columns["value"], columns["arm"].values
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        refuse(_tiny(value, value.values, "must be 0 or at least 1e-100 in magnitude"))
        square, count = two_product(value.values, value.values), len(value.values)
        terms = (np.ones(count), value.values, square.high, square.low)
        carried = tuple(is_in * term for is_in in (1.0 - is_b, is_b) for term in terms)
        return Increments(np.ones(count, np.int64), np.zeros(count), np.zeros(count), carried)

    def checks(self, seen: Increments, known: Known) -> tuple[Check, ...]:
        """See `Family`: of the measurements less the average of their arm; and whether both arms spread alike."""
        carried = seen.carried or (np.zeros(0),) * len(self.carries)
        is_a, is_b = carried[0] > 0.0, carried[4] > 0.0
        arms = carried[1][is_a], carried[5][is_b]
        residuals = np.zeros(len(is_a))
        for is_in, values in zip((is_a, is_b), arms, strict=True):
            residuals[is_in] = values - np.mean(values) if len(values) else 0.0
        noun = "measurements, each less the average of its arm,"
        return *order_checks(residuals, noun), equal_spread_check(*arms), normality_check(residuals, noun)

    def units_of(self, sums: Sequence[Double]) -> Double:
        """See `Invariant`."""
        return plus(sums[0], sums[4])


def _increments(difference: Double) -> Increments:
    """One sample of these differences from the reference, their squares without rounding."""
    square, count = two_product(difference.high, difference.high), len(difference.high)
    rest = square.low + (2.0 * difference.high * difference.low + difference.low * difference.low)
    carried = (np.ones(count), difference.high, difference.low, square.high, rest)
    return Increments(np.ones(count, np.int64), np.zeros(count), np.zeros(count), carried)


def _tiny(column: Column, differences: FloatArray, rule: str) -> list[Fault]:
    size = np.abs(differences)
    return column.require((size == 0.0) | (size >= SMALLEST_REAL), rule)


def _one(sums: Sequence[Double]) -> Sums:
    count, total, total_rest, squares, squares_rest = sums
    return Sums(count.value, plus(total, total_rest), plus(squares, squares_rest))


def _arms(sums: Sequence[Double]) -> tuple[Sums, Sums]:
    a, b = (Sums(count.value, total, plus(squares, rest)) for count, total, squares, rest in (sums[:4], sums[4:]))
    return a, b
