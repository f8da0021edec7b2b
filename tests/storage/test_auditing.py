# ruff: noqa: E501 - a table of changes reads best with one a line
"""An audit finds what was changed behind the service's back, in every table, and names the place."""

import hashlib
import json
import re
from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from functools import partial
from typing import Any

from sqlalchemy import Connection, Engine, text

from service.domain.access import UNLIMITED, Role
from service.domain.addresses import Allowed
from service.domain.checking import checked_content
from service.domain.disposing import Verdict
from service.domain.sequential_test import Subject, SubjectKind
from service.ingest.commands import (
    CreateKey,
    CreatePlan,
    CreateReceiver,
    Dispose,
    PostCorrection,
    PostObservations,
    RegisterTest,
    RemoveReceiver,
    RevokeKey,
)
from service.ingest.performing import perform
from service.ingest.road import perform_now
from service.storage import tables
from service.storage.auditing import Audited, Snapshot, audited, snapshot
from service.storage.engine import is_sqlite
from service.storage.reader import Reader
from service.storage.writer import writing
from tests.api.examples import SEAL, SHAFT
from tests.storage.test_history import GUARDED, post
from tests.storage.test_storage import NOW

UNITS = '{"observations": [{"value": 10.1, "unit": "u1"}, {"value": 10.2, "unit": "u2"}]}'


def filled(engine: Engine) -> None:
    """Tests of which one is decided and one has units, keys of which one is revoked, receivers of which one is gone."""
    for name, content in (("seal", SEAL), ("shaft", SHAFT), ("spare", SEAL)):
        perform_now(engine, CreatePlan(name, checked_content(content), "me"))
    for key, plan in (("lot-1", "seal"), ("lot-2", "shaft"), ("lot-3", "seal")):
        perform_now(engine, RegisterTest(key, plan, Subject(SubjectKind.LOT, "x"), {"line": "3", "shift": "1"}, "me"))
    for command in (post("lot-1", *[0] * 20, key="tray-1"), post("lot-1", *[0] * 20), post("lot-1", 1), with_units()):
        perform_now(engine, command)
    perform_now(engine, post("lot-2", 10.3))
    for name in ("one", "two"):
        perform_now(engine, CreateKey(name, Role.VIEWER))
    perform_now(engine, RevokeKey("one"))
    perform_now(engine, RegisterTest("lot-4", "seal", Subject(SubjectKind.LOT, "x"), {}, "me"))
    for act in (post("lot-4", *[0] * 30), void("lot-4", 7), void("lot-4", 9, {"value": 1})):
        perform_now(engine, act)
    perform_now(engine, Dispose("lot-4", Verdict.ACCEPT, "sheet 12", "the customer asked", "me"))
    for name in ("bench", "board"):
        perform_now(engine, CreateReceiver(name, f"https://{name}.example/", UNLIMITED, Allowed(), "me"))
    perform_now(engine, RemoveReceiver("bench", "me"))


def void(test: str, at: int, replacement: dict[str, Any] | None = None) -> PostCorrection:
    """A correction that voids, or replaces."""
    return PostCorrection(test, at, replacement, "typo", "d" * 64, "me", may_correct_decided=True, request_id="r3")


def with_units(*units: str) -> PostObservations:
    """Two units, those of `UNITS` or others."""
    body = UNITS
    for old, new in zip(("u1", "u2"), units, strict=False):
        body = body.replace(old, new)
    digest = hashlib.sha256(body.encode()).hexdigest()
    return PostObservations("lot-2", body, json.loads(body), digest, "line-2", request_id="r2")


@contextmanager
def behind_the_back(engine: Engine) -> Iterator[Connection]:
    """A connection on which the guards of the append-only tables, and the references, are off."""
    with engine.connect() as connection:
        if is_sqlite(engine):
            connection.exec_driver_sql("PRAGMA foreign_keys=OFF")
            connection.commit()
            for table in GUARDED:
                for name in ("no_change", "no_removal"):
                    connection.exec_driver_sql(f"DROP TRIGGER {table}_{name}")
        else:
            connection.exec_driver_sql("SET session_replication_role = replica")
        yield connection
        connection.commit()
        connection.exec_driver_sql("PRAGMA foreign_keys=ON" if is_sqlite(engine) else "RESET session_replication_role")
        connection.commit()


