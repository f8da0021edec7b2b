"""What people do to a test here: correct a result, dispose of the subject. Each is shown before it is done."""

import hashlib
import json
from dataclasses import dataclass, replace
from typing import Annotated, Any, cast

from fastapi import Path, Query, Request, Response
from fastapi.responses import RedirectResponse
from pydantic import TypeAdapter, ValidationError

from service.domain.access import Role
from service.domain.chain import json_of
from service.domain.correcting import Correction
from service.domain.disposing import FOLLOWS, Verdict
from service.domain.errors import Conflict, Fault, Invalid, InvalidCorrection, VersionMoved
from service.domain.names import NAME_PATTERN
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest, Status
from service.domain.state import State
from service.ingest.commands import Dispose, PostCorrection
from service.ingest.correcting import worked_out
from service.pages.failing import status_of
from service.pages.forms import Typed, typed
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.session import NotYours, Session, SignedIn, check_role
from service.pages.views.results import UNIT, as_observation, as_typed, fields_to_type, said
from service.pages.views.saying import saying_of
from service.web.fields import Reason
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, computing, reading
from service.web.requests import request_id_of

router = page_router()

Key = Annotated[str, Path(pattern=NAME_PATTERN)]
Sequence = Annotated[int, Query(ge=1, lt=2**53)]

VOID, REPLACE = "void", "replace"
_REASON: TypeAdapter[str] = TypeAdapter(Reason)


@dataclass(frozen=True)
class Consequence:
    """
    What a correction would come to, for people.

    Attributes:
        seen: What the form says was looked at, so that nothing else is done.
        counts: The result as it was understood.
    """

    correction: Correction
    before: str
    after: str
    changes_decision: bool
    moves_decision: bool
    version: int
    seen: str
    counts: str


@router.get("/tests/{key}/correct")
async def show_correction(
    request: Request, key: Key, session: SignedIn, parts: PartsOf, sequence: Sequence
) -> Response:
    """The observation as it counts now, to be voided or replaced."""
    test, plan = await known_test(parts, key)
    _check_may_correct(session, test)
    now = await reading(lambda: _as_it_counts(parts, test, plan, sequence))
    form = Typed({"what": REPLACE if now is not None else VOID, **as_typed(now)})
    return _correction_page(request, test, plan, sequence, form)


@router.post("/tests/{key}/correct")
async def correct(request: Request, key: Key, session: SignedIn, parts: PartsOf, sequence: Sequence) -> Response:
    """First show what would follow; then, from the form that shows it, do it."""
    form = await typed(request, session)
    test, plan = await known_test(parts, key)
    _check_may_correct(session, test)
    form, reason = _with_reason(form)
    if reason is None:
        return _correction_page(request, test, plan, sequence, form, status=422)
    try:
        command = _correction_command(request, session, test, plan, sequence, form, reason)
        if not _is_agreed(form, test, _seen(command)):
            consequence = await computing(parts, lambda: _consequence(parts, test, plan, command))
            return _correction_page(request, test, plan, sequence, form, consequence=consequence)
        await parts.road.submit(command)
    except (Invalid, Conflict, VersionMoved) as error:
        return _correction_page(request, test, plan, sequence, _told(form, error), status=status_of(error)[0])
    return RedirectResponse(f"/tests/{key}/results?after={max(0, sequence - 10)}#result-{sequence}", 303)


@router.get("/tests/{key}/dispose")
async def show_disposition(request: Request, key: Key, session: SignedIn, parts: PartsOf) -> Response:
    """What may be done with the subject."""
    check_role(session, Role.ENGINEER)
    test, plan = await known_test(parts, key)
    _check_open(test)
    return _disposition_page(request, test, plan, Typed({}))


@router.post("/tests/{key}/dispose")
async def dispose(request: Request, key: Key, session: SignedIn, parts: PartsOf) -> Response:
    """First show what would follow; then do it, and close the test."""
    form = await typed(request, session)
    check_role(session, Role.ENGINEER)
    test, plan = await known_test(parts, key)
    _check_open(test)
    form, reason = _with_reason(form)
    faults = dict(form.faults)
    verdict = Verdict(form["verdict"]) if form["verdict"] in set(Verdict) else None
    if verdict is None:
        faults["verdict"] = "say what is done with the subject"
    deviates = verdict is not None and verdict not in FOLLOWS[test.state.decision]
    deviation = _reason_in(form["deviation_reason"]) if deviates else None
    if deviates and deviation is None and (form["deviation_reason"] or form["step"] == "do"):
        faults["deviation_reason"] = "say why, in at most 1000 characters, for this is not what the test decided"
    if faults or reason is None or verdict is None:
        return _disposition_page(request, test, plan, Typed(form.values, faults), status=422)
    if not _is_agreed(form, test, verdict) or (deviates and deviation is None):
        return _disposition_page(request, test, plan, form, verdict=verdict)
    command = Dispose(
        test=key,
        verdict=verdict,
        reason=reason,
        deviation_reason=deviation,
        actor=session.key.name,
        expected_versions=frozenset({form["version"]}),
        request_id=request_id_of(request),
        limits=session.key.limits,
    )
    try:
        await parts.road.submit(command)
    except (Invalid, Conflict, VersionMoved) as error:
        return _disposition_page(request, test, plan, _told(form, error), status=status_of(error)[0])
    return RedirectResponse(f"/tests/{key}", 303)


