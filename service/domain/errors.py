"""
What can go wrong, without a word of HTTP.

    DomainError
    ├── Invalid                  cannot be right: carries faults, each with a JSON pointer
    │   ├── InvalidPlan
    │   ├── InvalidTest
    │   ├── InvalidObservations
    │   ├── InvalidCorrection, InvalidDisposition
    │   ├── InvalidKey, InvalidReceiver
    │   ├── InvalidQuestion
    │   ├── ComputationTooLarge
    │   └── IdempotencyKeyReused
    ├── Unknown                  there is no such thing
    │   ├── UnknownPlan, UnknownTest, UnknownKey, UnknownSimulation, UnknownSubject
    │   ├── UnknownReceiver, UnknownNotice
    ├── Conflict                 not now, or not again
    │   ├── PlanDiffers, TestDiffers, KeyNameTaken, ReceiverNameTaken, TooManyReceivers, NoticeWaiting
    │   ├── RepeatedUnits, TestIsClosed, SubmissionInProgress, NotDecided, ChangesNothing
    ├── OutsideLimits            the access key is for other tests
    ├── RoleTooNarrow            the access key may not do this as things stand
    ├── VersionMoved             the state is no longer the one the caller saw
    └── Unavailable              try again later: carries when
        ├── QueueFull, ShuttingDown, StorageFailed, OutcomeUnknown, DatabaseAway
        ├── TooManyQuestions, TooManyStreams
"""

from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass


@dataclass(frozen=True)
class Fault:
    """One thing wrong: where (a JSON pointer into the body), and the rule with the value received."""

    pointer: str
    detail: str


class DomainError(Exception):
    """Something the caller can be told; the text is for people."""


class Invalid(DomainError):
    """The request cannot be right, now or later."""

    def __init__(self, detail: str, faults: Sequence[Fault] = ()) -> None:
        super().__init__(detail)
        self.faults = tuple(faults)


class InvalidPlan(Invalid):
    """The plan contradicts itself or the theory."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("The plan cannot be right; see errors.", faults)


class InvalidTest(Invalid):
    """The registration of a test cannot be right."""


class InvalidObservations(Invalid):
    """At least one observation cannot be right; none of the submission is stored."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("The submission is refused as a whole and nothing of it is stored; see errors.", faults)


class InvalidCorrection(Invalid):
    """A correction cannot be right; nothing is changed."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("The correction is refused and nothing is changed; see errors.", faults)


class InvalidDisposition(Invalid):
    """A disposition does not say what it must."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("The disposition is refused and the test stays open; see errors.", faults)


class InvalidKey(Invalid):
    """A key cannot be made as asked."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        rules = "; ".join(f"{fault.pointer.removeprefix('/')} {fault.detail}" for fault in faults)
        super().__init__(f"The key cannot be made: {rules}.", faults)


class InvalidReceiver(Invalid):
    """A receiver cannot be registered as asked."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("The receiver is refused; see errors.", faults)


class InvalidQuestion(Invalid):
    """What is asked about a plan lies outside what it can answer."""


class ComputationTooLarge(Invalid):
    """The exact computation would need more work than the service does for one question."""

    def __init__(self, limit: str) -> None:
        super().__init__(
            f"The exact computation would need more than {limit}. Truncate the plan, move the hypotheses apart, "
            "or ask for less extreme parameters."
        )


class IdempotencyKeyReused(Invalid):
    """The idempotency key belongs to another submission of this test."""

    def __init__(self, key: str, reason: str) -> None:
        super().__init__(f"The idempotency key {key!r} {reason}; give each submission a key of its own.")


class Unknown(DomainError):
    """There is no such thing."""

    thing = "thing"

    def __init__(self, name: str) -> None:
        super().__init__(f"There is no {self.thing} {name!r}.")
        self.name = name


class UnknownPlan(Unknown):
    """No plan of this name."""

    thing = "plan"


class UnknownTest(Unknown):
    """No test of this key."""

    thing = "test"


class UnknownKey(Unknown):
    """No valid access key of this name."""

    thing = "access key"


class UnknownSimulation(Unknown):
    """No simulation of this name in this process."""

    thing = "simulation"

    def __init__(self, name: str) -> None:
        super().__init__(name)
        self.args = (f"This process has no simulation {name!r}; ask the question again, which gives the same figures.",)


class UnknownSubject(Unknown):
    """No test of this subject."""

    thing = "subject"


class UnknownReceiver(Unknown):
    """No receiver of this name that is not removed."""

    thing = "receiver"


class UnknownNotice(Unknown):
    """No notice of this id."""

    thing = "notice"


class Conflict(DomainError):
    """The request collides with what is stored."""


class PlanDiffers(Conflict):
    """A plan of this name exists with other content; plans never change."""

    def __init__(self, name: str) -> None:
        super().__init__(f"The plan {name!r} exists with other content, and plans never change; choose another name.")


