"""Designing a plan in the browser: figures as the API gives them, faults beside their fields, and what is saved."""

import csv
import io
import re
from html import unescape
from typing import Any
from urllib.parse import parse_qs, urlsplit

import httpx
import pytest

from service.domain.characteristics import Point, Promise, Simulation, Spread
from service.domain.checking import checked_content
from service.domain.errors import InvalidPlan
from service.domain.families import FAMILIES, INVARIANT
from service.domain.plan import canonical
from service.domain.statistics import STATISTICS
from service.pages.views.candidates import candidate_from, candidates_of, values_of
from service.pages.views.figures import rows_of, words_of
from service.pages.views.judging import judged_plan, with_promise
from service.pages.views.plan_words import BOUNDARY_WORDS, FAMILY_WORDS, STATISTIC_WORDS
from service.pages.words import figure, percent, signed
from tests.api.examples import PUMP, SEAL, SHAFT, WELD, Namer, with_plan
from tests.pages.people import form_token, signed_in, words
from tests.running import Running

INVARIANT_PLAN = {"family": "normal", "statistic": "invariant", "h0": 0.0, "h1": 0.8, "alpha": 0.07, "beta": 0.07}
INVARIANT_PLAN |= {"boundaries": "wald"}
TYPING = {"X-Requested-With": "page"}
TABLE = "10 - 3\n20 0 4\n40 3 4"
ROWS = [
    {"sample_number": 10, "reject": 3},
    {"sample_number": 20, "accept": 0, "reject": 4},
    {"sample_number": 40, "accept": 3, "reject": 4},
]


def fields(content: dict[str, Any], letter: str = "a") -> dict[str, str]:
    """A content as somebody types it."""
    return {f"{letter}.{path}": value for path, value in values_of(content).items()}


def fault(html: str, field: str) -> str:
    """What stands beside a field; empty where nothing does."""
    found = re.search(rf'id="{re.escape(field)}-fault" data-live><p class="fault">(.*?)</p>', html)
    return "" if found is None else unescape(found[1])


def typed_in(html: str, field: str) -> str:
    """What a field holds."""
    found = re.search(rf'name="{re.escape(field)}"[^>]*? value="([^"]*)"', html)
    assert found is not None, field
    return unescape(found[1])


def promised(admin: httpx.Client, content: dict[str, Any]) -> dict[str, Any]:
    """The API's answer at the plan's hypotheses."""
    at = [content[name] for name in ("h0", "h1") if name in content]
    answer = admin.post("/v1/characteristics", json={**content, "at": at})
    assert answer.status_code == 200, answer.text
    found: dict[str, Any] = answer.json()
    return found


@pytest.mark.parametrize("content", [SEAL, WELD, PUMP, SHAFT], ids=lambda content: content["family"])
def test_the_figures_are_those_of_the_api(service: Running, admin: httpx.Client, content: dict[str, Any]) -> None:
    expected = promised(admin, content)
    with signed_in(service, "viewer") as person:
        said = words(person.get("/design", params=fields(content)).text)
    for point in expected["points"]:
        has_exposure = point["average_exposure"] is not None
        quantiles = point["exposure_quantiles" if has_exposure else "quantiles"]
        average = point["average_exposure" if has_exposure else "average_sample_number"]
        accepted = percent(point["probability_of_acceptance"], 5)
        assert f"is accepted with a probability of {accepted}, after {figure(average)} " in said
        assert f"95 % of the tests need at most {figure(quantiles['0.95'])}." in said
    fixed = expected["fixed_sample"]
    assert f"Attained risk α {percent(expected['attained']['alpha'], 5)}" in said
    assert f"Attained risk β {percent(expected['attained']['beta'], 5)}" in said
    assert f"Fixed sample with the stated risks, {FAMILIES[content['family']].axis} {figure(fixed['size'])}" in said
    assert f"Saved on average at H0 {percent(fixed['saving_at_h0'])}" in said
    assert f"Accept at Λ of at most {signed(expected['thresholds']['accept'])}" in said
    assert f"Lines: slope {figure(expected['lines']['slope'])}" in said


