"""
The checks that families make of what they suppose, each with its sentence for people.

A family's `checks` picks from these; what is lacking for one is said in its place. No check has any part in a decision.
"""

from collections.abc import Callable
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from service.sequential.checks import counts, order, shapes
from service.sequential.checks.finding import Finding, Lacking
from service.sequential.double import BoolArray, FloatArray

# Below the first a sentence says that the figure speaks against the supposition, below the second strongly.
UNUSUAL, VERY_UNUSUAL = 0.05, 0.001

RUNS_METHOD = "Wald-Wolfowitz runs test, exact"


class Supposition(StrEnum):
    """What a plan supposes of the stream of observations."""

    INDEPENDENCE = "independence"
    STEADINESS = "steadiness"
    DISPERSION = "dispersion"
    SPREAD = "spread"
    SHAPE = "shape"


@dataclass(frozen=True)
class Check:
    """
    One check of one supposition.

    Attributes:
        name: Short and fixed, for programs.
        method: The statistical method by its usual name.
        finding: What it found, or what was lacking.
        sentence: The same for people.
    """

    name: str
    supposition: Supposition
    method: str
    finding: Finding | Lacking
    sentence: str

    @property
    def found(self) -> Finding | None:
        """What was found, None where the check could not be made."""
        return self.finding if isinstance(self.finding, Finding) else None


def order_checks(values: FloatArray, noun: str) -> tuple[Check, ...]:
    """Independence and steadiness of values that are alike while nothing drifts, in order of observation."""
    return runs_check(values, noun), autocorrelation_check(values, noun), trend_check(values, noun)


def runs_check(values: FloatArray, noun: str) -> Check:
    """Runs on either side of the median; of 0 and 1, the runs of like results."""
    found = order.runs(values, noun)
    return Check("runs", Supposition.INDEPENDENCE, RUNS_METHOD, found, _runs_words(found))


def even_runs_check(values: FloatArray, weights: FloatArray, noun: str) -> Check:
    """Runs of what each observation counts; where sizes or exposures differ, their order would show instead."""
    if len(weights) and np.any(weights != weights[0]):
        found = Lacking("needs observations of one size or exposure; the autocorrelation does not")
        return Check("runs", Supposition.INDEPENDENCE, RUNS_METHOD, found, _runs_words(found))
    return runs_check(values, noun)


def autocorrelation_check(values: FloatArray, noun: str) -> Check:
    """Whether neighbours resemble each other."""
    found = order.autocorrelation(values, noun)
    words = _directed(
        found,
        lambda f: f"The correlation of neighbours is {f.figure:.4g}",
        ("each resembles the one before it", "each differs from the one before it"),
    )
    return Check("autocorrelation", Supposition.INDEPENDENCE, "lag-one autocorrelation", found, words)


def trend_check(values: FloatArray, noun: str) -> Check:
    """Whether the values rise or fall in the order of observation."""
    found = order.trend(values, noun)
    words = _directed(
        found,
        lambda f: f"The rank correlation of the {noun} with their order is {f.figure:.4g}",
        (f"the {noun} rise", f"the {noun} fall"),
    )
    return Check("trend", Supposition.STEADINESS, "Mann-Kendall trend test", found, words)


def halves_check(nonconforming: FloatArray, sizes: FloatArray, noun: str) -> Check:
    """The proportion in the first half of the units against the second; groups are not cut."""
    ends = np.cumsum(sizes)
    cut = 1 + int(np.argmin(np.abs(ends - ends[-1] / 2.0))) if len(ends) else 0
    first = int(np.sum(nonconforming[:cut])), int(np.sum(sizes[:cut]))
    second = int(np.sum(nonconforming[cut:])), int(np.sum(sizes[cut:]))
    found = counts.halves(first, second, noun)
    words = _directed(
        found,
        lambda _: f"{first[0]} of the first {first[1]} units are {noun}, and {second[0]} of the last {second[1]}",
        ("the proportion rises", "the proportion falls"),
    )
    return Check("halves", Supposition.STEADINESS, "Fisher's exact test of two halves", found, words)


def centre_check(events: FloatArray, exposures: FloatArray, noun: str) -> Check:
    """Whether counts come early or late along the exposure."""
    found = counts.centre(events, exposures, noun)
    return _centre(found, noun, "the exposure", "Laplace's test given the total")


def failures_centre_check(times: FloatArray, failed: BoolArray) -> Check:
    """Whether failures come early or late along the unit-time."""
    found = shapes.even_failures(times, failed)
    return _centre(found, "failures", "the unit-time", "Laplace's test given the number of failures, exact up to 100")


