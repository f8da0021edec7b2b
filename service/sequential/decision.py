"""What a sequential test may answer, and which of its rules made the answer."""

from enum import StrEnum


class Decision(StrEnum):
    """
    The answer after an observation.

    `ACCEPT` accepts H0, `REJECT` rejects it; both are final. `CONTINUE` asks for another observation.
    """

    CONTINUE = "continue"
    ACCEPT = "accept"
    REJECT = "reject"


class Cause(StrEnum):
    """Why sampling ended: a boundary was reached, or truncation forced the answer."""

    BOUNDARY = "boundary"
    TRUNCATION = "truncation"
