"""Where a test stands, in a sentence that needs no statistics to be understood."""

import re
from dataclasses import dataclass, replace

from service.domain.families import Family
from service.domain.observing import direction_of_rejection
from service.domain.outlook import Ways, ways_of
from service.domain.plan import Plan
from service.domain.procedure import Procedure, procedure_of
from service.domain.sequential_test import SequentialTest
from service.domain.state import Cause, Decision
from service.pages.words import DONE, SAID, figure

# A number of things, such as "21 conforming units".
# A hyphen before a number.
_MINUS = re.compile(r"(?<![\w.])-(?=\d)")
_THINGS = re.compile(r"\d+ [a-z]+( [a-z]+)?")

# What is one of several.
_ONE = {"pairs that differ": "pair that differs"}


@dataclass(frozen=True)
class Saying:
    """
    Attributes:
        headline: The decision, and what it means for the subject.
        sentence: What brought it about, or what is still needed.
        notes: What somebody must know beside it.
    """

    decision: Decision
    headline: str
    sentence: str
    notes: tuple[str, ...]


def saying_of(test: SequentialTest, plan: Plan) -> Saying:
    """What the page says first."""
    procedure, state = procedure_of(plan), test.state
    what = test.subject.kind.value
    if test.disposition is not None:
        return Saying(state.decision, f"{DONE[test.disposition.verdict].capitalize()}", _closed(test), _notes(test))
    if not state.is_decided:
        sentence = still_needed(ways_of(procedure, state), what)
        return Saying(state.decision, SAID[state.decision], sentence, _notes(test))
    verb = "accepted" if state.decision is Decision.ACCEPT else "rejected"
    return Saying(state.decision, f"{SAID[state.decision]} the {what}", _decided(procedure, test, verb), _notes(test))


def decision_said(test: SequentialTest, plan: Plan) -> Saying:
    """The same of the decision alone, whatever was done with the subject since."""
    if test.disposition is not None and not test.state.is_decided:
        return Saying(test.state.decision, "No decision", "The test was closed before it had decided.", _notes(test))
    return saying_of(replace(test, disposition=None), plan)


def still_needed(ways: Ways, what: str) -> str:
    """The shortest ways to each decision, in one sentence."""
    to_reject = [way.words for way in (ways.reject, ways.reject_below) if way is not None]
    said = []
    if ways.accept is not None:
        said.append(f"{_more(ways.accept.words)} and the {what} is accepted")
    if to_reject:
        more = ", or ".join(map(_more, to_reject))
        said.append(f"{more} and {'it' if said else f'the {what}'} is rejected")
    sentence = "; ".join(said) + "." if said else "No single step decides from here."
    return sentence[0].upper() + sentence[1:]


def _more(words: str) -> str:
    """A way as what comes on top of what there is: plain numbers of things are so many more of them."""
    return f"{words} more" if _THINGS.fullmatch(words) else f"{_MINUS.sub('−', words)},"


def _decided(procedure: Procedure, test: SequentialTest, verb: str) -> str:
    state = test.state
    decided = state.decided
    if decided is None:  # not reached: the decision says it is
        raise ValueError(test.key)
    after = f"after {_counted(procedure.family, decided.sample_number)}"
    if decided.exposure is not None:
        after += f" and {procedure.family.axis} of {figure(decided.exposure)}"
    limit = "the evidence came to its limit" if procedure.thresholds is not None else "the table's limit was reached"
    why = limit if decided.cause is Cause.BOUNDARY else "the plan's truncation was reached"
    direction = direction_of_rejection(procedure, state)
    side = f", the parameter lying {direction} the hypothesis" if direction else ""
    return f"{why[0].upper()}{why[1:]} {after}{side}: the {test.subject.kind.value} is {verb} and sampling may stop."


def _counted(family: Family, number: int) -> str:
    """A sample number with what it counts: where exposure runs beside it, a unit may be reported often."""
    several = "observations" if family.has_exposure else family.axis
    one = _ONE.get(several, several.removesuffix("s"))
    return f"{figure(number)} {one if number == 1 else several}"


def _notes(test: SequentialTest) -> tuple[str, ...]:
    notes = []
    if test.disposition is not None and test.disposition.deviation_reason is not None:
        notes.append(f"Not what the test decided, because: {test.disposition.deviation_reason}")
    if test.decision_changed:
        notes.append("A correction has changed the decision.")
    if test.corrected_after_decision:
        notes.append("The test was corrected after it had decided.")
    if test.state.overrun:
        overrun = test.state.overrun
        came = "1 observation came after the decision and does" if overrun == 1 else None
        notes.append(f"{came or f'{figure(overrun)} observations came after the decision and do'} not count.")
    return tuple(notes)


def _closed(test: SequentialTest) -> str:
    """What was done with the subject, by whom and why, and what the test had decided."""
    disposition, decision = test.disposition, test.state.decision
    if disposition is None:  # not reached: the caller asks only of closed tests
        raise ValueError(test.key)
    by = f"The {test.subject.kind.value} was {DONE[disposition.verdict]} by {disposition.by}: {disposition.reason}"
    decided = "The test had not decided." if decision is Decision.CONTINUE else f"The test had decided: {decision}."
    return f"{by if by.endswith('.') else by + '.'} {decided}"
