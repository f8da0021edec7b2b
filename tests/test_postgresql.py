"""The whole service on PostgreSQL."""

from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

from sqlalchemy.engine import URL

from tests.api.examples import SHAFT
from tests.postgres import fresh_database
from tests.running import running


def test_the_main_job_on_postgresql(server: URL, tmp_path: Path) -> None:
    with (
        fresh_database(server) as url,
        running(tmp_path, database_url=url) as service,
        service.client("engineer") as client,
    ):
        client.post("/v1/plans", json={"name": "shaft", **SHAFT}).raise_for_status()
        registration = {"key": "lot-1", "plan": "shaft", "subject": {"kind": "lot", "name": "1"}, "labels": {"a": "b"}}
        client.post("/v1/tests", json=registration).raise_for_status()
        with ThreadPoolExecutor(8) as pool:
            posts = [{"values": [10.25], "key": f"k{i % 20}"} for i in range(40)]

            def post(item: dict[str, object]) -> int:
                headers = {"Idempotency-Key": str(item["key"])}
                return client.post(
                    "/v1/tests/lot-1/observations", json={"values": item["values"]}, headers=headers
                ).status_code

            assert set(pool.map(post, posts)) <= {201, 409}
        state = client.get("/v1/tests/lot-1").json()
        assert (state["sample_number"], state["decision"]) == (20, "continue")
        done = client.post("/v1/tests/lot-1/observations", json={"values": [12.0] * 3}).json()
        assert done["decision"] == "reject"
        assert [item["sequence"] for item in client.get("/v1/tests/lot-1/observations").json()["items"]] == list(
            range(1, 24)
        )
        assert client.get("/v1/tests?label=a:b&decision=reject").json()["items"][0]["key"] == "lot-1"
        assert client.get("/readyz").status_code == 200
        for path in ("/v1/tests/a%00b", "/v1/plans/a%00b"):
            assert client.get(path).status_code == 404
        assert client.post("/v1/tests/a%00b/observations", json={"values": [1.0]}).status_code == 404
        for query in ("subject=%00", "plan=%00", "label=a:%00", "cursor=WyJcdTAwMDAiXQ"):
            assert client.get(f"/v1/tests?{query}").status_code == 422