def test_candidates_are_laid_over_each_other_and_sent_as_an_address(service: Running, admin: httpx.Client) -> None:
    cut = {**SEAL, "truncation": {"sample_number": 60}}
    address = {**fields(SEAL), **fields(cut, "b"), "a.name": "open", "b.name": "cut"}
    body = {"candidates": [{"name": "open", **SEAL}, {"name": "cut", **cut}]}
    expected = admin.post("/v1/characteristics", json=body).json()["candidates"]
    with signed_in(service, "viewer") as person:
        text = person.get("/design", params=address).text
        rows = list(csv.DictReader(io.StringIO(person.get("/design/curves.csv", params=address).text)))
        link = unescape(re.findall(r'href="(/design\?[^"]+)">Link', text)[0])
        assert words(person.get(link).text) == words(text)
        third = person.get("/design", params={**address, "do": "add"})
        assert {name[0] for name in parse_qs(urlsplit(third.headers["Location"]).query)} == {"a", "b", "c"}
        fewer = person.get("/design", params={**address, "do": "remove-a"})
        assert {name[0] for name in parse_qs(urlsplit(fewer.headers["Location"]).query)} == {"b"}
    assert "cut, average" in text
    for candidate in expected:
        points = [row for row in rows if row["plan"] == candidate["name"]]
        assert [float(row["parameter"]) for row in points] == [each["parameter"] for each in candidate["points"]]
        for row, point in zip(points, candidate["points"], strict=True):
            assert float(row["probability_of_acceptance"]) == point["probability_of_acceptance"]
            assert float(row["average_sample_number"]) == point["average_sample_number"]
            assert float(row["sample_number_quantile_0.95"]) == point["quantiles"]["0.95"]
            assert row["average_exposure"] == ""


def test_a_newcomer_sees_an_example_at_once(service: Running) -> None:
    with signed_in(service, "viewer") as person:
        text = person.get("/design").text
    assert "is accepted with a probability of" in words(text)
    assert "Of 12 courses drawn at 0.02 (H0)" in words(text)
    assert text.count("<svg") >= 3
    assert "style=" not in text


@pytest.mark.parametrize(
    ("field", "typed", "said"),
    [
        ("a.h0", "0,05", "must be a number, such as 0.05"),
        ("a.h0", "<b>", "must be a number, such as 0.05; received '<b>'"),
        ("a.h0", "1e999", "is too large"),
        ("a.h0", "nan", "must be a number"),
        ("a.h0", "1_0", "must be a number"),
        ("a.h0", "٥", "must be a number"),
        ("a.h0", "", "is required"),
        ("a.h0", "-0.1", "must lie strictly between 0 and 1"),
        ("a.h1", "0.01", "must differ from h0"),
        ("a.alpha", "0", "must lie strictly between 0 and 1"),
        ("a.beta", "0.96", "alpha + beta must be below 1"),
        ("a.truncation.sample_number", "1.5", "must be a whole number"),
        ("a.truncation.sample_number", "0", "must be a whole number from 1"),
        ("a.truncation.sample_number", "9" * 300, "must be a whole number, such as 200"),
        ("a.boundaries", "magic", "must be one of wald"),
        ("a.boundaries", "given", ""),
        ("a.family", "rubber", "must be one of bernoulli"),
        ("a.statistic", "guess", "must be one of simple"),
        ("a.standard", "NO-SUCH", "must be one of"),
        ("seed", "-1", "must be a whole number from 0"),
        ("seed", "x", "must be a whole number"),
    ],
)
def test_a_fault_stands_beside_its_field_and_what_was_typed_is_kept(
    service: Running, field: str, typed: str, said: str
) -> None:
    address = {**fields(SEAL), "a.statistic": "simple", field: typed}
    with signed_in(service, "viewer") as person:
        answer = person.get("/design", params=address)
    assert answer.status_code == 200
    assert said in fault(answer.text, field)
    if field not in {"a.family", "a.statistic", "a.standard", "a.boundaries"}:
        assert typed_in(answer.text, field) == typed
        assert re.search(rf'name="{re.escape(field)}"[^>]*aria-invalid="true"', answer.text)
    else:
        assert f'<option value="{typed}" selected>' in answer.text
    if not field.startswith("seed"):
        assert "is accepted with a probability of" not in answer.text


