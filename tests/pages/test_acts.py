"""Correcting and disposing on the pages: first what would follow, then the deed."""

import re
from html import unescape
from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, Namer, with_test
from tests.pages.people import form_token, signed_in, words
from tests.running import Running

HIDDEN = re.compile(r'type="hidden" name="([a-z]+)" value="([^"]*)"')


def send(person: httpx.Client, address: str, **fields: str) -> httpx.Response:
    """Send the form of an address with its token."""
    return person.post(address, data={"token": form_token(person.get(address).text), **fields})


def agreed(person: httpx.Client, address: str, **fields: str) -> httpx.Response:
    """Look at what would follow, and send the form that shows it."""
    looked = send(person, address, step="look", **fields)
    hidden = {name: unescape(value) for name, value in HIDDEN.findall(looked.text) if name in ("version", "seen")}
    assert hidden.keys() == {"version", "seen"}, words(looked.text)
    return send(person, address, step="do", **hidden, **fields)


def version(admin: httpx.Client, key: str) -> str:
    return str(admin.get(f"/v1/tests/{key}").json()["version"])


def test_a_correction_shows_what_would_follow_and_then_changes_the_decision(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 1, 1]}).raise_for_status()
    address = f"/tests/{key}/correct?sequence=3"
    asked = {"what": "replace", "value": "0", "size": "", "unit": "", "reason": "Misread lamp"}
    with signed_in(service) as person:
        looked = send(person, address, step="look", **asked)
        said = words(looked.text)
        assert "Reject the lot → continue Go on sampling" in said
        assert "This changes the decision" in said
        assert admin.get(f"/v1/tests/{key}").json()["decision"] == "reject"
        done = agreed(person, address, **asked)
        assert done.status_code == 303
        results = words(person.get(f"/tests/{key}/results").text)
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["decision"], state["decision_changed"], state["corrections"]) == ("continue", True, 1)
    assert "replaced by the-engineer" in results
    assert "Misread lamp" in results


def test_a_correction_that_moves_the_decision_says_so(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 1, 0, 1, 0]}).raise_for_status()
    asked = {"what": "replace", "value": "1", "size": "", "unit": "", "reason": "Seen twice"}
    address = f"/tests/{key}/correct?sequence=1"
    with signed_in(service) as person:
        looked = words(send(person, address, step="look", **asked).text)
        assert "The decision stays, but falls with another result" in looked
        seen = re.search(r'name="seen" value="([^"]+)"', send(person, address, step="look", **asked).text)
        extra = {"seen": unescape(seen[1])} if seen else {}
        assert send(person, address, step="do", version=version(admin, key), **asked, **extra).status_code == 303
        assert "The decision falls with result 2." in words(person.get(f"/tests/{key}/history").text)


def test_a_void_takes_a_result_out(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, PUMP)
    body = {"observations": [{"time": 10.0, "failed": True, "unit": "P-1"}, {"time": 20.5, "failed": False}]}
    admin.post(f"/v1/tests/{key}/observations", json=body).raise_for_status()
    address = f"/tests/{key}/correct?sequence=1"
    with signed_in(service, "collector") as person:
        form = person.get(address).text
        assert 'value="10"' in form
        assert 'value="P-1"' in form
        done = agreed(person, address, what="void", reason="Bench was off")
    assert done.status_code == 303
    state = admin.get(f"/v1/tests/{key}").json()
    assert (state["total"], state["exposure"], state["voided"]) == (0, 20.5, 1)


@pytest.mark.parametrize(
    ("fields", "fault"),
    [
        ({"reason": ""}, "say why"),
        ({"reason": "x" * 1001}, "say why"),
        ({"value": "ten"}, "must be a number"),
        ({"value": "1e999"}, "must be a number"),
        ({"value": "nan"}, "must be a number"),
        ({"value": "1_0"}, "must be a number"),
        ({"unit": "x" * 201}, "must be at most 200 characters"),
        ({"unit": "P\x001"}, "without control characters"),
        ({"value": "\u0663"}, "must be a number"),
        ({"value": ""}, "is required"),
        ({"value": "10.1"}, "already"),
    ],
)
def test_a_wrong_correction_is_told_beside_its_field_and_what_was_typed_stays(
    service: Running, admin: httpx.Client, new_name: Namer, fields: dict[str, str], fault: str
) -> None:
    key = with_test(admin, new_name, SHAFT)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [10.1]}).raise_for_status()
    asked = {"what": "replace", "value": "10.2", "unit": "", "reason": "typed wrongly", "step": "look", **fields}
    with signed_in(service) as person:
        answer = send(person, f"/tests/{key}/correct?sequence=1", **asked)
    assert answer.status_code in {409, 422}
    assert fault in words(answer.text)
    assert "Nothing was changed." in words(answer.text)
    assert f'value="{asked["value"]}"' in answer.text
    assert version(admin, key) == "2"


def test_what_changed_meanwhile_is_looked_at_again(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 1]}).raise_for_status()
    asked = {"what": "void", "reason": "dropped", "step": "do", "version": version(admin, key), "seen": "null"}
    admin.post(f"/v1/tests/{key}/observations", json={"values": [1]}).raise_for_status()
    with signed_in(service) as person:
        answer = send(person, f"/tests/{key}/correct?sequence=1", **asked)
    assert answer.status_code == 200
    assert "What would follow" in words(answer.text)
    assert admin.get(f"/v1/tests/{key}").json()["corrections"] == 0


