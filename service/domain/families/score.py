"""The caller's own model: increments of a log-likelihood ratio that is worked out elsewhere."""

from collections.abc import Mapping
from typing import ClassVar, NoReturn

import numpy as np

from service.domain.errors import InvalidQuestion
from service.domain.families.base import ORIGIN, Column, Family, Increments, Start, Way, reals, refuse
from service.sequential import likelihood
from service.sequential.approximations import Motion
from service.sequential.double import FloatArray
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import REALS, Region, Span


class Score(Family):
    """
    One observation is what it adds to ln L(H1) - ln L(H0), as the caller's model has it; the total is their sum.

    There is no parameter, and nothing is known of how increments fall out: only what holds for every model is claimed.
    """

    name: ClassVar[str] = "score"
    parameter: ClassVar[str] = "none: the increments hold both hypotheses"
    counted: ClassVar[str] = "sum of the increments"
    axis: ClassVar[str] = "observations"
    span: ClassVar[Span] = REALS
    has_model: ClassVar[bool] = False

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        _refuse()

    def parameter_rule(self, value: float) -> str | None:
        """See `Family`."""
        _refuse()

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        return likelihood.summed()

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        _refuse()

    def grid(self, low: float, high: float, points: int) -> tuple[float, ...]:
        """See `Family`."""
        _refuse()

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        limits = region.limits(np.array([start.progress + 1.0]))
        low, high = float(limits.lower[0]) - start.total, float(limits.upper[0]) - start.total
        return (
            Way(1, None, low, f"an increment of at most {low:.6g}"),
            Way(1, None, high, f"an increment of at least {high:.6g}"),
        )

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        return None

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        _refuse()

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        _refuse()

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        value = columns["value"]
        refuse(reals(value, "must be a number", np.isfinite(value.values)))
        count = len(value.values)
        return Increments(np.ones(count, np.int64), np.ones(count), value.values)


def _refuse() -> NoReturn:
    raise InvalidQuestion(
        "The family score brings its own evidence and no model of the observations, so there are no exact figures, no "
        "approximations and no fixed sample; the plan's attained risks are the bounds that hold for every model."
    )
