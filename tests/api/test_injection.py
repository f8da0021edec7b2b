"""What is sent stays data: in addresses, headers, the database, answers and the log."""

import json
import socket
import unicodedata
from typing import Any
from urllib.parse import quote

import httpx
import pytest
from sqlalchemy import text

from service.domain.names import is_name
from service.storage.engine import create_engine_for
from tests.api.examples import SEAL, Namer, pointers, with_plan, with_test
from tests.running import Running

SQL = [
    "x'; DROP TABLE tests; --",
    "' OR '1'='1",
    "x' UNION SELECT digest FROM api_keys --",
    "%",
    "_",
    "\\",
    "x%27--",
    '"',
]
HTML = [
    "<script>alert(1)</script>",
    "</script><b>",
    "javascript:alert(1)",
    "<img src=x onerror=alert(1)>",
    "{{7*7}}",
    "${7*7}",
]
SPREADSHEET = ["=1+1", "@SUM(A1)", "+1", "-1"]


@pytest.mark.parametrize("nasty", [*SQL, *HTML, *SPREADSHEET])
def test_free_text_comes_back_as_it_was_and_finds_only_itself(admin: httpx.Client, new_name: Namer, nasty: str) -> None:
    plan, name = with_plan(admin, new_name("plan"), SEAL), new_name("subject")
    other = new_name("lot")
    keys = [new_name("lot"), new_name("lot")]
    for key, text_ in ((keys[0], nasty + name), (keys[1], name), (other, "z" + nasty + name)):
        body = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": text_}, "labels": {"note": text_}}
        answer = admin.post("/v1/tests", json=body)
        assert answer.status_code == 201, answer.text
        assert answer.headers["Content-Type"] == "application/json"
        assert answer.headers["X-Content-Type-Options"] == "nosniff"
        assert answer.json()["subject"]["name"] == answer.json()["labels"]["note"] == text_
    for filters in ({"subject": nasty + name}, {"label": f"note:{nasty}{name}"}):
        assert [test["key"] for test in admin.get("/v1/tests", params=filters).json()["items"]] == [keys[0]]


