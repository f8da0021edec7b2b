"""What every answer says to a browser, and whose pages may ask."""

import httpx
import pytest

from service.settings import BadSettings, read_settings
from tests.api.examples import SEAL, Namer, with_test
from tests.running import Running


def test_every_answer_is_hardened(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    answers = [
        admin.get(f"/v1/tests/{key}"),
        admin.get(f"/v1/tests/{key}", headers={"If-None-Match": "*"}),
        admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"}),
        admin.get("/v1/nothing"),
        admin.put("/v1/plans"),
        admin.post("/v1/plans", content=b"{", headers={"Content-Type": "application/json"}),
        admin.get("/metrics"),
        httpx.get(f"{service.url}/healthz"),
        httpx.get(f"{service.url}/openapi.json"),
        httpx.get(f"{service.url}/v1/tests"),
    ]
    assert [answer.status_code for answer in answers] == [200, 304, 200, 404, 405, 400, 200, 200, 200, 401]
    for answer in answers:
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.headers["Referrer-Policy"] == "no-referrer"
        assert answer.headers["Cache-Control"] == "private, no-cache"
        assert answer.headers["Content-Security-Policy"].startswith("default-src 'none'")
        assert "Server" not in answer.headers
        assert "Access-Control-Allow-Origin" not in answer.headers


def test_a_secret_is_kept_by_no_cache(admin: httpx.Client, new_name: Namer) -> None:
    made = admin.post("/v1/keys", json={"name": new_name("station"), "role": "viewer"})
    assert made.headers["Cache-Control"] == "no-store"
    assert made.headers.get_list("Cache-Control") == ["no-store"]


def preflight(service: Running, origin: str) -> httpx.Response:
    asked = {
        "Origin": origin,
        "Access-Control-Request-Method": "POST",
        "Access-Control-Request-Headers": "authorization,idempotency-key",
    }
    return httpx.options(f"{service.url}/v1/tests", headers=asked)


def test_no_page_of_another_origin_may_ask(service: Running, admin: httpx.Client) -> None:
    answer = preflight(service, "https://board.example")
    assert not any(name.startswith("access-control") for name in answer.headers)
    shown = admin.get("/v1/tests", headers={"Origin": "https://board.example"})
    assert not any(name.startswith("access-control") for name in shown.headers)


def test_pages_of_the_named_origins_may_ask(guarded: Running) -> None:
    for origin in ("https://board.example", "http://10.0.0.7:3000"):
        answer = preflight(guarded, origin)
        assert (answer.status_code, answer.headers["Access-Control-Allow-Origin"]) == (200, origin)
        assert "Access-Control-Allow-Credentials" not in answer.headers
    for origin in ("https://board.example.evil", "http://board.example", "null"):
        assert "Access-Control-Allow-Origin" not in preflight(guarded, origin).headers
    with guarded.client("engineer") as engineer:
        answer = engineer.get("/v1/tests", headers={"Origin": "https://board.example"})
        assert answer.headers["Access-Control-Allow-Origin"] == "https://board.example"
        assert "ETag" in answer.headers["Access-Control-Expose-Headers"]


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("BODY_SECONDS", "0"),
        ("RATE_LIMIT", "-1"),
        ("RATE_LIMIT", "nan"),
        ("RATE_BURST", "0"),
        ("CONNECTION_LIMIT", "1"),
    ],
)
def test_a_limit_that_cannot_be_is_refused_at_the_start(monkeypatch: pytest.MonkeyPatch, name: str, value: str) -> None:
    monkeypatch.setenv(f"SPRT_{name}", value)
    with pytest.raises(BadSettings, match=f"SPRT_{name}"):
        read_settings()


@pytest.mark.parametrize("origins", ["*", "board.example", "https://board.example/", "https://a b", "null"])
def test_what_is_no_origin_is_refused_at_the_start(monkeypatch: pytest.MonkeyPatch, origins: str) -> None:
    monkeypatch.setenv("SPRT_CORS_ORIGINS", origins)
    with pytest.raises(BadSettings, match="SPRT_CORS_ORIGINS"):
        read_settings()