def test_thresholds_and_rows_are_asked_for_where_the_rule_needs_them(service: Running) -> None:
    own = {**fields(SEAL), "a.boundaries": "given", "a.thresholds.accept": "-2", "a.thresholds.reject": "\u22123"}
    with signed_in(service, "viewer") as person:
        given = person.get("/design", params={**fields(SEAL), "a.boundaries": "given"}).text
        assert fault(given, "a.thresholds.accept").endswith('are required for "given" boundaries')
        assert "must lie above 0" in fault(person.get("/design", params=own).text, "a.thresholds.reject")
        good = words(person.get("/design", params={**own, "a.thresholds.reject": "3"}).text)
        assert "Reject at Λ of at least +3" in good
        table = {**fields(SEAL), "a.boundaries": "table"}
        for rows, said in [
            ("", "is required"),
            ("10 - 3\n20 0", "row 2 must have 3 entries"),
            ("10 - 3\n20 zero 4", "row 2 must be a whole number"),
            ("10 - 3\n5 0 4", "row 2"),
            ("10 - 3", "row 1: the last row must leave nothing undecided"),
        ]:
            assert said in fault(person.get("/design", params={**table, "a.table": rows}).text, "a.table")
        assert "is accepted with a probability of" in words(
            person.get("/design", params={**table, "a.table": TABLE}).text
        )


@pytest.mark.parametrize("h0", ["1e100", "-1e100", "0"])
def test_hypotheses_that_a_double_cannot_hold_apart_are_drawn_all_the_same(service: Running, h0: str) -> None:
    address = {"a.family": "normal_difference", "a.statistic": "mixture", "a.h0": h0, "a.alpha": "0.05"}
    known = {"a.known.sigma_a": "0.4", "a.known.sigma_b": "0.4", "a.known.prior.tau": "0.3"}
    with signed_in(service, "viewer") as person:
        answer = person.get("/design", params={**address, **known, "a.truncation.sample_number": "20"})
    assert answer.status_code == 200
    assert "Operating characteristic</title>" in answer.text


@pytest.mark.parametrize(
    "query",
    [
        "a.=&b.&.=1&a.known.prior.=2&a..=3",
        "do=remove-z&do=add&a.h0=%00",
        "do=save-z",
        "do=truncate-",
        "do=truncate-a&a.h0=x&inflation=%F0%9F%98%80",
        "a.table=%00&a.boundaries=table&a.h0=1&a.statistic=simple",
        "a.family=normal&a.known.mean=1&a.known.sigma.x=2&a.h0=1",
        "a.standard=%3Cscript%3E&a.scale=-1",
        "a.sides=3&a.family=bernoulli&a.statistic=mixture&a.h0=.5&a.alpha=.05",
        "a.sides=two&a.family=bernoulli&a.statistic=generalised&a.h0=.5&a.alpha=.05",
        "a.boundaries=calibrated&a.statistic=invariant&a.family=exponential&a.h0=1",
        "seed=1e5&view=upside-down&inflation=",
        "a.name=%22%3E%3Cscript%3Ealert(1)%3C/script%3E&a.h0=.1&a.h1=.2&a.alpha=.1&a.beta=.1",
    ],
)
def test_no_address_brings_the_page_down(service: Running, query: str) -> None:
    with signed_in(service) as person:
        answer = person.get(f"/design?{query}", follow_redirects=True)
    assert answer.status_code == 200
    assert "<h1>Design a plan</h1>" in answer.text
    assert "<script>" not in answer.text


def test_candidates_of_two_families_are_not_compared(service: Running) -> None:
    with signed_in(service, "viewer") as person:
        text = person.get("/design", params={**fields(SEAL), **fields(WELD, "b")}).text
    assert fault(text, "b.family").startswith("must be that of the first candidate, bernoulli")
    assert "is accepted with a probability of" in words(text)


