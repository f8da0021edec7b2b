"""All that is on record of one test, in words and figures ready to be set on paper."""

import json
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from datetime import datetime
from itertools import groupby, islice
from xml.etree.ElementTree import Element

from service.domain.assumptions import Assumptions
from service.domain.characteristics import promise_of
from service.domain.correcting import Correction
from service.domain.errors import ComputationTooLarge, InvalidQuestion
from service.domain.families import Family
from service.domain.log import LoggedObservation, expanded
from service.domain.plan import Plan
from service.domain.procedure import Procedure, lines_of, procedure_of
from service.domain.sequential_test import SequentialTest
from service.domain.standards import source_of
from service.domain.state import Decision, State
from service.pages.charts.walk import walk_drawing
from service.pages.views.one_test import Facts, facts_of, promises_of
from service.pages.views.picture import picture_of, views_of
from service.pages.views.results import Result, columns_of, result_of, said
from service.pages.views.saying import decision_said
from service.pages.views.telling import Figure, figures_of
from service.pages.words import DONE, figure, percent
from service.storage.reader import Reader
from service.web.asking import assumptions_for, inference_for
from service.web.walks import Walks

# Results that are all set; of more, so many of the first and of the last.
MOST_RESULTS, FIRST_AND_LAST = 1000, 100
# Corrections that are set.
MOST_CORRECTIONS = 200
LEVEL = 0.95
# Letters from here on, beyond Latin, Greek and Cyrillic, are not among the fonts that come with the service.
FURTHEST = "\u0530"
POINTS = 1600

BEFORE_DECISION = (
    "There is no estimate before the decision: estimates that allow for the stopping rule are of where a test ended."
)
NOT_COMPUTED = "The attained risks are not among the figures of this record: {reason}"
SIMULATED = "figures of an invariant plan are simulated, and stand on the page of the plan."
CAUTIONS = (
    (
        "What this record says of risks, estimates and intervals holds if the results came about as the plan "
        "supposes; nothing in it shows that they did."
    ),
    (
        "It replaces no standard, contract, law or instruction. Where one of them applies and says something else, "
        "that is to be followed."
    ),
    (
        "What is done with the subject is decided by the person who is authorised to do so, and who answers for it "
        "by signature."
    ),
)
SIGNING = ("Inspected by", "Reviewed by", "Approved by")


@dataclass(frozen=True)
class Table:
    """
    Rows of words under a heading for each column.

    Attributes:
        figures: The columns that hold figures.
    """

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    figures: tuple[int, ...] = ()


@dataclass(frozen=True)
class Record:
    """
    What is set, in its order.

    Attributes:
        results: The log; where it is long, only its first part, and `last_results` its last.
        results_note: How many there are, and where those left out are to be found.
        estimates: Empty where there are none; `estimates_note` says why.
    """

    key: str
    title: str
    printed: str
    identity: Facts
    decision: Decision
    headline: str
    sentence: str
    notes: tuple[str, ...]
    standing: Facts
    promises: Facts
    drawing: Element
    results: Table
    last_results: Table
    results_note: str
    corrections: Table
    corrections_note: str
    estimates: Table
    estimates_note: str
    checks: Table
    checks_summary: str
    disposition: Facts
    history: Facts
    verifying: str
    cautions: tuple[str, ...] = CAUTIONS
    signing: tuple[str, ...] = SIGNING


def record_of(reader: Reader, walks: Walks, test: SequentialTest, plan: Plan, now: datetime) -> Record:
    """Everything about a test as it was read."""
    decided = decision_said(test, plan)
    results = _results(reader, test, plan)
    estimates, estimates_note = _estimates(reader, test, plan)
    checks = assumptions_for(reader, test, plan)
    corrections = reader.log.corrections(test)
    picture = picture_of(test, plan, walks.path_of(reader, test, plan, POINTS), views_of(procedure_of(plan))[0])
    return Record(
        key=test.key,
        title=f"Record of {test.subject.kind} {test.subject.name}",
        printed=moment(now),
        identity=_identity(test, plan),
        decision=test.state.decision,
        headline=decided.headline,
        sentence=decided.sentence,
        notes=decided.notes,
        standing=facts_of(test, plan),
        promises=_promises(plan),
        drawing=walk_drawing(picture),
        results=results[0],
        last_results=results[1],
        results_note=_results_note(test),
        corrections=_corrections(reader, test, plan, corrections[:MOST_CORRECTIONS]),
        corrections_note=_corrections_note(len(corrections)),
        estimates=estimates,
        estimates_note=estimates_note,
        checks=_checks(checks),
        checks_summary=checks.summary,
        disposition=_disposition(test),
        history=(("Acts", f"{test.history.length}"), ("Link of the last act", test.history.link)),
        verifying=_verifying(test),
    )