def _consequence(parts: Parts, test: SequentialTest, plan: Plan, command: PostCorrection) -> Consequence:
    procedure = procedure_of(plan)
    correction, _, _ = worked_out(command, test, procedure, parts.reader.log, parts.clock())
    after = replace(test, state=correction.state)
    return Consequence(
        correction,
        saying_of(test, plan).headline,
        saying_of(after, plan).headline,
        correction.state.decision is not test.state.decision,
        _place(correction.state) != _place(test.state),
        test.version,
        _seen(command),
        "" if correction.replacement is None else said(procedure.family, json.loads(correction.replacement)),
    )


def _seen(command: PostCorrection) -> str:
    return json_of(command.replacement)


def _is_agreed(form: Typed, test: SequentialTest, seen: str) -> bool:
    """Whether this is to be done, and is what the form has shown of the test as it is."""
    return form["step"] == "do" and form["version"] == str(test.version) and form["seen"] == seen


def _place(state: State) -> int | None:
    """The result with which the decision fell."""
    return None if state.decided is None else state.decided.sequence


def _correction_command(  # noqa: PLR0913 - the parts of a request
    request: Request,
    session: Session,
    test: SequentialTest,
    plan: Plan,
    sequence: int,
    form: Typed,
    reason: str,
) -> PostCorrection:
    replacement = None if form["what"] == VOID else as_observation(procedure_of(plan).family, form)
    asked = json.dumps({"sequence": sequence, "observation": replacement, "reason": reason})
    return PostCorrection(
        test=test.key,
        observation=sequence,
        replacement=replacement,
        reason=reason,
        body_digest=hashlib.sha256(asked.encode()).hexdigest(),
        actor=session.key.name,
        may_correct_decided=session.may(Role.ENGINEER),
        expected_versions=frozenset({str(test.version)}),
        request_id=request_id_of(request),
        limits=session.key.limits,
    )


def _correction_page(  # noqa: PLR0913 - what the page shows
    request: Request,
    test: SequentialTest,
    plan: Plan,
    sequence: int,
    form: Typed,
    *,
    consequence: Consequence | None = None,
    status: int = 200,
) -> Response:
    return page(
        request,
        "correct.html",
        status=status,
        test=test,
        sequence=sequence,
        form=form,
        fields=fields_to_type(procedure_of(plan).family),
        consequence=consequence,
    )


def _disposition_page(  # noqa: PLR0913 - what the page shows
    request: Request,
    test: SequentialTest,
    plan: Plan,
    form: Typed,
    *,
    verdict: Verdict | None = None,
    status: int = 200,
) -> Response:
    follows = FOLLOWS[test.state.decision]
    return page(
        request,
        "dispose.html",
        status=status,
        test=test,
        saying=saying_of(test, plan),
        form=form,
        verdicts=[(each, each in follows) for each in Verdict],
        verdict=verdict,
        deviates=verdict is not None and verdict not in follows,
    )


def _as_it_counts(parts: Parts, test: SequentialTest, plan: Plan, sequence: int) -> Any:  # noqa: ANN401 - JSON
    if sequence > test.state.sequence:
        rule = f"must be a result of this test, 1 to {test.state.sequence}; received {sequence}"
        raise InvalidCorrection([Fault("/sequence", rule)])
    _, now = parts.reader.log.observation(test, procedure_of(plan).family, sequence)
    return now


def _check_may_correct(session: Session, test: SequentialTest) -> None:
    check_role(session, Role.COLLECTOR)
    _check_open(test)
    if test.state.is_decided and not session.may(Role.ENGINEER):
        raise NotYours("After the decision only an engineer may correct a result.")


def _check_open(test: SequentialTest) -> None:
    if test.status is Status.CLOSED:
        raise Conflict("The test is closed by its disposition; nothing about it can be changed any more.")


def _with_reason(form: Typed) -> tuple[Typed, str | None]:
    reason = _reason_in(form["reason"])
    if reason is not None:
        return form, reason
    return Typed(form.values, {**form.faults, "reason": "say why, in at most 1000 characters"}), None


def _reason_in(text: str) -> str | None:
    try:
        return _REASON.validate_python(" ".join(text.split()))
    except ValidationError:
        return None


def _told(form: Typed, error: Exception) -> Typed:
    """The form with what the domain says of it, beside the field where it is about one."""
    faults = getattr(error, "faults", ())
    if not faults:
        return Typed(form.values, {"": str(error)})
    found = {}
    for fault in cast("tuple[Fault, ...]", faults):
        name = fault.pointer.removeprefix("/observation/").removeprefix("/")
        found[name if name in {*form.values, UNIT} else ""] = f"{name} {fault.detail}".strip()
    return Typed(form.values, found)
