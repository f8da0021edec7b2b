"""The plan: what is promised before the first datum. Immutable, compared by its fingerprint."""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from functools import lru_cache
from typing import Any

Content = Mapping[str, Any]

# The member of `known` that is no number.
PRIOR = "prior"

# Digits that are kept of figures that were computed, well above their error and as many as a person would write.
DIGITS = 12


def rounded(value: float) -> float:
    """A computed figure as it is stored with a plan."""
    return float(f"{value:.{DIGITS}g}")


@dataclass(frozen=True)
class Plan:
    """
    A stored plan.

    `document` is its content in canonical JSON (see `canonical`), the name left out; `fingerprint` its SHA-256.
    """

    name: str
    document: str
    fingerprint: str
    created_at: datetime
    created_by: str

    @property
    def content(self) -> Mapping[str, Any]:
        """The content as decoded JSON; treat it as read-only."""
        return _decoded(self.document)


def canonical(content: Mapping[str, Any]) -> str:
    """
    The one JSON text that stands for this content: keys sorted, no spaces, numbers as Python prints them.

    What says nothing must not tell two plans apart: empty members are left out, and a negative zero is a zero.
    """
    return json.dumps(_plain(content), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)


def _plain(value: Any) -> Any:  # noqa: ANN401 - JSON is anything
    if isinstance(value, Mapping):
        return {name: _plain(member) for name, member in value.items() if member not in (None, {})}
    return 0.0 if isinstance(value, float) and value == 0.0 else value


def stated(document: str) -> Mapping[str, Any]:
    """
    What the caller of a canonical document stated, without the figures that were computed from it.

    Those may differ in their last digit where they are computed on another machine.
    """
    content = dict(_decoded(document))
    content.pop("attained", None)
    if content["boundaries"] == "calibrated":
        content.pop("thresholds", None)
    return content


def fingerprint_of(document: str) -> str:
    """SHA-256 of a canonical document, hexadecimal."""
    return hashlib.sha256(document.encode()).hexdigest()


def known_of(content: Content) -> Mapping[str, float]:
    """The numbers that the family needs to know beforehand."""
    return {name: value for name, value in content.get("known", {}).items() if name != PRIOR}


def prior_of(content: Content) -> Mapping[str, float] | None:
    """The prior that a mixture averages over."""
    prior: Mapping[str, float] | None = content.get("known", {}).get(PRIOR)
    return prior


@lru_cache(maxsize=1024)
def _decoded(document: str) -> Mapping[str, Any]:
    content: Mapping[str, Any] = json.loads(document)
    return content