def differences(connection: Connection) -> list[str]:
    """What an audit finds on this very connection, which sees changes that are not committed."""
    found = audited(lambda: nullcontext(Snapshot(connection)))
    return [audit.difference for audit in found if audit.difference is not None]


def test_what_was_not_touched_is_as_it_was_recorded(engine: Engine) -> None:
    filled(engine)
    assert list(audited(partial(snapshot, engine))) == [
        Audited(None, is_of_test=False, acts=13),
        Audited(None, is_of_test=True, acts=5, observations=41),
        Audited(None, is_of_test=True, acts=3, observations=3),
        Audited(None, is_of_test=True, acts=1),
        Audited(None, is_of_test=True, acts=7, observations=30),
    ]
    named, unknown = audited(partial(snapshot, engine), ["lot-2", "nowhere"])
    assert (named.acts, named.difference) == (3, None)
    assert unknown.difference == "test nowhere: there is none"


SWAP_SUBMISSIONS = """
UPDATE submissions SET first_sequence = 1001, last_sequence = 1020 WHERE test = 'lot-1' AND first_sequence = 1;
UPDATE submissions SET first_sequence = 1, last_sequence = 20 WHERE test = 'lot-1' AND first_sequence = 21;
UPDATE submissions SET first_sequence = 21, last_sequence = 40 WHERE test = 'lot-1' AND first_sequence = 1001
"""
SWAP_HISTORY = """
UPDATE history SET number = 100 WHERE chain = '' AND number = 1;
UPDATE history SET number = 1 WHERE chain = '' AND number = 2;
UPDATE history SET number = 2 WHERE chain = '' AND number = 100
"""
SWAP_CORRECTIONS = """
UPDATE corrections SET number = 100 WHERE number = 4;
UPDATE corrections SET number = 4 WHERE number = 5;
UPDATE corrections SET number = 5 WHERE number = 100
"""
CUT_SHORT = """
DELETE FROM submissions WHERE test = 'lot-2' AND first_sequence = 3;
UPDATE tests SET sequence = 2, version = 2 WHERE key = 'lot-2'
"""
VANISHED = """
DELETE FROM test_labels WHERE test = 'lot-3'; DELETE FROM history WHERE chain = 'lot-3';
DELETE FROM tests WHERE key = 'lot-3'
"""