def test_a_seed_draws_the_same_courses_each_time(service: Running) -> None:
    with signed_in(service, "viewer") as person:
        pages = [
            person.get("/design", params={**fields(SHAFT), "seed": seed, "view": "evidence"}).text
            for seed in ("5", "5", "6", "none")
        ]
    drawn = [re.findall(r'<polyline points="[^"]+"', text) for text in pages]
    assert drawn[0] == drawn[1]
    assert drawn[0] != drawn[2]
    assert len(drawn[3]) == len(drawn[0]) - 24


def test_figures_that_take_seconds_wait_for_the_button(service: Running) -> None:
    slow = {**fields(PUMP), "a.boundaries": "calibrated", "a.h1": "250"}
    with signed_in(service, "viewer") as person:
        first = words(person.get("/design", params=slow, headers=TYPING).text)
        shown = words(person.get("/design", params=slow).text)
        again = words(person.get("/design", params=slow, headers=TYPING).text)
    assert "press Show" in first
    assert "is accepted with a probability of" not in first
    assert "press Show" not in shown
    assert "is accepted with a probability of" in shown
    assert shown == again


def test_what_cannot_be_computed_says_so_in_place_of_the_figures(service: Running) -> None:
    far = {**fields(SEAL), "a.h0": "0.00000001", "a.h1": "0.000000011"}
    with signed_in(service, "viewer") as person:
        answer = person.get("/design", params=far)
        sheet = person.get("/design/curves.csv", params=far)
        score = words(person.get("/design", params={"a.family": "score"}).text)
        endless = {"a.family": "bernoulli", "a.statistic": "mixture", "a.h0": "0.5", "a.alpha": "0.05"}
        prior = {"a.known.prior.a": "1", "a.known.prior.b": "1", "a.sides": "2"}
        mixture = words(person.get("/design", params={**endless, **prior}).text)
    assert answer.status_code == 200
    assert "The exact computation would need more than" in words(answer.text)
    assert sheet.status_code == 422
    assert "Risk α whatever the model is, at most 5 %" in score
    assert "However long it runs, a lot for which H0 is true is rejected with a probability of at most 5 %." in mixture


def test_a_truncation_is_found_as_the_api_finds_it(service: Running, admin: httpx.Client) -> None:
    content = {**SHAFT, "h1": 11.0, "alpha": 0.2, "beta": 0.2}
    asked = admin.post("/v1/characteristics", json={**content, "suggest_truncation": {"inflation": 0.5}}).json()
    with signed_in(service, "viewer") as person:
        found = person.get("/design", params={**fields(content), "inflation": "0.5", "do": "truncate-a"})
        wrong = person.get("/design", params={**fields(content), "inflation": "7", "do": "truncate-a"})
    query = parse_qs(urlsplit(found.headers["Location"]).query)
    expected = asked["suggested_truncation"]["truncation"]["sample_number"]
    assert query["a.truncation.sample_number"] == [str(expected)]
    assert query["a.boundaries"] == ["calibrated"]
    assert "must lie above 0 and at most 1" in fault(wrong.text, "inflation")


def test_invariant_figures_are_simulated_when_somebody_asks(service: Running, admin: httpx.Client) -> None:
    """What the page starts is what the API would answer: ended there, so that no other test waits for it."""
    with signed_in(service, "viewer") as person:
        before = words(person.get("/design", params=fields(INVARIANT_PLAN)).text)
        refused = person.get("/design/curves.csv", params=fields(INVARIANT_PLAN))
        assert refused.status_code == 409
        assert "Press Simulate to begin" in before
        assert "Press Simulate to begin" in words(refused.text)
        begun = person.get("/design", params={**fields(INVARIANT_PLAN), "do": "simulate"})
        assert re.search(r"The simulation (waits for its turn|is running)", words(begun.text))
        assert '<noscript><meta http-equiv="refresh" content="3"></noscript>' in begun.text
        assert 'data-again="3"' in begun.text
        asked = admin.post("/v1/characteristics", json=INVARIANT_PLAN)
        assert asked.status_code == 202
        assert asked.json()["status"] in {"waiting", "running"}
        admin.delete(asked.headers["Location"]).raise_for_status()
        after = words(person.get("/design", params=fields(INVARIANT_PLAN)).text)
    assert "Press Simulate to begin" in after


