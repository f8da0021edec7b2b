"""
All outcomes of a test of whole totals, enumerated, with their numbers of paths, and ordered by stages.

Unclever on purpose: a dictionary of totals is moved look by look, in fractions; every outcome is kept.
"""

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from math import exp, factorial

Limits = Callable[[Fraction], tuple[float, float]]


@dataclass(frozen=True)
class End:
    """
    One outcome: after which look, at which progress and total, on which side, and how many (weighted) paths lead to it.

    Attributes:
        cause: "above", "below" or "wall".
        paths: From the origin: numbers for units, sums of products of e^x/x! for counts.
        from_first: The same for paths that begin with an increase.
    """

    look: int
    progress: Fraction
    total: int
    cause: str
    paths: Fraction
    from_first: Fraction


def ends(
    limits: Limits,
    looks: list[Fraction],
    wall: Fraction | None,
    ways: Callable[[Fraction, int], Fraction],
    first: Fraction,
    most: int,
) -> list[End]:
    """
    Every outcome up to the last of these looks.

    Args:
        ways: The weight of an increase over some progress.
        first: Progress used up by the first increase.
        most: Totals above it are left out.
    """
    found, now = [], Fraction(0)
    alive, from_first = {0: Fraction(1)}, {1: Fraction(1)}
    for number, look in enumerate(looks, start=1):
        begin = max(now, first)
        moved = _moved(alive, ways, look - now, most)
        moved_first = _moved(from_first, ways, look - begin, most)
        lower, upper = limits(look)
        alive, from_first = {}, {}
        for total, paths in sorted(moved.items()):
            cause = "below" if total <= lower else "above" if total >= upper else None
            if cause is None and wall is not None and look >= wall:
                cause = "wall"
            if cause is None:
                alive[total], from_first[total] = paths, moved_first.get(total, Fraction(0))
            else:
                found.append(End(number, look, total, cause, paths, moved_first.get(total, Fraction(0))))
        from_first = {total: paths for total, paths in from_first.items() if paths}
        now = look
    return found


def _moved(
    alive: dict[int, Fraction], ways: Callable[[Fraction, int], Fraction], over: Fraction, most: int
) -> dict[int, Fraction]:
    moved: dict[int, Fraction] = {}
    for total, paths in alive.items():
        for increase in range(most - total + 1):
            weight = ways(over, increase)
            if weight:
                moved[total + increase] = moved.get(total + increase, Fraction(0)) + paths * weight
    return moved


def units(over: Fraction, increase: int) -> Fraction:
    """Binomial coefficients."""
    n = int(over)
    return Fraction(factorial(n) // factorial(increase) // factorial(n - increase)) if increase <= n else Fraction(0)


@lru_cache(maxsize=1000)
def counts(over: Fraction, increase: int) -> Fraction:
    """Poisson terms without the rate."""
    return over**increase / factorial(increase)


def chance_of_units(end: End, p: float) -> float:
    """The probability of an outcome of units."""
    return float(end.paths * Fraction(p) ** end.total * (1 - Fraction(p)) ** int(end.progress - end.total))


def chance_of_counts(end: End, rate: float) -> float:
    """The probability of an outcome of counts."""
    return float(end.paths) * rate**end.total * exp(-rate * float(end.progress))


def by_stages(found: list[End]) -> list[End]:
    """Furthest up first: exits above, earliest first; decisions at the wall by total; exits below, latest first."""
    order = {"above": 0, "wall": 1, "below": 2}

    def place(end: End) -> tuple[int, int, int]:
        when = {"above": end.look, "wall": 0, "below": -end.look}[end.cause]
        return order[end.cause], when, -end.total

    return sorted(found, key=place)
