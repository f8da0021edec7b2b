"""Who may do what, asked of every route the service has."""

import time
from datetime import UTC, datetime, timedelta

import httpx
import pytest
from fastapi.routing import iter_route_contexts

from service.app import create_app
from service.domain.access import Role
from service.pages.session import COOKIE
from service.settings import Settings
from tests.api.examples import SEAL, Namer, pointers, with_test
from tests.pages.people import form_token, signed_in
from tests.running import Running, command

ROLES = ["viewer", "collector", "engineer", "administrator"]

LEAST_ROLE = {
    ("POST", "/v1/plans"): "engineer",
    ("GET", "/v1/plans"): "viewer",
    ("GET", "/v1/plans/{name}"): "viewer",
    ("GET", "/v1/plans/{name}/characteristics"): "viewer",
    ("POST", "/v1/characteristics"): "viewer",
    ("GET", "/v1/simulations/{name}"): "viewer",
    ("DELETE", "/v1/simulations/{name}"): "viewer",
    ("POST", "/v1/plans/{name}/rehearsal"): "viewer",
    ("POST", "/v1/rehearsal"): "viewer",
    ("GET", "/v1/standard-plans"): "viewer",
    ("POST", "/v1/tests"): "engineer",
    ("GET", "/v1/tests"): "viewer",
    ("GET", "/v1/tests/{key}"): "viewer",
    ("POST", "/v1/tests/{key}/observations"): "collector",
    ("GET", "/v1/tests/{key}/observations"): "viewer",
    ("GET", "/v1/tests/{key}/path"): "viewer",
    ("GET", "/v1/tests/{key}/outlook"): "viewer",
    ("GET", "/v1/tests/{key}/assumptions"): "viewer",
    ("POST", "/v1/tests/{key}/corrections"): "collector",
    ("POST", "/v1/tests/{key}/disposition"): "engineer",
    ("GET", "/v1/tests/{key}/history"): "viewer",
    ("GET", "/v1/subjects/{kind}/{name}"): "viewer",
    ("GET", "/v1/events"): "viewer",
    ("GET", "/v1/tests/{key}/inference"): "viewer",
    ("GET", "/v1/summary"): "viewer",
    ("GET", "/metrics"): "viewer",
    ("GET", "/v1/keys"): "administrator",
    ("POST", "/v1/keys"): "administrator",
    ("DELETE", "/v1/keys/{name}"): "administrator",
    ("POST", "/v1/receivers"): "administrator",
    ("GET", "/v1/receivers"): "administrator",
    ("DELETE", "/v1/receivers/{name}"): "administrator",
    ("POST", "/v1/receivers/{name}/trial"): "administrator",
    ("GET", "/v1/receivers/{name}/notices"): "administrator",
    ("POST", "/v1/notices/{id}/again"): "administrator",
}
OPEN = {("GET", "/healthz"), ("GET", "/readyz"), ("GET", "/openapi.json")}

# What people look at, signed in with a key of at least this role.
PAGES = {
    ("GET", "/"): "viewer",
    ("GET", "/live"): "viewer",
    ("POST", "/sign-out"): "viewer",
    ("GET", "/tests/{key}"): "viewer",
    ("GET", "/tests/{key}/results"): "viewer",
    ("GET", "/tests/{key}/assumptions"): "viewer",
    ("GET", "/tests/{key}/estimates"): "viewer",
    ("GET", "/tests/{key}/history"): "viewer",
    ("GET", "/tests/{key}/drawing.svg"): "viewer",
    ("GET", "/tests/{key}/drawing.png"): "viewer",
    ("GET", "/tests/{key}/path.csv"): "viewer",
    ("GET", "/tests/{key}/record"): "viewer",
    ("GET", "/tests/{key}/record.pdf"): "viewer",
    ("GET", "/plans/{name}/curves.svg"): "viewer",
    ("GET", "/plans/{name}/curves.png"): "viewer",
    ("GET", "/tests/{key}/correct"): "collector",
    ("POST", "/tests/{key}/correct"): "collector",
    ("GET", "/tests/{key}/dispose"): "engineer",
    ("POST", "/tests/{key}/dispose"): "engineer",
    ("GET", "/plans"): "viewer",
    ("GET", "/plans/{name}"): "viewer",
    ("GET", "/plans/{name}/curves.csv"): "viewer",
    ("GET", "/plans/{name}/register"): "engineer",
    ("POST", "/plans/{name}/register"): "engineer",
    ("GET", "/design"): "viewer",
    ("GET", "/design/curves.csv"): "viewer",
    ("GET", "/design/standards"): "viewer",
    ("GET", "/design/save"): "engineer",
    ("POST", "/design/save"): "engineer",
}
OPEN_PAGES = {("GET", "/sign-in"), ("POST", "/sign-in"), ("ANY", "/static")}


def routes() -> set[tuple[str, str]]:
    """Every route of the service itself, described or not."""
    found = set()
    for context in iter_route_contexts(create_app(Settings()).routes):
        found |= {
            (method, (context.path or "").replace(":path", "")) for method in (context.methods or {"ANY"}) - {"HEAD"}
        }
    return found


def test_every_route_has_a_rule_and_is_described() -> None:
    assert routes() == LEAST_ROLE.keys() | OPEN | PAGES.keys() | OPEN_PAGES
    paths = create_app(Settings()).openapi()["paths"]
    described = {(method.upper(), path) for path, operations in paths.items() for method in operations}
    assert described | {("GET", "/openapi.json")} == routes() - PAGES.keys() - OPEN_PAGES


