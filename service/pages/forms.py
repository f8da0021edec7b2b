"""Forms as browsers send them, and what is wrong with them beside each field."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from hmac import compare_digest
from typing import cast
from urllib.parse import parse_qsl

from fastapi import Request

from service.domain.errors import Fault, Invalid
from service.pages.session import NotYours, SignedIn
from service.web.bodies import BodyTooLarge, BodyTooSlow, body_within
from service.web.parts import Parts

MOST_BYTES, MOST_FIELDS = 256 * 1024, 2000
TOKEN = "token"  # noqa: S105 - the name of a field


@dataclass(frozen=True)
class Typed:
    """
    What somebody typed into a form, and what is wrong with it.

    Attributes:
        values: By the name of the field.
        faults: By the name of the field; those of no field under an empty name.
    """

    values: Mapping[str, str]
    faults: Mapping[str, str] = field(default_factory=dict)

    def __getitem__(self, name: str) -> str:
        """What was typed, without the space around it; empty where nothing was."""
        return self.values.get(name, "").strip()

    def fault(self, name: str) -> str:
        """What is wrong with a field; empty where nothing is."""
        return self.faults.get(name, "")

    def with_faults(self, faults: Sequence[Fault], fields: Mapping[str, str] | None = None) -> "Typed":
        """
        The same with what the domain found wrong.

        Args:
            faults: Of the domain.
            fields: The field of a pointer, where it is not the pointer without its slash.
        """
        found: dict[str, str] = {}
        for fault in faults:
            name = (fields or {}).get(fault.pointer, fault.pointer.removeprefix("/"))
            found[name if name in self.values or fields else ""] = fault.detail
        return Typed(self.values, found)


async def typed(request: Request, session: SignedIn) -> Typed:
    """
    The form that a signed-in person sent.

    Raises:
        NotYours: It does not carry the session's token: another site sent it, or it is from an earlier session.
        Invalid: It is no form.
    """
    found = await form_of(request)
    if not compare_digest(found[TOKEN].encode(), session.token.encode()):
        raise NotYours("The form is not from this session. Go back, load the page again and send it once more.")
    return found


async def form_of(request: Request) -> Typed:
    """
    The fields of a form.

    Raises:
        Invalid: It is no form, or takes too long or too much.
    """
    media_type = request.headers.get("content-type", "").partition(";")[0].strip().lower()
    if media_type != "application/x-www-form-urlencoded":
        raise Invalid("What was sent is no form.")
    settings = cast("Parts", request.app.state.parts).settings
    try:
        body = await body_within(request, MOST_BYTES, settings.body_seconds)
        pairs = parse_qsl(body.decode("ascii"), keep_blank_values=True, errors="strict", max_num_fields=MOST_FIELDS)
    except (BodyTooLarge, BodyTooSlow):
        raise Invalid("The form is too long, or took too long to arrive; nothing was stored.") from None
    except ValueError:
        raise Invalid("What was sent is no form.") from None
    return Typed(dict(pairs))