def test_a_unit_goes_into_the_log_as_it_is(admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    units = [*SQL, *HTML]
    body = {"observations": [{"value": 0, "unit": unit} for unit in units]}
    assert admin.post(f"/v1/tests/{key}/observations", json=body).status_code == 201
    log = admin.get(f"/v1/tests/{key}/observations").json()["items"]
    assert [entry["unit"] for entry in log] == units
    sheet = admin.get(f"/v1/tests/{key}/observations", headers={"Accept": "text/csv"})
    assert sheet.headers["Content-Type"].startswith("text/csv")
    assert sheet.headers["X-Content-Type-Options"] == "nosniff"


def test_the_tables_are_all_there_after_everything(service: Running) -> None:
    engine = create_engine_for(service.database_url)
    with engine.connect() as connection:
        for table in ("api_keys", "plans", "tests", "test_labels", "submissions", "units"):
            assert connection.execute(text(f"SELECT count(*) FROM {table}")).scalar() is not None
    engine.dispose()


@pytest.mark.parametrize(
    "path",
    [
        "../../etc/passwd",
        "..%2f..%2fetc%2fpasswd",
        "%2e%2e/%2e%2e/etc/passwd",
        "..%5c..%5cwindows",
        "a%00.json",
        "a;b=c",
        "a%0d%0aSet-Cookie:%20x=1",
        "%c0%ae%c0%ae/",
        "a" * 5000,
        "~root",
        "%25s%25n",
        "'%20OR%20'1'='1",
    ],
)
def test_no_address_leads_anywhere_else(service: Running, path: str) -> None:
    """Sent as it stands, where a client would tidy it up."""
    url = httpx.URL(service.url)
    for start in ("/v1/tests/", "/v1/plans/", "/v1/keys/", "/"):
        method = "DELETE" if "keys" in start else "GET"
        with socket.create_connection((url.host, url.port or 80), timeout=20.0) as connection:
            secret = service.keys["administrator"]
            lines = [
                f"{method} {start}{path} HTTP/1.1",
                "Host: x",
                "Connection: close",
                f"Authorization: Bearer {secret}",
            ]
            connection.sendall("\r\n".join([*lines, "", ""]).encode())
            received = b""
            while piece := connection.recv(65536):
                received += piece
        top, _, body = received.partition(b"\r\n\r\n")
        assert top.split()[1] in {b"404", b"405"}, top
        assert b"set-cookie" not in top.lower()
        assert b"root:" not in body
        assert json.loads(body)["status"] in {404, 405}


@pytest.mark.parametrize(
    "name", ["Idempotency-Key", "If-Match", "If-None-Match", "Last-Event-ID", "Authorization", "Accept"]
)
def test_no_header_reaches_an_answer_as_a_header(
    service: Running, admin: httpx.Client, new_name: Namer, name: str
) -> None:
    key = with_test(admin, new_name, SEAL)
    own = {} if name == "Authorization" else {"Authorization": f"Bearer {service.keys['administrator']}"}
    for value in (b"a\tb", b"\xe2\x80\xa8", b"\xff\xfe", b'"; drop', b"a" * 20_000, b"%0d%0aX-Forged: 1", b"<script>"):
        for method, path in (("GET", f"/v1/tests/{key}"), ("POST", f"/v1/tests/{key}/observations")):
            body = {"values": [0]} if method == "POST" else None
            headers: list[tuple[Any, Any]] = [*own.items(), (name.encode(), value)]
            answer = httpx.request(method, f"{service.url}{path}", headers=headers, json=body)
            assert answer.status_code < 500
            assert "X-Forged" not in answer.headers
            assert not any("forged" in shown.lower() for shown in answer.headers.values())


def test_names_are_ascii_so_that_none_looks_like_another(admin: httpx.Client, new_name: Namer) -> None:
    """Look-alikes, composed and decomposed letters, wide digits, joiners and marks of direction: none is a name."""
    plan = with_plan(admin, new_name("plan"), SEAL)
    composed = "café"
    odd = [
        "lоt-7",
        "ｌot-7",
        "lot-７",
        composed,
        unicodedata.normalize("NFD", composed),
        "lot\u200b7",
        "lot\u202e7",
        "ﬁ",
        "lot-Ⅷ",
    ]
    for key in [*odd, "lot 7", "lot\n", " lot", "lot/7", "-lot", ".lot", "", "l" * 101]:
        assert not is_name(key)
        body = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": "x"}}
        answer = admin.post("/v1/tests", json=body)
        assert (answer.status_code, pointers(answer)) == (422, ["/key"]), key
        assert admin.get(f"/v1/tests/{quote(key, safe='')}").status_code == 404 or not key
    longest = "l" * (100 - len(plan)) + plan
    for key in (longest, longest.upper()):  # another case is another name
        body = {"key": key, "plan": plan, "subject": {"kind": "lot", "name": "x"}}
        assert admin.post("/v1/tests", json=body).status_code == 201


def test_subjects_are_compared_letter_by_letter(admin: httpx.Client, new_name: Namer) -> None:
    """A lot number is free text: what differs in its code points is another lot, and nothing is changed on the way."""
    plan, name = with_plan(admin, new_name("plan"), SEAL), new_name("é")
    forms = {unicodedata.normalize(form, name) for form in ("NFC", "NFD")}
    assert len(forms) == 2
    for subject in forms:
        body = {"key": new_name("lot"), "plan": plan, "subject": {"kind": "lot", "name": subject}}
        assert admin.post("/v1/tests", json=body).json()["subject"]["name"] == subject
        assert len(admin.get("/v1/tests", params={"subject": subject}).json()["items"]) == 1


def test_no_answer_sends_a_caller_and_its_key_to_another_address(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    """Behind a proxy that ends TLS, what the service takes for its own address is plain HTTP and as the caller says."""
    for _ in range(2):
        with_test(admin, new_name, SEAL)
    headers = {"Host": "evil.example", "X-Forwarded-Host": "evil.example", "Forwarded": "host=evil.example"}
    page = admin.get("/v1/tests", params={"limit": 1}, headers=headers)
    assert page.headers["Link"].startswith("</v1/tests?limit=1&cursor=")
    assert len(admin.get(page.links["next"]["url"]).json()["items"]) == 1
    for path in ("/v1/tests/", "/v1/plans/", "/healthz/", "//evil.example/"):
        with socket.create_connection((httpx.URL(service.url).host, httpx.URL(service.url).port or 80)) as connection:
            connection.sendall(f"GET {path} HTTP/1.0\r\nHost: evil.example\r\n\r\n".encode())
            received = connection.recv(65536)
        assert received.split()[1] in {b"401", b"404"}, received
        assert b"evil" not in received