CHANGES = [
    ("submissions", "UPDATE submissions SET body = '{\"values\": [0]}' WHERE first_sequence = 41", "act 5 .*posted"),
    ("submissions", "UPDATE submissions SET actor = 'other' WHERE test = 'lot-1' AND first_sequence = 1", "act 2 .*link"),
    ("submissions", "UPDATE submissions SET total = 3 WHERE test = 'lot-1' AND first_sequence = 21", "act 3 .*link"),
    ("submissions", "UPDATE submissions SET request_id = 'r9' WHERE first_sequence = 41", "act 5 .*link"),
    ("submissions", "UPDATE submissions SET received_at = '2030-01-01T00:00:00.000000Z' WHERE first_sequence = 41", "act 5 .*link"),
    ("submissions", "UPDATE submissions SET idempotency_key = 'x' WHERE first_sequence = 41", "act 5 .*link"),
    ("submissions", "DELETE FROM submissions WHERE test = 'lot-1' AND first_sequence = 21", "act 4 .*act 3 was to come"),
    ("submissions", SWAP_SUBMISSIONS, "test lot-1, act 3 .*act 2 was to come"),
    ("submissions", CUT_SHORT, "test lot-2: its history ends with act 2, and its row says 3"),
    ("history", "DELETE FROM history WHERE chain = 'lot-1' AND act = 'decided'", "act 5 .*act 4 was to come"),
    ("history", "UPDATE history SET actor = 'x' WHERE chain = 'lot-1' AND act = 'registered'", "test lot-1, act 1 .*link"),
    ("history", "UPDATE history SET details = '{\"plan\": \"seal\"}' WHERE number = 1 AND chain = ''", "service, act 1 .*link"),
    ("history", "UPDATE history SET details = 'none' WHERE number = 1 AND chain = 'lot-3'", "test lot-3: a row cannot be read"),
    ("history", SWAP_HISTORY, "service, act 1 .*link"),
    ("history", "DELETE FROM history WHERE chain = '' AND number = 13", "service's history ends with act 12, and 13"),
    ("chains", "UPDATE chains SET history_link = 'x'", "service's history ends"),
    ("chains", "DELETE FROM chains", "service's history ends with act 13, and 0"),
    ("tests", "UPDATE tests SET decision = 'reject' WHERE key = 'lot-1'", "test lot-1: its state"),
    ("tests", "UPDATE tests SET log_likelihood_ratio = 0.125 WHERE key = 'lot-2'", "test lot-2: its state"),
    ("tests", "UPDATE tests SET status = 'closed' WHERE key = 'lot-3'", "test lot-3: its status"),
    ("tests", "UPDATE tests SET version = 7 WHERE key = 'lot-3'", "test lot-3: its version"),
    ("tests", "UPDATE tests SET updated_at = '2030-01-01T00:00:00.000000Z' WHERE key = 'lot-3'", "test lot-3: its updated_at"),
    ("tests", "UPDATE tests SET subject_name = 'y' WHERE key = 'lot-2'", "test lot-2, act 1 .*registered"),
    ("tests", "UPDATE tests SET history_length = 2 WHERE key = 'lot-2'", "test lot-2: its history ends"),
    ("tests", VANISHED, "service, act 6 .test-registered.: what it tells of is missing"),
    ("tests", "UPDATE tests SET disposition = 'scrap' WHERE key = 'lot-4'", "test lot-4, act 7 .disposed.*row says"),
    ("tests", "UPDATE tests SET disposed_by = 'x' WHERE key = 'lot-4'", "test lot-4: its disposition"),
    ("tests", "UPDATE tests SET status = 'open', disposition = NULL WHERE key = 'lot-4'", "test lot-4, act 7 .disposed.*row says"),
    ("tests", "UPDATE tests SET decision_changed = (1 = 0) WHERE key = 'lot-4'", "test lot-4: its decision_changed"),
    ("tests", "UPDATE tests SET corrected_after_decision = (1 = 0) WHERE key = 'lot-4'", "test lot-4: its corrected_after"),
    ("tests", "UPDATE tests SET corrections = 3 WHERE key = 'lot-4'", "test lot-4: its corrections"),
    ("corrections", "UPDATE corrections SET reason = 'x' WHERE observation = 7", "test lot-4, act 4 .corrected observation 7.*link"),
    ("corrections", "UPDATE corrections SET replacement = '{\"value\": 0}' WHERE observation = 9", "test lot-4, act 5 .*link"),
    ("corrections", "UPDATE corrections SET observation = 8 WHERE observation = 7", "test lot-4, act 4 .*link"),
    ("corrections", "UPDATE corrections SET total = 5 WHERE observation = 7", "test lot-4, act 4 .*link"),
    ("corrections", "DELETE FROM corrections WHERE observation = 7", "test lot-4, act 5 .*act 4 was to come"),
    ("corrections", SWAP_CORRECTIONS, "test lot-4, act 4 .*link"),
    ("test_labels", "UPDATE test_labels SET value = '4' WHERE test = 'lot-2' AND name = 'line'", "test lot-2: its labels"),
    ("test_labels", "DELETE FROM test_labels WHERE test = 'lot-2' AND name = 'line'", "test lot-2: its labels"),
    ("units", "UPDATE units SET sequence = 3 - sequence", "test lot-2: the units of observations 1"),
    ("units", "DELETE FROM units WHERE unit = 'u2'", "test lot-2: the units of observations 1"),
    ("units", "INSERT INTO units VALUES ('lot-2', 'u3', 3)", "test lot-2: 3 units are kept, and 2"),
    ("plans", "UPDATE plans SET document = replace(document, '0.01', '0.02') WHERE name = 'spare'", "service, act 3"),
    ("plans", "UPDATE plans SET created_by = 'x' WHERE name = 'spare'", "service, act 3"),
    ("plans", "DELETE FROM plans WHERE name = 'spare'", "service, act 3"),
    ("plans", "UPDATE plans SET document = replace(document, '0.01', '0.02') WHERE name = 'seal'", "test lot-1: its plan"),
    ("api_keys", "UPDATE api_keys SET role = 'engineer' WHERE name = 'two'", "service, act 8"),
    ("api_keys", "UPDATE api_keys SET digest = 'x' WHERE name = 'two'", "service, act 8"),
    ("api_keys", "UPDATE api_keys SET revoked_at = NULL WHERE name = 'one'", "service, act 9"),
    ("api_keys", "UPDATE api_keys SET revoked_at = created_at WHERE name = 'two'", "api_keys: 2 are revoked"),
    ("api_keys", "DELETE FROM api_keys WHERE name = 'two'", "service, act 8"),
    ("api_keys", "INSERT INTO api_keys SELECT 'x', 'x', role, 'x', created_at, NULL, NULL, NULL, NULL FROM api_keys WHERE name = 'two'", "api_keys: 3 rows"),
    ("receivers", "UPDATE receivers SET address = 'https://elsewhere.example/' WHERE name = 'board'", "service, act 12"),
    ("receivers", "UPDATE receivers SET secret = 'whsec_AAAA' WHERE name = 'board'", "service, act 12"),
    ("receivers", "UPDATE receivers SET labels = '{\"line\": [\"4\"]}' WHERE name = 'board'", "service, act 12"),
    ("receivers", "UPDATE receivers SET removed_at = NULL WHERE name = 'bench'", "service, act 11"),
    ("receivers", "UPDATE receivers SET removed_at = created_at, secret = NULL WHERE name = 'board'", "receivers: 2 are removed"),
    ("receivers", "DELETE FROM receivers WHERE name = 'board'", "service, act 12"),
    ("receivers", "INSERT INTO receivers SELECT 'x', 'x', address, NULL, fingerprint, created_at, 'x', created_at, NULL, NULL FROM receivers WHERE name = 'board'", "receivers: 3 rows"),
]  # fmt: skip


