"""Two arms compared through the share of one of them: what families share whose evidence is a count of two kinds."""

import math
from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.checks import (
    Check,
    autocorrelation_check,
    even_runs_check,
    halves_check,
    proportion_dispersion_check,
)
from service.domain.families.base import ORIGIN, End, Family, Increments, Start, TableKind, Way, plural
from service.domain.families.bernoulli import Bernoulli
from service.sequential import likelihood
from service.sequential.approximations import Motion
from service.sequential.checks.counts import proportion_residuals
from service.sequential.deviance import Deviance
from service.sequential.double import FloatArray
from service.sequential.errors import OutOfRange
from service.sequential.evidence import Evidence
from service.sequential.exact.characteristics import Characteristics
from service.sequential.fixed_sample import FixedSample
from service.sequential.inference.ordering import Outcome
from service.sequential.likelihood import LikelihoodRatio
from service.sequential.region import PASS_FAIL, Region, Span
from service.sequential.ways import looks_to_lower, looks_to_upper

# Odds beyond these leave too few digits of the rarer kind.
SMALLEST_ODDS, LARGEST_ODDS = 1e-6, 1e6

SHARES = Bernoulli()


class Conditional(Family):
    """
    Given that something has shown in one of two arms, it was arm b with odds that the parameter sets.

    The region runs over what has shown, the total over what showed in b: a region of proportions.

    Attributes:
        shown: What is counted, one and several.
        in_a, in_b: In which arm it showed, for people.
    """

    span: ClassVar[Span] = PASS_FAIL
    prior: ClassVar[tuple[str, ...]] = Bernoulli.prior
    table: ClassVar[TableKind | None] = TableKind.UNITS
    no_unbiased_estimate: ClassVar[str | None] = "Unbiased is only the estimate of the share of b, not of its odds."
    no_bias: ClassVar[str | None] = "Is known of the estimate of the share of b only, not of its odds."
    shown: ClassVar[tuple[str, str]]
    in_a: ClassVar[str]
    in_b: ClassVar[str]

    def odds_at_one(self, known: Mapping[str, float]) -> float:
        """The odds of b against a under the parameter 1; under any other they are so many times as large."""
        return 1.0

    def hypothesis_rule(self, value: float) -> str | None:
        """See `Family`."""
        within = SMALLEST_ODDS <= value <= LARGEST_ODDS
        return None if within else f"must lie from {SMALLEST_ODDS:g} to {LARGEST_ODDS:g}"

    def parameter_rule(self, value: float) -> str | None:
        """See `Family`."""
        return None if value == 0.0 else self.hypothesis_rule(value)

    def likelihood_ratio(self, h0: float, h1: float, known: Mapping[str, float]) -> LikelihoodRatio:
        """See `Family`."""
        odds0, odds1 = h0 * self.odds_at_one(known), h1 * self.odds_at_one(known)
        for odds in (odds0, odds1):
            self._check_odds(odds)
        return likelihood.odds(odds0, odds1)

    def deviance(self, known: Mapping[str, float]) -> Deviance:
        """See `Family`."""
        return SHARES.deviance({})

    def mixture(self, edge: float, direction: int, known: Mapping[str, float], prior: Mapping[str, float]) -> Evidence:
        """See `Family`; the prior is that of the share of b."""
        return SHARES.mixture(edge, direction, {}, prior)

    def outcome(self, region: Region, end: End, known: Mapping[str, float]) -> Outcome:
        """See `Family`."""
        return SHARES.outcome(region, end, {})

    def mean_of(self, parameter: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        self._check_odds(parameter * self.odds_at_one(known))
        return self._share(parameter, known)

    def parameter_of(self, mean: float, known: Mapping[str, float]) -> float:
        """See `Family`."""
        return mean / (1.0 - mean) / self.odds_at_one(known) if mean < 1.0 else math.inf

    def exact(
        self, region: Region, parameters: FloatArray, known: Mapping[str, float], start: Start = ORIGIN
    ) -> Characteristics:
        """See `Family`."""
        shares = np.array([self._share(float(parameter), known) for parameter in parameters])
        return SHARES.exact(region, shares, {}, start)

    def ways(self, region: Region, start: Start, known: Mapping[str, float]) -> tuple[Way | None, Way | None]:
        """See `Family`."""
        down = looks_to_lower(region, start.progress, start.total, 1.0)
        up = looks_to_upper(region, start.progress, start.total, 1.0)
        return (
            None if down is None else Way(down[0], None, down[1], self._with_at_most(*down)),
            None if up is None else Way(up[0], None, up[1], self._with_at_least(*up)),
        )

    def estimate(self, start: Start, known: Mapping[str, float]) -> float | None:
        """See `Family`."""
        of_a = start.progress - start.total
        return start.total / of_a / self.odds_at_one(known) if of_a > 0.0 else None

    def motion(self, parameter: float, known: Mapping[str, float]) -> Motion:
        """See `Family`."""
        return SHARES.motion(self._share(parameter, known), {})

    def fixed_sample(
        self, lower: float, upper: float, risks: tuple[float, float], known: Mapping[str, float]
    ) -> FixedSample | None:
        """See `Family`."""
        return SHARES.fixed_sample(self._share(lower, known), self._share(upper, known), risks, {})

    def checks(self, seen: Increments, known: Mapping[str, float]) -> tuple[Check, ...]:
        """See `Family`: what has shown falls to b by one chance, report by report where one holds several."""
        has_shown = seen.progress > 0.0
        shown, in_b = seen.progress[has_shown], seen.total[has_shown]
        several = self.shown[1]
        checks = [even_runs_check(in_b, shown, several), halves_check(in_b, shown, f"{several} {self.in_b}")]
        if np.any(shown > 1.0):
            checks[1:1] = [autocorrelation_check(proportion_residuals(in_b, shown), "reports")]
            checks.append(proportion_dispersion_check(in_b, shown, f"{several} {self.in_b}"))
        return tuple(checks)

    @staticmethod
    def _check_odds(odds: float) -> None:
        if not SMALLEST_ODDS <= odds <= LARGEST_ODDS:
            rule = f"must, like h0, leave odds of b against a from {SMALLEST_ODDS:g} to {LARGEST_ODDS:g}"
            raise OutOfRange("h1", rule, odds)

    def _share(self, parameter: float, known: Mapping[str, float]) -> float:
        odds = parameter * self.odds_at_one(known)
        return odds / (1.0 + odds)

    def _with_at_most(self, count: int, of_b: float) -> str:
        what = plural(count, *self.shown)
        return f"{what}, {_all(count)}{self.in_a}" if of_b == 0 else f"{what}, at most {of_b:.0f} {self.in_b}"

    def _with_at_least(self, count: int, of_b: float) -> str:
        what = plural(count, *self.shown)
        if of_b == count:
            return f"{what}, {_all(count)}{self.in_b}"
        return f"{what}, at least {of_b:.0f} {self.in_b}" if of_b else f"{what}, whatever the arm"


def _all(count: int) -> str:
    return "" if count == 1 else "all "