@pytest.mark.parametrize(("role", "status"), [("viewer", 403), ("collector", 403), ("engineer", 200)])
def test_after_the_decision_only_an_engineer_corrects(
    service: Running, admin: httpx.Client, new_name: Namer, role: str, status: int
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
    with signed_in(service, role) as person:
        assert person.get(f"/tests/{key}/correct?sequence=1").status_code == status
        offered = "Correct result 1" in person.get(f"/tests/{key}/results").text
        assert offered == (status == 200)


def test_what_was_not_looked_at_is_not_done(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SHAFT)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [10.1]}).raise_for_status()
    asked = {"what": "replace", "unit": "", "reason": "typed wrongly"}
    with signed_in(service) as person:
        correct, dispose_of = f"/tests/{key}/correct?sequence=1", f"/tests/{key}/dispose"
        looked = send(person, correct, value="1,000", step="look", **asked)
        assert "Result 1 Decision" in words(looked.text)
        seen = dict(HIDDEN.findall(looked.text))["seen"]
        shown = {"step": "do", "version": "2"}
        other = send(person, correct, value="2", seen=unescape(seen), **shown, **asked)
        assert "What would follow" in words(other.text)
        why = {"reason": "x", "deviation_reason": "y"}
        assert "What would follow" in words(
            send(person, dispose_of, verdict="scrap", seen="rework", **shown, **why).text
        )
    assert version(admin, key) == "2"


def dispose(person: httpx.Client, key: str, **fields: str) -> httpx.Response:
    return send(person, f"/tests/{key}/dispose", **fields)


def test_a_disposition_shows_what_would_follow_and_then_closes_the_test(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 24}).raise_for_status()
    with signed_in(service) as person:
        looked = dispose(person, key, verdict="accept", reason="As decided", step="look")
        assert "is accepted by the-engineer, and the test is closed for good" in words(looked.text)
        assert admin.get(f"/v1/tests/{key}").json()["status"] == "open"
        done = agreed(person, f"/tests/{key}/dispose", verdict="accept", reason="As decided")
        assert done.status_code == 303
        said = words(person.get(f"/tests/{key}").text)
        assert "The lot was accepted by the-engineer: As decided. The test had decided: accept." in said
        assert person.get(f"/tests/{key}/dispose").status_code == 409
        assert person.get(f"/tests/{key}/correct?sequence=1").status_code == 409
    assert admin.get(f"/v1/tests/{key}").json()["status"] == "closed"


def test_a_disposition_against_the_decision_needs_its_own_reason_and_shows(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
    asked = {"verdict": "concession", "reason": "Field trial", "step": "do"}
    asked |= {"version": version(admin, key), "seen": "concession"}
    with signed_in(service) as person:
        refused = dispose(person, key, deviation_reason="", **asked)
        assert refused.status_code == 422
        assert "this is not what the test decided" in words(refused.text)
        assert admin.get(f"/v1/tests/{key}").json()["status"] == "open"
        assert dispose(person, key, deviation_reason="Customer agreed", **asked).status_code == 303
        assert "because: Customer agreed" in words(person.get(f"/tests/{key}").text)
        assert "against the decision" in words(person.get(f"/?words={key}").text)


@pytest.mark.parametrize(
    "fields", [{"verdict": "", "reason": "x"}, {"verdict": "burn", "reason": "x"}, {"verdict": "scrap"}]
)
def test_a_disposition_says_what_and_why(
    service: Running, admin: httpx.Client, new_name: Namer, fields: dict[str, Any]
) -> None:
    key = with_test(admin, new_name, SEAL)
    with signed_in(service) as person:
        assert dispose(person, key, step="look", **fields).status_code == 422
    assert version(admin, key) == "1"


@pytest.mark.parametrize("act", ["correct?sequence=1", "dispose"])
def test_a_form_without_its_token_or_that_is_none_changes_nothing(
    service: Running, admin: httpx.Client, new_name: Namer, act: str
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).raise_for_status()
    fields = {"what": "void", "verdict": "scrap", "reason": "x", "deviation_reason": "y", "step": "do", "version": "2"}
    with signed_in(service) as person:
        address = f"/tests/{key}/{act}"
        assert person.post(address, data=fields).status_code == 403
        assert person.post(address, data={**fields, "token": "guess"}).status_code == 403
        assert person.post(address, json=fields).status_code == 422
        assert person.post(
            address, content=b"a=%ff", headers={"Content-Type": "application/x-www-form-urlencoded"}
        ).status_code in {403, 422}
        assert person.post(address, data={"reason": "x" * 300_000}).status_code == 422
    assert version(admin, key) == "2"


def test_results_come_in_pages_with_the_latest_first_asked_for(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 250}).raise_for_status()
    with signed_in(service, "viewer") as person:
        pages = [
            person.get(f"/tests/{key}/results{query}").text for query in ("", "?after=0", "?after=100", "?after=999")
        ]
    firsts = [int(page.split('<tr id="result-')[1].split('"')[0]) for page in pages]
    assert firsts == [151, 1, 101, 151]
    assert "overrun" in words(pages[0])
