"""Plans over HTTP."""

import math
from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, Namer, pointers, with_plan


def test_a_plan_is_created_with_its_thresholds_and_lines(admin: httpx.Client, new_name: Namer) -> None:
    """NIST/SEMATECH e-Handbook, section 6.2.6: intercepts and slope (quoted from memory, recomputed)."""
    name = new_name("plan")
    answer = admin.post("/v1/plans", json={"name": name, **SEAL})
    assert answer.status_code == 201
    assert answer.headers["Location"] == f"/v1/plans/{name}"
    plan = answer.json()
    assert plan["lines"]["slope"] == pytest.approx(0.0397, abs=5e-5)
    assert plan["lines"]["accept_intercept"] == pytest.approx(0.939, abs=5e-4)
    assert plan["lines"]["reject_intercept"] == pytest.approx(1.205, abs=5e-4)
    assert plan["thresholds"] == {
        "accept": pytest.approx(math.log(0.10 / 0.95), rel=1e-14),
        "reject": pytest.approx(math.log(0.90 / 0.05), rel=1e-14),
    }
    assert admin.get(answer.headers["Location"]).json() == plan


def test_the_same_plan_again_is_answered_with_the_stored_one(admin: httpx.Client, new_name: Namer) -> None:
    body = {"name": new_name("plan"), **SEAL}
    first = admin.post("/v1/plans", json=body)
    again = admin.post("/v1/plans", json={**body, "boundaries": "wald", "known": None})
    assert (first.status_code, again.status_code) == (201, 200)
    assert again.json() == first.json()


def test_what_says_nothing_does_not_tell_two_plans_apart(admin: httpx.Client, new_name: Namer) -> None:
    seal, shaft = {"name": new_name("plan"), **SEAL}, {"name": new_name("plan"), **SHAFT, "h0": 0.0}
    for body, same in ((seal, {**seal, "known": {}}), (shaft, {**shaft, "h0": -0.0})):
        first = admin.post("/v1/plans", json=body)
        again = admin.post("/v1/plans", json=same)
        assert (first.status_code, again.status_code) == (201, 200)
        assert again.json() == first.json()
    assert admin.post("/v1/plans", json={**seal, "name": new_name("plan"), "truncation": {}}).status_code == 422


def test_a_plan_never_changes(admin: httpx.Client, new_name: Namer) -> None:
    name = with_plan(admin, new_name("plan"), SEAL)
    other = admin.post("/v1/plans", json={"name": name, **SEAL, "beta": 0.2})
    assert other.status_code == 409
    assert other.json()["type"].endswith(":plan-differs")
    assert admin.get(f"/v1/plans/{name}").json()["beta"] == 0.10


def test_plans_are_listed_page_by_page(admin: httpx.Client, new_name: Namer) -> None:
    names = {with_plan(admin, new_name("paged"), SEAL) for _ in range(5)}
    seen: list[str] = []
    url: str | None = "/v1/plans?limit=2"
    while url:
        page = admin.get(url)
        seen += [plan["name"] for plan in page.json()["items"]]
        url = page.links.get("next", {}).get("url")
    assert seen == sorted(seen)
    assert len(seen) == len(set(seen))
    assert names <= set(seen)


def test_an_unchanged_plan_is_not_sent_again(admin: httpx.Client, new_name: Namer) -> None:
    name = with_plan(admin, new_name("plan"), SEAL)
    tag = admin.get(f"/v1/plans/{name}").headers["ETag"]
    assert admin.get(f"/v1/plans/{name}", headers={"If-None-Match": tag}).status_code == 304


BAD_PLANS: list[tuple[dict[str, Any], dict[str, Any], str]] = [
    (SEAL, {"family": "cauchy"}, "/family"),
    (SEAL, {"h1": 0.01}, "/h1"),
    (SEAL, {"h0": 0.0}, "/h0"),
    (SEAL, {"h1": 1.0}, "/h1"),
    (SEAL, {"alpha": 0.0}, "/alpha"),
    (SEAL, {"beta": 1.0}, "/beta"),
    (SEAL, {"alpha": 0.6, "beta": 0.4}, "/beta"),
    (SEAL, {"alpha": "0.05"}, "/alpha"),
    (SEAL, {"alpha": True}, "/alpha"),
    (SEAL, {"truncation": {"sample_number": 1}}, "/truncation/sample_number"),
    (SEAL, {"truncation": {"sample_number": 0}}, "/truncation/sample_number"),
    (SEAL, {"truncation": {"sample_number": 20.5}}, "/truncation/sample_number"),
    (SEAL, {"truncation": {"exposure": 20.0}}, "/truncation/exposure"),
    (SEAL, {"truncation": {}}, "/truncation/sample_number"),
    (SEAL, {"known": {"sigma": 1.0}}, "/known/sigma"),
    (SEAL, {"boundaries": "loose"}, "/boundaries"),
    (SEAL, {"boundaries": "given"}, "/thresholds"),
    (SEAL, {"boundaries": "given", "thresholds": {"accept": 1.0, "reject": 2.0}}, "/thresholds/accept"),
    (SEAL, {"boundaries": "given", "thresholds": {"accept": -1.0, "reject": 0.0}}, "/thresholds/reject"),
    (SEAL, {"thresholds": {"accept": -1.0, "reject": 2.0}}, "/thresholds"),
    (SEAL, {"statistic": "magic"}, "/statistic"),
    (SEAL, {"colour": "red"}, "/colour"),
    (SEAL, {"name": "no spaces"}, "/name"),
    (SHAFT, {"known": None}, "/known/sigma"),
    (SHAFT, {"known": {"sigma": 0.0}}, "/known/sigma"),
    (SHAFT, {"known": {"sigma": -1.0}}, "/known/sigma"),
    (PUMP, {"h0": -5.0}, "/h0"),
    (PUMP, {"truncation": {"exposure": -1.0}}, "/truncation/exposure"),
    (PUMP, {"truncation": {"failures": 3}}, "/truncation/exposure"),
]


@pytest.mark.parametrize(("base", "change", "pointer"), BAD_PLANS)
def test_a_plan_that_cannot_be_right_names_the_field(
    admin: httpx.Client, new_name: Namer, base: dict[str, Any], change: dict[str, Any], pointer: str
) -> None:
    name = new_name("bad")
    answer = admin.post("/v1/plans", json={"name": name, **base, **change})
    assert answer.status_code == 422, answer.text
    assert pointer in pointers(answer)
    assert admin.get(f"/v1/plans/{name}").status_code == 404


@pytest.mark.parametrize("number", ["NaN", "Infinity", "-Infinity", "1e400", "1" + "0" * 400])
def test_a_number_that_is_not_finite_is_refused_where_it_stands(
    admin: httpx.Client, new_name: Namer, number: str
) -> None:
    body = (
        f'{{"name": "{new_name("bad")}", "family": "bernoulli", "h0": {number}, "h1": 0.1, "alpha": 0.1, "beta": 0.1}}'
    )
    answer = admin.post("/v1/plans", content=body, headers={"Content-Type": "application/json"})
    assert answer.status_code == 422, answer.text
    assert pointers(answer) == ["/h0"]
