"""
What the shape of a course leaves to chance, for an invariant test with one side and a wall.

Quantity: for each course the t from which on it ends above, were its residuals of the same shape; from it the
probability to end above, given the shape, at any standardised mean.
Method: the shape of the residuals, that is their direction, is independent of their size and of the average, whatever
the standardised mean; and whatever is added to all measurements raises every t. So the averages with which a course
goes on are an interval that only shrinks from look to look, and when it is empty there is one t that parts the courses
of this shape; that t has the noncentral law. The residuals with the other sign are as probable, and their mean errs the
other way: each course is two shapes.
Accuracy: that of the draws, for the mean over shapes is the probability itself; tails of t are interpolated to 1e-6.
Cost: some 50 nanoseconds for each look of each course, to the wall.
Source: Basu (1955), Sankhya 15, 377-380 (independence); Rao (1945) and Blackwell (1947), Annals of Mathematical
Statistics 18, 105-110 (the mean given a part of the data varies less); Hammersley and Morton (1956), Proceedings of the
Cambridge Philosophical Society 52, 449-475 (opposite draws).
"""

import math
from dataclasses import dataclass

import numpy as np
from scipy.special import nctdtr

from service.sequential.double import BoolArray, FloatArray, IndexArray
from service.sequential.invariant import Looks

# Roots of squares about the average below this are those of one measurement.
NONE = 1e-150
SIGNS = np.array([[1.0], [-1.0]])
# Points of an interpolated tail.
GRID = 4096


@dataclass(frozen=True)
class Shapes:
    """
    Where shapes are parted; arrays of shape (2, courses), the residuals as drawn and with the other sign.

    Attributes:
        looks: The look at which every average has led to a decision.
        places: The t over the root of its degrees of freedom there from which on the course ends above.
    """

    looks: IndexArray
    places: FloatArray

    def probability_above(self, looks: Looks, delta: float) -> FloatArray:
        """
        The mean over both shapes of each course; array of shape (courses,).

        Not a number, as `nctdtr` has it, where a t is too far out.

        Args:
            looks: All looks, from the first to the last.
        """
        both = np.empty(self.looks.shape)
        for look in np.unique(self.looks):
            freedom, size = float(looks.freedom[look - 1]), float(looks.size[look - 1])
            here = self.looks == look
            both[here] = _tail(freedom, delta * math.sqrt(size), self.places[here])
        probability: FloatArray = both.mean(axis=0)
        return probability


class Outline:
    """Follows the interval of averages of each shape of a batch."""

    def __init__(self, courses: int) -> None:
        self._low, self._high = np.full((2, courses), -math.inf), np.full((2, courses), math.inf)
        self._looks, self._places = np.zeros((2, courses), np.intp), np.zeros((2, courses))

    @property
    def shapes(self) -> Shapes:
        """What was found, once nothing is open."""
        return Shapes(self._looks, self._places)

    def is_open(self, courses: IndexArray) -> BoolArray:
        """Whether one of the shapes of each of these is not parted yet."""
        open_: BoolArray = np.any(self._looks[:, courses] == 0, axis=0)
        return open_

    def extend(
        self,
        courses: IndexArray,
        number: FloatArray,
        means: FloatArray,
        about: FloatArray,
        limits: tuple[FloatArray, FloatArray],
    ) -> None:
        """
        Take more looks; the wall, whose limits are equal, parts everything.

        Args:
            courses: Which of the batch.
            number: Of the looks, array of shape (looks,).
            means, about: The averages and the squares about them; arrays of shape (looks, courses).
            limits: Of t over the root of its degrees of freedom, arrays of shape (looks,).
        """
        spreads = np.maximum(np.sqrt(about), NONE) / np.sqrt(number)[:, np.newaxis]
        low, high, looks = self._low[:, courses], self._high[:, courses], self._looks[:, courses]
        for look, spread, mean, lower, upper in zip(number, spreads, means, *limits, strict=True):
            signed = SIGNS * mean
            # An empty interval stays the point that it became.
            low, high = _within(lower * spread - signed, low, high), _within(upper * spread - signed, low, high)
            is_new = (low >= high) & (looks == 0)
            if is_new.any():
                looks[is_new] = int(look)
                sign, row = np.nonzero(is_new)
                self._places[sign, courses[row]] = (low[is_new] + signed[is_new]) / spread[row]
        self._low[:, courses], self._high[:, courses], self._looks[:, courses] = low, high, looks


def _within(values: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    within: FloatArray = np.minimum(np.maximum(values, low), high)
    return within


def _tail(freedom: float, noncentrality: float, places: FloatArray) -> FloatArray:
    """P(t/sqrt(freedom) >= place), by interpolation over the angle of t where there are many; shape of the places."""
    angles = np.arctan(places)
    asked = angles
    if places.size > GRID:
        # Linear between points that are about 0.002 standard deviations apart: 1e-6.
        asked = np.linspace(float(angles.min()), float(angles.max()), GRID)
    tails: FloatArray = nctdtr(freedom, -noncentrality, -np.tan(asked) * math.sqrt(freedom))
    return tails if places.size <= GRID else np.interp(angles, asked, tails)
