"""Reading a log while more is posted."""

import asyncio
import hashlib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import httpx

from service.app import create_app
from service.domain.access import Role
from service.domain.checking import checked_content
from service.domain.sequential_test import SequentialTest, Subject, SubjectKind
from service.ingest.commands import CreateKey, CreatePlan, IssuedKey, PostObservations, RegisterTest
from service.ingest.road import perform_now
from service.settings import Settings
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from tests.api.examples import SEAL


class MeanwhileReader(Reader):
    """A reader that has something happen right after the test was read."""

    happens: Callable[[], object]

    def test(self, key: str) -> SequentialTest | None:
        found = super().test(key)
        self.happens()
        return found


def zeros(count: int) -> PostObservations:
    body = f'{{"values": [{", ".join("0" * count)}]}}'
    return PostObservations("lot", body, {"values": [0] * count}, hashlib.sha256(body.encode()).hexdigest(), "me")


def test_what_is_posted_meanwhile_does_not_show_as_not_counted(tmp_path: Path) -> None:
    url = f"sqlite:///{tmp_path / 'meanwhile.sqlite3'}"
    engine = create_engine_for(url)
    upgrade(engine)
    issued = perform_now(engine, CreateKey("me", Role.VIEWER))
    assert isinstance(issued, IssuedKey)
    perform_now(engine, CreatePlan("seal", checked_content(SEAL), "me"))
    perform_now(engine, RegisterTest("lot", "seal", Subject(SubjectKind.LOT, "lot"), {}, "me"))
    perform_now(engine, zeros(10))
    reader = MeanwhileReader(engine)
    reader.happens = lambda: perform_now(engine, zeros(3))
    app = create_app(Settings(database_url=url))

    async def main() -> None:
        async with app.router.lifespan_context(app):
            app.state.parts = replace(app.state.parts, reader=reader)
            headers = {"Authorization": f"Bearer {issued.secret}"}
            transport = httpx.ASGITransport(app)
            async with httpx.AsyncClient(transport=transport, base_url="http://x", headers=headers) as client:
                log = (await client.get("/v1/tests/lot/observations")).json()["items"]
                assert [item["counted"] for item in log] == [True] * 10
                table = await client.get("/v1/tests/lot/observations", headers={"Accept": "text/csv"})
                assert table.text.count("true") == table.text.count("\r\n") - 1 == 13
                path = (await client.get("/v1/tests/lot/path")).json()
                assert (path["decision"], path["points"][-1]["sample_number"]) == ("continue", 16)

    asyncio.run(main())
    engine.dispose()