def rate_dispersion_check(events: FloatArray, exposures: FloatArray, noun: str) -> Check:
    """Counts over exposures against Poisson counts of one rate."""
    found = counts.rate_dispersion(events, exposures, noun)
    return _dispersion(found, "Poisson counts of one rate", "dispersion test given the total")


def proportion_dispersion_check(nonconforming: FloatArray, sizes: FloatArray, noun: str) -> Check:
    """Groups against binomial ones of one proportion."""
    found = counts.proportion_dispersion(nonconforming, sizes, noun)
    return _dispersion(found, "groups of one proportion", "chi-squared test of homogeneity given the total")


def spread_check(values: FloatArray, sigma: float, noun: str, averages: int = 1) -> Check:
    """The standard deviation against the one that the plan says is known."""
    found = shapes.spread(values, sigma, noun, averages)
    words = _directed(
        found,
        lambda f: f"The standard deviation of the {noun} is {f.figure:.4g} times the plan's sigma",
        (
            "sigma is too small and the risks are larger than promised",
            "sigma is too large and the sample larger than needed",
        ),
    )
    return Check("spread", Supposition.SPREAD, "chi-squared test of a variance, exact", found, words)


def equal_spread_check(a: FloatArray, b: FloatArray) -> Check:
    """The standard deviations of two arms against each other."""
    found = shapes.equal_spread(a, b)
    words = _directed(
        found,
        lambda f: f"The standard deviation in b is {f.figure:.4g} times that in a",
        ("b varies more", "b varies less"),
    )
    return Check("equal_spread", Supposition.SPREAD, "F test of two variances, exact", found, words)


def normality_check(values: FloatArray, noun: str) -> Check:
    """The shape of measurements."""
    found = shapes.normality(values, noun)
    of = noun
    if len(values) > shapes.MOST_FOR_SHAPIRO:
        of = f"{shapes.MOST_FOR_SHAPIRO} of the {noun}, evenly spaced through the stream,"
    words = _directed(
        found, lambda f: f"Shapiro and Wilk's W of {of} is {f.figure:.4g} (normal ones come near 1)", None
    )
    return Check("shape", Supposition.SHAPE, "Shapiro-Wilk test", found, words)


def agelessness_check(times: FloatArray, failed: BoolArray) -> Check:
    """The shape of lives with suspensions: whether units age."""
    found = shapes.agelessness(times, failed)
    suspended = " The suspensions make this approximate." if not np.all(failed) else ""
    words = _directed(
        found,
        lambda f: (
            f"By age, failures fall at {f.figure:.4g} of the total time on test on average, where 0.5 is expected"
        ),
        ("units wear out", "units fail early in life"),
    )
    is_made = isinstance(found, Finding)
    method = "cumulative total time on test (Gail-Gastwirth)"
    return Check("shape", Supposition.SHAPE, method, found, words + (suspended if is_made else ""))


def _centre(found: Finding | Lacking, noun: str, along: str, method: str) -> Check:
    words = _directed(
        found,
        lambda f: f"On average the {noun} fall at {f.figure:.4g} of {along}, where 0.5 is expected",
        (f"the {noun} become more frequent", f"the {noun} become rarer"),
    )
    return Check("centre", Supposition.STEADINESS, method, found, words)


def _dispersion(found: Finding | Lacking, like: str, method: str) -> Check:
    words = _directed(
        found,
        lambda f: f"The counts vary {f.figure:.4g} times as much as {like} would",
        ("something else varies as well", "they are more alike than chance makes them"),
    )
    return Check("dispersion", Supposition.DISPERSION, method, found, words)


def _runs_words(found: Finding | Lacking) -> str:
    def counted(finding: Finding) -> str:
        return f"{finding.figure:.0f} runs of like results, where {finding.expected:.1f} are expected"

    return _directed(found, counted, ("results alternate", "like follows like"))


def _directed(found: Finding | Lacking, counted: Callable[[Finding], str], directions: tuple[str, str] | None) -> str:
    """What was counted, then whether it is usual; for an unusual figure the reading of a high or a low one."""
    if isinstance(found, Lacking):
        return f"Not made: {found.reason}."
    sentence = counted(found)
    chance = f"(p = {found.p_value:.2g})" if found.p_value > 0.0 else "(p < 1e-300)"
    if found.p_value >= UNUSUAL:
        return f"{sentence}: nothing unusual {chance}."
    strength = "very unusual" if found.p_value < VERY_UNUSUAL else "unusual"
    if directions is None or found.expected is None:
        return f"{sentence}: {strength} {chance}."
    reading = directions[0] if found.figure > found.expected else directions[1]
    return f"{sentence}: {strength} {chance}, as when {reading}."
