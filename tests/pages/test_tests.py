"""The list of tests, and the page of one."""

import json
import re
from pathlib import Path
from typing import Any

import httpx
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, with_plan, with_test
from tests.pages.people import signed_in, words
from tests.running import Running, running

ALWAYS = {"Sample number": "sample_number", "Log-likelihood ratio Λ": "log_likelihood_ratio"}
NEEDED = "24 conforming units more and the lot is accepted; 2 nonconforming units more and it is rejected."
SIGN = str.maketrans({"−": "-", "∞": "inf"})


def facts(html: str) -> dict[str, str]:
    """The figures of a page by their names."""
    return {words(name): words(value) for name, value in re.findall(r"<dt>(.*?)</dt><dd>(.*?)</dd>", html, re.DOTALL)}


def to_digits(value: float, digits: int = 6) -> str:
    """A number as the API gives it, to the digits of a page."""
    return f"{float(value):.{digits}g}"


@pytest.mark.parametrize(
    ("plan", "body", "named"),
    [
        (SEAL, {"values": [0, 0, 1, 0]}, {"Nonconforming units": "total"}),
        (WELD, {"observations": [{"value": 2, "exposure": 1.5}]}, {"Counts": "total", "Exposure": "exposure"}),
        (PUMP, {"observations": [{"time": 40.5, "failed": True}]}, {"Failures": "total", "Unit-time": "exposure"}),
        (SHAFT, {"values": [10.1, 10.37]}, {"Sum of the measurements": "total"}),
        (
            {**SHAFT, "statistic": "invariant", "h0": 0.0, "h1": 0.5, "boundaries": "wald", "known": {"reference": 10}},
            {"values": [10.1, 10.37, 9.8]},
            {"Student's t": "total"},
        ),
    ],
)
def test_figures_are_those_of_the_interface_to_the_digits_shown(
    service: Running, admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: Any, named: dict[str, str]
) -> None:
    key = with_test(admin, new_name, plan)
    state = admin.post(f"/v1/tests/{key}/observations", json=body).json()
    with signed_in(service, "viewer") as person:
        shown = facts(person.get(f"/tests/{key}").text)
    for name, member in {**named, **ALWAYS}.items():
        assert float(shown[name].translate(SIGN)) == float(to_digits(state[member])), name
    assert float(shown["Reject at or above"].translate(SIGN)) == float(to_digits(state["thresholds"]["reject"]))
    assert admin.get(f"/v1/plans/{state['plan']}").json()["parameter"] == shown["Parameter"]


def test_the_decision_comes_in_words_with_what_is_still_needed(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    with signed_in(service, "viewer") as person:
        said = words(person.get(f"/tests/{key}").text)
        assert NEEDED in said
        admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).raise_for_status()
        said = words(person.get(f"/tests/{key}").text)
        assert "Reject the lot The evidence came to its limit after 2 units" in said


def test_what_is_to_be_expected_is_what_the_interface_says(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 1, 0]}).raise_for_status()
    outlook = admin.get(f"/v1/tests/{key}/outlook").json()
    with signed_in(service, "viewer") as person:
        said = words(person.get(f"/tests/{key}").text)
    for expected in outlook["expected"]:
        chance = to_digits(expected["probability_of_acceptance"] * 100.0, 4)
        average = to_digits(expected["further_sample_number"]["average"], 4)
        assert f"{chance} % {average}".replace("-", "−") in said


@pytest.mark.parametrize("view", ["evidence", "count", "", "nonsense"])
def test_the_drawing_says_what_it_shows_and_stands_without_script(
    service: Running, admin: httpx.Client, new_name: Namer, view: str
) -> None:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 9}).raise_for_status()
    with signed_in(service, "viewer") as person:
        answer = person.get(f"/tests/{key}", params={"view": view})
    drawing = re.search(r"<svg .*?</svg>", answer.text.split('id="picture"')[1], re.DOTALL)
    assert answer.status_code == 200
    assert drawing is not None
    assert "Go on sampling" in drawing[0]
    assert ("log-likelihood ratio" in drawing[0]) == (view != "count")