def test_simulated_figures_are_shown_with_their_errors() -> None:
    """Invented figures, of the form in which a simulation gives them."""
    spread = Spread(9.25, 4.0, {"0.5": 8.0, "0.9": 15.0, "0.95": 17.0, "0.99": 21.0})
    points = tuple(
        Point(at, chance, spread, None, None, None, None, 0.0004, 0.01) for at, chance in ((1e-17, 0.94), (0.8, 0.08))
    )
    simulation = Simulation(1, 4096, 0.00042, 0.00043, 5.0, 6.0)
    promise = Promise("simulation", None, 0.06, 0.08, points, None, simulation)
    judged = judged_plan("spread", checked_content(INVARIANT_PLAN))
    assert judged.needs_simulating
    shown = with_promise(judged, promise)
    rows = {row.name: row.cells[0] for row in rows_of([shown])}
    assert rows["Attained risk α"] == "6 % ± 0.042 %"
    assert rows["Figures"] == "simulated, 4096 courses, seed 1"
    assert "is 0 (H0), a lot is accepted with a probability of 94 %, after 9.25 measurements" in words_of(shown)[0]


def save(person: httpx.Client, address: dict[str, str], **extra: str) -> httpx.Response:
    token = form_token(person.get("/design/save", params=address).text)
    return person.post("/design/save", data={"token": token, **address, **extra})


@pytest.mark.parametrize(
    "content",
    [
        SEAL,
        {**PUMP, "truncation": {"exposure": 4000.0, "failures": 9}},
        {**SHAFT, "boundaries": "given", "thresholds": {"accept": -2.5, "reject": 3.0}},
        {**SEAL, "boundaries": "table", "table": ROWS},
        {"standard": "MIL-HDBK-781A/VI-D", "scale": 120.0},
        {"family": "score", "alpha": 0.05, "beta": 0.1, "boundaries": "strict"},
    ],
    ids=["units", "time", "thresholds", "table", "standard", "score"],
)
def test_a_saved_design_is_the_plan_that_the_api_would_store(
    service: Running, admin: httpx.Client, new_name: Namer, content: dict[str, Any]
) -> None:
    name = new_name("designed")
    with signed_in(service) as person:
        act = person.get("/design", params={**fields(content), "a.name": name, "do": "save-a"})
        assert (act.status_code, urlsplit(act.headers["Location"]).path) == (303, "/design/save")
        form = person.get(act.headers["Location"]).text
        assert typed_in(form, "name") == name
        hidden = dict(re.findall(r'type="hidden" name="(a\.[^"]+)" value="([^"]*)"', form))
        sent = {field: unescape(value) for field, value in hidden.items()}
        stored = person.post("/design/save", data={"token": form_token(form), "name": name, **sent})
        assert (stored.status_code, stored.headers["Location"]) == (303, f"/plans/{name}")
        shown = person.get(f"/plans/{name}")
        assert f'href="/plans/{name}/register"' in shown.text
    again = admin.post("/v1/plans", json={"name": name, **content})
    assert again.status_code == 200, again.text
    assert again.json()["created_by"] == "the-engineer"


