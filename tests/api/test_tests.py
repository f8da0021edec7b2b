"""Registering, listing and showing tests over HTTP."""

from datetime import UTC, datetime
from typing import Any

import httpx
import pytest

from tests.api.examples import SEAL, Namer, pointers, with_plan, with_test
from tests.running import Running


def test_a_registered_test_asks_for_an_observation(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL, labels={"line": "3"})
    test = admin.get(f"/v1/tests/{key}").json()
    assert test["decision"] == "continue"
    assert (test["sample_number"], test["total"], test["log_likelihood_ratio"], test["version"]) == (0, 0, 0.0, 1)
    assert test["labels"] == {"line": "3"}
    assert (test["exposure"], test["decided"], test["status"]) == (None, None, "open")


def test_registering_again_changes_nothing(admin: httpx.Client, new_name: Namer) -> None:
    plan = with_plan(admin, new_name("plan"), SEAL)
    body = {"key": new_name("lot"), "plan": plan, "subject": {"kind": "lot", "name": "ü/7 <b>"}}
    first, again = admin.post("/v1/tests", json=body), admin.post("/v1/tests", json=body)
    assert (first.status_code, again.status_code) == (201, 200)
    assert again.json() == first.json()
    other = admin.post("/v1/tests", json={**body, "labels": {"a": "b"}})
    assert other.status_code == 409


def test_a_registration_can_insist_on_the_state_it_saw(admin: httpx.Client, new_name: Namer) -> None:
    body = {"key": new_name("lot"), "plan": with_plan(admin, new_name("plan"), SEAL)}
    body["subject"] = {"kind": "lot", "name": "x"}  # type: ignore[assignment]

    def register(tag: str) -> int:
        return admin.post("/v1/tests", json=body, headers={"If-Match": tag}).status_code

    assert (register("*"), register('"1"'), register("x")) == (412, 412, 422)
    admin.post("/v1/tests", json=body).raise_for_status()
    assert (register("*"), register('"1"'), register('"2"')) == (200, 200, 412)


def test_a_test_needs_a_plan_that_exists(admin: httpx.Client, new_name: Namer) -> None:
    body = {"key": new_name("lot"), "plan": "nowhere", "subject": {"kind": "lot", "name": "x"}}
    answer = admin.post("/v1/tests", json=body)
    assert answer.status_code == 422
    assert pointers(answer) == ["/plan"]


@pytest.mark.parametrize(
    ("change", "pointer"),
    [
        ({"subject": {"kind": "batch", "name": "x"}}, "/subject/kind"),
        ({"subject": {"kind": "lot", "name": ""}}, "/subject/name"),
        ({"subject": {"kind": "lot", "name": "a\x00b"}}, "/subject/name"),
        ({"key": "../etc"}, "/key"),
        ({"key": "k" * 101}, "/key"),
        ({"labels": {"a": 1}}, "/labels/a"),
        ({"labels": {"no space": "1"}}, "/labels/no space"),
    ],
)
def test_a_registration_that_cannot_be_right_names_the_field(
    admin: httpx.Client, new_name: Namer, change: dict[str, object], pointer: str
) -> None:
    plan = with_plan(admin, new_name("plan"), SEAL)
    body = {"key": new_name("lot"), "plan": plan, "subject": {"kind": "lot", "name": "x"}, **change}
    answer = admin.post("/v1/tests", json=body)
    assert answer.status_code == 422, answer.text
    assert pointer in pointers(answer)


def test_lists_filter_by_everything_at_once(admin: httpx.Client, new_name: Namer) -> None:
    start = datetime.now(UTC).isoformat()
    value = new_name("cell")
    accepted = with_test(admin, new_name, SEAL, labels={"cell": value, "shift": "early"})
    running = with_test(admin, new_name, SEAL, labels={"cell": value, "shift": "late"})
    admin.post(f"/v1/tests/{accepted}/observations", json={"values": [0] * 24}).raise_for_status()

    def keys(**filters: Any) -> list[str]:
        answer = admin.get("/v1/tests", params={"label": f"cell:{value}", **filters})
        return [test["key"] for test in answer.raise_for_status().json()["items"]]

    assert keys() == sorted([accepted, running])
    assert keys(decision="accept") == [accepted]
    assert keys(label=[f"cell:{value}", "shift:late"]) == [running]
    assert keys(subject=f"{running}/A", kind="lot") == [running]
    assert keys(kind="experiment") == []
    assert keys(updated_after=start) == sorted([accepted, running])
    assert keys(updated_after="2999-01-01T00:00:00Z") == []
    assert keys(plan=admin.get(f"/v1/tests/{accepted}").json()["plan"]) == [accepted]


@pytest.mark.parametrize(
    "query",
    [
        "limit=0",
        "limit=501",
        "cursor=!!",
        "cursor=WzFd",
        "decision=maybe",
        "label=x",
        "cursor=WyJcdWQ4MDAiXQ",
        "cursor=WyJcdTAwMDAiXQ",
        "subject=a%00b",
        "plan=a%00b",
        "label=a%00:b",
        "label=a:b%00",
        "updated_after=noon",
        "updated_after=9999-12-31T23:59:59-14:00",
        "updated_after=0001-01-01T00:00:00%2B14:00",
        "colour=red",
    ],
)
def test_a_bad_filter_is_refused(admin: httpx.Client, query: str) -> None:
    answer = admin.get(f"/v1/tests?{query}")
    assert answer.status_code == 422, answer.text
    assert pointers(answer)[0].startswith("/" + query.partition("=")[0])


def test_the_summary_counts_every_test_once(admin: httpx.Client, new_name: Namer) -> None:
    before = admin.get("/v1/summary").json()
    with_test(admin, new_name, SEAL)
    after = admin.get("/v1/summary").json()
    assert after["tests"] == before["tests"] + 1
    assert after["by_decision"]["continue"] == before["by_decision"]["continue"] + 1
    assert sum(after["by_decision"].values()) == sum(after["by_status"].values()) == after["tests"]


@pytest.mark.parametrize("name", ["nowhere", "a%00b", "%ed%a0%80", "a%0a", "x" * 101, "%20"])
def test_an_unknown_name_is_404_everywhere(admin: httpx.Client, name: str) -> None:
    for path in ("", "/observations", "/path"):
        assert admin.get(f"/v1/tests/{name}{path}").status_code == 404
    assert admin.get(f"/v1/plans/{name}").status_code == 404
    assert admin.post(f"/v1/tests/{name}/observations", json={"values": [0]}).status_code == 404
    assert admin.delete(f"/v1/keys/{name}").status_code == 404


def test_who_has_the_present_version_is_told_so_and_nobody_else(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    tag = admin.get(f"/v1/tests/{key}").headers["ETag"]
    for given, status in ((tag, 304), (f'"x", W/{tag}', 304), ("*", 304), ('"0"', 200)):
        answer = admin.get(f"/v1/tests/{key}", headers={"If-None-Match": given})
        assert (answer.status_code, answer.headers["ETag"]) == (status, tag), given
        assert answer.headers["X-Request-Id"]
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).raise_for_status()
    assert admin.get(f"/v1/tests/{key}", headers={"If-None-Match": tag}).status_code == 200
    for path in ("nowhere", "a%00b", f"{key}/nowhere", ""):
        assert admin.get(f"/v1/tests/{path}", headers={"If-None-Match": "*"}).status_code == 404, path
    with service.client(None) as nobody:
        assert nobody.get(f"/v1/tests/{key}", headers={"If-None-Match": "*"}).status_code == 401
