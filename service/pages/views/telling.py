"""What may be said after the decision, and what happened, in words."""

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime
from itertools import islice
from typing import Any

from service.domain.chain import Act, Entry
from service.domain.disposing import Verdict
from service.domain.inference import meanings_of
from service.domain.inferred import Inference, Kind
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.domain.state import Decision
from service.pages.words import DONE, SAID, figure, percent
from service.storage.reader import Reader

ACTS = 100

P_VALUES = {Kind.EXACT: "p-value", Kind.SIMULATED: "p-value, simulated", Kind.BOUND: "p-value, at most"}
NAMES = {
    Act.REGISTERED: "Registered",
    Act.SUBMITTED: "Results received",
    Act.DECIDED: "Decision",
    Act.CORRECTED: "Correction",
    Act.DISPOSED: "Disposition",
}


@dataclass(frozen=True)
class Figure:
    """
    One figure.

    Attributes:
        meaning: What it says, in a sentence.
        reason: Why it is what it is, where that needs saying.
        error: Its standard error, where it was simulated.
    """

    name: str
    value: str
    meaning: str
    reason: str
    error: float | None


@dataclass(frozen=True)
class ToldAct:
    """One act for people."""

    number: int
    name: str
    at: datetime
    actor: str
    words: str
    link: str
    is_migrated: bool


def figures_of(found: Inference, plan: Plan) -> tuple[Figure, ...]:
    """The figures of an inference, each in a sentence."""
    meanings, reasons = meanings_of(plan.document, found.level), dict(found.reasons)
    errors = {} if found.simulated is None else found.simulated.errors
    interval = "–" if found.lower is None and found.upper is None else f"{figure(found.lower)} to {figure(found.upper)}"
    ends = " ".join(dict.fromkeys(reasons[end] for end in ("lower", "upper") if end in reasons))
    rows = (
        ("Median-unbiased estimate", figure(found.median_unbiased), "median_unbiased"),
        (f"{percent(found.level, 7)} confidence interval", interval, "interval"),
        (P_VALUES[found.kind], figure(found.p_value), "p_value"),
        ("Maximum-likelihood estimate", figure(found.maximum_likelihood), "maximum_likelihood"),
        ("Its bias", figure(found.bias), "bias_of_maximum_likelihood"),
        ("Unbiased estimate", figure(found.unbiased), "unbiased"),
    )
    return tuple(
        Figure(name, value, meanings.get(key, ""), ends if key == "interval" else reasons.get(key, ""), errors.get(key))
        for name, value, key in rows
    )


def acts_of(reader: Reader, test: SequentialTest, after: int, sequence: int) -> tuple[tuple[ToldAct, ...], str | None]:
    """A page of a test's history after an act, and the query of the next page."""
    entries = list(islice(reader.log.acts(test.key, after, sequence, test.history.length), ACTS + 1))
    page = entries[:ACTS]
    further = None
    if len(entries) > ACTS:
        sequence = max([sequence, *(entry.details.get("last_sequence", 0) for entry in page)])
        further = f"?after={page[-1].number}&sequence={sequence}"
    return tuple(map(told, page)), further


def told(entry: Entry) -> ToldAct:
    """An act in words."""
    return ToldAct(
        number=entry.number,
        name=NAMES.get(entry.act, entry.act.value),
        at=entry.at,
        actor=entry.actor,
        words=" ".join(_words(entry)),
        link=entry.link,
        is_migrated=entry.is_migrated,
    )


def _words(entry: Entry) -> Iterator[str]:
    details = entry.details
    if entry.act is Act.REGISTERED:
        yield f"Under plan {details['plan']}, fingerprint {details['fingerprint'][:12]}…"
    elif entry.act is Act.SUBMITTED:
        first, last = details["first_sequence"], details["last_sequence"]
        yield f"Result {first}." if first == last else f"Results {first} to {last}."
    elif entry.act is Act.DECIDED:
        yield f"{SAID[Decision(details['before'])]} → {SAID[Decision(details['decision'])]}"
        if details.get("sequence") is not None:
            yield f"with result {details['sequence']}."
    elif entry.act is Act.CORRECTED:
        yield f"Result {details['sequence']} {'voided' if details['observation'] is None else 'replaced'}:"
        yield _said(details["reason"])
        if details["state"]["decided"] is not None:
            yield f"The decision falls with result {details['state']['decided']['sequence']}."
    elif entry.act is Act.DISPOSED:
        yield f"{DONE[Verdict(details['disposition'])].capitalize()}:"
        yield _said(details["reason"])
        if details.get("deviation_reason"):
            yield f"Not what the test decided, because: {_said(details['deviation_reason'])}"


def _said(text: Any) -> str:  # noqa: ANN401 - out of a record
    """A sentence with its end."""
    words = str(text).rstrip()
    return words if words.endswith((".", "!", "?")) else f"{words}."
