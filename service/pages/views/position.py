"""Where a test stands between its limits, as a share of the way from the accept limit to the reject limit."""

import math
from dataclasses import dataclass

import numpy as np

from service.domain.observing import standing_of
from service.domain.procedure import Procedure
from service.domain.state import Decision, State
from service.pages.words import SAID, figure


@dataclass(frozen=True)
class Position:
    """
    Attributes:
        share: 0 at the limit on the left, 1 at that on the right.
        zero: Where the evidence is even; None where no likelihood ratio decides.
        words: The same for those who cannot see it.
    """

    share: float
    zero: float | None
    decision: Decision
    is_two_sided: bool
    has_accept_limit: bool
    words: str


def position_of(procedure: Procedure, state: State) -> Position:
    """Where a state stands, seen along the evidence, or along the total where a table decides."""
    two_sided = procedure.is_two_sided
    if procedure.thresholds is None or two_sided:
        share, zero, has_limit = _share_of_total(procedure, state), None, True
    else:
        accept, reject = procedure.thresholds.accept, procedure.thresholds.reject
        has_limit = math.isfinite(accept)
        low = accept if has_limit else -reject
        share = (state.log_likelihood_ratio - low) / (reject - low)
        zero = -low / (reject - low)
    if state.is_decided:
        share = _decided_share(state, share, two_sided=two_sided)
    share = min(1.0, max(0.0, share))
    said = SAID[state.decision]
    way = f"{figure(share * 100.0, 2)} % of the way from the left limit to the right"
    return Position(share, zero, state.decision, two_sided, has_limit, f"{said}: {way}")


def _decided_share(state: State, share: float, *, two_sided: bool) -> float:
    """A decided test stands at a limit, or between those of a two-sided plan that accepts at its wall."""
    if state.decision is Decision.ACCEPT:
        return 0.5 if two_sided else 0.0
    return round(share) if two_sided else 1.0


def _share_of_total(procedure: Procedure, state: State) -> float:
    standing = standing_of(procedure, state)
    limits = procedure.region.limits(np.array([max(standing.progress, 1.0)]))
    low, high = float(limits.lower[0]), float(limits.upper[0])
    if not math.isfinite(low) or not math.isfinite(high) or high <= low:
        return 0.5
    share = (standing.total - low) / (high - low)
    return share if procedure.is_upward or procedure.is_two_sided else 1.0 - share
