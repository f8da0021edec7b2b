"""
The forms of the normal families in an invariant plan: hypotheses of standardised means, the standard deviation unknown.

The region runs over the log-likelihood ratio of the last t, which is that of the whole sequence; what is shown is t.
"""

import math
from abc import abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import ClassVar, NoReturn

import numpy as np

from service.domain.errors import InvalidQuestion
from service.domain.families.base import LARGEST_REAL, ORIGIN, Family, Start, Way
from service.sequential import likelihood
from service.sequential.approximations import Motion
from service.sequential.boundaries import Thresholds
from service.sequential.double import Double, FloatArray
from service.sequential.errors import OutOfRange
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.invariant import LARGEST_DELTA, InvariantRatio, Looks, invariant_ratio
from service.sequential.invariant_ways import Interval, Next, common, mirrored, reaching
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import REALS, Limits, Region, Span
from service.sequential.studentised import Studentised

Known = Mapping[str, float]

# Nearer hypotheses would need more observations than a test can have, and come near the rounding of the ratio.
NEAREST = 1e-4
TWO_SIDES = 2.0


@dataclass(frozen=True)
class Coming:
    """
    The next measurement, and the look that it makes.

    Attributes:
        origin: The value from which `next_` counts.
        noun: What it is, before its value.
        is_mirrored: `next_` gives -t.
    """

    looks: Looks
    next_: Next
    origin: float
    noun: str
    is_mirrored: bool = False


class Invariant(Family):
    """
    What the forms share. A plan's `known` carries its hypotheses and sides beside what it states.

    Attributes:
        samples: 1, or 2 where t compares two.
    """

    counted: ClassVar[str] = "Student's t"
    axis: ClassVar[str] = "measurements"
    span: ClassVar[Span] = REALS
    is_invariant: ClassVar[bool] = True
    samples: ClassVar[int] = 1

    @abstractmethod
    def studied(self, sums: Sequence[Double]) -> tuple[Looks, Studentised]:
        """The looks, and t at each of them."""

    @abstractmethod
    def balanced(self, units: FloatArray) -> Looks:
        """Looks after so many units, as evenly in both arms as they can be where there are two."""

    @abstractmethod
    def coming(self, start: Start, known: Known) -> Coming | None:
        """The next measurement; None where no single one can make a t."""

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if abs(value) <= LARGEST_DELTA else f"must be at most {LARGEST_DELTA:g} in magnitude"

    def known_rule(self, name: str, value: float) -> str | None:
        """A reference may be any number."""
        return None if abs(value) <= LARGEST_REAL else "must be at most 1e100 in magnitude"

    def settled(self, known: Known, h0: float, h1: float) -> Known:
        """See `Family`."""
        return {"reference": 0.0, **known, "h0": h0, "h1": h1}

    def likelihood_ratio(self, h0: float, h1: float, known: Known) -> LikelihoodRatio:
        """See `Family`: the total of the region is the ratio."""
        if abs(h1 - h0) < NEAREST:
            raise OutOfRange("h1", f"must differ from h0 by at least {NEAREST:g}", h1)
        invariant_ratio(h0, h1, int(known["sides"]))
        return likelihood.summed()

    def place(self, sums: Sequence[Double], known: Known) -> tuple[Double, Double]:
        """See `Family`."""
        looks, found = self.studied(sums)
        evidence = ratio_of(known).log_of(looks, found) + 0.0
        return self.units_of(sums), Double(evidence, np.zeros_like(evidence))

    def displayed(self, sums: Sequence[Double], total: Double, known: Known) -> Double:
        """See `Family`: Student's t, 0 while it is not defined."""
        t = self.studied(sums)[1].t + 0.0
        return Double(t, np.zeros_like(t))

    def drawn(self, region: Region, progress: FloatArray, known: Known) -> Limits:
        """See `Family`: the t at which the ratio comes to the thresholds; |t| with two sides."""
        ratio, looks = ratio_of(known), self.balanced(progress)
        of_ratio = region.limits(progress)
        lower, upper = np.full_like(progress, -np.inf), np.full_like(progress, np.inf)
        # The thresholds are the same everywhere but at the wall.
        for low, high in set(zip(of_ratio.lower.tolist(), of_ratio.upper.tolist(), strict=True)):
            here = np.flatnonzero((of_ratio.lower == low) & (of_ratio.upper == high))
            limits = ratio.t_limits(Looks(looks.freedom[here], looks.size[here]), Thresholds(low, high))
            lower[here], upper[here] = limits.accept, limits.reject
        return Limits(lower, upper)

    def exact(self, region: Region, parameters: FloatArray, known: Known, start: Start = ORIGIN) -> Characteristics:
        """See `Family`."""
        _refuse()

    def motion(self, parameter: float, known: Known) -> Motion:
        """See `Family`."""
        _refuse()

    def fixed_sample(self, lower: float, upper: float, risks: tuple[float, float], known: Known) -> FixedSample | None:
        """See `Family`."""
        return None

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """See `Family`."""
        return tuple(float(value) for value in np.linspace(2.0 * low - high, 2.0 * high - low, points))

    def estimate(self, start: Start, known: Known) -> float | None:
        """See `Family`."""
        if not start.carried:
            return None
        looks, found = self.studied(sums_of(start))
        if not found.is_defined[0]:
            return None
        freedom, size = float(looks.freedom[0]), float(looks.size[0])
        # Maximum likelihood divides by the number of measurements where t divides by its degrees of freedom.
        return float(found.t[0]) * math.sqrt((freedom + self.samples) / freedom / size)

    def ways(self, region: Region, start: Start, known: Known) -> tuple[Way | None, Way | None]:
        """See `Family`: a single measurement that decides, None where none can."""
        if not start.carried or (coming := self.coming(start, known)) is None:
            return None, None
        limits = region.limits(np.array([start.progress + 1.0]))
        ratio, thresholds = ratio_of(known), Thresholds(float(limits.lower[0]), float(limits.upper[0]))
        accept, reject = _limits(ratio, thresholds, float(coming.looks.freedom[0]), float(coming.looks.size[0]))
        now = float(self.studied(sums_of(start))[1].t[0])
        if known["sides"] == TWO_SIDES:
            accepting = common(_at_most(coming, accept), _at_least(coming, -accept)) if math.isfinite(accept) else ()
            rejecting = (*_at_most(coming, -reject), *_at_least(coming, reject)) if math.isfinite(reject) else ()
        elif ratio.is_upward:
            accepting, rejecting = _at_most(coming, accept), _at_least(coming, reject)
        else:
            accepting, rejecting = _at_least(coming, accept), _at_most(coming, reject)
        return _way(coming, accepting, accept - now), _way(coming, rejecting, reject - now)

    @abstractmethod
    def units_of(self, sums: Sequence[Double]) -> Double:
        """How many have been observed."""


