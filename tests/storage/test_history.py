"""The history on both databases: chained, append-only, and given to what was there before it."""

import hashlib
import json
from datetime import UTC, datetime

import pytest
from sqlalchemy import Engine, event, text
from sqlalchemy.exc import DBAPIError

from service.domain.access import Role
from service.domain.chain import SERVICE, Entry, Head, shown
from service.domain.checking import checked_content
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import CreateKey, CreatePlan, PostCorrection, PostObservations, RegisterTest, RevokeKey
from service.ingest.performing import perform
from service.ingest.road import perform_now
from service.storage.migrate import downgrade, upgrade
from service.storage.reader import Reader
from service.storage.writer import writing
from tests.api.examples import SEAL, SHAFT
from tests.storage.test_storage import NOW

GUARDED = ["submissions", "history", "corrections"]


def post(test: str, *values: float, key: str | None = None) -> PostObservations:
    body = json.dumps({"values": list(values)})
    digest = hashlib.sha256(body.encode()).hexdigest()
    return PostObservations(test, body, json.loads(body), digest, "line-2", key, request_id="r1")


def filled(engine: Engine, *, is_corrected: bool = True) -> None:
    """Two tests, one of them decided and past it, and keys of which one is revoked."""
    for name, plan in (("seal", SEAL), ("shaft", SHAFT)):
        perform_now(engine, CreatePlan(name, checked_content(plan), "me"))
        registration = RegisterTest(f"lot-{name}", name, Subject(SubjectKind.LOT, "Los ½"), {"a": "b"}, "me")
        perform_now(engine, registration, lambda: NOW)
    for command in (
        post("lot-shaft", 10.1, 10.2),
        post("lot-seal", *[0] * 20, key="tray-1"),
        post("lot-seal", *[0] * 20),
        post("lot-seal", 1),
    ):
        perform_now(engine, command)
    correction = PostCorrection("lot-shaft", 1, None, "typo", "d" * 64, "me", may_correct_decided=False)
    if is_corrected:
        perform_now(engine, correction)
    for name in ("one", "two"):
        perform_now(engine, CreateKey(name, Role.VIEWER))
    perform_now(engine, RevokeKey("one"))


def linked(entries: list[Entry]) -> Head:
    """The end of a chain, every link of it computed again by the recipe of the documents."""
    link = ""
    for number, entry in enumerate(entries, start=1):
        parts = [link, entry.chain, number, entry.act, shown(entry.at), entry.actor, entry.request_id, entry.details]
        recipe = json.dumps(parts, sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        link = hashlib.sha256(recipe.encode()).hexdigest()
        assert (entry.number, entry.link) == (number, link)
    return Head(len(entries), link)


def history(engine: Engine, chain: str) -> list[Entry]:
    return list(Reader(engine).log.acts(chain))


def test_every_act_is_chained_and_the_end_is_kept(engine: Engine) -> None:
    filled(engine)
    acts = {chain: history(engine, chain) for chain in ("lot-seal", "lot-shaft", SERVICE)}

    def acts_of(chain: str) -> list[str]:
        return [entry.act for entry in acts[chain]]

    assert acts_of("lot-seal") == ["registered", "submitted", "submitted", "decided", "submitted"]
    assert acts_of("lot-shaft") == ["registered", "submitted", "corrected"]
    assert acts_of(SERVICE) == [*["plan-created", "test-registered"] * 2, *["key-created"] * 2, "key-revoked"]
    for key in ("lot-seal", "lot-shaft"):
        assert getattr(Reader(engine).test(key), "history", None) == linked(acts[key])
    with engine.connect() as connection:
        row = connection.execute(text("SELECT * FROM chains")).one()
    assert Head(row.history_length, row.history_link) == linked(acts[SERVICE])
    decided = acts["lot-seal"][3]
    assert (decided.actor, decided.request_id, decided.details["sequence"]) == ("line-2", "r1", 24)
    assert acts[SERVICE][-1].actor == "command line"


def test_what_was_there_before_gets_its_history(engine: Engine) -> None:
    filled(engine, is_corrected=False)
    before = {key: history(engine, key) for key in ("lot-seal", "lot-shaft")}
    tests = {key: Reader(engine).test(key) for key in before}
    downgrade(engine, "0004")
    upgrade(engine)
    for key, acts in before.items():
        again = history(engine, key)
        assert [(e.act, e.at, e.actor, e.details) for e in again if e.act != "decided"] == [
            (e.act, e.at, e.actor, e.details) for e in acts if e.act != "decided"
        ]
        assert all(entry.is_migrated for entry in again)
        test = Reader(engine).test(key)
        assert test is not None
        assert test.history == linked(again)
        assert test.state == getattr(tests[key], "state", None)
    (decided,) = [entry for entry in history(engine, "lot-seal") if entry.act == "decided"]
    assert (decided.number, decided.details) == (4, before["lot-seal"][3].details)
    service = history(engine, SERVICE)
    assert len(service) == linked(service).length == 7
    perform_now(engine, post("lot-seal", 0))
    assert not history(engine, "lot-seal")[-1].is_migrated
    linked(history(engine, "lot-seal"))


@pytest.mark.parametrize("table", GUARDED)
@pytest.mark.parametrize("change", ["UPDATE {} SET actor = 'x'", "DELETE FROM {}"])
def test_the_database_refuses_to_change_or_remove_what_happened(engine: Engine, table: str, change: str) -> None:
    filled(engine)
    with pytest.raises(DBAPIError, match=f"rows of {table} are never changed or removed"), engine.begin() as connection:
        connection.execute(text(change.format(table)))


def test_postgresql_refuses_to_empty_them_too(engine: Engine) -> None:
    if engine.dialect.name == "sqlite":
        assert engine.dialect.name == "sqlite", "SQLite has no TRUNCATE"
        return
    for table in GUARDED:
        with pytest.raises(DBAPIError, match="never changed or removed"), engine.begin() as connection:
            connection.execute(text(f"TRUNCATE {table} CASCADE"))


def test_a_group_records_in_few_statements(engine: Engine) -> None:
    """As many for forty submissions as for one: the history travels in the rows of the log."""
    filled(engine)
    seen: list[str] = []
    event.listen(engine, "before_cursor_execute", lambda _c, _u, sql, *_: seen.append(sql))
    counts = []
    for size in (1, 40):
        seen.clear()
        with writing(engine) as writer:
            writer.expect(["lot-shaft"], [])
            for _ in range(size):
                perform(post("lot-shaft", 10.25), writer, datetime.now(UTC))
        counts.append(len([sql for sql in seen if "FROM plans" not in sql]))
    assert counts[0] == counts[1]