def test_names_are_shown_as_they_are_and_never_as_markup(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    plan, key = with_plan(admin, new_name("plan"), SEAL), new_name("lot")
    name = '<img src=x onerror=alert(1)> "quoted" & Ünïcode ✓'
    body = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": name}, "labels": {"note": "<b>x</b>"}}
    admin.post("/v1/tests", json=body).raise_for_status()
    with signed_in(service, "viewer") as person:
        for address in (f"/?words={key}", f"/tests/{key}", f"/tests/{key}/history", f"/tests/{key}/results"):
            page = person.get(address).text
            assert "<img" not in page
            assert "<b>x" not in page
            assert name in words(page)


def test_the_list_is_narrowed_by_its_address(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    mark = new_name("narrow")
    plan = with_plan(admin, new_name("plan"), SEAL)
    keys = [f"{mark}-{place}" for place in "abc"]
    for key, kind in zip(keys, ("lot", "experiment", "lot"), strict=True):
        body = {"key": key, "plan": plan, "subject": {"kind": kind, "name": f"{key} 100%_A"}, "labels": {"row": key}}
        admin.post("/v1/tests", json=body).raise_for_status()
    admin.post(f"/v1/tests/{keys[2]}/observations", json={"values": [1, 1]}).raise_for_status()
    asked = {
        f"words={mark}": keys,
        f"words={mark.upper()}": keys,
        f"words={mark}&kind=lot": [keys[0], keys[2]],
        f"words={mark}&stage=running": keys[:2],
        f"words={mark}&stage=waiting": [keys[2]],
        f"words={mark}&stage=closed": [],
        f"words={mark}&decision=reject": [keys[2]],
        f"plan={plan}&label=row:{keys[1]}": [keys[1]],
        f"words={mark}-b 100%25_": [keys[1]],
        f"words={mark}&plan=none": [],
        f"words={mark}&decision=nonsense": keys,
    }
    with signed_in(service, "viewer") as person:
        for query, expected in asked.items():
            page = person.get(f"/?{query}").text
            assert sorted(re.findall(r'<th scope="row"><a href="/tests/([^"]+)"', page)) == sorted(expected), query


def test_the_last_to_change_comes_first_and_pages_follow_each_other(tmp_path: Path) -> None:
    with running(tmp_path) as alone, alone.client() as admin:
        admin.post("/v1/plans", json={"name": "seal", **SEAL}).raise_for_status()
        for number in range(60):
            body = {"key": f"t-{number:02}", "plan": "seal", "subject": {"kind": "lot", "name": f"Lot {number}"}}
            admin.post("/v1/tests", json=body).raise_for_status()
        admin.post("/v1/tests/t-07/observations", json={"values": [0]}).raise_for_status()
        with signed_in(alone, "viewer") as person:
            first = person.get("/").text
            further = re.search(r'rel="next" href="([^"]+)"', first)
            assert further is not None
            second = person.get(further[1].replace("&amp;", "&")).text
        found = [re.findall(r'<th scope="row"><a href="/tests/([^"]+)"', page) for page in (first, second)]
        assert found[0][0] == "t-07"
        assert [len(page) for page in found] == [50, 10]
        assert len({key for page in found for key in page}) == 60


@pytest.mark.parametrize(
    "address",
    ["/tests/none", "/tests/none/results", "/tests/none/history", "/tests/a%20b", "/tests/none?view=", "/?before=x",
     "/tests/none/estimates?level=2", "/tests/none/results?after=-1"],
)  # fmt: skip
def test_what_is_not_there_is_answered_by_a_page_that_helps(service: Running, address: str) -> None:
    with signed_in(service, "viewer") as person:
        answer = person.get(address)
    assert answer.status_code == 404
    assert answer.headers["Content-Type"].startswith("text/html")
    assert "All tests" in words(answer.text)


def test_an_address_that_leads_nowhere_is_a_page_in_a_browser_and_a_problem_elsewhere(service: Running) -> None:
    browser = httpx.get(f"{service.url}/nope", headers={"Accept": "text/html,*/*;q=0.8"})
    assert browser.status_code == 404
    assert "There is nothing here" in words(browser.text)
    with service.client("viewer") as program:
        for address, accept in (("/nope", "*/*"), ("/v1/nope", "text/html")):
            answer = program.get(address, headers={"Accept": accept})
            assert (answer.status_code, answer.headers["Content-Type"]) == (404, "application/problem+json")


def test_the_moment_of_the_decision_is_shown(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    decided = admin.post(f"/v1/tests/{key}/observations", json={"values": [1, 1]}).json()["decided"]["at"]
    with signed_in(service, "viewer") as person:
        assert f"{decided[:10]} {decided[11:19]} UTC" in facts(person.get(f"/tests/{key}").text)["Decided"]


def test_a_limited_key_sees_its_own_tests_alone(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    row = new_name("row")
    inside = with_test(admin, new_name, SEAL, labels={"row": row})
    outside = with_test(admin, new_name, SEAL, labels={"row": "other"})
    made = admin.post("/v1/keys", json={"name": new_name("limited"), "role": "engineer", "labels": {"row": [row]}})
    with signed_in(service, secret=made.json()["secret"]) as person:
        listed = person.get("/").text
        assert inside in listed
        assert outside not in listed
        parts = ("", "/results", "/assumptions", "/estimates", "/history", "/correct?sequence=1", "/dispose")
        assert {person.get(f"/tests/{outside}{part}").status_code for part in parts} == {404}
        assert person.get(f"/tests/{inside}").status_code == 200


def test_a_page_is_told_of_changes(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key, other = with_test(admin, new_name, SEAL), with_test(admin, new_name, SEAL)
    with signed_in(service, "viewer") as person, person.stream("GET", f"/live?test={key}") as stream:
        assert stream.headers["Content-Type"].startswith("text/event-stream")
        lines = stream.iter_lines()
        next(lines)
        for each in (other, key):
            admin.post(f"/v1/tests/{each}/observations", json={"values": [0]}).raise_for_status()
        told = json.loads(next(line for line in lines if line.startswith("data: "))[6:])
    assert told == {"key": key, "version": 2}


def test_estimates_are_those_of_the_interface(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    with signed_in(service, "viewer") as person:
        assert "Not before the decision" in words(person.get(f"/tests/{key}/estimates").text)
        admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 1, 0, 1]}).raise_for_status()
        found = admin.get(f"/v1/tests/{key}/inference?level=0.9").json()
        said = words(person.get(f"/tests/{key}/estimates?level=0.9").text)
    assert to_digits(found["estimates"]["median_unbiased"]) in said
    assert f"{to_digits(found['interval']['lower'])} to {to_digits(found['interval']['upper'])}" in said
    assert f"p-value {to_digits(found['p_value'])}" in said
    assert found["meanings"]["interval"] in said


def test_all_tests_of_one_subject_are_shown_together(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    subject = {"kind": "lot", "name": new_name("Lot of two")}
    keys = [with_test(admin, new_name, SEAL, subject=subject) for _ in range(2)]
    admin.post(f"/v1/tests/{keys[1]}/observations", json={"values": [1, 1]}).raise_for_status()
    with signed_in(service, "viewer") as person:
        said = words(person.get(f"/tests/{keys[0]}").text)
    assert "All 2 tests of this lot your key sees, together: reject Reject" in said
    joint = admin.get(f"/v1/subjects/lot/{subject['name']}").json()
    assert f"{to_digits(joint['producers_risk']['if_independent'] * 100, 4)} % if the tests are independent" in said


def test_tests_of_one_subject_beyond_those_shown_come_to_nothing_together(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    subject = {"kind": "experiment", "name": new_name("Long experiment")}
    first = with_test(admin, new_name, SEAL, subject=subject)
    plan = admin.get(f"/v1/tests/{first}").json()["plan"]
    for _ in range(100):
        body = {"key": new_name("part"), "plan": plan, "subject": subject}
        admin.post("/v1/tests", json=body).raise_for_status()
    with signed_in(service, "viewer") as person:
        said = words(person.get(f"/tests/{first}").text)
    assert "The first 100 tests of this experiment" in said
    assert "what they come to together is not said here" in said
    assert "Joint producer's risk" not in said


def test_bounds_that_hold_for_every_model_are_not_called_attained(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    plan = {"family": "score", "alpha": 0.05, "beta": 0.1, "boundaries": "strict"}
    key = with_test(admin, new_name, plan)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [2.0, 2.0]}).raise_for_status()
    with signed_in(service, "viewer") as person:
        for part in ("", "/record"):
            said = words(person.get(f"/tests/{key}{part}").text)
            assert "Producer's risk whatever the model is, at most 5 %" in said
            assert "attained" not in said
        estimates = words(person.get(f"/tests/{key}/estimates").text)
    assert estimates.count("there is no parameter to estimate") == 5


def test_a_label_without_a_colon_finds_nothing_and_says_why(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL, labels={"bench": "north"})
    with signed_in(service, "viewer") as person:
        right, wrong = (person.get("/", params={"words": key, "label": label}).text for label in ("bench:north", "x"))
    assert "label-fault" not in right
    assert f"/tests/{key}" in right
    assert 'aria-describedby="label-fault"' in wrong
    assert "No test matches." in words(wrong)


@pytest.mark.parametrize("name", ["words", "plan", "label", "stage"])
def test_an_address_with_control_characters_asks_nothing(service: Running, name: str) -> None:
    """One of the databases takes no such text."""
    with signed_in(service, "viewer") as person:
        assert person.get("/", params={name: "a:\x00"}).status_code == 404


@pytest.mark.parametrize(
    ("plan", "body", "after", "axis"),
    [
        (PUMP, {"values": [1.0] * 9}, "observations and unit-time of", "unit-time"),
        (
            {"family": "paired", "h0": 1.0, "h1": 4.0, "alpha": 0.05, "beta": 0.1},
            {"observations": [{"a": 0, "b": 1}] * 12},
            "pairs that differ:",
            "pairs that differ",
        ),
    ],
)
def test_numbers_say_what_they_count(
    service: Running, admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: Any, after: str, axis: str
) -> None:
    key = with_test(admin, new_name, plan)
    with signed_in(service, "viewer") as person:
        assert f"further on average, {axis}" in words(person.get(f"/tests/{key}").text)
        state = admin.post(f"/v1/tests/{key}/observations", json=body).json()
        assert f"after {state['sample_number']} {after}" in words(person.get(f"/tests/{key}").text)
