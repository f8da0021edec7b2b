"""Two ways of doing one thing, tried side by side: pass/fail pairs, by Wald's double dichotomies."""

from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import Column, Increments, refuse
from service.domain.families.conditional import Conditional


class Paired(Conditional):
    """
    One observation is a pair of results, 0 or 1 each; only pairs that differ count, and they are the sample number.

    The parameter is the odds ratio u = pb(1 - pa) / (pa(1 - pb)): of the pairs that differ, a share u/(1 + u) succeeds
    in b, whatever the two chances are. Source: Wald (1947), Sequential Analysis, chapter 6.
    """

    name: ClassVar[str] = "paired"
    parameter: ClassVar[str] = "odds ratio of success, b over a, of pairs that differ"
    counted: ClassVar[str] = "pairs that differ in b's favour"
    axis: ClassVar[str] = "pairs that differ"
    value_field: ClassVar[str] = "a"
    required: ClassVar[tuple[str, ...]] = ("b",)
    shown: ClassVar[tuple[str, str]] = ("pair that differs", "pairs that differ")
    in_a: ClassVar[str] = "in a's favour"
    in_b: ClassVar[str] = "in b's favour"

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        a, b = columns["a"], columns["b"]
        rule = "must be 0 or 1"
        refuse([fault for arm in (a, b) for fault in arm.require((arm.values == 0.0) | (arm.values == 1.0), rule)])
        differs = (a.values != b.values).astype(np.float64)
        return Increments(differs.astype(np.int64), differs, (b.values > a.values).astype(np.float64))
