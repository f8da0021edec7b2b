"""The history of a test over HTTP: one answer to what happened, which a stranger can check."""

import hashlib
import json
from typing import Any

import httpx

from tests.api.examples import SEAL, Namer, pointers, with_test
from tests.running import Running


def history(client: httpx.Client, key: str, limit: int = 100) -> list[dict[str, Any]]:
    """All pages, with every link computed again from the answers alone."""
    items: list[dict[str, Any]] = []
    address: str | None = f"/v1/tests/{key}/history?limit={limit}"
    while address is not None:
        answer = client.get(address)
        assert answer.status_code == 200, answer.text
        page = answer.json()
        items += page["items"]
        address = answer.links.get("next", {}).get("url")
        assert (page["next_cursor"] is None) == (address is None)
    link = ""
    for number, act in enumerate(items, start=1):
        parts = [link, key, number, act["act"], act["at"], act["actor"], act["request_id"], act["details"]]
        recipe = json.dumps(parts, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        link = hashlib.sha256(recipe.encode()).hexdigest()
        assert (act["number"], act["link"]) == (number, link)
        assert act["previous_link"] in (None, "" if number == 1 else items[number - 2]["link"])
    assert (page["length"], page["link"]) == (len(items), link)
    return items


def test_a_history_tells_who_did_what_when_and_by_which_request(
    admin: httpx.Client, service: Running, new_name: Namer
) -> None:
    key = with_test(admin, new_name, SEAL)
    with service.client("collector") as collector:
        body = '{"values": [0, 0,0]}'
        headers = {"Content-Type": "application/json", "Idempotency-Key": "tray-1"}
        posted = collector.post(f"/v1/tests/{key}/observations", content=body, headers=headers)
        collector.post(f"/v1/tests/{key}/observations", content=body, headers=headers)  # answered again, no act
        collector.post(f"/v1/tests/{key}/observations", json={"values": [0.5]})  # refused, no act
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 30})
    acts = history(admin, key)
    assert [act["act"] for act in acts] == ["registered", "submitted", "submitted", "decided"]
    assert [act["actor"] for act in acts] == ["the-administrator", "the-collector"] + ["the-administrator"] * 2
    first = acts[1]
    assert first["request_id"] == posted.headers["X-Request-Id"]
    assert first["details"]["body_digest"] == hashlib.sha256(body.encode()).hexdigest()
    assert first["details"]["idempotency_key"] == "tray-1"
    assert first["details"]["state"]["sequence"] == 3
    assert acts[3]["details"] == {
        "decision": "accept", "before": "continue", "sequence": 24, "sample_number": 24, "cause": "submitted",
    }  # fmt: skip
    assert acts[3]["request_id"] == acts[2]["request_id"]
    assert not any(act["migrated"] for act in acts)


def test_a_history_is_paged_like_other_lists(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    for _ in range(3):
        admin.post(f"/v1/tests/{key}/observations", json={"values": [0] * 10})
    links = [[act["link"] for act in history(admin, key, limit)] for limit in (1, 2, 5, 100)]
    assert links == [links[0]] * 4
    assert len(history(admin, key)) == 5
    for cursor in ("x", "WzFd", "WyJhIiwxXQ", "Wy0xLDBd"):
        answer = admin.get(f"/v1/tests/{key}/history?cursor={cursor}")
        assert (answer.status_code, pointers(answer)) == (422, ["/cursor"])


def test_a_history_has_the_version_of_its_test(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    tag = admin.get(f"/v1/tests/{key}/history").headers["ETag"]
    unchanged = admin.get(f"/v1/tests/{key}/history", headers={"If-None-Match": tag})
    assert unchanged.status_code == 304
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]})
    assert admin.get(f"/v1/tests/{key}/history", headers={"If-None-Match": tag}).status_code == 200
    assert admin.get("/v1/tests/nowhere-at-all/history").status_code == 404
