"""
Exact figures of a test of normal measurements between limits of any shape, look by look.

Quantity: probabilities of each end, mean, standard deviation and quantiles of the further sample number.
Method: the density of the totals that go on is carried from look to look at Gauss-Legendre points between the limits
of that look, or as far as the totals are likely to come. It is carried under one drift; the likelihood ratio gives the
figures under the others near it, whose sums have positive terms only.
Accuracy: the difference to a computation with fewer points, reported as the error bound.
Cost: the points times those within a step of each, for each look and each group of drifts.
Source: Armitage, McPherson and Rowe (1969), Journal of the Royal Statistical Society A 132, 235-244 (the recursion).
"""

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from scipy.special import ndtr

from service.sequential.curved import CurvedRegion
from service.sequential.double import FloatArray, IndexArray
from service.sequential.exact.characteristics import LEVELS, NEGLIGIBLE, Characteristics, TooMuchWork, spread
from service.sequential.exact.strip import Strip, density, nodes_between
from service.sequential.region import Region, looks_to_wall
from service.sequential.shifted import line_of_h0, seen_from_h0

# Standard deviations from the mean beyond which a total is not followed.
FAR = 8.5
# Beyond this the normal density is lost among the smallest numbers, which are slow.
FURTHEST = 37.0
# Drifts whose totals at the last look lie within so many standard deviations are followed together.
REACH = 16.0
# Without a last look as many are supposed; nearly all is over by then.
OPEN_LOOKS = 100
MOST_POINTS, MOST_WORK = 2_500, 600_000_000
# One exponential and one multiplication for each pair of points.
PAIR_WORK = 2
BLOCK = 256
# Points that take a step together.
AT_ONCE = 64
# Numbers of points rise by this share, for finding the points of a new number costs more than using a few more.
RISE = 1.06


class _Look(NamedTuple):
    """Limits at one look, in standard deviations from where sampling stands."""

    lower: float
    upper: float
    is_last: bool


class _Ends(NamedTuple):
    """Arrays of shape (points,), but `survival` of shape (looks, points): the probability of going on after each."""

    below: FloatArray
    between: FloatArray
    above: FloatArray
    survival: FloatArray
    work: int


def characteristics_by_looks(
    region: Region, means: FloatArray, sigma: float, progress: float = 0.0, total: float = 0.0
) -> Characteristics:
    """
    Exact figures at these means, from one point of the region on.

    Args:
        region: Of real totals.
        means: Array of shape (points,).
        sigma: Standard deviation of one measurement, above 0.
        progress, total: Where sampling stands, inside the region.

    Raises:
        TooMuchWork: The region is too wide for the spread, or too long.
    """
    if isinstance(region, CurvedRegion):
        line = line_of_h0(region)
        region, means, total = seen_from_h0(region, sigma), means - line, total - line * progress
    drifts, steps = means / sigma, _Steps(region, sigma, (progress, total))
    looks = None if region.wall is None else looks_to_wall(region.wall, 1.0, progress)
    groups = _groups(drifts, looks)
    parts: dict[float, list[_Ends]] = {fineness: [] for fineness in (1.2, 1.0)}
    left = MOST_WORK
    for fineness, found in parts.items():
        for group in groups:
            found.append(_followed(steps, drifts[group], fineness, left))
            left -= found[-1].work
    fine, coarse = (_joined(found, groups) for found in parts.values())
    mean, second = _moments(fine.survival)
    bound = float(np.max(np.abs(fine.below - coarse.below))) + float(np.max(np.abs(fine.above - coarse.above)))
    bound += float(np.max(np.abs(mean / _moments(coarse.survival)[0] - 1.0))) + 1e-13
    going_on = np.concatenate([fine.survival, np.zeros((1, len(means)))])
    quantiles = np.argmax(going_on[:, :, np.newaxis] <= LEVELS, axis=0) + 1.0
    deviation = spread(mean, second)
    work = fine.work + coarse.work
    return Characteristics(fine.below, fine.between, fine.above, mean, deviation, quantiles, bound, work)


def _groups(drifts: FloatArray, looks: int | None) -> list[IndexArray]:
    """Indices of drifts that may be followed together."""
    order = np.argsort(drifts)
    group = np.floor((drifts[order] - drifts[order[0]]) * math.sqrt(looks or OPEN_LOOKS) / REACH)
    return np.split(order, np.flatnonzero(np.diff(group)) + 1)


def _joined(parts: list[_Ends], groups: list[IndexArray]) -> _Ends:
    """All groups as one, in the order of the drifts as given."""
    order = np.argsort(np.concatenate(groups))
    looks = max(len(part.survival) for part in parts)
    survival = [np.pad(part.survival, ((0, looks - len(part.survival)), (0, 0))) for part in parts]
    return _Ends(
        below=np.concatenate([part.below for part in parts])[order],
        between=np.concatenate([part.between for part in parts])[order],
        above=np.concatenate([part.above for part in parts])[order],
        survival=np.concatenate(survival, axis=1)[:, order],
        work=sum(part.work for part in parts),
    )


