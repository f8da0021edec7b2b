"""Keys that are for some tests alone: for them, the others do not exist."""

import json
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import httpx
import pytest
from typer.testing import CliRunner

from service.cli import app as command_line
from tests.api.examples import SEAL, Namer, pointers, with_plan
from tests.api.test_access import LEAST_ROLE
from tests.running import Running, command

ABOUT_A_TEST = sorted((method, path) for method, path in LEAST_ROLE if path.startswith("/v1/tests/{key}"))


@dataclass(frozen=True)
class Plant:
    """Two tests on two lines, and keys that may see the first."""

    plan: str
    line: str
    inside: str
    outside: str
    by_label: str
    by_subject: str


@pytest.fixture(scope="module")
def plant(admin: httpx.Client, new_name: Namer) -> Plant:
    line, plan = new_name("line"), with_plan(admin, new_name("plan"), SEAL)
    keys = []
    for number in (line, f"{line}-other"):
        keys.append(new_name("lot"))
        body = {"key": keys[-1], "plan": plan, "subject": {"kind": "lot", "name": f"{keys[-1]}/A ü"}}
        admin.post("/v1/tests", json={**body, "labels": {"line": number}}).raise_for_status()
    secrets = []
    subject = {"kind": "lot", "name": f"{keys[0]}/A ü"}
    for limits in ({"labels": {"line": [line, "none"]}}, {"subjects": [subject, {"kind": "lot", "name": "none"}]}):
        made = admin.post("/v1/keys", json={"name": new_name("limited"), "role": "engineer", **limits})
        assert made.status_code == 201, made.text
        assert {name: made.json()[name] for name in limits} == limits
        secrets.append(made.json()["secret"])
    return Plant(plan, line, *keys, *secrets)


@contextmanager
def carrying(service: Running, secret: str) -> Iterator[httpx.Client]:
    with httpx.Client(base_url=service.url, headers={"Authorization": f"Bearer {secret}"}, timeout=30.0) as client:
        yield client


@pytest.fixture(params=["by_label", "by_subject"])
def limited(service: Running, plant: Plant, request: pytest.FixtureRequest) -> Iterator[httpx.Client]:
    with carrying(service, getattr(plant, request.param)) as client:
        yield client


# What each route that writes to a test takes.
BODIES: dict[str, dict[str, Any]] = {
    "observations": {"values": [0]},
    "corrections": {"sequence": 1, "action": "void", "reason": "dropped"},
    "disposition": {"disposition": "accept", "reason": "as decided", "deviation_reason": "early"},
}


@pytest.mark.parametrize(("method", "path"), ABOUT_A_TEST)
def test_a_test_outside_of_the_limits_is_as_if_it_were_not_there(
    limited: httpx.Client, plant: Plant, method: str, path: str
) -> None:
    """Asked of every route about one test, plainly and conditionally: the very answer for one that does not exist."""
    body = BODIES.get(path.rpartition("/")[2]) if method == "POST" else None
    for headers in ({}, {"If-None-Match": "*"}, {"If-Match": "*"}):
        answers = []
        for key in (plant.outside, "nowhere"):
            answer = limited.request(method, path.format(key=key), json=body, headers=headers)
            assert answer.status_code == 404, answer.text
            answers.append(answer.text.replace(key, "…"))
        assert answers[0] == answers[1]
    if method == "GET":
        found = limited.get(path.format(key=plant.inside))
        assert found.status_code == (409 if path.endswith("/inference") else 200)


def test_nothing_is_stored_in_a_test_outside_of_the_limits(
    limited: httpx.Client, admin: httpx.Client, plant: Plant
) -> None:
    before = [admin.get(f"/v1/tests/{key}").json()["version"] for key in (plant.inside, plant.outside)]
    for key, status in ((plant.inside, 201), (plant.outside, 404)):
        answer = limited.post(f"/v1/tests/{key}/observations", json={"values": [0]})
        assert answer.status_code == status
    after = [admin.get(f"/v1/tests/{key}").json()["version"] for key in (plant.inside, plant.outside)]
    assert after == [before[0] + 1, before[1]]


def test_lists_and_counts_hold_what_is_inside_alone(limited: httpx.Client, plant: Plant) -> None:
    listed = limited.get("/v1/tests").json()
    assert {test["key"] for test in listed["items"]} >= {plant.inside}
    assert {test["labels"].get("line") for test in listed["items"]} == {plant.line}
    for filters in ({"label": f"line:{plant.line}-other"}, {"subject": f"{plant.outside}/A ü"}):
        assert limited.get("/v1/tests", params=filters).json()["items"] == []
    assert limited.get("/v1/summary").json()["tests"] == len(listed["items"])


