"""One lot with several characteristics."""

from urllib.parse import quote

import httpx
import pytest

from tests.api.examples import SEAL, SHAFT, Namer, with_plan
from tests.api.test_corrections import post


def test_a_lot_is_rejected_by_one_characteristic_and_accepted_by_all(admin: httpx.Client, new_name: Namer) -> None:
    name = f"Los {new_name('½')}/B 7%?"
    keys = []
    for content in (SEAL, SHAFT):
        plan, key = with_plan(admin, new_name("plan"), content), new_name("lot")
        keys.append(key)
        registration = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": name}}
        admin.post("/v1/tests", json=registration).raise_for_status()
    address = f"/v1/subjects/lot/{quote(name, safe='')}"

    def joint() -> str:
        return str(admin.get(address).json()["decision"])

    assert joint() == "continue"
    post(admin, keys[0], {"values": [0] * 24})
    assert joint() == "continue"
    post(admin, keys[1], {"values": [9.0] * 10})
    answer = admin.get(address).json()
    assert answer["decision"] == "accept"
    assert answer["subject"] == {"kind": "lot", "name": name}
    assert [(test["key"], test["decision"]) for test in answer["tests"]] == [(key, "accept") for key in keys]
    assert answer["producers_risk"]["if_independent"] == pytest.approx(1 - 0.95 * 0.95, rel=1e-14)
    assert answer["producers_risk"]["at_most"] == pytest.approx(0.1, rel=1e-14)
    assert answer["consumers_risk"] == 0.1
    assert {test["risks"] for test in answer["tests"]} == {"stated"}
    for at in (1, 2):
        body = {"sequence": at, "action": "replace", "observation": {"value": 1}, "reason": "typo"}
        admin.post(f"/v1/tests/{keys[0]}/corrections", json=body).raise_for_status()
    assert joint() == "reject"


def test_a_subject_without_tests_is_unknown(admin: httpx.Client) -> None:
    assert admin.get("/v1/subjects/lot/nowhere-at-all").status_code == 404
    assert admin.get("/v1/subjects/batch/x").status_code == 422
    assert admin.get("/v1/subjects/lot/a%00b").status_code == 422