class TestDiffers(Conflict):
    """A test of this key exists with another plan, subject or labels."""

    __test__ = False

    def __init__(self, key: str) -> None:
        super().__init__(f"The test {key!r} exists with another plan, subject or labels; choose another key.")


class KeyNameTaken(Conflict):
    """A valid access key carries this name."""

    def __init__(self, name: str) -> None:
        super().__init__(f"A valid access key is already named {name!r}; revoke it first or choose another name.")


class ReceiverNameTaken(Conflict):
    """A receiver carries this name."""

    def __init__(self, name: str) -> None:
        super().__init__(f"A receiver is already named {name!r}; remove it first or choose another name.")


class TooManyReceivers(Conflict):
    """There are as many receivers as the service tells."""

    def __init__(self, limit: int) -> None:
        super().__init__(f"There are {limit} receivers, and no more are told; remove one first.")


class NoticeWaiting(Conflict):
    """The notice waits to be sent already."""

    def __init__(self, notice: str) -> None:
        super().__init__(f"The notice {notice!r} waits to be sent, or is being sent; it needs no sending again.")


class RepeatedUnits(Conflict):
    """Units that this test has counted already, or that stand twice in the submission."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        super().__init__("A unit may be counted once in a test; nothing of the submission is stored; see errors.")
        self.faults = tuple(faults)


class TestIsClosed(Conflict):
    """The test takes no further observations."""

    __test__ = False

    def __init__(self, key: str) -> None:
        super().__init__(f"The test {key!r} is closed and takes no further observations, corrections or disposition.")


class SubmissionInProgress(Conflict):
    """The first submission with this idempotency key has not been answered yet."""

    def __init__(self, key: str) -> None:
        super().__init__(f"A submission with the idempotency key {key!r} is still in progress; try again shortly.")


class NotDecided(Conflict):
    """What is asked follows the decision, and there is none yet."""

    def __init__(self, key: str) -> None:
        super().__init__(
            f"The test {key!r} is not decided yet, and inference follows the decision. "
            "Until then ask for its outlook: what is still needed and what is to be expected."
        )


class OutsideLimits(DomainError):
    """The access key is limited to other tests."""

    def __init__(self, name: str) -> None:
        super().__init__(f"The key {name!r} is limited to subjects or labels that this test does not have.")


class ChangesNothing(Conflict):
    """The observation is already what the correction would make it."""

    def __init__(self, observation: int) -> None:
        super().__init__(f"Observation {observation} is already what this correction would make it.")


class RoleTooNarrow(DomainError):
    """The access key may not do this as things stand."""


class VersionMoved(DomainError):
    """The state is no longer the one the caller saw."""

    def __init__(self, expected: Iterable[str], current: int | None) -> None:
        has = "there is no such test yet" if current is None else f"its version is now {current}"
        super().__init__(f"The test is not as expected: If-Match gave {', '.join(sorted(expected)) or 'none'}; {has}.")


class Unavailable(DomainError):
    """Not at this moment."""

    retry_after_seconds = 1


class QueueFull(Unavailable):
    """More is waiting to be written than the service will hold."""

    def __init__(self) -> None:
        super().__init__("Too many submissions are waiting; nothing was stored, try again shortly.")


class DatabaseAway(Unavailable):
    """The database did not answer a read."""

    retry_after_seconds = 5

    def __init__(self) -> None:
        super().__init__("The database does not answer; try again shortly.")


class TooManyQuestions(Unavailable):
    """More exact computations are waiting than can be answered soon."""

    retry_after_seconds = 5

    def __init__(self) -> None:
        super().__init__("Too many exact computations are waiting; try again shortly.")


class TooManyStreams(Unavailable):
    """As many streams of events are open as one process carries."""

    retry_after_seconds = 15

    def __init__(self, limit: int) -> None:
        super().__init__(f"This process carries {limit} streams of events and has no more places; come back later.")


class ShuttingDown(Unavailable):
    """The service is stopping; it finishes what it accepted and takes nothing new."""

    retry_after_seconds = 5

    def __init__(self) -> None:
        super().__init__("The service is stopping; nothing was stored, try again shortly.")


class StorageFailed(Unavailable):
    """The database refused; nothing was stored."""

    retry_after_seconds = 5

    def __init__(self) -> None:
        super().__init__("The database did not take the write; nothing was stored, try again shortly.")


class OutcomeUnknown(Unavailable):
    """The database was lost in the middle of a commit; whether it took the write will only show later."""

    retry_after_seconds = 5

    def __init__(self) -> None:
        super().__init__(
            "The database did not confirm the write, so it is not known whether it is stored; "
            "send it again with the same idempotency key, or look at the log first."
        )


@contextmanager
def located(pointer: str) -> Iterator[None]:
    """Let the faults found inside point below this place of the body."""
    try:
        yield
    except (Invalid, RepeatedUnits) as error:
        error.faults = tuple(Fault(pointer + fault.pointer, fault.detail) for fault in error.faults)
        raise