def test_events_tell_of_what_is_inside_alone(limited: httpx.Client, admin: httpx.Client, plant: Plant) -> None:
    with limited.stream("GET", "/v1/events", params={"after": 0, "plan": plant.plan}) as stream:
        lines = stream.iter_lines()
        for key in (plant.outside, plant.inside):
            admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).raise_for_status()
        version = admin.get(f"/v1/tests/{plant.inside}").json()["version"]
        told: list[dict[str, str | int]] = []
        while not told or told[-1]["version"] != version:
            told += [json.loads(line[6:]) for line in [next(lines)] if line.startswith("data: ")]
    assert plant.outside not in {event["key"] for event in told}


def test_only_what_matches_may_be_registered(service: Running, plant: Plant, new_name: Namer) -> None:
    body = {"key": new_name("lot"), "plan": plant.plan, "subject": {"kind": "lot", "name": "x"}}
    with carrying(service, plant.by_label) as client:
        for labels in ({}, {"line": f"{plant.line}-other"}, {"Line": plant.line}):
            refused = client.post("/v1/tests", json={**body, "labels": labels})
            assert (refused.status_code, refused.json()["type"]) == (403, "urn:sprt-monitor:problem:key-limited")
        labels = {"line": plant.line, "shift": "a"}
        assert client.post("/v1/tests", json={**body, "labels": labels}).status_code == 201
        taken = client.post("/v1/tests", json={**body, "key": plant.outside, "labels": labels})
        assert taken.status_code == 409
    with carrying(service, plant.by_subject) as client:
        assert client.post("/v1/tests", json={**body, "labels": labels}).status_code == 403
        kind = {"kind": "experiment", "name": f"{plant.inside}/A ü"}
        assert client.post("/v1/tests", json={**body, "key": new_name("lot"), "subject": kind}).status_code == 403


def test_the_figures_of_all_are_not_for_a_limited_key(limited: httpx.Client) -> None:
    answer = limited.get("/metrics")
    assert (answer.status_code, answer.json()["type"]) == (403, "urn:sprt-monitor:problem:key-limited")


def test_an_administrator_cannot_be_limited(admin: httpx.Client, new_name: Namer) -> None:
    body = {"name": new_name("limited"), "role": "administrator", "labels": {"line": ["3"]}}
    answer = admin.post("/v1/keys", json=body)
    assert (answer.status_code, pointers(answer)) == (422, ["/role"])
    wrong: list[dict[str, Any]] = [
        {"labels": {"line": []}},
        {"labels": {"a b": ["1"]}},
        {"subjects": [{"kind": "batch", "name": "x"}]},
    ]
    for limits in wrong:
        assert admin.post("/v1/keys", json={**body, "role": "viewer", **limits}).status_code == 422


def test_a_limited_key_is_made_and_listed_on_the_command_line(service: Running, plant: Plant, new_name: Namer) -> None:
    url, name = service.database_url, new_name("station")
    limits = ("--label", f"line={plant.line}", "--subject", f"lot:{plant.inside}/A ü")
    made = command("keys", "create", "--role", "viewer", "--name", name, *limits, database_url=url)
    assert made.returncode == 0, made.stderr
    with carrying(service, made.stdout.strip()) as client:
        assert [test["key"] for test in client.get("/v1/tests").json()["items"]] == [plant.inside]
    listed = command("keys", "list", database_url=url, COLUMNS="300").stdout
    (row,) = (line for line in listed.splitlines() if f" {name} " in line)
    assert f"lot:{plant.inside}/A ü, line={plant.line}" in row


@pytest.mark.parametrize("wrong", ["--label=line", "--label=a b=c", "--subject=batch:x", "--subject=lot:"])
def test_limits_that_cannot_be_are_refused_on_the_command_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, wrong: str
) -> None:
    monkeypatch.setenv("SPRT_DATABASE_URL", f"sqlite:///{tmp_path / 'keys.sqlite3'}")
    refused = CliRunner().invoke(command_line, ["keys", "create", "--role", "viewer", "--name", "x", wrong])
    assert (refused.exit_code, refused.stdout) == (1, "")
    assert "label" in refused.stderr or "--subject" in refused.stderr
