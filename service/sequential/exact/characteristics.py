"""What a plan does at given parameters, as every exact computation answers it."""

from dataclasses import dataclass

import numpy as np

from service.sequential.double import FloatArray

# Sampling that is still going on with less than this probability is no longer followed.
NEGLIGIBLE = 1e-13

QUANTILES = (0.5, 0.9, 0.95, 0.99)
# Probabilities of still sampling that the quantiles stand for.
LEVELS = 1.0 - np.array(QUANTILES)


class TooMuchWork(Exception):
    """The computation would need more than it may; `limit` says of what."""

    def __init__(self, most: int, unit: str) -> None:
        super().__init__(f"the exact computation would need more than {most} {unit}")
        self.limit = f"{most} {unit}"


@dataclass(frozen=True)
class Characteristics:
    """
    Exact figures at some parameters; arrays of shape (points,), quantiles of shape (points, 4).

    `below`, `above`: probabilities of ending at or beyond either limit; `between`: of ending between the limits of the
    wall, where these leave room. `mean`, `standard_deviation` and `quantiles` are of the progress at the decision:
    units, or exposure.

    Attributes:
        error_bound: A bound of the absolute error of the probabilities, and of the relative error of the means.
        work: About how many multiplications it took.
    """

    below: FloatArray
    between: FloatArray
    above: FloatArray
    mean: FloatArray
    standard_deviation: FloatArray
    quantiles: FloatArray
    error_bound: float
    work: int


def spread(mean: FloatArray, second_moment: FloatArray) -> FloatArray:
    """The standard deviation from two moments, never below zero."""
    deviation: FloatArray = np.sqrt(np.maximum(0.0, second_moment - mean**2))
    return deviation
