"""
The tables. Private to storage.

Every key of a growing table begins with the test, so that the log can be partitioned by test.
"""

from datetime import UTC, datetime
from typing import Any

from sqlalchemy import (
    BigInteger,
    Boolean,
    CheckConstraint,
    Column,
    DateTime,
    Dialect,
    Float,
    ForeignKeyConstraint,
    Index,
    MetaData,
    PrimaryKeyConstraint,
    String,
    Table,
    Text,
    TypeDecorator,
    UniqueConstraint,
    false,
    text,
)
from sqlalchemy.types import TypeEngine

metadata = MetaData(
    naming_convention={
        "pk": "pk_%(table_name)s",
        "fk": "fk_%(table_name)s_%(referred_table_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    }
)


# Names and keys sort by their code points on both databases.
KEY = String(100).with_variant(String(100, collation="C"), "postgresql")


class UtcTime(TypeDecorator[datetime]):
    """A moment in UTC with microseconds: timestamptz on PostgreSQL, sortable ISO 8601 text ending in Z on SQLite."""

    impl = DateTime(timezone=True)
    cache_ok = True

    def load_dialect_impl(self, dialect: Dialect) -> TypeEngine[Any]:
        """Text on SQLite, which has no type for moments."""
        return dialect.type_descriptor(String(27) if dialect.name == "sqlite" else DateTime(timezone=True))

    def process_bind_param(self, value: datetime | None, dialect: Dialect) -> Any:  # noqa: ANN401 - as the driver takes it
        """Refuse moments without a zone."""
        if value is None:
            return None
        if value.tzinfo is None:
            raise ValueError(f"a moment needs a time zone; received {value!r}")
        moment = value.astimezone(UTC)
        return moment.strftime("%Y-%m-%dT%H:%M:%S.%fZ") if dialect.name == "sqlite" else moment

    def process_result_value(self, value: Any, dialect: Dialect) -> datetime | None:  # noqa: ANN401, ARG002
        """Always in UTC."""
        if value is None:
            return None
        return datetime.fromisoformat(value) if isinstance(value, str) else value.astimezone(UTC)


def _state_columns() -> list[Column[Any] | CheckConstraint]:
    """What a test and each entry of its log share: the state after them."""
    return [
        Column("sequence", BigInteger, nullable=False),
        Column("sample_number", BigInteger, nullable=False),
        Column("exposure", Float(53), nullable=False),
        Column("exposure_low", Float(53), nullable=False),
        Column("total", Float(53), nullable=False),
        Column("total_low", Float(53), nullable=False),
        Column("log_likelihood_ratio", Float(53), nullable=False),
        Column("decision", String(8), nullable=False),
        Column("decided_sequence", BigInteger),
        Column("decided_sample_number", BigInteger),
        Column("decided_exposure", Float(53)),
        Column("decided_at", UtcTime),
        Column("decided_cause", String(10)),
        Column("overrun", BigInteger, nullable=False),
        Column("carried", Text),
        Column("voided", BigInteger, nullable=False, server_default="0"),
        CheckConstraint("decision IN ('continue', 'accept', 'reject')", name="decision"),
        CheckConstraint("decided_cause IN ('boundary', 'truncation')", name="decided_cause"),
    ]


def _head_columns() -> list[Column[Any]]:
    """The end of a chain of acts."""
    return [
        Column("history_length", BigInteger, nullable=False, server_default="0"),
        Column("history_link", String(64), nullable=False, server_default=""),
    ]


def _place_columns() -> list[Column[Any]]:
    """The place of an act in its chain."""
    return [
        Column("number", BigInteger, nullable=False, server_default="0"),
        Column("link", String(64), nullable=False, server_default=""),
    ]


api_keys = Table(
    "api_keys",
    metadata,
    Column("id", String(32), nullable=False),
    Column("name", KEY, nullable=False),
    Column("role", String(13), nullable=False),
    Column("digest", String(64), nullable=False),
    Column("created_at", UtcTime, nullable=False),
    Column("expires_at", UtcTime),
    Column("revoked_at", UtcTime),
    Column("subjects", Text),
    Column("labels", Text),
    PrimaryKeyConstraint("id"),
    UniqueConstraint("digest"),
    CheckConstraint("role IN ('viewer', 'collector', 'engineer', 'administrator')", name="role"),
    Index(
        "uq_api_keys_valid_name",
        "name",
        unique=True,
        sqlite_where=text("revoked_at IS NULL"),
        postgresql_where=text("revoked_at IS NULL"),
    ),
)

plans = Table(
    "plans",
    metadata,
    Column("name", KEY, nullable=False),
    Column("document", Text, nullable=False),
    Column("fingerprint", String(64), nullable=False),
    Column("created_at", UtcTime, nullable=False),
    Column("created_by", String(100), nullable=False),
    PrimaryKeyConstraint("name"),
)

tests = Table(
    "tests",
    metadata,
    Column("key", KEY, nullable=False),
    Column("plan", KEY, nullable=False),
    Column("subject_kind", String(10), nullable=False),
    Column("subject_name", String(200), nullable=False),
    Column("labels", Text, nullable=False),
    Column("status", String(6), nullable=False),
    Column("version", BigInteger, nullable=False),
    Column("registered_at", UtcTime, nullable=False),
    Column("registered_by", String(100), nullable=False),
    Column("updated_at", UtcTime, nullable=False),
    *_state_columns(),
    # Of the last write to the test; in the order in which writes became visible. Zero until the writer numbers it.
    Column("change", BigInteger, nullable=False, server_default="0"),
    *_head_columns(),
    Column("corrections", BigInteger, nullable=False, server_default="0"),
    Column("decision_changed", Boolean, nullable=False, server_default=false()),
    Column("corrected_after_decision", Boolean, nullable=False, server_default=false()),
    Column("disposition", String(10)),
    Column("disposition_reason", Text),
    Column("deviation_reason", Text),
    Column("disposed_by", String(100)),
    Column("disposed_at", UtcTime),
    PrimaryKeyConstraint("key"),
    ForeignKeyConstraint(["plan"], ["plans.name"]),
    CheckConstraint("subject_kind IN ('lot', 'experiment')", name="subject_kind"),
    CheckConstraint("status IN ('open', 'closed')", name="status"),
    Index(None, "decision", "key"),
    Index(None, "plan", "key"),
    Index(None, "subject_name", "key"),
    Index(None, "updated_at"),
    Index(None, "disposition", "key"),
    Index(None, "change"),
    Index(None, "subject_kind", "status", "decision"),
)

test_labels = Table(
    "test_labels",
    metadata,
    Column("test", KEY, nullable=False),
    Column("name", KEY, nullable=False),
    Column("value", String(200), nullable=False),
    PrimaryKeyConstraint("test", "name"),
    ForeignKeyConstraint(["test"], ["tests.key"]),
    Index(None, "name", "value", "test"),
    sqlite_with_rowid=False,
)

submissions = Table(
    "submissions",
    metadata,
    Column("test", KEY, nullable=False),
    Column("first_sequence", BigInteger, nullable=False),
    Column("last_sequence", BigInteger, nullable=False),
    Column("body", Text, nullable=False),
    Column("body_digest", String(64), nullable=False),
    Column("received_at", UtcTime, nullable=False),
    Column("actor", String(100), nullable=False),
    Column("idempotency_key", String(255)),
    Column("version", BigInteger, nullable=False),
    *_state_columns(),
    Column("request_id", String(64)),
    # Its place in the history of its test.
    *_place_columns(),
    PrimaryKeyConstraint("test", "first_sequence"),
    ForeignKeyConstraint(["test"], ["tests.key"]),
    UniqueConstraint("test", "idempotency_key"),
    CheckConstraint("first_sequence BETWEEN 1 AND last_sequence", name="sequence_order"),
    sqlite_with_rowid=False,
)

# What was posted stays in submissions; the last correction of an observation is in force.
corrections = Table(
    "corrections",
    metadata,
    Column("test", KEY, nullable=False),
    Column("observation", BigInteger, nullable=False),
    Column("action", String(7), nullable=False),
    Column("replacement", Text),
    Column("reason", Text, nullable=False),
    Column("body_digest", String(64), nullable=False),
    Column("received_at", UtcTime, nullable=False),
    Column("actor", String(100), nullable=False),
    Column("idempotency_key", String(255)),
    Column("version", BigInteger, nullable=False),
    Column("decision_before", String(8), nullable=False),
    *_state_columns(),
    Column("request_id", String(64)),
    *_place_columns(),
    PrimaryKeyConstraint("test", "number"),
    ForeignKeyConstraint(["test"], ["tests.key"]),
    UniqueConstraint("test", "idempotency_key"),
    CheckConstraint("action IN ('void', 'replace')", name="action"),
    Index(None, "test", "observation", "number"),
    sqlite_with_rowid=False,
)

units = Table(
    "units",
    metadata,
    Column("test", KEY, nullable=False),
    Column("unit", String(200), nullable=False),
    Column("sequence", BigInteger, nullable=False),
    PrimaryKeyConstraint("test", "unit"),
    ForeignKeyConstraint(["test"], ["tests.key"]),
    sqlite_with_rowid=False,
)

# The acts that have no table of their own. The chain is the key of a test, or empty for what belongs to none.
history = Table(
    "history",
    metadata,
    Column("chain", KEY, nullable=False),
    *_place_columns(),
    Column("act", String(20), nullable=False),
    Column("at", UtcTime, nullable=False),
    Column("actor", String(100), nullable=False),
    Column("request_id", String(64)),
    Column("details", Text, nullable=False),
    PrimaryKeyConstraint("chain", "number"),
    sqlite_with_rowid=False,
)

# The ends of the chains that belong to no test.
chains = Table(
    "chains",
    metadata,
    Column("chain", KEY, nullable=False),
    *_head_columns(),
    PrimaryKeyConstraint("chain"),
)

# What has been told, and what is still to be told; no part of the record.
receivers = Table(
    "receivers",
    metadata,
    Column("id", String(32), nullable=False),
    Column("name", KEY, nullable=False),
    Column("address", Text, nullable=False),
    # Readable, for notices are signed with it; forgotten when the receiver is removed.
    Column("secret", String(100)),
    Column("fingerprint", String(64), nullable=False),
    Column("created_at", UtcTime, nullable=False),
    Column("created_by", String(100), nullable=False),
    Column("removed_at", UtcTime),
    Column("subjects", Text),
    Column("labels", Text),
    PrimaryKeyConstraint("id"),
    Index(
        "uq_receivers_present_name",
        "name",
        unique=True,
        sqlite_where=text("removed_at IS NULL"),
        postgresql_where=text("removed_at IS NULL"),
    ),
)

notices = Table(
    "notices",
    metadata,
    Column("id", KEY, nullable=False),
    Column("receiver", String(32), nullable=False),
    Column("test", KEY),
    Column("version", BigInteger, nullable=False),
    Column("kind", String(30), nullable=False),
    Column("body", Text, nullable=False),
    Column("created_at", UtcTime, nullable=False),
    Column("due_at", UtcTime, nullable=False),
    Column("state", String(9), nullable=False),
    Column("attempts", BigInteger, nullable=False),
    Column("lease", String(32)),
    Column("outcome", Text),
    PrimaryKeyConstraint("id"),
    ForeignKeyConstraint(["receiver"], ["receivers.id"]),
    ForeignKeyConstraint(["test"], ["tests.key"]),
    CheckConstraint("state IN ('waiting', 'delivered', 'dead')", name="state"),
    # Each version of a test tells a receiver one thing at most, in the order of the versions.
    UniqueConstraint("receiver", "test", "version"),
    Index(None, "state", "receiver", "due_at"),
    Index(None, "receiver", "id"),
    Index(None, "receiver", "state", "id"),
)
