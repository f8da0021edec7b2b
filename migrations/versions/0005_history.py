"""
A history of every act, chained by SHA-256; the log and the history take no change and no removal any more.

What is there already gets its history here, marked by the request `migration`. The recipe of the links is written out,
for it must stay what it was when this ran. Services of the version before would write a log without links: stop them.
"""

import hashlib
import json
from collections.abc import Iterator, Mapping
from datetime import UTC, datetime
from typing import Any

import sqlalchemy as sa
from alembic import op

revision = "0005"
down_revision = "0004"
branch_labels = None
depends_on = None

MOMENT = sa.DateTime(timezone=True).with_variant(sa.String(27), "sqlite")
KEY = sa.String(100).with_variant(sa.String(100, collation="C"), "postgresql")

MIGRATED = "migration"
ROWS_AT_ONCE = 500
GUARDED = ("submissions", "history")

REFUSES = """
CREATE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    RAISE EXCEPTION 'rows of % are never changed or removed', TG_TABLE_NAME;
END
$$
"""


def upgrade() -> None:
    for table in ("tests", "submissions"):
        op.add_column(table, sa.Column("voided", sa.BigInteger(), nullable=False, server_default="0"))
    op.add_column("tests", sa.Column("history_length", sa.BigInteger(), nullable=False, server_default="0"))
    op.add_column("tests", sa.Column("history_link", sa.String(64), nullable=False, server_default=""))
    op.add_column("submissions", sa.Column("request_id", sa.String(64)))
    op.add_column("submissions", sa.Column("number", sa.BigInteger(), nullable=False, server_default="0"))
    op.add_column("submissions", sa.Column("link", sa.String(64), nullable=False, server_default=""))
    op.create_table(
        "history",
        sa.Column("chain", KEY, nullable=False),
        sa.Column("number", sa.BigInteger(), nullable=False, server_default="0"),
        sa.Column("link", sa.String(64), nullable=False, server_default=""),
        sa.Column("act", sa.String(20), nullable=False),
        sa.Column("at", MOMENT, nullable=False),
        sa.Column("actor", sa.String(100), nullable=False),
        sa.Column("request_id", sa.String(64)),
        sa.Column("details", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("chain", "number", name=op.f("pk_history")),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "chains",
        sa.Column("chain", KEY, nullable=False),
        sa.Column("history_length", sa.BigInteger(), nullable=False, server_default="0"),
        sa.Column("history_link", sa.String(64), nullable=False, server_default=""),
        sa.PrimaryKeyConstraint("chain", name=op.f("pk_chains")),
    )
    _record_what_was()
    is_sqlite = op.get_bind().dialect.name == "sqlite"
    if not is_sqlite:
        op.execute(REFUSES)
    for table in GUARDED:
        for statement in guards_on_sqlite(table) if is_sqlite else guards_on_postgresql(table):
            op.execute(statement)


def downgrade() -> None:
    is_sqlite = op.get_bind().dialect.name == "sqlite"
    for table in GUARDED:
        for name in ("no_change", "no_removal"):
            op.execute(f"DROP TRIGGER {table}_{name}" + ("" if is_sqlite else f" ON {table}"))
    if not is_sqlite:
        op.execute("DROP FUNCTION refuse_change()")
    op.drop_table("chains")
    op.drop_table("history")
    for column in ("link", "number", "request_id"):
        op.drop_column("submissions", column)
    for column in ("history_link", "history_length"):
        op.drop_column("tests", column)
    for table in ("tests", "submissions"):
        op.drop_column(table, "voided")


def guards_on_sqlite(table: str) -> Iterator[str]:
    for name, event in (("no_change", "UPDATE"), ("no_removal", "DELETE")):
        refusal = f"SELECT RAISE(ABORT, 'rows of {table} are never changed or removed')"
        yield f"CREATE TRIGGER {table}_{name} BEFORE {event} ON {table} BEGIN {refusal}; END"


def guards_on_postgresql(table: str) -> Iterator[str]:
    for name, events, each in (("no_change", "UPDATE OR DELETE", "ROW"), ("no_removal", "TRUNCATE", "STATEMENT")):
        yield (
            f"CREATE TRIGGER {table}_{name} BEFORE {events} ON {table} FOR EACH {each} EXECUTE FUNCTION refuse_change()"
        )


class _Chain:
    """Binds entries one after another."""

    def __init__(self, name: str) -> None:
        self.name, self.length, self.link = name, 0, ""

    def bind(self, act: str, at: Any, actor: str, details: Mapping[str, Any]) -> dict[str, Any]:  # noqa: ANN401
        self.length += 1
        parts = [self.link, self.name, self.length, act, _shown(at), actor, MIGRATED, details]
        text = json.dumps(_plain(parts), sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
        self.link = hashlib.sha256(text.encode()).hexdigest()
        shown = json.dumps(_plain(details), sort_keys=True, separators=(",", ":"), ensure_ascii=False)
        return {
            "chain": self.name,
            "number": self.length,
            "link": self.link,
            "act": act,
            "at": at,
            "actor": actor,
            "request_id": MIGRATED,
            "details": shown,
        }


def _record_what_was() -> None:
    connection, service = op.get_bind(), _Chain("")
    entries = [
        service.bind(
            "plan-created", plan.created_at, plan.created_by, {"plan": plan.name, "fingerprint": plan.fingerprint}
        )
        for plan in connection.execute(sa.text("SELECT * FROM plans ORDER BY created_at, name"))
    ]
    keys = list(connection.execute(sa.text("SELECT * FROM api_keys ORDER BY created_at, id")))
    entries += [service.bind("key-created", key.created_at, "unknown", _key(key)) for key in keys]
    entries += [
        service.bind("key-revoked", key.revoked_at, "unknown", {"id": key.id, "name": key.name})
        for key in keys
        if key.revoked_at is not None
    ]
    _insert(connection, entries)
    plans = connection.execute(sa.text("SELECT name, fingerprint FROM plans"))
    fingerprints = {plan.name: plan.fingerprint for plan in plans}
    for tests in _pages(connection, "SELECT * FROM tests WHERE key > :last ORDER BY key LIMIT :limit", "", "key"):
        heads = []
        for test in tests:
            chain = _Chain(test.key)
            details = {
                "plan": test.plan,
                "fingerprint": fingerprints[test.plan],
                "subject": {"kind": test.subject_kind, "name": test.subject_name},
                "labels": json.loads(test.labels),
            }
            own = [chain.bind("registered", test.registered_at, test.registered_by, details)]
            own.append(service.bind("test-registered", test.registered_at, test.registered_by, {"test": test.key}))
            _insert(connection, own + _bind_log(connection, chain))
            heads.append({"which": test.key, "length": chain.length, "link": chain.link})
        update = "UPDATE tests SET history_length = :length, history_link = :link WHERE key = :which"
        connection.execute(sa.text(update), heads)
    if service.length:
        insert = "INSERT INTO chains (chain, history_length, history_link) VALUES ('', :length, :link)"
        connection.execute(sa.text(insert), {"length": service.length, "link": service.link})


def _bind_log(connection: sa.Connection, chain: _Chain) -> list[dict[str, Any]]:
    """Link the submissions of a test; the entries of its decision."""
    decided: list[dict[str, Any]] = []
    before = "continue"
    found = (
        "SELECT * FROM submissions WHERE test = :test AND first_sequence > :last ORDER BY first_sequence LIMIT :limit"
    )
    update = (
        "UPDATE submissions SET request_id = :request_id, number = :number, link = :link "
        "WHERE test = :test AND first_sequence = :first"
    )
    for page in _pages(connection, found, 0, "first_sequence", test=chain.name):
        places = []
        for row in page:
            entry = chain.bind("submitted", row.received_at, row.actor, _submission(row))
            place = {name: entry[name] for name in ("number", "link", "request_id")}
            places.append({**place, "test": row.test, "first": row.first_sequence})
            if row.decision != before:
                details = {
                    "decision": row.decision,
                    "before": before,
                    "sequence": row.decided_sequence,
                    "sample_number": row.sample_number,
                    "cause": "submitted",
                }
                decided.append(chain.bind("decided", row.received_at, row.actor, details))
                before = row.decision
        connection.execute(sa.text(update), places)
    return decided


def _pages(connection: sa.Connection, found: str, last: Any, key: str, **more: str) -> Iterator[list[Any]]:  # noqa: ANN401
    while rows := list(connection.execute(sa.text(found), {"last": last, "limit": ROWS_AT_ONCE, **more})):
        yield rows
        last = getattr(rows[-1], key)


def _insert(connection: sa.Connection, entries: list[dict[str, Any]]) -> None:
    if entries:
        names = ", ".join(entries[0])
        values = ", ".join(f":{name}" for name in entries[0])
        connection.execute(sa.text(f"INSERT INTO history ({names}) VALUES ({values})"), entries)  # noqa: S608


def _key(key: Any) -> dict[str, Any]:  # noqa: ANN401
    return {
        "id": key.id,
        "name": key.name,
        "role": key.role,
        "fingerprint": hashlib.sha256(key.digest.encode()).hexdigest(),
        "expires_at": None if key.expires_at is None else _shown(key.expires_at),
    }


def _submission(row: Any) -> dict[str, Any]:  # noqa: ANN401
    decided = {
        "sequence": row.decided_sequence,
        "sample_number": row.decided_sample_number,
        "exposure": row.decided_exposure,
        "at": None if row.decided_at is None else _shown(row.decided_at),
        "cause": row.decided_cause,
    }
    state = {
        "sequence": row.sequence,
        "sample_number": row.sample_number,
        "exposure": [row.exposure, row.exposure_low],
        "total": [row.total, row.total_low],
        "carried": json.loads(row.carried or "[]"),
        "log_likelihood_ratio": row.log_likelihood_ratio,
        "decision": row.decision,
        "decided": None if row.decided_sequence is None else decided,
        "overrun": row.overrun,
        "voided": row.voided,
    }
    return {
        "first_sequence": row.first_sequence,
        "last_sequence": row.last_sequence,
        "body_digest": row.body_digest,
        "idempotency_key": row.idempotency_key,
        "version": row.version,
        "state": state,
    }


def _shown(moment: Any) -> str:  # noqa: ANN401 - text on SQLite
    return moment if isinstance(moment, str) else moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def _plain(value: Any) -> Any:  # noqa: ANN401
    if isinstance(value, Mapping):
        return {name: _plain(member) for name, member in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(member) for member in value]
    if isinstance(value, datetime):
        return _shown(value)
    return value + 0.0 if isinstance(value, float) else value
