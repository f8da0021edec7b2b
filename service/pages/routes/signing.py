"""Signing in and out, with an access key."""

import secrets
from hmac import compare_digest
from typing import Annotated, cast

from fastapi import Query, Request, Response
from fastapi.responses import RedirectResponse

from service.pages.forms import form_of, typed
from service.pages.rendering import page
from service.pages.routing import SIGN_IN, local, page_router
from service.pages.session import SignedIn, forget, keep
from service.web.keys import valid_key
from service.web.parts import Parts, PartsOf

router = page_router(is_open=True)

# Tells a form that this service made from one that another site sends; whoever signs in has no session yet.
FORM_COOKIE, FORM_SECONDS = "sprt_form", 3600


@router.get(SIGN_IN)
async def show_sign_in(request: Request, next_: Annotated[str, Query(alias="next", max_length=2000)] = "/") -> Response:
    """The form; whoever is signed in goes on."""
    if request.state.session is not None:
        return RedirectResponse(local(next_), 303)
    return _form(request, local(next_))


@router.post(SIGN_IN)
async def sign_in(request: Request, parts: PartsOf) -> Response:
    """Keep the key in a cookie, and go where somebody wanted to."""
    form = await form_of(request)
    place = local(form["next"] or "/")
    token = request.cookies.get(FORM_COOKIE, "")
    if not token or not compare_digest(form["token"].encode(), token.encode()):
        return _form(request, place, "The form was too old; please try once more.", status=403)
    key = await valid_key(parts, form["key"])
    if key is None:
        fault = "No such key, or it is revoked or past its time."
        return _form(request, place, fault, status=401)
    response = RedirectResponse(place, 303)
    keep(response, request, form["key"], parts.clock(), parts.settings)
    response.delete_cookie(FORM_COOKIE, path=SIGN_IN)
    return response


@router.post("/sign-out")
async def sign_out(request: Request, session: SignedIn) -> Response:
    """Have the browser forget the key."""
    await typed(request, session)
    response = RedirectResponse(SIGN_IN, 303)
    forget(response, request)
    return response


def _form(request: Request, place: str, fault: str = "", status: int = 200) -> Response:
    token = secrets.token_urlsafe(32)
    hours = cast("Parts", request.app.state.parts).settings.session_hours
    response = page(request, "sign_in.html", status=status, place=place, token=token, fault=fault, hours=hours)
    response.set_cookie(
        FORM_COOKIE,
        token,
        max_age=FORM_SECONDS,
        path=SIGN_IN,
        secure=request.url.scheme == "https",
        httponly=True,
        samesite="strict",
    )
    return response
