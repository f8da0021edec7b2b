"""The state of a test: what all counted observations together have said so far."""

from dataclasses import dataclass
from datetime import datetime

from service.sequential.decision import Cause, Decision


@dataclass(frozen=True)
class Sum:
    """A running sum kept in two doubles, so that its value does not depend on how the terms were posted."""

    high: float = 0.0
    low: float = 0.0

    @property
    def value(self) -> float:
        """The sum as one double."""
        return self.high + self.low


@dataclass(frozen=True)
class Decided:
    """The moment of a decision: where the walk stood, when that was recorded, and which observation it was."""

    sequence: int
    sample_number: int
    exposure: float | None
    at: datetime
    cause: Cause


@dataclass(frozen=True)
class State:
    """
    Where a test stands after `sequence` observations.

    Once decided, the evidence, sample number, exposure and total stay what they were at the decision;
    only `sequence` and `overrun` still move.

    Attributes:
        sequence: Observations received, overrun included.
        sample_number: Units used (reports, for families watched in time).
        exposure: Unit-time or other exposure used; zero for families without exposure.
        total: The sufficient statistic in its natural unit.
        carried: Running sums of a family that needs more of them than progress and total; empty before the first.
        log_likelihood_ratio: Evidence for H1 against H0, in nats.
        decision: The answer; accept and reject are final.
        decided: The moment of the decision, once there is one.
        overrun: Observations received after the decision: kept, never counted.
        voided: Observations that a correction took out, before or after the decision: kept, never counted.
    """

    sequence: int = 0
    sample_number: int = 0
    exposure: Sum = Sum()
    total: Sum = Sum()
    log_likelihood_ratio: float = 0.0
    decision: Decision = Decision.CONTINUE
    decided: Decided | None = None
    overrun: int = 0
    carried: tuple[Sum, ...] = ()
    voided: int = 0

    @property
    def counted(self) -> int:
        """Observations that the evidence stands on."""
        return self.sequence - self.overrun - self.voided

    @property
    def is_decided(self) -> bool:
        """True once sampling may stop."""
        return self.decision is not Decision.CONTINUE


__all__ = ["Cause", "Decided", "Decision", "State", "Sum"]
