"""Registering a lot or an experiment under a plan."""

from collections.abc import Mapping
from typing import Annotated, cast

from fastapi import Path, Request, Response
from fastapi.responses import RedirectResponse

from service.domain.access import Role
from service.domain.errors import Conflict, Fault, Invalid, OutsideLimits
from service.domain.names import NAME_PATTERN
from service.domain.plan import Plan
from service.ingest.commands import RegisteredTest, RegisterTest
from service.pages.failing import status_of
from service.pages.forms import Typed, typed
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.session import SignedIn, check_role
from service.pages.views.one_test import promises_of
from service.pages.views.registering import registration_in
from service.web.lookup import known_plan
from service.web.parts import PartsOf
from service.web.requests import request_id_of

router = page_router()

Name = Annotated[str, Path(pattern=NAME_PATTERN)]

# The field beside which a fault of the domain stands.
FIELDS = {"/key": "key", "/subject/kind": "kind", "/subject/name": "subject", "/labels": "labels"}
NOTHING: Mapping[str, str] = {"key": "", "kind": "lot", "subject": "", "labels": ""}


@router.get("/plans/{name}/register")
async def show_registration(request: Request, name: Name, session: SignedIn, parts: PartsOf) -> Response:
    """An empty form."""
    check_role(session, Role.ENGINEER)
    return _page(request, await known_plan(parts, name), Typed(NOTHING))


@router.post("/plans/{name}/register")
async def register(request: Request, name: Name, session: SignedIn, parts: PartsOf) -> Response:
    """Register it and go to its page; results then come by the API or the command line."""
    form = await typed(request, session)
    check_role(session, Role.ENGINEER)
    plan = await known_plan(parts, name)
    form = Typed({**NOTHING, **form.values})
    registration, faults = registration_in(form)
    if registration is None:
        return _page(request, plan, Typed(form.values, faults), status=422)
    command = RegisterTest(
        key=registration.key,
        plan=plan.name,
        subject=registration.subject,
        labels=registration.labels,
        actor=session.key.name,
        request_id=request_id_of(request),
        limits=session.key.limits,
    )
    try:
        outcome = cast("RegisteredTest", await parts.road.submit(command))
    except Invalid as error:
        told = error.faults or (Fault("", str(error)),)
        return _page(request, plan, form.with_faults(told, FIELDS), status=status_of(error)[0])
    except Conflict as error:
        return _page(request, plan, Typed(form.values, {"key": str(error)}), status=status_of(error)[0])
    except OutsideLimits as error:
        return _page(request, plan, Typed(form.values, {"": str(error)}), status=status_of(error)[0])
    return RedirectResponse(f"/tests/{outcome.test.key}", 303)


def _page(request: Request, plan: Plan, form: Typed, status: int = 200) -> Response:
    return page(request, "register.html", status=status, plan=plan, form=form, promises=promises_of(plan))
