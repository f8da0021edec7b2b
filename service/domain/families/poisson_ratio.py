"""Counts in two arms: the ratio of their rates, whatever the rates are."""

from collections.abc import Mapping
from typing import ClassVar

import numpy as np

from service.domain.families.base import Column, Increments, refuse, whole_numbers
from service.domain.families.conditional import Conditional


class PoissonRatio(Conditional):
    """
    One observation is a report of the counts in both arms, over exposures in the one known ratio.

    Given their sum, the count in b is binomial with odds ratio * exposure_ratio, so events are the sample number. A
    report is looked at only at its end. Source: Przyborowski and Wilenski (1940), Biometrika 31, 313-323.
    """

    name: ClassVar[str] = "poisson_ratio"
    parameter: ClassVar[str] = "ratio of the rates, b over a"
    counted: ClassVar[str] = "events in b"
    axis: ClassVar[str] = "events"
    value_field: ClassVar[str] = "a"
    required: ClassVar[tuple[str, ...]] = ("b",)
    known: ClassVar[tuple[str, ...]] = ("exposure_ratio",)
    shown: ClassVar[tuple[str, str]] = ("event", "events")
    in_a: ClassVar[str] = "in a"
    in_b: ClassVar[str] = "in b"

    def odds_at_one(self, known: Mapping[str, float]) -> float:
        """See `Conditional`."""
        return known["exposure_ratio"]

    def increments(self, columns: Mapping[str, Column], known: Mapping[str, float]) -> Increments:
        """See `Family`."""
        a, b = columns["a"], columns["b"]
        refuse([*whole_numbers(a, 0), *whole_numbers(b, 0)])
        events = a.values + b.values
        return Increments(events.astype(np.int64), events, b.values)
