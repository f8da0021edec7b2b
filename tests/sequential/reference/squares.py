"""
Sums of squares of normal measurements between two parallel lines, as integrals one inside the other.

Slow on purpose: the density of the total after each look is the integral over the measurement that came last, all the
way down, piece by piece by Gauss-Legendre points of an angle, whose sine squared takes the roots from both ends of a
piece. A few looks only.
"""

import math
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf, erfc

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Squares:
    """
    Sampling goes on while slope * looks - low < total < slope * looks + high; `points` for each piece.

    Where `sized`, each walk is weighed by the size of its first measurement.
    """

    slope: float
    low: float
    high: float
    variance: float
    points: int = 40
    sized: bool = False

    def lower(self, look: int) -> float:
        """The limit below after a look; totals are never below 0."""
        return max(0.0, self.slope * look - self.low)

    def upper(self, look: int) -> float:
        """The limit above after a look."""
        return self.slope * look + self.high

    def density(self, look: int, total: Array) -> Array:
        """Of the totals at a look, having gone on at all looks before; shape as given."""
        spread = math.sqrt(self.variance)
        if look == 1:
            size = np.sqrt(np.where(total > 0.0, total, math.inf))
            return self._normal(size / spread) / (spread * (1.0 if self.sized else size))
        low, high = self.lower(look - 1), np.minimum(total, self.upper(look - 1))
        # The size of the last measurement, from the one that came to this total from the upper end before it.
        smallest, largest = (np.sqrt(np.maximum(total - end, 0.0)) for end in (high, low))
        cuts = [np.sqrt(np.maximum(total - self.upper(i), 0.0)) for i in range(1, look - 1)]
        size, weights, rest = pieces(smallest, np.maximum(largest, smallest), cuts, self.points)
        before = low + rest * (largest + size)
        found = self.density(look - 1, before) * 2.0 * self._normal(size / spread) / spread
        return np.asarray((found * weights).sum(axis=0))

    def reaches(self, looks: int, total: float) -> float:
        """P(ending above before the last of these looks, or coming to the total at it)."""
        exits = [self._exits(look, self.upper(look), is_up=True) for look in range(1, looks)]
        return math.fsum([*exits, self._exits(looks, total, is_up=True)])

    def stays(self, looks: int, total: float) -> float:
        """P(ending below before the last of these looks, or with at most this total at it)."""
        exits = [self._exits(look, self.lower(look), is_up=False) for look in range(1, looks)]
        return math.fsum([*exits, self._exits(looks, total, is_up=False)])

    def over(self, look: int, ends: list[float]) -> tuple[Array, Array]:
        """Totals at a look between these ends, and the probability that each stands for; cut at the corners."""
        low, high = np.array([ends[0]]), np.array([ends[-1]])
        cuts = [np.array([cut]) for cut in (*ends[1:-1], *(self.upper(i) for i in range(1, look)))]
        totals, weights, _ = pieces(low, high, cuts, self.points)
        return totals[:, 0], (self.density(look, totals) * weights)[:, 0]

    def _exits(self, look: int, goal: float, *, is_up: bool) -> float:
        chance = erfc if is_up else erf
        if look == 1:
            return float(chance(math.sqrt(max(goal, 0.0) / (2.0 * self.variance))))
        # Cut where what comes next has its corner, and around it.
        low, high = self.lower(look - 1), self.upper(look - 1)
        around = [goal + share * self.variance for share in (-40.0, -8.0, -1.0, 0.0, 1.0, 8.0, 40.0)]
        totals, masses = self.over(look - 1, [low, *(min(max(cut, low), high) for cut in around), high])
        gap = np.sqrt(np.maximum(goal - totals, 0.0) / (2.0 * self.variance))
        return float((masses * chance(gap)).sum())

    def _normal(self, size: Array) -> Array:
        return np.asarray(np.exp(-0.5 * size**2) / math.sqrt(2.0 * math.pi))


def pieces(low: Array, high: Array, cuts: list[Array], points: int) -> tuple[Array, Array, Array]:
    """Nodes between two ends, their weights, and how far each is from the upper end; of shape (all points, …)."""
    edges = np.sort(np.array([low, *(np.clip(cut, low, high) for cut in cuts), high]), axis=0)
    x, share = np.polynomial.legendre.leggauss(points)
    angle = (math.pi / 4 * (x + 1)).reshape(-1, *(1,) * low.ndim)
    weight = (math.pi / 4 * share).reshape(angle.shape) * np.sin(2 * angle)
    nodes, weights, rest = [], [], []
    for from_, to in pairwise(edges):
        nodes.append(from_ + (to - from_) * np.sin(angle) ** 2)
        weights.append((to - from_) * weight)
        rest.append((edges[-1] - to) + (to - from_) * np.cos(angle) ** 2)
    return np.concatenate(nodes), np.concatenate(weights), np.concatenate(rest)
