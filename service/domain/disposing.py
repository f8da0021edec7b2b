"""Dispositions: what an authorised person finally did with a subject, and why. Pure."""

from dataclasses import dataclass
from datetime import datetime
from enum import StrEnum

from service.domain.errors import Fault, InvalidDisposition
from service.domain.state import Decision


class Verdict(StrEnum):
    """What may be done with a subject."""

    ACCEPT = "accept"
    REJECT = "reject"
    CONCESSION = "concession"
    REWORK = "rework"
    SCRAP = "scrap"
    WITHDRAWN = "withdrawn"


# What follows from each decision by itself; anything else deviates from it.
FOLLOWS = {
    Decision.CONTINUE: frozenset[Verdict](),
    Decision.ACCEPT: frozenset({Verdict.ACCEPT}),
    Decision.REJECT: frozenset({Verdict.REJECT, Verdict.REWORK, Verdict.SCRAP}),
}


@dataclass(frozen=True)
class Disposition:
    """
    What was done with a subject.

    Attributes:
        deviation_reason: Why it is not what the test decided; None where it is.
    """

    verdict: Verdict
    reason: str
    deviation_reason: str | None
    by: str
    at: datetime

    @property
    def deviates(self) -> bool:
        """True where it does not follow from the decision."""
        return self.deviation_reason is not None


def check_deviation(verdict: Verdict, deviation_reason: str | None, decision: Decision) -> None:
    """
    Ask whether a disposition says why it deviates, if it does.

    Raises:
        InvalidDisposition: It does and does not say why, or does not and says why.
    """
    deviates = verdict not in FOLLOWS[decision]
    if deviates and deviation_reason is None:
        what = "there is no decision yet" if decision is Decision.CONTINUE else f"the decision is {decision}"
        rule = f"is required, for {what} and {verdict} does not follow from it"
    elif not deviates and deviation_reason is not None:
        rule = f"must be left out, for {verdict} follows from the decision {decision}"
    else:
        return
    raise InvalidDisposition([Fault("/deviation_reason", rule)])
