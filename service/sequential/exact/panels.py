"""
Sums of squares of standard normal numbers between two lines, one step of the walk as a matrix.

Quantity: the mean of a function of the height after one step, the function being kept by its values at some heights.
Method: the density of a square is infinite at zero, so the integral runs over the number that is squared, where it is
smooth. What is asked of the rest of a walk has a corner of half-integer order at each whole number of falls above a
line at which it may end, and no other: on panels that end there it is a smooth function of the root of the distance to
the end, and is kept by its values at Gauss-Legendre points of that root (product integration). Corners soften with each
fall; after some of them wider panels do.
Accuracy: that of the number of points.
Cost: the points, times the panels that one step reaches from each, times the points of a panel squared.
Source: Atkinson, The Numerical Solution of Integral Equations of the Second Kind, chapter 4 (product integration);
Asmussen and Albrecher, Ruin Probabilities, chapter IV (Lundberg's inequality, which bounds how far a walk that falls
ever rises).
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np

from service.sequential.double import BoolArray, FloatArray
from service.sequential.exact.characteristics import TooMuchWork

MOST_NODES = 2_400
# More points than those for the integral over a panel.
MORE_POINTS = 12
# A normal number beyond this has no probability that matters.
FARTHEST = 9.0
WIDEST_PANEL = 6.0
# Corners nearer to each other than this share of the room are one.
SAME = 1e-9
# So many corners above a line are felt on their other side, where panels are no wider than so many times the distance.
ACUTE = 6
GROWTH = 2.0
# Above a root each panel ends so many times as far from it as it begins, but for those nearest to it.
NEXT, NEAREST = 4.0, 1e-7
# Probability that a walk ever rises beyond where it is followed.
NEVER = 1e-16
# Pairs of an origin and a panel that are worked on at once: their numbers stay near the processor.
BLOCK = 300


@dataclass(frozen=True)
class Room:
    """
    Where a walk goes on; each of its steps falls by `fall` and rises by the square of a standard normal number.

    Attributes:
        low, high: Below and above these heights nothing is kept.
        lines: Heights at which something may end, from which corners rise.
        root: A height at or below `low` at which what is asked has a root, and so has it at each fall above; minus
            infinity where none is.
    """

    low: float
    high: float
    fall: float
    lines: tuple[float, ...]
    root: float = -math.inf


@dataclass(frozen=True)
class Law:
    """
    Where a walk begins: as high above a height as the sum of the first squares.

    Attributes:
        height: To which the first falls have led.
        squares: How many have been added up.
        moment: Each beginning is weighed by this power of the root of their sum.
    """

    height: float
    squares: int = 1
    moment: int = 0

    @property
    def power(self) -> int:
        """Of the root of the sum, in its density with its weight."""
        return self.squares - 1 + self.moment

    @property
    def log_constant(self) -> float:
        """Of that density: of a chi distribution."""
        return (1.0 - 0.5 * self.squares) * math.log(2.0) - math.lgamma(0.5 * self.squares)


@dataclass(frozen=True)
class Resolution:
    """
    How closely a computation looks.

    Attributes:
        points: Gauss-Legendre points of a panel.
        sharp: Corners that are ends of panels; later ones are so soft that a panel may run across. A long fall keeps
            more of them sharp.
    """

    points: int
    sharp: int


@dataclass(frozen=True)
class Kernel:
    """
    One step of the walk, on functions of the height kept by their values.

    Attributes:
        heights: Array of shape (nodes,).
        onward: Array of shape (nodes, nodes): the mean of a function after a step from each node.
        begin: Array of shape (beginnings, nodes): the same after each beginning.
    """

    heights: FloatArray
    onward: FloatArray
    begin: FloatArray
    work: int


def kernel_of(room: Room, beginnings: Sequence[Law], resolution: Resolution, farthest: float = FARTHEST) -> Kernel:
    """
    The step of a walk.

    Args:
        room: Where it goes on.
        beginnings: How it may begin.
        resolution: How closely to look.
        farthest: Normal numbers beyond this are left out.

    Raises:
        TooMuchWork: It would need too many points.
    """
    points, panels = resolution.points, _panels_of(room, resolution.sharp)
    count = len(panels.left)
    if count * points > MOST_NODES:
        raise TooMuchWork(MOST_NODES, "quadrature points")
    places, _ = _legendre(points)
    shares = np.where(panels.has_corner[:, np.newaxis], places**2, places)
    heights = (panels.right[:, np.newaxis] - panels.width[:, np.newaxis] * shares).ravel()
    onward = _means(heights - room.fall, panels, points, farthest, Law(0.0))
    begin = [_means(np.array([law.height]), panels, points, max(farthest, _most(law)), law) for law in beginnings]
    work = len(heights) * count * (points + MORE_POINTS) * points // 2
    return Kernel(heights, onward, np.concatenate(begin), work)


def _most(law: Law) -> float:
    """The root of a sum of squares that is as good as never exceeded."""
    return math.sqrt(law.squares) + FARTHEST


@dataclass(frozen=True)
class _Panels:
    """
    Pieces of the room, ascending; arrays of shape (panels,).

    Attributes:
        left, right: Their ends.
        has_corner: Whether what is asked has a corner at the right end; it is then smooth in the root of the distance.
    """

    left: FloatArray
    right: FloatArray
    has_corner: BoolArray

    @property
    def width(self) -> FloatArray:
        """The length of each."""
        return self.right - self.left


def _means(origins: FloatArray, panels: _Panels, points: int, farthest: float, law: Law) -> FloatArray:
    """
    Weights of the values at the points of each panel in the mean of a function at origin + sum of squares, the function
    being zero outside the panels; array of shape (origins, panels * points).
    """
    to_left, to_right = panels.left - origins[:, np.newaxis], panels.right - origins[:, np.newaxis]
    origin, panel = np.nonzero((to_right > 0.0) & (to_left < farthest**2))
    means = np.zeros((len(origins), len(panels.left), points))
    for begin in range(0, len(origin), BLOCK):
        some = origin[begin : begin + BLOCK], panel[begin : begin + BLOCK]
        distances = to_left[some], to_right[some]
        means[some] = _weights(distances, panels.has_corner[some[1]], points, farthest, law)
    return means.reshape(len(origins), -1)


def _weights(
    distances: tuple[FloatArray, FloatArray], has_corner: BoolArray, points: int, farthest: float, law: Law
) -> FloatArray:
    """
    The same for pairs of an origin and a panel.

    Args:
        distances: Two arrays of shape (pairs,): from the origin to both ends of the panel; not all of it lies below.
        has_corner: Array of shape (pairs,).
        points: Of the panel.
        farthest: The largest root of a sum.
        law: Of the sum.

    Returns:
        Array of shape (pairs, points).
    """
    tau, weights = _legendre(points + MORE_POINTS)
    to_left, to_right = distances
    reach, near = np.sqrt(to_right)[:, np.newaxis], np.sqrt(np.maximum(to_left, 0.0))[:, np.newaxis]
    far = np.minimum(reach, farthest)
    # The number that is squared, thicker towards the right end, where the function may have its corner.
    back = (far - near) * tau**2
    number = far - back
    exponent = law.log_constant - 0.5 * number**2
    if law.power:
        exponent += law.power * np.log(number)
    chance = np.exp(exponent) * (far - near) * (2.0 * tau * weights)
    distance = np.maximum((reach - far + back) * (reach + number), 0.0)
    share = distance / (to_right - to_left)[:, np.newaxis]
    place = 2.0 * np.where(has_corner[:, np.newaxis], np.sqrt(share), share) - 1.0
    # Legendre coefficients of the function from its values: exact up to the degree that the points carry.
    before, now = np.ones_like(place), place
    moments = [np.einsum("nq,nq->n", chance, before), np.einsum("nq,nq->n", chance, now)]
    for degree in range(1, points - 1):
        before, now = now, ((2 * degree + 1) * place * now - degree * before) / (degree + 1)
        moments.append(np.einsum("nq,nq->n", chance, now))
    found: FloatArray = np.stack(moments, axis=1) @ _coefficients(points)
    return found


def _panels_of(room: Room, most: int) -> _Panels:
    """Between corners, and narrower where a panel would be too wide for the squares."""
    low, high, fall = room.low, room.high, room.fall
    width = high - low
    sharp = math.floor(min(most + fall * fall / 4.0, width / fall))
    if sharp > MOST_NODES:
        raise TooMuchWork(MOST_NODES, "quadrature points")
    falls, lines = np.arange(1.0, sharp + 2.0), room.lines if math.isinf(room.root) else (*room.lines, room.root)
    corners = np.concatenate([np.zeros(0), *(line + fall * falls for line in lines)])
    inner = np.unique(corners[(corners > low) & (corners < high)])
    # Corners of two kinds that fall together are one.
    inner = inner[np.diff(inner, prepend=low) > SAME * width]
    inner = inner[high - inner > SAME * width]
    ends = np.array([low, *inner, high])
    acute = np.unique(np.concatenate([np.full(1, high + fall), *(line + fall * falls[:ACUTE] for line in lines)]))
    beyond = acute[np.searchsorted(acute, ends[1:] + SAME * width)] - ends[1:]
    cells = [
        _cut(left, right, fall, gap)
        for (left, right), gap in zip(pairwise(ends.tolist()), beyond.tolist(), strict=True)
    ]
    edges = [low, *(edge for cell in cells for edge in cell)]
    if math.isfinite(room.root):
        for i in range(ACUTE):
            edges = _cut_above(edges, room.root + fall * i, max(low - room.root, NEAREST))
    ends = np.array(edges)
    has_corner = np.isin(ends[1:], inner)
    has_corner[-1] = bool(np.any(np.abs(corners - high) <= SAME * width))
    return _Panels(ends[:-1], ends[1:], has_corner)


def _cut_above(edges: list[float], root: float, nearest: float) -> list[float]:
    """The ends of all panels, with more of them above a root, but for its nearest neighbourhood."""
    found = edges[:1]
    for left, right in pairwise(edges):
        between, at = [], (right - root) / NEXT
        while root + at > left and at > nearest:
            between.append(root + at)
            at /= NEXT
        found += [*between[::-1], right]
    return found


def _cut(left: float, right: float, fall: float, gap: float) -> list[float]:
    """
    The ends of the panels between two corners, ascending, the first left out: narrow at the right end.

    Args:
        left, right: The corners.
        fall: Of each step.
        gap: From the right end to the next acute corner, which is felt on this side of it.
    """
    edges, distance = [right], 0.0
    while True:
        step = 2.0 + 2.0 * math.sqrt(distance)
        step = min(step, WIDEST_PANEL) if fall < WIDEST_PANEL else step
        step = min(step, GROWTH * max(gap, distance))
        distance += step
        if right - distance <= left + 0.25 * step:
            return edges[::-1]
        if len(edges) > MOST_NODES:
            raise TooMuchWork(MOST_NODES, "quadrature points")
        edges.append(right - distance)


def highest_rise(fall: float) -> float:
    """A height above its start that the walk never comes to, where it clearly falls: Lundberg's inequality."""
    if fall < 1.1:
        return math.inf
    root = 0.5
    for _ in range(200):  # the root of -ln(1 - 2 root) / 2 = fall * root, from above; each turn is .91 nearer at least
        root = -0.5 * math.expm1(-2.0 * fall * root)
    return -math.log(NEVER) / root


@lru_cache(maxsize=16)
def _legendre(points: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre points and weights between 0 and 1."""
    x, weights = np.polynomial.legendre.leggauss(points)
    return 0.5 * (x + 1.0), 0.5 * weights


@lru_cache(maxsize=16)
def _coefficients(points: int) -> FloatArray:
    """Legendre coefficients of each of the functions that are 1 at one point; array of shape (degrees, points)."""
    x, weights = np.polynomial.legendre.leggauss(points)
    degrees = np.arange(points)[:, np.newaxis]
    values = np.polynomial.legendre.legvander(x, points - 1).T
    coefficients: FloatArray = (degrees + 0.5) * values * weights
    return coefficients