def moment(at: datetime) -> str:
    """A time in UTC."""
    return at.strftime("%Y-%m-%d %H:%M:%S UTC")


def spelling(name: str) -> str:
    """A name with a number for each letter that may lack a form on the machine that prints."""
    return "".join(each if each < FURTHEST else f"[U+{ord(each):04X}]" for each in name)


def _identity(test: SequentialTest, plan: Plan) -> Facts:
    labels = tuple((f"Label {name}", value) for name, value in test.labels.items())
    name = test.subject.name
    spelled = () if max(name) < FURTHEST else (("The name in code points", spelling(name)),)
    return (
        (test.subject.kind.value.capitalize(), name),
        *spelled,
        ("Test", test.key),
        *labels,
        ("Plan", plan.name),
        ("Fingerprint of the plan", plan.fingerprint),
        ("Plan made", f"{moment(plan.created_at)} by {plan.created_by}"),
        ("Registered", f"{moment(test.registered_at)} by {test.registered_by}"),
        ("Last change", f"{moment(test.updated_at)}, version {test.version}"),
    )


def _promises(plan: Plan) -> Facts:
    """What the plan states, with its hypotheses in words, its lines and its risks."""
    procedure, content = procedure_of(plan), plan.content
    parameter = procedure.family.parameter
    stated = dict(promises_of(plan))
    for name in ("H0", "H1"):
        if name in stated:
            stated[name] = f"{parameter} = {stated[name]}"
    stated.pop("Parameter", None)
    stated |= _lines(procedure)
    source = source_of(content.get("standard"))
    if source is not None:
        stated["Source of the table"] = source
    return (*stated.items(), *_attained(plan, procedure))


def _lines(procedure: Procedure) -> dict[str, str]:
    """The limits of the total where they are straight lines."""
    lines = lines_of(procedure)
    if lines is None:
        return {}
    family, sign = procedure.family, 1.0 if procedure.is_upward else -1.0
    sides = ("at most", "at least") if procedure.is_upward else ("at least", "at most")
    found = {}
    for name, side, height in (
        ("Accept when", sides[0], -sign * lines.accept_intercept),
        ("Reject when", sides[1], sign * lines.reject_intercept),
    ):
        rest = f"{'+' if height >= 0.0 else '−'} {figure(abs(height))}"
        found[name] = f"{family.counted} {side} {figure(lines.slope)} × {family.axis} {rest}"
    return found


def _attained(plan: Plan, procedure: Procedure) -> Iterator[tuple[str, str]]:
    """The risks that the plan really has, unless they were stated with it."""
    names = ("Producer's risk attained", "Consumer's risk attained")
    if "attained" in plan.content:
        return
    if procedure.family.is_invariant:
        yield "Risks attained", NOT_COMPUTED.format(reason=SIMULATED)
        return
    try:
        promise = promise_of(plan.document, procedure.hypotheses)
    except (ComputationTooLarge, InvalidQuestion) as error:
        yield "Risks attained", NOT_COMPUTED.format(reason=error)
        return
    for name, risk in zip(names, (promise.alpha, promise.beta), strict=True):
        if risk is not None:
            yield name, percent(risk, 4)


def _results(reader: Reader, test: SequentialTest, plan: Plan) -> tuple[Table, Table]:
    """The first and the last results; all of them are first where there are few."""
    family, count = procedure_of(plan).family, test.state.sequence
    first = count if count <= MOST_RESULTS else FIRST_AND_LAST
    rows = [list(_read(reader, test, family, 0, first))]
    rows.append(list(_read(reader, test, family, count - FIRST_AND_LAST, count)) if first < count else [])
    shown = [each for part in rows for each in part]
    has_unit = any(each.logged.unit for each in shown)
    has_observed = any(each.logged.observed_at for each in shown)
    columns = ("No.", *columns_of(family), *("unit",) * has_unit, *("observed",) * has_observed)
    columns = (*columns, "received (UTC)", "by", "counts")
    figures = tuple(range(1, len(family.fields) + 1))
    first_rows, last_rows = (tuple(_rows(part, has_unit=has_unit, has_observed=has_observed)) for part in rows)
    return Table(columns, first_rows, figures), Table(columns, last_rows, figures)


def _read(reader: Reader, test: SequentialTest, family: Family, after: int, through: int) -> Iterable[Result]:
    entries = expanded(family, test, reader.log.corrected(test, after))
    wanted = (result_of(family, each) for each in entries if each.sequence > after)
    return islice(wanted, through - after)


