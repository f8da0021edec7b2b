"""Plans and registrations that the tests of the interface vary."""

from collections.abc import Callable
from typing import Any

import httpx

SEAL = {"family": "bernoulli", "h0": 0.01, "h1": 0.10, "alpha": 0.05, "beta": 0.10}
WELD = {"family": "poisson", "h0": 0.5, "h1": 1.5, "alpha": 0.05, "beta": 0.10}
PUMP = {"family": "exponential", "h0": 1000.0, "h1": 500.0, "alpha": 0.10, "beta": 0.10}
SHAFT = {"family": "normal", "h0": 10.0, "h1": 10.5, "alpha": 0.05, "beta": 0.05, "known": {"sigma": 0.5}}

Namer = Callable[[str], str]


def with_plan(client: httpx.Client, name: str, body: dict[str, Any]) -> str:
    """Store a plan and return its name."""
    answer = client.post("/v1/plans", json={"name": name, **body})
    assert answer.status_code == 201, answer.text
    return name


def with_test(client: httpx.Client, new_name: Namer, body: dict[str, Any], **extra: Any) -> str:
    """Register a test under a new plan of this content and return its key."""
    plan = with_plan(client, new_name("plan"), body)
    key = new_name("lot")
    registration = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": f"{key}/A"}, **extra}
    answer = client.post("/v1/tests", json=registration)
    assert answer.status_code == 201, answer.text
    return key


def pointers(answer: httpx.Response) -> list[str]:
    """Where the problem document says the faults are."""
    return [fault["pointer"] for fault in answer.json().get("errors", [])]
