"""
Risks and sample numbers of the invariant test, simulated where they are seldom and weighted back.

Quantity: probability of rejection, mean, standard deviation and quantiles of the sample number at any standardised
means, each probability and mean with its standard error.
Method: courses are drawn in equal parts under the hypotheses and the means asked for, and each counts for every mean
with its likelihood over that of the whole mixture, a weight that never exceeds the number of parts. Under H0
rejections come from the courses of H1, where they are usual. Deviations of quantities with known means are taken out
by least squares: the weights of each part (mean 1), and within a part the sum, its square and the squares less what
they are expected to be at the decision (mean 0).
Accuracy: the standard error stated with each figure; for probabilities at least what one course of the heaviest weight
seen would add, for what has not been seen.
Cost: about 0.1 microseconds for each look of each course, weights included.
Source: Wald (1947), Sequential Analysis, appendix (the likelihood identity, and the mean of the sums); Cox
(1952), Proceedings of the Cambridge Philosophical Society 48, 290-299 (the ratio of the last t is that of all);
Siegmund (1976), Annals of Statistics 4, 673-684 (importance sampling of sequential tests); Owen and Zhou (2000),
Journal of the American Statistical Association 95, 135-143 (mixtures with controls).
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev
from scipy.special import ndtri

from service.sequential.double import BoolArray, FloatArray, IndexArray
from service.sequential.exact.characteristics import QUANTILES, spread
from service.sequential.invariant import Looks, log_density
from service.sequential.invariant_shapes import Shapes
from service.sequential.invariant_walks import BATCH, Endings, InvariantTest, Walker

# Parts of the mixture at the most.
MOST_PARTS = 7
# A logarithm of a density is interpolated by this many terms, for standardised means up to the largest; beyond it by
# more, for it has a singularity near the imaginary alignment 2/mean, so that the error falls by asinh(2/mean) a term.
TERMS, LARGEST_INTERPOLATED, FALL = 24, 3.0, 15.0


@dataclass(frozen=True)
class Estimate:
    """A simulated figure and its standard error."""

    value: float
    standard_error: float

    def upper(self, confidence: float) -> float:
        """What the figure does not exceed, with this one-sided confidence."""
        return self.value + float(ndtri(confidence)) * self.standard_error


@dataclass(frozen=True)
class Point:
    """
    Figures at one standardised mean; sample numbers count all units, two for each look at two samples.

    Attributes:
        quantiles: Of the sample number, for the `QUANTILES`.
    """

    delta: float
    rejection: Estimate
    average_sample_number: Estimate
    standard_deviation: float
    quantiles: tuple[float, ...]


@dataclass(frozen=True)
class Simulated:
    """
    Attributes:
        points: In the order asked for.
        courses: How many were simulated.
    """

    points: tuple[Point, ...]
    courses: int

    @property
    def standard_error(self) -> float:
        """The largest of a probability."""
        return max(point.rejection.standard_error for point in self.points)


@dataclass(frozen=True)
class Effort:
    """
    When a simulation is good enough.

    Attributes:
        standard_error: No probability of rejection may have a larger one.
        most_courses: Then it ends all the same; one batch of each part is made in any case.
    """

    standard_error: float = 5e-4
    most_courses: int = 4_000_000


USUAL_EFFORT = Effort()


@dataclass(frozen=True)
class Progress:
    """How far a simulation is: courses made, and how many it asks for by what is known of its standard error."""

    courses: int
    expected: int


Report = Callable[[Progress], None]


def no_report(progress: Progress) -> None:
    """For callers that do not ask."""


def simulated(
    test: InvariantTest,
    at: Sequence[float],
    seed: int,
    effort: Effort = USUAL_EFFORT,
    report: Report = no_report,
) -> Simulated:
    """
    Simulate until the standard errors are small enough, or the most courses made.

    The same arguments give the same figures, to the last digit.

    Args:
        at: Standardised means; at least one.
        seed: Not below 0.
        report: Called after each batch and between figures; what it raises ends the simulation, and passes.

    Raises:
        TooMuchWork: A course sees too many looks.
    """
    run = Run(test, parts_of(test, at), seed)
    most = max(1, effort.most_courses // (BATCH * len(run.parts)))
    goal = 1
    while True:
        run.extend(goal, report)
        found = run.figures(at, report)
        if found.standard_error <= effort.standard_error or goal == most:
            return found
        # As many as the error asks for and a little more, but at most four times as many.
        needed = math.ceil(1.1 * goal * (found.standard_error / effort.standard_error) ** 2)
        goal = min(max(needed, goal + 1), 4 * goal, most)


def parts_of(test: InvariantTest, at: Sequence[float]) -> tuple[float, ...]:
    """The means of the mixture: both hypotheses and those asked for, or some of the same range where they are many."""
    asked = {abs(delta) if test.ratio.sides == 2 else delta for delta in at}
    parts = {test.ratio.delta0, test.ratio.delta1}
    room = MOST_PARTS - len(parts)
    more = sorted(asked - parts)
    if len(more) > room:
        more = [float(delta) for delta in np.linspace(more[0], more[-1], room)]
    return tuple(sorted(parts | set(more)))


class Run:
    """Courses of one test under a mixture of means, made batch after batch."""

    def __init__(self, test: InvariantTest, parts: tuple[float, ...], seed: int) -> None:
        self.test, self.parts, self._seed = test, parts, seed
        self._walker = Walker(test)
        self._batches: list[list[Endings]] = [[] for _ in parts]

    def extend(self, goal: int, report: Report = no_report) -> None:
        """Make batches until each part has `goal` of them."""
        for number in range(len(self._batches[0]), goal):
            for place, delta in enumerate(self.parts):
                self._batches[place].append(self._walker.batch(delta, self._seed, place, number))
                made = sum(len(batches) for batches in self._batches)
                report(Progress(made * BATCH, goal * len(self.parts) * BATCH))

    def figures(self, at: Sequence[float], report: Report = no_report) -> Simulated:
        """What the courses so far say of these means; `report` is called before each."""
        mixture = _Mixture(self.test, self.parts, [_joined(batches) for batches in self._batches])
        points = []
        for delta in at:
            report(Progress(mixture.courses, mixture.courses))
            points.append(mixture.point(delta))
        return Simulated(tuple(points), mixture.courses)


def _joined(endings: list[Endings]) -> Endings:
    found = [e.shapes for e in endings if e.shapes is not None]
    shapes = Shapes(np.hstack([s.looks for s in found]), np.hstack([s.places for s in found])) if found else None
    return Endings(
        looks=np.concatenate([e.looks for e in endings]),
        total=np.concatenate([e.total for e in endings]),
        squares=np.concatenate([e.squares for e in endings]),
        is_rejected=np.concatenate([e.is_rejected for e in endings]),
        shapes=shapes,
    )


class _Mixture:
    """All courses, with what is needed to weigh them; arrays of shape (parts, courses of a part)."""

    def __init__(self, test: InvariantTest, parts: tuple[float, ...], endings: list[Endings]) -> None:
        self._test = test
        everything = _joined(endings)
        self._shape = (len(parts), len(endings[0].looks))
        self.courses = everything.looks.size
        self._looks, self._alignment = everything.looks, everything.alignment
        self._is_rejected: BoolArray = everything.is_rejected
        self._shapes = everything.shapes
        logs = np.array([self._log_density(delta) for delta in parts])
        self._log_mixture = np.logaddexp.reduce(logs, axis=0) - math.log(len(parts))
        # One is a combination of the others.
        self._controls = [self._shaped(np.exp(log - self._log_mixture) - 1.0) for log in logs[:-1]]
        self._zeros = [
            _martingales(test.drift(delta), test.samples, e) for delta, e in zip(parts, endings, strict=True)
        ]
        self._free = [self._without_zeros(control) for control in self._controls]

    def point(self, delta: float) -> Point:
        """The figures at one mean."""
        weights = np.exp(self._log_density(delta) - self._log_mixture)
        rejected = weights * self._is_rejected
        rejection = self._estimate(rejected, self._of_shapes(delta, rejected))
        number = self._looks * self._test.samples
        mean = self._estimate(weights * number)
        share = np.bincount(self._looks, weights) / weights.sum()
        seen = np.arange(len(share)) * self._test.samples
        deviation = float(spread(np.array(share @ seen), np.array(share @ seen**2)))
        reached = np.searchsorted(np.cumsum(share), np.array(QUANTILES) - 1e-12)
        quantiles = tuple(float(seen[min(i, len(seen) - 1)]) for i in reached)
        bounded = min(max(rejection.value, 0.0), 1.0)
        error = max(rejection.standard_error, self._floor(weights))
        return Point(delta, Estimate(bounded, error), mean, deviation, quantiles)

    def _floor(self, weights: FloatArray) -> float:
        """What one more course could add to the rarer of the decisions, going by the heaviest seen; never zero."""
        heaviest = [float(np.max(weights, where=side, initial=0.0)) for side in (self._is_rejected, ~self._is_rejected)]
        return (min(heaviest) or 1.0) / self.courses

    def _of_shapes(self, delta: float, rejected: FloatArray) -> list[FloatArray]:
        """What courses add to the probability of rejection, given their shapes, less what they add by themselves."""
        if self._shapes is None:
            return []
        number = np.arange(1.0, float(self._test.last or 1) + 1.0)
        above = self._shapes.probability_above(self._test.looks(number), delta)
        # Too far out for the noncentral t the courses speak for themselves.
        if not np.all(np.isfinite(above)):
            return []
        given_shape = above if self._test.ratio.is_upward else 1.0 - above
        return [self._without_zeros(self._shaped(given_shape - rejected))]

    def _estimate(self, values: FloatArray, more: Sequence[FloatArray] = ()) -> Estimate:
        """The mean of the mixture, cleared of what the controls explain, and its standard error."""
        rows, free = self._without_zeros(self._shaped(values)), np.array([*self._free, *more])
        centred = rows - rows.mean(axis=1, keepdims=True)
        if free.size:
            design = (free - free.mean(axis=2, keepdims=True)).reshape(len(free), -1).T
            shares = np.linalg.lstsq(design, centred.ravel())[0]
            rows = rows - np.tensordot(shares, free, axes=1)
        variance = float(rows.var(axis=1).mean())
        return Estimate(float(rows.mean()), math.sqrt(variance / self.courses))

    def _without_zeros(self, rows: FloatArray) -> FloatArray:
        """Each row less what the sums with mean zero explain of it."""
        return np.array([_cleared(row, zeros) for row, zeros in zip(rows, self._zeros, strict=True)])

    def _shaped(self, values: FloatArray) -> FloatArray:
        return values.reshape(self._shape)

    def _log_density(self, delta: float) -> FloatArray:
        return ending_log_density(self._test, delta, self._looks, self._alignment)


def _martingales(drift: float, samples: int, endings: Endings) -> FloatArray:
    """Sums whose mean at the decision is zero, under the mean they were drawn with; shape (courses, 3)."""
    looks = endings.looks.astype(float)
    total = endings.total - looks * drift
    # About its mean every term adds one to the squares, and the common mean of pairs leaves out one.
    squares = endings.squares - 2.0 * drift * endings.total + looks * drift * drift
    expected = looks if samples == 1 else 2.0 * looks - 1.0
    return np.column_stack([total, total * total - looks, squares - expected])


def _cleared(values: FloatArray, zeros: FloatArray) -> FloatArray:
    """The values less what the columns with mean zero explain of them; shape (courses,)."""
    centred = zeros - zeros.mean(axis=0)
    cleared: FloatArray = values - zeros @ np.linalg.lstsq(centred, values - values.mean())[0]
    return cleared


def ending_log_density(test: InvariantTest, delta: float, looks: IndexArray, alignment: FloatArray) -> FloatArray:
    """
    `log_density` at very many endings.

    The same looks come again and again, and at each the ratio is a smooth function of the alignment: a polynomial for
    each look gives it to 1e-7, where that takes fewer evaluations.
    """
    if test.ratio.sides == 2 and delta != 0.0:
        both = [_interpolated(test, delta, looks, sign * alignment) for sign in (1.0, -1.0)]
        mean: FloatArray = np.logaddexp(*both) - math.log(2.0)
        return mean
    return _interpolated(test, delta, looks, alignment)


def _interpolated(test: InvariantTest, delta: float, looks: IndexArray, alignment: FloatArray) -> FloatArray:
    distinct, place = np.unique(looks, return_inverse=True)
    return log_density_at(test.looks(distinct.astype(float)), delta, place, alignment)


def log_density_at(looks: Looks, delta: float, place: IndexArray, alignment: FloatArray) -> FloatArray:
    """The one-sided `log_density` at very many points, `place` naming the look of each; 1e-7 where interpolated."""
    if looks.size.size * _terms(delta) > place.size:
        return log_density(Looks(looks.freedom[place], looks.size[place]), alignment, delta)
    terms = _series(looks, delta)
    return np.asarray(chebyshev.chebval(alignment, terms[:, place], tensor=False))


def polynomials(test: InvariantTest, delta: float, number: FloatArray) -> FloatArray:
    """Chebyshev series in the alignment of the one-sided `log_density` at these looks; shape (terms, looks)."""
    return _series(test.looks(number), delta)


def _series(looks: Looks, delta: float) -> FloatArray:
    number = _terms(delta)
    nodes = np.cos(math.pi * (np.arange(number) + 0.5) / number)
    at = Looks(looks.freedom[:, np.newaxis], looks.size[:, np.newaxis])
    # The polynomials are orthogonal over these nodes.
    terms: FloatArray = (2.0 / number) * (chebyshev.chebvander(nodes, number - 1).T @ log_density(at, nodes, delta).T)
    terms[0] *= 0.5
    return terms


def _terms(delta: float) -> int:
    return TERMS if abs(delta) <= LARGEST_INTERPOLATED else math.ceil(FALL / math.asinh(2.0 / abs(delta)))