def request(client: httpx.Client, method: str, path: str) -> int:
    body: dict[str, str] | None = {} if method == "POST" else None
    with client.stream(method, path.format(name="none", key="none", kind="lot", id="none"), json=body) as answer:
        return answer.status_code


@pytest.mark.parametrize(("method", "path"), sorted(LEAST_ROLE))
def test_each_role_reaches_what_it_may_and_nothing_else(
    service: Running, ended: list[str], method: str, path: str
) -> None:
    least = Role(LEAST_ROLE[method, path])
    for role in ROLES:
        with service.client(role) as client:
            status = request(client, method, path)
            assert (status != 403) == Role(role).includes(least), (role, status)
            assert status != 401
    with service.client(None) as nobody:
        assert request(nobody, method, path) == 401
        for secret in ended:
            nobody.headers["Authorization"] = f"Bearer {secret}"
            assert request(nobody, method, path) == 401


@pytest.fixture(scope="module")
def test_key(admin: httpx.Client, new_name: Namer) -> str:
    """A test with one result."""
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0]}).raise_for_status()
    return key


@pytest.mark.parametrize(("method", "path"), sorted(PAGES))
def test_each_role_sees_the_pages_that_it_may(
    service: Running, ended: list[str], test_key: str, method: str, path: str
) -> None:
    address = path.format(key=test_key, name="none")
    for role in ROLES:
        with signed_in(service, role) as person:
            body = {"token": form_token(person.get("/").text)} if method == "POST" else None
            with person.stream(method, address, params={"sequence": "1"}, data=body) as answer:
                assert (answer.status_code != 403) == Role(role).includes(Role(PAGES[method, path])), role
                assert answer.headers.get("Location", "") in {"", "/sign-in"}
    for secret in (None, *ended):
        cookies = {} if secret is None else {COOKIE: f"1.2.{secret}"}
        nobody = httpx.request(method, service.url + address, cookies=cookies)
        assert (nobody.status_code, nobody.headers["Location"].partition("?")[0]) == (303, "/sign-in")


@pytest.fixture(scope="module")
def ended(admin: httpx.Client, new_name: Namer) -> list[str]:
    """The secrets of an administrator's key that has expired and of one that was revoked."""
    soon = datetime.now(UTC) + timedelta(seconds=0.5)
    secrets = []
    for expires_at in (soon.isoformat(), None):
        body = {"name": new_name("ended"), "role": "administrator", "expires_at": expires_at}
        made = admin.post("/v1/keys", json=body)
        assert made.status_code == 201, made.text
        secrets.append(made.json()["secret"])
    admin.delete(f"/v1/keys/{body['name']}").raise_for_status()
    while datetime.now(UTC) <= soon:
        time.sleep(0.01)
    return secrets


@pytest.mark.parametrize(("method", "path"), sorted(OPEN))
def test_only_health_readiness_and_the_description_are_open(service: Running, method: str, path: str) -> None:
    with service.client(None) as nobody:
        assert request(nobody, method, path) == 200


@pytest.mark.parametrize("header", ["", "Bearer", "Bearer wrong", "Basic YTpi", "Bearer " + "x" * 5000])
def test_a_wrong_key_is_401(service: Running, header: str) -> None:
    answer = httpx.get(f"{service.url}/v1/tests", headers={"Authorization": header} if header else {})
    assert answer.status_code == 401
    assert answer.headers["WWW-Authenticate"] == "Bearer"
    assert answer.headers["Content-Type"] == "application/problem+json"


def test_a_revoked_key_ends_at_once(admin: httpx.Client, service: Running, new_name: Namer) -> None:
    name = new_name("station")
    made = admin.post("/v1/keys", json={"name": name, "role": "viewer"})
    assert made.status_code == 201
    headers = {"Authorization": f"Bearer {made.json()['secret']}"}
    assert httpx.get(f"{service.url}/v1/tests", headers=headers).status_code == 200
    assert admin.post("/v1/keys", json={"name": name, "role": "viewer"}).status_code == 409
    assert command("keys", "revoke", name, database_url=service.database_url).returncode == 0
    assert httpx.get(f"{service.url}/v1/tests", headers=headers).status_code == 401
    assert admin.delete(f"/v1/keys/{name}").status_code == 404
    assert admin.post("/v1/keys", json={"name": name, "role": "viewer"}).status_code == 201


def test_an_expired_key_is_401(admin: httpx.Client, service: Running, new_name: Namer) -> None:
    soon = (datetime.now(UTC) + timedelta(seconds=0.5)).isoformat()
    made = admin.post("/v1/keys", json={"name": new_name("brief"), "role": "viewer", "expires_at": soon})
    assert made.status_code == 201, made.text
    headers = {"Authorization": f"Bearer {made.json()['secret']}"}
    statuses = {httpx.get(f"{service.url}/v1/tests", headers=headers).status_code}
    while datetime.now(UTC).isoformat() < soon:
        pass
    statuses.add(httpx.get(f"{service.url}/v1/tests", headers=headers).status_code)
    assert 401 in statuses
    for never in ("2001-01-01T00:00:00Z", "0001-01-01T00:00:00+14:00", "9999-12-31T23:59:59-14:00"):
        refused = admin.post("/v1/keys", json={"name": new_name("brief"), "role": "viewer", "expires_at": never})
        assert (refused.status_code, pointers(refused)) == (422, ["/expires_at"])


def test_no_secret_is_ever_shown_again(admin: httpx.Client, service: Running) -> None:
    listed = admin.get("/v1/keys").text + command("keys", "list", database_url=service.database_url).stdout
    assert "the-viewer" in listed
    assert not any(secret in listed for secret in service.keys.values())
