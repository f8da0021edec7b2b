"""
Exact figures the slow way: every total after every look, in exact fractions or many digits, one parameter at a time.

Unclever on purpose: the limits are asked for one look after the other, probabilities are a dictionary, and nothing is
shared with the fast computations.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
from scipy.linalg import expm

Limits = Callable[[int], tuple[float, float]]


@dataclass(frozen=True)
class Figures:
    """Probabilities of both ends, two moments, and the probability of still sampling after each look."""

    below: float
    above: float
    mean: float
    second: float
    survival: list[float]

    def quantile(self, q: float) -> int:
        """The first look after which sampling goes on with at most 1 - q."""
        return next(n for n, alive in enumerate(self.survival) if alive <= 1 - q)


def looks(
    limits: Limits,
    jumps: Mapping[int, Fraction],
    last: int,
    *,
    first: int = 0,
    total: int = 0,
    rest_above: bool = False,
) -> Figures:
    """
    Follow the totals look by look to `last`, from `total` after look `first`.

    Args:
        limits: The lower and upper limit after look n; both decide on equality.
        jumps: Probability of each increase; what is missing to one lies beyond every limit if `rest_above`.
    """
    alive = {total: Fraction(1)}
    below = above = mean = second = Fraction(0)
    survival = [1.0]
    for n in range(first + 1, last + 1):
        lower, upper = limits(n)
        moved: dict[int, Fraction] = {}
        for height, probability in alive.items():
            mean += probability
            second += (2 * (n - first) - 1) * probability
            left = probability
            for jump, chance in jumps.items():
                moved[height + jump] = moved.get(height + jump, Fraction(0)) + probability * chance
                left -= probability * chance
            above += left if rest_above else 0
        below += sum((p for height, p in moved.items() if height <= lower), Fraction(0))
        above += sum((p for height, p in moved.items() if height >= upper), Fraction(0))
        alive = {height: p for height, p in moved.items() if lower < height < upper}
        survival.append(float(sum(alive.values(), Fraction(0))))
    return Figures(float(below), float(above), float(mean), float(second), survival)


def in_time(
    lower_at: Callable[[int], float],
    upper_at: Callable[[int], float],
    wall: float,
    ends_below: Callable[[int], bool],
    cap: int,
    rate: float,
) -> tuple[float, float, float]:
    """
    P(below), P(above) and mean time of a test of failures, by the matrix exponential of its generator.

    States 0 … cap - 1 are totals, one absorbs above, and the last adds up the time of all others. At the wall
    `ends_below` parts the totals.
    """
    moments = sorted({wall, *(m for k in range(cap) for m in (lower_at(k), upper_at(k)) if 0 < m < wall)})
    state, now, below = np.zeros(cap + 2), 0.0, 0.0
    state[0] = 1.0
    for moment in moments:
        middle = (now + moment) / 2
        generator = np.zeros((cap + 2, cap + 2))
        for k in range(cap):
            rejects = k + 1 >= cap or upper_at(k + 1) > middle
            generator[k, k] = -rate
            generator[k, cap if rejects else k + 1] += rate
            generator[k, cap + 1] = 1.0
        state, now = state @ expm(generator * (moment - now)), moment
        for k in range(cap):
            if lower_at(k) <= moment or (moment == wall and ends_below(k)):
                below, state[k] = below + state[k], 0.0
            elif moment == wall:
                state[cap] += state[k]
    return below, float(state[cap]), float(state[cap + 1])