def sums_of(start: Start) -> list[Double]:
    """The carried sums of one point as arrays of shape (1,)."""
    return [Double(np.array([value]), np.array([rest])) for value, rest in zip(start.carried, start.rest, strict=True)]


@lru_cache(maxsize=256)
def _ratio(h0: float, h1: float, sides: int) -> InvariantRatio:
    return invariant_ratio(h0, h1, sides)


@lru_cache(maxsize=65_536)
def _limits(ratio: InvariantRatio, thresholds: Thresholds, freedom: float, size: float) -> tuple[float, float]:
    """The t that accept and reject at one look; kept, for lists of tests ask for the same again and again."""
    found = ratio.t_limits(Looks(np.array([freedom]), np.array([size])), thresholds)
    return float(found.accept[0]), float(found.reject[0])


def ratio_of(known: Known) -> InvariantRatio:
    """The ratio of a plan with this `known`."""
    return _ratio(known["h0"], known["h1"], int(known["sides"]))


def _at_least(coming: Coming, limit: float) -> tuple[Interval, ...]:
    """The distances of the next measurement from its origin for which t is at or above the limit."""
    return mirrored(reaching(_turned(coming.next_), limit)) if coming.is_mirrored else reaching(coming.next_, limit)


def _at_most(coming: Coming, limit: float) -> tuple[Interval, ...]:
    """Likewise at or below: that is -t at or above the negative limit."""
    return reaching(coming.next_, -limit) if coming.is_mirrored else mirrored(reaching(_turned(coming.next_), -limit))


def _turned(next_: Next) -> Next:
    """The -t of a measurement at the distance -u."""
    return replace(next_, lever=-next_.lever)


def _way(coming: Coming, distances: tuple[Interval, ...], rise: float) -> Way | None:
    """One measurement in the first of these intervals, or in the others."""
    if not distances:
        return None
    ends = [_words(coming.origin + low, coming.origin + high) for low, high in distances]
    except_for = ""
    if coming.next_.room == 0.0 and coming.next_.spreads and any(low < 0.0 < high for low, high in distances):
        except_for = f", but not {coming.origin:.8g}"
    return Way(1, None, rise, f"{coming.noun} {' or '.join(ends)}{except_for}")


def _words(low: float, high: float) -> str:
    if math.isinf(low) and math.isinf(high):
        return "of any value"
    if math.isinf(low):
        return f"of at most {high:.8g}"
    return f"of at least {low:.8g}" if math.isinf(high) else f"from {low:.8g} to {high:.8g}"


def _refuse() -> NoReturn:
    raise InvalidQuestion(
        "The figures of an invariant plan are simulated; ask for the characteristics of this plan alone."
    )
