"""
The generalised log-likelihood ratio of composite hypotheses in a one-parameter family.

Quantity: ln sup of the likelihood over H1 - ln sup over H0, in nats. One-sided: H0 = {parameter <= edge0}, H1 =
{parameter >= edge1}, mirrored where edge1 lies below edge0. Two-sided: H0 = {edge0} against the whole range.
Method: the suprema lie at the estimate, or at the edge nearest to it, so that the ratio is a difference of two half
deviances; between the edges it is the ratio of the two simple hypotheses.
Accuracy: that of `deviance` and `likelihood`.
Cost: a few operations for each point.
Source: Lorden (1976), Annals of Statistics 4, 281-291; Kulldorff, Davis, Kolczak, Lewis, Lieu and Platt (2011),
Sequential Analysis 30, 58-78 (one-sided, counts, equal edges).
"""

from dataclasses import dataclass

import numpy as np

from service.sequential.deviance import Deviance
from service.sequential.double import Double, FloatArray
from service.sequential.likelihood import LikelihoodRatio


@dataclass(frozen=True)
class Generalised:
    """
    What both forms share. See `Evidence`.

    Attributes:
        edge0: H0's edge, or its only value, as a mean of one unit of progress.
    """

    deviance: Deviance
    edge0: float

    @property
    def is_test_martingale(self) -> bool:
        """See `Evidence`; suprema know what came."""
        return False

    def expected(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        return self.edge0 * progress

    def deviation(self, progress: FloatArray) -> FloatArray:
        """See `Evidence`."""
        return np.sqrt(self.deviance.variance(self.edge0) * np.maximum(progress, 1e-300))


@dataclass(frozen=True)
class OneSided(Generalised):
    """
    H0 on one side of `edge0`, H1 on the other side of `edge1`.

    Attributes:
        edge1: As `edge0`; equal to it where nothing lies between the hypotheses.
        ratio: The simple one of the two edges; None where they are equal.
        is_upward: H1 lies above H0.
    """

    edge1: float
    ratio: LikelihoodRatio | None
    is_upward: bool

    @property
    def is_two_sided(self) -> bool:
        """See `Evidence`."""
        return False

    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`."""
        estimate, n = total.value, progress.value
        sign = 1.0 if self.is_upward else -1.0
        beyond0 = sign * (estimate - self.edge0 * n) > 0.0
        before1 = sign * (self.edge1 * n - estimate) > 0.0
        for_h1 = np.where(beyond0, self.deviance.against(progress, total, self.edge0), 0.0)
        for_h0 = np.where(before1, self.deviance.against(progress, total, self.edge1), 0.0)
        apart = for_h1 - for_h0
        if self.ratio is None:
            return apart
        return np.where(beyond0 & before1, self.ratio.log(progress, total), apart)


@dataclass(frozen=True)
class TwoSided(Generalised):
    """H0 is the single value `edge0`, H1 the whole range."""

    @property
    def is_two_sided(self) -> bool:
        """See `Evidence`."""
        return True

    @property
    def is_upward(self) -> bool:
        """See `Evidence`."""
        return True

    def log(self, progress: Double, total: Double) -> FloatArray:
        """See `Evidence`."""
        return self.deviance.against(progress, total, self.edge0)
