"""What is inferred after the decision of a test, and over which looks."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from service.sequential.double import FloatArray


@dataclass(frozen=True)
class Looks:
    """
    The looks that were taken up to the decision.

    Attributes:
        progress: Array of shape (looks,): units or exposure at each; compared by its digest.
        step: How far apart they were, None where that differed; None for families watched in time too.
        words: The rule for people.
        in_b: Of measurements that come one by one in two arms, 1 for each in b and 0 for each in a.
    """

    progress: FloatArray = field(compare=False)
    digest: str
    step: float | None
    words: str
    in_b: tuple[float, ...] | None = None


class Kind(StrEnum):
    """What a p-value is."""

    EXACT = "exact"
    SIMULATED = "simulated"
    BOUND = "bound"


@dataclass(frozen=True)
class Simulated:
    """
    How figures were simulated; the same seed gives the same ones.

    Attributes:
        errors: The standard error of each figure, by its name; those that are None have none.
    """

    seed: int
    courses: int
    errors: Mapping[str, float]


@dataclass(frozen=True)
class Inference:
    """
    The figures after a decision; None where there is none, with the reason under the figure's name in `reasons`.

    Attributes:
        bias: Of the maximum-likelihood estimate, were its value the true parameter.
        looks: Which looks the probabilities are over.
    """

    p_value: float
    maximum_likelihood: float | None
    median_unbiased: float | None
    unbiased: float | None
    level: float
    lower: float | None
    upper: float | None
    bias: float | None
    reasons: Mapping[str, str]
    looks: str
    kind: Kind = Kind.EXACT
    simulated: Simulated | None = None
