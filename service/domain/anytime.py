"""What may be said at any moment, decided or not: an always-valid p-value and a confidence sequence."""

import math
from dataclasses import dataclass

import numpy as np

from service.domain.observing import standing_of
from service.domain.procedure import Procedure
from service.domain.state import State
from service.sequential.double import Double, FloatArray
from service.sequential.mixture import Mixture


@dataclass(frozen=True)
class ConfidenceSequence:
    """
    Limits that hold at all moments together: with at least this probability the parameter never leaves any of them.

    Attributes:
        level: 1 - alpha.
        lower, upper: Arrays of shape (points,), infinite where the range has no end.
    """

    level: float
    lower: FloatArray
    upper: FloatArray


def always_valid_p_value(procedure: Procedure, log_likelihood_ratio: float) -> float | None:
    """
    A p-value that may be looked at at any moment: under H0 it is ever at or below a with probability at most a.

    None where the evidence gives none. Source: Ville (1939); the inverse of a likelihood ratio, at most 1.
    """
    return math.exp(-max(0.0, log_likelihood_ratio)) if procedure.evidence.is_test_martingale else None


def confidence_at(procedure: Procedure, state: State) -> ConfidenceSequence | None:
    """The limits where a state stands, as one point."""
    if not isinstance(procedure.evidence, Mixture):
        return None
    standing = standing_of(procedure, state)
    return confidence_sequence(procedure, np.array([standing.progress]), np.array([standing.total]))


def confidence_sequence(procedure: Procedure, progress: FloatArray, total: FloatArray) -> ConfidenceSequence | None:
    """
    The parameters that a mixture over the plan's prior does not speak against; None for plans without a prior.

    Args:
        procedure: The plan, compiled.
        progress, total: Arrays of shape (points,): where the walk stands.
    """
    evidence, family = procedure.evidence, procedure.family
    if not isinstance(evidence, Mixture):
        return None
    alpha, zero = procedure.risks[0], np.zeros_like(progress)
    ends = evidence.confidence(Double(progress, zero), Double(total, zero), alpha)
    low, high = (np.array([family.parameter_of(float(mean), procedure.known) for mean in end]) for end in ends)
    return ConfidenceSequence(1.0 - alpha, *((high, low) if family.parameter_lowers_total else (low, high)))