def _moments(survival: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The first two moments of the sample number; `survival[k]` is the probability of more than k + 1."""
    weight = 2.0 * np.arange(1, len(survival) + 1) + 1.0
    return 1.0 + survival.sum(axis=0), 1.0 + weight @ survival


class _Steps:
    """The looks of a region from one of its points on; its limits are asked for once, however often they are needed."""

    def __init__(self, region: Region, sigma: float, start: tuple[float, float]) -> None:
        self._region, self._sigma = region, sigma
        self._progress, self._total = start
        self._last = math.inf if region.wall is None else looks_to_wall(region.wall, 1.0, self._progress)
        self._known: list[_Look] = []

    def __iter__(self) -> Iterator[_Look]:
        """From the first on, as far as is wanted."""
        at = 0
        while at < self._last:
            if at == len(self._known):
                self._ask()
            yield self._known[at]
            at += 1

    def _ask(self) -> None:
        """For some more."""
        begin = len(self._known) + 1
        looks = np.arange(begin, min(begin + BLOCK, self._last + 1), dtype=np.float64)
        limits = self._region.limits(self._progress + looks)
        lower, upper = (limits.lower - self._total) / self._sigma, (limits.upper - self._total) / self._sigma
        for look, low, high in zip(looks, lower, upper, strict=True):
            self._known.append(_Look(float(low), float(high), bool(look == self._last)))


def _followed(steps: _Steps, drifts: FloatArray, fineness: float, most: int) -> _Ends:
    """One group of drifts to the end, so finely, with at most so many multiplications."""
    base = 0.5 * float(drifts.min() + drifts.max())
    zero = np.zeros(len(drifts))
    below, between, above = zero, zero, zero
    survival: list[FloatArray] = []
    x, mass, work = np.zeros(1), np.ones(1), 0
    for k, look in enumerate(steps):
        # Under another drift each point weighs as much more as the likelihood of having come to it.
        tilted = mass * np.exp(np.multiply.outer(drifts - base, x) - 0.5 * k * (drifts**2 - base**2)[:, np.newaxis])
        ahead = x + drifts[:, np.newaxis]
        below = below + (tilted * ndtr(look.lower - ahead)).sum(axis=1)
        above = above + (tilted * ndtr(ahead - look.upper)).sum(axis=1)
        rest = np.maximum(0.0, (tilted * (ndtr(look.upper - ahead) - ndtr(look.lower - ahead))).sum(axis=1))
        if look.is_last:
            between = rest
            break
        if float(np.max(rest)) < NEGLIGIBLE or look.upper <= look.lower:
            break
        survival.append(rest)
        nodes, weights = _nodes(look, drifts, k + 1, fineness)
        mass, pairs = _stepped(x, mass, nodes, base, FAR + float(np.max(np.abs(drifts - base))))
        mass, x, work = mass * weights, nodes, work + PAIR_WORK * pairs
        if work > most:
            raise TooMuchWork(MOST_WORK, "multiplications")
    return _Ends(below, between, above, np.array(survival).reshape(-1, len(drifts)), work)


def _stepped(x: FloatArray, mass: FloatArray, nodes: FloatArray, drift: float, reach: float) -> tuple[FloatArray, int]:
    """The density at the nodes one step after these points; steps of more than `reach` from the drift are left out."""
    moved, pairs = np.empty_like(nodes), 0
    for begin in range(0, len(nodes), AT_ONCE):
        some = nodes[begin : begin + AT_ONCE]
        near = slice(*np.searchsorted(x, (some[0] - drift - reach, some[-1] - drift + reach)))
        distance = np.clip(some - x[near, np.newaxis] - drift, -FURTHEST, FURTHEST)
        moved[begin : begin + AT_ONCE] = mass[near] @ density(distance)
        pairs += distance.size
    return moved, pairs


def _nodes(look: _Look, drifts: FloatArray, k: int, fineness: float) -> tuple[FloatArray, FloatArray]:
    """Points between the limits of the k-th look, or as far as totals are likely to come; and their weights."""
    reach = FAR * math.sqrt(k)
    low = max(look.lower, k * float(drifts.min()) - reach)
    high = min(look.upper, k * float(drifts.max()) + reach)
    if high <= low:  # only what is as good as impossible goes on
        low, high = (look.lower, look.lower + 1.0) if math.isfinite(look.lower) else (look.upper - 1.0, look.upper)
    points = _known_number(fineness * (20.0 + 2.0 * (high - low)))
    if points > MOST_POINTS:
        raise TooMuchWork(MOST_POINTS, "quadrature points")
    return nodes_between(Strip(low, high), points)


def _known_number(points: float) -> int:
    """The next higher of a few numbers of points."""
    return math.ceil(RISE ** math.ceil(math.log(points) / math.log(RISE)))
