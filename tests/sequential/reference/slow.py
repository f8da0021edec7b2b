"""
One observation at a time, in 60 digits, straight from the densities.

Unclever on purpose: the likelihood of each observation under each hypothesis is written down from its density, the
logarithms are added, and after each observation the sum is compared with the thresholds.
"""

from dataclasses import dataclass
from fractions import Fraction

from mpmath import exp, log, mp, mpf, pi, sqrt

mp.dps = 60


@dataclass(frozen=True)
class Plan:
    """The plan's numbers as they stand in its document."""

    family: str
    h0: float
    h1: float
    accept: float
    reject: float
    sigma: float = 1.0
    wall: float | None = None
    cap: int | None = None


@dataclass(frozen=True)
class Answer:
    """What the slow test answers; `used` counts the observations, `position` is the unit or exposure at the end."""

    decision: str
    cause: str | None
    used: int
    units: int
    position: mpf
    total: mpf
    evidence: mpf


def density(plan: Plan, parameter: float, result: float, weight: float) -> mpf:
    """Likelihood of one observation, constants that do not depend on the parameter left out."""
    theta, x, w = mpf(parameter), mpf(result), mpf(weight)
    if plan.family == "bernoulli":
        return theta**x * (1 - theta) ** (w - x)
    if plan.family == "poisson":
        return exp(-theta * w) * theta**x
    if plan.family == "exponential":
        return exp(-w / theta) / theta**x
    sigma = mpf(plan.sigma)
    return exp(-((x - theta) ** 2) / (2 * sigma**2)) / (sigma * sqrt(2 * pi))


def step(plan: Plan, result: float, weight: float) -> mpf:
    """Ln of the likelihood ratio of one observation."""
    return log(density(plan, plan.h1, result, weight)) - log(density(plan, plan.h0, result, weight))


def written(number: float) -> Fraction:
    """The number as a person writes it: a hundred exposures of 0.57 are 57, whatever binary digits make of them."""
    return Fraction(repr(number))


def digits(number: Fraction) -> mpf:
    """A fraction in 60 digits."""
    return mpf(number.numerator) / number.denominator


def run(plan: Plan, observations: list[tuple[float, float]]) -> Answer:
    """
    The whole test.

    Args:
        plan: Its numbers.
        observations: Pairs of the result (0/1 or a count, a measurement, failed or not) and its weight (size, exposure,
            time; 1 for a measurement).
    """
    if plan.family == "exponential":
        return _in_time(plan, observations)
    evidence, position, total, units = mpf(0), Fraction(0), mpf(0), 0
    for used, (result, weight) in enumerate(observations, start=1):
        evidence += step(plan, result, weight)
        position += written(weight)
        total += mpf(result)
        units += int(weight) if plan.family == "bernoulli" else 1
        decision, cause = _judged(plan, evidence), "boundary"
        if decision == "continue" and plan.wall is not None and position >= written(plan.wall):
            decision, cause = ("reject" if evidence > 0 else "accept"), "truncation"
        if decision != "continue":
            return Answer(decision, cause, used, units, digits(position), total, evidence)
    return Answer("continue", None, len(observations), units, digits(position), total, evidence)


def _judged(plan: Plan, evidence: mpf) -> str:
    if evidence <= mpf(plan.accept):
        return "accept"
    return "reject" if evidence >= mpf(plan.reject) else "continue"


def _in_time(plan: Plan, observations: list[tuple[float, float]]) -> Answer:
    """Between failures the evidence moves at the constant speed 1/h0 - 1/h1; a failure makes it jump by ln(h0/h1)."""
    speed = 1 / mpf(plan.h0) - 1 / mpf(plan.h1)
    drifts_to, threshold = ("accept", plan.accept) if speed < 0 else ("reject", plan.reject)
    jumps_to = "reject" if drifts_to == "accept" else "accept"
    evidence, elapsed, total = mpf(0), Fraction(0), mpf(0)
    for used, (failed, time) in enumerate(observations, start=1):
        position = digits(elapsed)
        elapsed += written(time)
        end = digits(elapsed)
        reaches = position + (mpf(threshold) - evidence) / speed
        wall = digits(written(plan.wall)) if plan.wall is not None else None
        if reaches <= end and (wall is None or reaches <= wall):
            return Answer(drifts_to, "boundary", used, used, reaches, total, mpf(threshold))
        if wall is not None and plan.wall is not None and written(plan.wall) <= elapsed:
            evidence += speed * (wall - position)
            forced = drifts_to if plan.cap is not None else ("reject" if evidence > 0 else "accept")
            return Answer(forced, "truncation", used, used, wall, total, evidence)
        evidence += speed * (end - position)
        position = end
        if failed:
            evidence += log(mpf(plan.h0) / mpf(plan.h1))
            total += 1
        judged = _judged(plan, evidence)
        if judged != "continue":
            return Answer(judged, "boundary", used, used, position, total, evidence)
        if plan.cap is not None and total >= plan.cap:
            return Answer(jumps_to, "truncation", used, used, position, total, evidence)
    return Answer("continue", None, len(observations), len(observations), digits(elapsed), total, evidence)