def _rows(results: Sequence[Result], *, has_unit: bool, has_observed: bool) -> Iterator[tuple[str, ...]]:
    """A row for each result, or for several that follow each other and are alike in everything."""

    def words(result: Result) -> tuple[str, ...]:
        logged = result.logged
        between = (*(logged.unit or "",) * has_unit, *(logged.observed_at or "",) * has_observed)
        received = moment(logged.received_at).removesuffix(" UTC")
        return (*result.posted, *between, received, logged.actor, _counts(logged))

    for told, some in groupby(results, key=words):
        numbers = [result.logged.sequence for result in some]
        yield (f"{numbers[0]}" if len(numbers) == 1 else f"{numbers[0]} to {numbers[-1]}", *told)


def _counts(logged: LoggedObservation) -> str:
    if logged.correction is not None:
        return "voided" if logged.correction.replacement is None else "replaced"
    return "yes" if logged.is_counted else "overrun"


def _results_note(test: SequentialTest) -> str:
    count = test.state.sequence
    if count == 0:
        return "No result has come in yet."
    note = (
        f"{figure(count)} results in all, as they were posted and in the order in which they were reported; results "
        "that follow each other and are alike in everything stand together."
    )
    if count > MOST_RESULTS:
        note += (
            f" Here are the first {FIRST_AND_LAST} and the last {FIRST_AND_LAST}. All are on the page "
            f"/tests/{test.key}/results, and as CSV at /v1/tests/{test.key}/observations with Accept: text/csv."
        )
    return note


def _corrections(reader: Reader, test: SequentialTest, plan: Plan, made: Sequence[Correction]) -> Table:
    family = procedure_of(plan).family
    rows = []
    for each in made:
        posted, _ = reader.log.observation(test, family, each.observation)
        before, after = str(each.before), str(each.state.decision)
        rows.append(
            (
                f"{each.observation}",
                said(family, posted),
                "voided" if each.replacement is None else said(family, json.loads(each.replacement)),
                each.reason,
                f"{moment(each.received_at)} by {each.actor}",
                (after if before == after else f"{before} → {after}") + _since(each.state),
            )
        )
    return Table(("Result", "posted", "counts now", "reason", "made", "decision"), tuple(rows))


def _since(state: State) -> str:
    """With which result a decision falls from a correction on."""
    return "" if state.decided is None else f", with result {state.decided.sequence}"


def _corrections_note(count: int) -> str:
    if count == 0:
        return "Nothing was corrected."
    left_out = f" The first {MOST_CORRECTIONS} are set here." if count > MOST_CORRECTIONS else ""
    return f"{figure(count)} made. What was posted stays on record; the last correction of a result counts.{left_out}"


def _estimates(reader: Reader, test: SequentialTest, plan: Plan) -> tuple[Table, str]:
    if not test.state.is_decided:
        return Table((), ()), BEFORE_DECISION
    try:
        found = inference_for(reader, test, plan, LEVEL)
    except (ComputationTooLarge, InvalidQuestion) as error:
        return Table((), ()), str(error)
    overrun = " Results after the decision never count here." if test.state.overrun else ""
    rows = tuple((each.name, _value(each), f"{each.meaning} {each.reason}".strip()) for each in figures_of(found, plan))
    return Table(("figure", "value", "what it means"), rows, (1,)), f"{found.looks}{overrun}"


def _value(estimate: Figure) -> str:
    """A figure with its standard error where it was simulated."""
    return estimate.value if estimate.error is None else f"{estimate.value}, standard error {figure(estimate.error, 2)}"


def _checks(found: Assumptions) -> Table:
    rows = tuple(
        (
            str(check.supposition),
            check.method,
            figure(None if check.found is None else check.found.p_value, 4),
            figure(adjusted, 4),
        )
        for check, adjusted in zip(found.checks, found.adjusted, strict=True)
    )
    return Table(("Supposed", "method", "p-value", "allowing for all checks"), rows)


def _disposition(test: SequentialTest) -> Facts:
    disposition = test.disposition
    if disposition is None:
        return ()
    done = (
        (f"The {test.subject.kind.value} was", DONE[disposition.verdict]),
        ("Reason", disposition.reason),
        ("By", f"{disposition.by}, {moment(disposition.at)}"),
    )
    if disposition.deviation_reason is None:
        return (*done, ("The test's decision", "followed"))
    return (*done, ("The test's decision", "not followed"), ("Reason for that", disposition.deviation_reason))


def _verifying(test: SequentialTest) -> str:
    return (
        "The link of each act is the SHA-256 of that act and of the link before it, so this link vouches for all acts "
        "up to it. They are told with their links at "
        f"/v1/tests/{test.key}/history; act {test.history.length} must carry this one. “sprt-monitor verify” computes "
        "all links of the service again and names the first that differs."
    )
