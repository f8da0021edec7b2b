"""Stored plans in the browser, and registering a test under one."""

import csv
import io
import re
from html import unescape
from typing import Any

import httpx
import pytest

from service.domain.names import NAME_RULE
from service.pages.words import figure, percent, signed
from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, with_plan, with_test
from tests.pages.people import form_token, signed_in, words
from tests.running import Running

STANDARD = {"standard": "MIL-HDBK-781A/III-D", "scale": 100.0}
REGISTRATION = {"kind": "lot", "subject": "2041/B <i>", "labels": "line: 3\r\n\r\nbench:north: left\r\n"}


def register(person: httpx.Client, plan: str, **given: str) -> httpx.Response:
    """Send the form of a plan with its token."""
    address = f"/plans/{plan}/register"
    return person.post(address, data={"token": form_token(person.get(address).text), **REGISTRATION, **given})


def fault(html: str, field: str) -> str:
    """What stands beside a field."""
    found = re.search(rf'<p class="fault" id="{field}-fault">(.*?)</p>', html)
    return "" if found is None else unescape(found[1])


@pytest.mark.parametrize(
    "content", [SEAL, WELD, PUMP, SHAFT, STANDARD], ids=["units", "counts", "time", "mean", "table"]
)
def test_a_plan_shows_what_the_api_says_of_it(
    service: Running, admin: httpx.Client, new_name: Namer, content: dict[str, Any]
) -> None:
    name = with_plan(admin, new_name("plan"), content)
    stored = admin.get(f"/v1/plans/{name}").json()
    at = {"at": [stored["h0"], stored["h1"]]}
    expected = admin.get(f"/v1/plans/{name}/characteristics", params=at).json()
    with signed_in(service, "viewer") as person:
        text = person.get(f"/plans/{name}").text
        drawings = [person.get(unescape(link)) for link in re.findall(r'href="(/plans/[^"]+/curves\.svg[^"]*)"', text)]
        assert len(drawings) == 2
        rows = list(csv.DictReader(io.StringIO(person.get(f"/plans/{name}/curves.csv").text)))
    said = words(text)
    for point in expected["points"]:
        accepted = percent(point["probability_of_acceptance"], 5)
        average = point["average_sample_number"] if point["average_exposure"] is None else point["average_exposure"]
        assert f"is {figure(point['parameter'])} (H" in said
        assert f"is accepted with a probability of {accepted}, after {figure(average)} " in said
    assert f"Attained risk α {percent(expected['attained']['alpha'], 5)}" in said
    assert f"takes {figure(expected['fixed_sample']['size'])} " in said
    if stored["thresholds"] is not None:
        assert f"Reject at Λ of at least {signed(stored['thresholds']['reject'])}" in said
    if stored["table"] is not None:
        assert "failures reject at accept at" in said
        for row in stored["table"]:
            cells = (row["failures"], row.get("reject_at"), row.get("accept_at"))
            assert " ".join(figure(cell) for cell in cells) in said
        assert "MIL-HDBK-781A (1996), sequential test plans" in said
    assert stored["fingerprint"] in said
    assert {kept.status_code for kept in drawings} == {200}
    curve = admin.get(f"/v1/plans/{name}/characteristics").json()["points"]
    assert [float(row["parameter"]) for row in rows] == [point["parameter"] for point in curve]
    for row, point in zip(rows, curve, strict=True):
        assert float(row["probability_of_acceptance"]) == point["probability_of_acceptance"]
        exposure = point["average_exposure"]
        assert row["average_exposure"] == ("" if exposure is None else repr(exposure))


