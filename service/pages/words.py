"""Numbers, decisions and times as a page says them."""

import math
from collections.abc import Callable, Mapping
from datetime import datetime
from typing import Any

from markupsafe import Markup, escape

from service.domain.disposing import Verdict
from service.domain.families.base import plural
from service.domain.state import Decision

# Digits of a computed figure on a page.
DIGITS = 6

SAID = {
    Decision.CONTINUE: "Go on sampling",
    Decision.ACCEPT: "Accept",
    Decision.REJECT: "Reject",
}
DONE = {
    Verdict.ACCEPT: "accepted",
    Verdict.REJECT: "rejected",
    Verdict.CONCESSION: "released on concession",
    Verdict.REWORK: "sent to rework",
    Verdict.SCRAP: "scrapped",
    Verdict.WITHDRAWN: "withdrawn",
}


def figure(value: float | None, digits: int = DIGITS) -> str:
    """A number to so many significant digits, with a true minus sign; a dash for none."""
    if value is None:
        return "–"
    if math.isinf(value):
        return "∞" if value > 0.0 else "−∞"
    if isinstance(value, int) or (float(value).is_integer() and abs(value) < 10**digits):
        text = f"{int(value)}"
    else:
        text = f"{value:.{digits}g}"
    return text.replace("-", "−")


def signed(value: float | None, digits: int = DIGITS) -> str:
    """The same with its sign."""
    text = figure(value, digits)
    return text if value is None or value <= 0.0 else f"+{text}"


def percent(value: float | None, digits: int = 3) -> str:
    """A probability in per cent."""
    return "–" if value is None else f"{figure(value * 100.0, digits)} %"


def moment(at: datetime | None) -> Markup:
    """A time in UTC, which the script shows in the zone of the viewer."""
    if at is None:
        return Markup("–")
    return Markup('<time datetime="{}">{} UTC</time>').format(
        at.strftime("%Y-%m-%dT%H:%M:%SZ"), at.strftime("%Y-%m-%d %H:%M:%S")
    )


def said(decision: str) -> str:
    """What a decision tells people to do."""
    return SAID[Decision(decision)]


def done(verdict: str) -> str:
    """What was done with a subject."""
    return DONE[Verdict(verdict)]


def labelled(labels: Mapping[str, str]) -> Markup:
    """Labels, each a name and a value."""
    return Markup(" ").join(
        Markup('<span class="label">{}: {}</span>').format(escape(name), escape(value))
        for name, value in labels.items()
    )


FILTERS: dict[str, Callable[..., Any]] = {
    "figure": figure,
    "signed": signed,
    "percent": percent,
    "moment": moment,
    "said": said,
    "done": done,
    "labelled": labelled,
    "plural": plural,
}
