"""
The stage-wise ordering of the outcomes of a sequential test, and what it says about the parameter.

Quantity: P(an outcome at least as far up as the one observed) and P(one further up), by the parameter; from
them confidence limits and the median-unbiased estimate.
Method: furthest up are the exits above the region, the earliest first; then the decisions at the wall by their totals;
then the exits below, the latest first. At one look larger totals are further up. A coupling shows that both
probabilities grow with the parameter, so each limit is the root of a monotone function.
Accuracy: that of the probabilities; roots to 1e-12 of the natural parameter.
Cost: some ten evaluations for each root.
Source: Armitage (1957), Biometrika 44, 9-26; Siegmund (1978), Biometrika 65, 341-349; Tsiatis, Rosner and Mehta (1984),
Biometrics 40, 797-803.

What lies further up than an exit above, and further down than one below, needs only the looks taken so far: the other
side is the complement. So nothing has to be known about looks that would have come later.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from scipy.optimize import brentq

ROOT = 1e-13
# Beyond this natural parameter lies the end of the range.
FURTHEST = 200.0


@dataclass(frozen=True)
class Tails:
    """
    Probabilities of outcomes around the one observed; each is added up directly or is the complement of such a sum.

    Attributes:
        up, further_up: P(at least as far up), and without the outcome itself.
        down, further_down: The same towards the other end.
    """

    up: float
    further_up: float
    down: float
    further_down: float

    @classmethod
    def of_up(cls, up: float, further_up: float) -> "Tails":
        """From sums towards large totals."""
        up, further_up = _clipped(up), _clipped(further_up)
        return cls(up, further_up, 1.0 - further_up, 1.0 - up)

    @classmethod
    def of_down(cls, down: float, further_down: float) -> "Tails":
        """From sums towards small totals."""
        down, further_down = _clipped(down), _clipped(further_down)
        return cls(1.0 - further_down, 1.0 - down, down, further_down)


class Outcome(Protocol):
    """One observed outcome, as the parameter is varied; a natural parameter grows with the mean of one unit."""

    @property
    def reference(self) -> float:
        """A natural parameter near the estimate, where roots are looked for first."""
        ...

    def natural(self, mean: float) -> float:
        """The natural parameter of a mean of one unit of progress."""
        ...

    def mean(self, natural: float) -> float:
        """The mean of one unit of progress; the ends of its range for infinite natural parameters."""
        ...

    def tails(self, natural: float) -> Tails:
        """The probabilities around this outcome."""
        ...

    def first_step_mean(self) -> float:
        """The mean, given the outcome, of what the first unit alone says of the parameter: unbiased whatever it is."""
        ...


def lower_limit(outcome: Outcome, tail: float) -> float:
    """
    The natural parameter at which this outcome and those further up have probability `tail`.

    Minus infinity, the end of the range, where they are more probable everywhere: nothing lies further down.
    """
    return _root(lambda natural: outcome.tails(natural).up - tail, outcome.reference)


def upper_limit(outcome: Outcome, tail: float) -> float:
    """
    The natural parameter at which this outcome and those further down have probability `tail`.

    Infinity, the end of the range, where they are more probable everywhere: nothing lies further up.
    """
    return _root(lambda natural: tail - outcome.tails(natural).down, outcome.reference)


def median_unbiased(outcome: Outcome) -> float:
    """
    The natural parameter at which this outcome is in the middle: P(further up) + P(this outcome)/2 = 1/2.

    Where outcomes are continuous this one has probability zero. At an end of the ordering the equation holds at the end
    of the range only, which is infinite.
    """
    here = outcome.tails(outcome.reference)
    if here.further_down == 0.0:
        return -math.inf
    if here.further_up == 0.0:
        return math.inf

    def excess(natural: float) -> float:
        tails = outcome.tails(natural)
        return 0.5 * (tails.up + tails.further_up) - 0.5

    return _root(excess, outcome.reference)


def _root(rising: Callable[[float], float], start: float) -> float:
    """The root of a function that does not fall, looked for ever further from `start`; infinite where there is none."""
    value = rising(start)
    if value == 0.0:
        return start
    direction = -1.0 if value > 0.0 else 1.0
    # Steps that an enormous start, of misread data, does not swallow.
    scale = max(1.0, 1e-12 * abs(start))
    near, step = start, 0.25 * scale
    while True:
        far = near + direction * step
        if abs(far - start) > FURTHEST * scale:
            return direction * math.inf
        if rising(far) * direction >= 0.0:
            return float(brentq(rising, near, far, xtol=ROOT, rtol=1e-15))
        near, step = far, 2.0 * step


def _clipped(probability: float) -> float:
    return min(1.0, max(0.0, probability))