def test_a_plan_tells_how_many_tests_run_under_it(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    plan = admin.get(f"/v1/tests/{key}").json()["plan"]
    with signed_in(service, "viewer") as person:
        one = person.get(f"/plans/{plan}").text
        assert "1 test under it: 1 running, 0 waiting for a disposition, 0 closed." in words(one)
        assert f'href="/?plan={plan}"' in one
        admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
        assert "0 running, 1 waiting for a disposition" in words(person.get(f"/plans/{plan}").text)
        empty = with_plan(admin, new_name("plan"), SEAL)
        assert "No test is registered under it yet." in words(person.get(f"/plans/{empty}").text)


def test_the_region_is_drawn_both_ways_and_with_courses(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    name = with_plan(admin, new_name("plan"), SEAL)
    with signed_in(service, "viewer") as person:
        count = person.get(f"/plans/{name}").text
        evidence = person.get(f"/plans/{name}", params={"view": "evidence"}).text
        courses = person.get(f"/plans/{name}", params={"seed": "4"}).text
        assert person.get(f"/plans/{name}", params={"seed": "-4"}).status_code == 404
        assert person.get(f"/plans/{name}", params={"view": "nonsense"}).text == count
    assert "log-likelihood ratio Λ</text>" in evidence
    assert "nonconforming units</text>" in count
    assert "courses drawn" not in words(count)
    assert re.search(r"Of 12 courses drawn at 0\.01 \(H0\): \d+ accept", words(courses))
    assert "style=" not in count + evidence + courses


def test_an_invariant_plan_offers_its_simulation(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    content = {**SHAFT, "statistic": "invariant", "h0": 0.0, "h1": 0.7, "known": {"reference": 10.0}}
    name = with_plan(admin, new_name("plan"), {**content, "boundaries": "wald"})
    with signed_in(service, "viewer") as person:
        answer = person.get(f"/plans/{name}")
        assert person.get(f"/plans/{name}/curves.csv").status_code == 409
    assert "Press Simulate to begin" in words(answer.text)
    assert 'href="?simulate=1"' in answer.text


def test_a_plan_is_a_start_for_a_design(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    contents: list[dict[str, Any]] = [{**PUMP, "truncation": {"exposure": 5000.0}}, STANDARD]
    with signed_in(service, "viewer") as person:
        for content in contents:
            name = with_plan(admin, new_name("plan"), content)
            text = person.get(f"/plans/{name}").text
            (link,) = re.findall(r'href="(/design\?plan=[^"]+)"', text)
            design = person.get(unescape(link)).text
            (sentence,) = re.findall(r"If the mean life is [^.]+ \(H0\).*? need at most [^.]+\.", words(design))[:1]
            assert sentence in words(text)
            assert f'name="a.name" value="{name}"' in design
        for wrong in ("no-such-plan", "%00", "a%20b", "x" * 200):
            assert person.get(f"/design?plan={wrong}").status_code == 404


def test_plans_are_listed_by_name_a_page_at_a_time(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    names = sorted(with_plan(admin, new_name("zz-listed"), SEAL) for _ in range(52))
    with signed_in(service, "viewer") as person:
        first = person.get("/plans", params={"after": "zz-listed"}).text
        (further,) = re.findall(r'rel="next" href="([^"]+)"', first)
        second = person.get(unescape(further)).text
        assert "There are no further plans" in words(person.get("/plans", params={"after": "zzzz"}).text)
    listed = [re.findall(r'href="/plans/(zz-listed-[^"]+)"', text) for text in (first, second)]
    assert [len(part) for part in listed] == [50, 2]
    assert listed[0] + listed[1] == names
    assert "0.01 proportion nonconforming 0.1 5 %, 10 % wald" in words(first)


def test_an_unknown_plan_is_a_page_that_helps(service: Running) -> None:
    with signed_in(service, "viewer") as person:
        for address in ("/plans/no-such-plan", "/plans/no-such-plan/curves.csv", "/plans/%20", "/plans?after=%00"):
            answer = person.get(address)
            assert answer.status_code == 404
            assert "All plans" in words(answer.text)


def test_a_lot_is_registered_with_its_labels(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    with signed_in(service) as person:
        done = register(person, plan, key=key)
        assert (done.status_code, done.headers["Location"]) == (303, f"/tests/{key}")
        assert "2041/B <i>" in words(person.get(f"/tests/{key}").text)
        again = register(person, plan, key=key)
        assert again.status_code == 303
    test = admin.get(f"/v1/tests/{key}").json()
    assert test["subject"] == {"kind": "lot", "name": "2041/B <i>"}
    assert test["labels"] == {"line": "3", "bench": "north: left"}
    history = admin.get(f"/v1/tests/{key}/history").json()["items"]
    assert (history[0]["actor"], len(history[0]["request_id"])) == ("the-engineer", 32)


@pytest.mark.parametrize(
    ("given", "field", "said"),
    [
        ({"key": ""}, "key", NAME_RULE),
        ({"key": "a/b"}, "key", NAME_RULE),
        ({"key": "x" * 101}, "key", NAME_RULE),
        ({"kind": "heap"}, "kind", "must be one of lot, experiment"),
        ({"subject": ""}, "subject", "must be 1 to 200 characters"),
        ({"subject": "x" * 201}, "subject", "must be 1 to 200 characters"),
        ({"subject": "a\x07b"}, "subject", "must be 1 to 200 characters"),
        ({"labels": "line 3"}, "labels", "line 1 must be a name, a colon and a value; received 'line 3'"),
        ({"labels": "a: 1\nb c: 2"}, "labels", "line 2: the name must be"),
        ({"labels": "a:"}, "labels", "line 1: the value must be 1 to 200 characters"),
        ({"labels": "a: 1\na: 2"}, "labels", "line 2: 'a' is there already"),
        ({"labels": "\n".join(f"n{i}: 1" for i in range(21))}, "labels", "must be at most 20; received 21"),
    ],
)
def test_a_wrong_registration_is_told_beside_its_field_and_kept(
    service: Running, admin: httpx.Client, new_name: Namer, given: dict[str, str], field: str, said: str
) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    with signed_in(service) as person:
        answer = register(person, plan, **{"key": key, **given})
    assert answer.status_code == 422
    assert said in fault(answer.text, field)
    assert "Nothing was changed." in words(answer.text)
    assert 'value="2041/B &lt;i&gt;"' in answer.text or field == "subject"
    assert admin.get(f"/v1/tests/{key}").status_code == 404


def test_a_key_that_exists_with_other_content_is_told(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    plan = with_plan(admin, new_name("plan"), WELD)
    before = admin.get(f"/v1/tests/{key}").json()
    with signed_in(service) as person:
        answer = register(person, plan, key=key)
    assert answer.status_code == 409
    assert "exists with another plan, subject or labels" in fault(answer.text, "key")
    assert f'value="{key}"' in answer.text
    assert admin.get(f"/v1/tests/{key}").json() == before


@pytest.mark.parametrize("role", ["viewer", "collector"])
def test_others_may_look_but_not_register(service: Running, admin: httpx.Client, new_name: Namer, role: str) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    with signed_in(service, role) as person:
        text = person.get(f"/plans/{plan}").text
        assert "/register" not in text
        address = f"/plans/{plan}/register"
        assert person.get(address).status_code == 403
        sent = {"token": form_token(text), "key": key, **REGISTRATION}
        assert person.post(address, data=sent).status_code == 403
    assert admin.get(f"/v1/tests/{key}").status_code == 404


def test_a_form_from_elsewhere_registers_nothing(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    with signed_in(service) as person:
        for token in ({}, {"token": "x"}):
            sent = {"key": key, **REGISTRATION, **token}
            assert person.post(f"/plans/{plan}/register", data=sent).status_code == 403
    assert admin.get(f"/v1/tests/{key}").status_code == 404


def test_a_limited_key_registers_only_what_it_may(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    made = admin.post("/v1/keys", json={"name": new_name("line7"), "role": "engineer", "labels": {"line": ["7"]}})
    assert made.status_code == 201, made.text
    with signed_in(service, secret=made.json()["secret"]) as person:
        refused = register(person, plan, key=key)
        assert refused.status_code == 403
        assert "limited to subjects or labels" in words(refused.text)
        assert f'value="{key}"' in refused.text
        assert register(person, plan, key=key, labels="line: 7").status_code == 303
        assert "1 test under it" in words(person.get(f"/plans/{plan}").text)
        other = with_test(admin, new_name, SEAL)
        others = admin.get(f"/v1/tests/{other}").json()["plan"]
        assert "No test is registered under it yet." in words(person.get(f"/plans/{others}").text)