def test_what_cannot_be_stored_is_said_and_nothing_is(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    taken, name = with_plan(admin, new_name("taken"), SEAL), new_name("never")
    with signed_in(service) as person:
        differs = save(person, fields(WELD), name=taken)
        assert differs.status_code == 409
        assert "exists with other content" in words(differs.text)
        assert typed_in(differs.text, "name") == taken
        assert save(person, fields(SEAL), name=taken).status_code == 303
        for wrong in ("", "a b", "-x", "x" * 101, "<script>"):
            refused = save(person, fields(SEAL), name=wrong)
            assert refused.status_code == 422
            assert "must be a letter or digit" in words(refused.text)
            assert "<script>x" not in refused.text
        faulty = save(person, {**fields(SEAL), "a.h0": "2", "a.alpha": "x"}, name=name)
        assert faulty.status_code == 422
        assert "must be a number" in words(faulty.text)
        twice = save(person, {**fields(SEAL), "a.h0": "2"}, name=name)
        assert "H0: must lie strictly between 0 and 1" in words(twice.text)
        assert person.post("/design/save", data={**fields(SEAL), "name": name}).status_code == 403
        forged = {**fields(SEAL), "name": name, "token": "x"}
        assert person.post("/design/save", data=forged).status_code == 403
    assert admin.get(f"/v1/plans/{name}").status_code == 404
    assert admin.get(f"/v1/plans/{taken}").json()["family"] == "bernoulli"


@pytest.mark.parametrize("role", ["viewer", "collector"])
def test_others_may_look_but_not_save(service: Running, admin: httpx.Client, new_name: Namer, role: str) -> None:
    name = new_name("never")
    with signed_in(service, role) as person:
        text = person.get("/design", params=fields(SEAL)).text
        assert "save-a" not in text
        assert "An engineer can save a design" in words(text)
        assert person.get("/design/save", params=fields(SEAL)).status_code == 403
        token = form_token(text)
        assert person.post("/design/save", data={**fields(SEAL), "name": name, "token": token}).status_code == 403
    assert admin.get(f"/v1/plans/{name}").status_code == 404


def test_a_standard_plan_is_a_start(service: Running) -> None:
    with signed_in(service, "viewer") as person:
        listed = person.get("/design/standards")
        links = [unescape(link) for link in re.findall(r'href="(/design\?a\.standard=[^"]+)"', listed.text)]
        assert len(links) == 10
        for link in links:
            said = words(person.get(link).text)
            assert "is accepted with a probability of" in said, link


def test_every_family_statistic_and_rule_has_its_words() -> None:
    assert FAMILY_WORDS.keys() == FAMILIES.keys()
    assert STATISTIC_WORDS.keys() == STATISTICS.keys()
    assert set(BOUNDARY_WORDS) == {rule for statistic in STATISTICS.values() for rule in statistic.boundaries}


@pytest.mark.parametrize("statistic", STATISTICS)
@pytest.mark.parametrize("family", FAMILIES)
def test_every_family_and_statistic_begins_with_a_plan_without_fault(family: str, statistic: str) -> None:
    """A risk that cannot be is the only fault, so that no figure is computed."""
    (candidate,) = candidates_of({"a.family": family, "a.statistic": statistic, "a.shape": "other"})
    assert not candidate.faults
    with pytest.raises(InvalidPlan) as refused:
        checked_content({**candidate.content, "alpha": 2.0})
    pointers = [each.pointer for each in refused.value.faults]
    is_served = {
        "simple": True,
        "generalised": bool(FAMILIES[family].prior),
        "mixture": bool(FAMILIES[family].prior),
        "invariant": family in INVARIANT,
    }[statistic]
    assert pointers == (["/alpha"] if is_served else ["/statistic"])
    assert all(candidate.layout.field_of(pointer) == pointer[1:] for pointer in pointers)
    again = candidate_from("b", "x", candidate.content)
    assert canonical(again.content) == canonical(candidate.content)


def test_another_family_brings_its_own_example_and_keeps_the_risks() -> None:
    typed = {"a.shape": "bernoulli|simple", "a.h0": "0.3", "a.h1": "0.4", "a.alpha": "0.2", "a.beta": "0.15"}
    (candidate,) = candidates_of({**typed, "a.family": "normal", "a.statistic": "simple"})
    assert candidate.content["known"] == {"sigma": 0.25}
    assert (candidate.content["alpha"], candidate.content["beta"]) == (0.2, 0.15)
    assert candidate.content["h0"] == 10.0
    (same,) = candidates_of({**typed, "a.family": "bernoulli", "a.statistic": "simple"})
    assert (same.content["h0"], same.content["h1"]) == (0.3, 0.4)


def test_a_plan_that_does_not_keep_its_risks_says_so(service: Running) -> None:
    stated = {"a.family": "bernoulli", "a.h0": "0.02", "a.h1": "0.08", "a.alpha": "0.05", "a.beta": "0.1"}
    with signed_in(service, "viewer") as person:
        asked = {**stated, "a.truncation.sample_number": "10"}
        said = words(person.get("/design", params=asked).text)
        assert "Mind: it does not keep its stated risks;" in said
        assert "where 10 % is stated" in said
        assert "does not keep" not in words(person.get("/design", params=stated).text)