def test_a_group_of_posts_and_corrections_sees_its_own_acts(engine: Engine) -> None:
    filled(engine)
    with writing(engine) as writer:
        writer.expect(["lot-2", "lot-3"], [])
        for act in (post("lot-2", 10.4), void("lot-2", 4), post("lot-3", 0), void("lot-2", 1), with_units("u1", "u3")):
            perform(act, writer, NOW)
    test = Reader(engine).test("lot-2")
    assert test is not None
    assert (test.state.sequence, test.state.voided) == (6, 2)
    assert differences_of(engine) == []


def differences_of(engine: Engine) -> list[str]:
    found = audited(partial(snapshot, engine))
    return [audit.difference for audit in found if audit.difference is not None]


def test_every_table_is_tried() -> None:
    """But for the outbox, which is no part of the record."""
    assert {table for table, _, _ in CHANGES} == tables.metadata.tables.keys() - {"notices"}


def test_what_was_changed_removed_or_moved_is_found_and_named(engine: Engine) -> None:
    """Each change is made, found, and taken back, on one database."""
    filled(engine)
    with behind_the_back(engine) as connection:
        connection.commit()
        for table, change, named in CHANGES:
            for statement in change.split(";"):
                connection.execute(text(statement))
            found = differences(connection)
            connection.rollback()
            assert any(re.search(named, difference) for difference in found), (table, change, found)
        assert differences(connection) == []
