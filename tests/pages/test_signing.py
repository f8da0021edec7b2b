"""Signing in and out, sessions, and what no other site may do."""

import hashlib
import hmac
from datetime import UTC, datetime, timedelta
from pathlib import Path

import httpx
import pytest

from service.pages.session import COOKIE
from tests.pages.people import form_token, sign_in, signed_in, words
from tests.running import Running, running


def test_nobody_sees_a_page_and_comes_back_to_the_same_place_after_signing_in(service: Running) -> None:
    with httpx.Client(base_url=service.url) as client:
        sent = client.get("/tests/lot-7/results?after=3")
        assert sent.status_code == 303
        form = client.get(sent.headers["Location"])
        assert "/tests/lot-7/results?after=3" in form.text
        answer = sign_in(client, service.keys["viewer"], "/tests/lot-7/results?after=3")
        assert (answer.status_code, answer.headers["Location"]) == (303, "/tests/lot-7/results?after=3")
        assert client.get("/").status_code == 200


ELSEWHERE = ["https://evil.example/", "//evil.example", "/\\evil.example", "javascript:alert(1)", ""]


@pytest.mark.parametrize("place", ELSEWHERE)
def test_signing_in_never_leads_to_another_site(service: Running, place: str) -> None:
    with httpx.Client(base_url=service.url) as client:
        assert sign_in(client, service.keys["viewer"], place).headers["Location"] == "/"


def forged(made: str) -> str:
    """A cookie that binds its time to a secret as the service does; anybody can make one."""
    bound = hmac.new(b"guess", f"session {made}".encode(), hashlib.sha256).hexdigest()
    return f"{COOKIE}={made}.{bound}.guess"


@pytest.mark.parametrize("cookie", [f"{COOKIE}=1.\xe9.x", forged("9" * 400), forged("9" * 5000), forged("")])
def test_whoever_sends_a_cookie_that_cannot_be_right_is_asked_to_sign_in(service: Running, cookie: str) -> None:
    with httpx.Client(base_url=service.url, headers=[(b"cookie", cookie.encode("latin-1"))]) as client:
        assert client.get("/").status_code == 303
        assert client.get("/sign-in").status_code == 200


def test_a_form_that_comes_from_no_address_leads_to_signing_in(service: Running) -> None:
    answer = httpx.post(f"{service.url}/tests/lot-7/dispose", headers={"Referer": "http://[x"}, data={"a": "b"})
    assert (answer.status_code, answer.headers["Location"]) == (303, "/sign-in?next=%2F")


def test_the_cookie_is_kept_from_script_and_other_sites(service: Running) -> None:
    with httpx.Client(base_url=service.url) as client:
        header = sign_in(client, service.keys["viewer"]).headers["Set-Cookie"].lower()
    assert {"httponly", "samesite=lax", "path=/"} <= {part.strip() for part in header.split(";")}
    with httpx.Client(base_url=service.url, headers={"X-Forwarded-Proto": "https"}) as behind_tls:
        behind_tls.cookies.set("sprt_form", "chosen")
        answer = behind_tls.post("/sign-in", data={"token": "chosen", "key": service.keys["viewer"]})
        assert "secure" in answer.headers["Set-Cookie"].lower()


@pytest.mark.parametrize("secret", ["", "wrong", "x" * 5000, "é", "' or 1=1 --"])
def test_a_wrong_key_is_told_beside_the_field(service: Running, secret: str) -> None:
    with httpx.Client(base_url=service.url) as client:
        answer = sign_in(client, secret)
        assert answer.status_code == 401
        assert "No such key" in words(answer.text)
        assert 'aria-describedby="key-fault"' in answer.text
        assert COOKIE not in client.cookies


def test_another_site_can_neither_sign_in_nor_send_a_form(service: Running) -> None:
    with httpx.Client(base_url=service.url) as client:
        forged = client.post("/sign-in", data={"token": "", "key": service.keys["viewer"]})
        assert forged.status_code == 403
        assert COOKIE not in client.cookies
    with signed_in(service) as person:
        assert person.post("/sign-out", data={"token": "guessed"}).status_code == 403
        assert person.get("/").status_code == 200


def test_signing_out_ends_the_session_in_this_browser(service: Running) -> None:
    with signed_in(service) as person:
        answer = person.post("/sign-out", data={"token": form_token(person.get("/").text)})
        assert answer.status_code == 303
        assert COOKIE not in person.cookies
        assert person.get("/").status_code == 303


def test_a_session_ends_with_its_time_and_no_cookie_can_be_made_younger(tmp_path: Path) -> None:
    with running(tmp_path, SPRT_SESSION_HOURS="0.0003") as short, httpx.Client(base_url=short.url) as client:
        sign_in(client, short.keys["viewer"])
        cookie = client.cookies[COOKIE]
        made, bound, secret = cookie.split(".")
        deadline = datetime.now(UTC) + timedelta(seconds=20)
        while client.get("/", headers={"Cookie": f"{COOKIE}={cookie}"}).status_code == 200:
            assert datetime.now(UTC) < deadline
        younger = f"{COOKIE}={int(made) + 3600}.{bound}.{secret}"
        assert client.get("/", headers={"Cookie": younger}).status_code == 303


@pytest.mark.parametrize("cookie", ["", ".", "..", "1.2.3", "٣.x.y", "9" * 4000, "1764600000..secret"])
def test_a_spoilt_cookie_is_no_session(service: Running, cookie: str) -> None:
    answer = httpx.get(f"{service.url}/", headers={b"Cookie": f"{COOKIE}={cookie}".encode()})
    assert answer.status_code == 303


def test_a_revoked_key_is_signed_out_at_once(service: Running, admin: httpx.Client) -> None:
    made = admin.post("/v1/keys", json={"name": "leaver", "role": "viewer"}).json()
    with httpx.Client(base_url=service.url) as client:
        sign_in(client, made["secret"])
        assert client.get("/").status_code == 200
        admin.delete("/v1/keys/leaver").raise_for_status()
        assert client.get("/").status_code == 303


def test_a_key_in_a_cookie_opens_no_other_door(service: Running) -> None:
    with signed_in(service, "administrator") as person:
        assert person.get("/v1/tests").status_code == 401
        assert person.post("/v1/keys", json={"name": "stolen", "role": "viewer"}).status_code == 401


def test_pages_load_nothing_from_elsewhere_and_run_no_script_of_their_own(service: Running) -> None:
    with signed_in(service) as person:
        answer = person.get("/")
    policy = answer.headers["Content-Security-Policy"]
    assert "default-src 'none'" in policy
    assert "script-src 'self'" in policy
    assert "unsafe" not in policy
    assert " style=" not in answer.text
    assert "http://" not in answer.text.replace("http://www.w3.org/2000/svg", "")
    assert "https://" not in answer.text
