"""The first schema: keys, plans, tests, the log of submissions, units, and a view of single observations."""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

MOMENT = sa.DateTime(timezone=True).with_variant(sa.String(27), "sqlite")
KEY = sa.String(100).with_variant(sa.String(100, collation="C"), "postgresql")

# One row per observation, for people who query with SQL; the log keeps one row per submission.
VIEW_ON_SQLITE = """
CREATE VIEW observations AS
SELECT
    s.test,
    s.first_sequence + o.key AS sequence,
    CASE o.type WHEN 'object' THEN coalesce(o.value ->> 'value', o.value ->> 'time') ELSE o.value END AS value,
    CASE o.type WHEN 'object' THEN o.value ->> 'exposure' END AS exposure,
    CASE o.type WHEN 'object' THEN o.value ->> 'size' END AS size,
    CASE o.type WHEN 'object' THEN o.value ->> 'failed' END AS failed,
    CASE o.type WHEN 'object' THEN o.value ->> 'unit' END AS unit,
    CASE o.type WHEN 'object' THEN o.value ->> 'observed_at' END AS observed_at,
    s.received_at,
    s.actor,
    s.first_sequence + o.key <= coalesce(t.decided_sequence, t.sequence) AS counted
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
JOIN json_each(s.body, CASE WHEN json_type(s.body, '$.values') IS NULL THEN '$.observations' ELSE '$.values' END) AS o
"""

VIEW_ON_POSTGRESQL = """
CREATE VIEW observations AS
SELECT
    s.test,
    s.first_sequence + o.position - 1 AS sequence,
    CASE jsonb_typeof(o.item)
        WHEN 'object' THEN coalesce(o.item ->> 'value', o.item ->> 'time')::float8
        ELSE (o.item #>> '{}')::float8
    END AS value,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'exposure')::float8 END AS exposure,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'size')::float8 END AS size,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'failed')::boolean END AS failed,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'unit' END AS unit,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'observed_at' END AS observed_at,
    s.received_at,
    s.actor,
    s.first_sequence + o.position - 1 <= coalesce(t.decided_sequence, t.sequence) AS counted
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
CROSS JOIN LATERAL jsonb_array_elements(coalesce(s.body::jsonb -> 'values', s.body::jsonb -> 'observations'))
    WITH ORDINALITY AS o (item, position)
"""


def upgrade() -> None:
    op.create_table(
        "api_keys",
        sa.Column("id", sa.String(length=32), nullable=False),
        sa.Column("name", KEY, nullable=False),
        sa.Column("role", sa.String(length=13), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("created_at", MOMENT, nullable=False),
        sa.Column("expires_at", MOMENT, nullable=True),
        sa.Column("revoked_at", MOMENT, nullable=True),
        sa.CheckConstraint(
            "role IN ('viewer', 'collector', 'engineer', 'administrator')", name=op.f("ck_api_keys_role")
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_api_keys")),
        sa.UniqueConstraint("digest", name=op.f("uq_api_keys_digest")),
    )
    op.create_index(
        "uq_api_keys_valid_name",
        "api_keys",
        ["name"],
        unique=True,
        sqlite_where=sa.text("revoked_at IS NULL"),
        postgresql_where=sa.text("revoked_at IS NULL"),
    )
    op.create_table(
        "plans",
        sa.Column("name", KEY, nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("fingerprint", sa.String(length=64), nullable=False),
        sa.Column("created_at", MOMENT, nullable=False),
        sa.Column("created_by", sa.String(length=100), nullable=False),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_plans")),
    )
    op.create_table(
        "tests",
        sa.Column("key", KEY, nullable=False),
        sa.Column("plan", KEY, nullable=False),
        sa.Column("subject_kind", sa.String(length=10), nullable=False),
        sa.Column("subject_name", sa.String(length=200), nullable=False),
        sa.Column("labels", sa.Text(), nullable=False),
        sa.Column("status", sa.String(length=6), nullable=False),
        sa.Column("version", sa.BigInteger(), nullable=False),
        sa.Column("registered_at", MOMENT, nullable=False),
        sa.Column("registered_by", sa.String(length=100), nullable=False),
        sa.Column("updated_at", MOMENT, nullable=False),
        sa.Column("sequence", sa.BigInteger(), nullable=False),
        sa.Column("sample_number", sa.BigInteger(), nullable=False),
        sa.Column("exposure", sa.Float(precision=53), nullable=False),
        sa.Column("exposure_low", sa.Float(precision=53), nullable=False),
        sa.Column("total", sa.Float(precision=53), nullable=False),
        sa.Column("total_low", sa.Float(precision=53), nullable=False),
        sa.Column("log_likelihood_ratio", sa.Float(precision=53), nullable=False),
        sa.Column("decision", sa.String(length=8), nullable=False),
        sa.Column("decided_sequence", sa.BigInteger(), nullable=True),
        sa.Column("decided_sample_number", sa.BigInteger(), nullable=True),
        sa.Column("decided_exposure", sa.Float(precision=53), nullable=True),
        sa.Column("decided_at", MOMENT, nullable=True),
        sa.Column("decided_cause", sa.String(length=10), nullable=True),
        sa.Column("overrun", sa.BigInteger(), nullable=False),
        sa.CheckConstraint("decided_cause IN ('boundary', 'truncation')", name=op.f("ck_tests_decided_cause")),
        sa.CheckConstraint("decision IN ('continue', 'accept', 'reject')", name=op.f("ck_tests_decision")),
        sa.CheckConstraint("status IN ('open', 'closed')", name=op.f("ck_tests_status")),
        sa.CheckConstraint("subject_kind IN ('lot', 'experiment')", name=op.f("ck_tests_subject_kind")),
        sa.ForeignKeyConstraint(["plan"], ["plans.name"], name=op.f("fk_tests_plans")),
        sa.PrimaryKeyConstraint("key", name=op.f("pk_tests")),
    )
    op.create_index(op.f("ix_tests_decision_key"), "tests", ["decision", "key"], unique=False)
    op.create_index(op.f("ix_tests_plan_key"), "tests", ["plan", "key"], unique=False)
    op.create_index(
        op.f("ix_tests_subject_kind_status_decision"), "tests", ["subject_kind", "status", "decision"], unique=False
    )
    op.create_index(op.f("ix_tests_subject_name_key"), "tests", ["subject_name", "key"], unique=False)
    op.create_index(op.f("ix_tests_updated_at"), "tests", ["updated_at"], unique=False)
    op.create_table(
        "submissions",
        sa.Column("test", KEY, nullable=False),
        sa.Column("first_sequence", sa.BigInteger(), nullable=False),
        sa.Column("last_sequence", sa.BigInteger(), nullable=False),
        sa.Column("body", sa.Text(), nullable=False),
        sa.Column("body_digest", sa.String(length=64), nullable=False),
        sa.Column("received_at", MOMENT, nullable=False),
        sa.Column("actor", sa.String(length=100), nullable=False),
        sa.Column("idempotency_key", sa.String(length=255), nullable=True),
        sa.Column("version", sa.BigInteger(), nullable=False),
        sa.Column("sequence", sa.BigInteger(), nullable=False),
        sa.Column("sample_number", sa.BigInteger(), nullable=False),
        sa.Column("exposure", sa.Float(precision=53), nullable=False),
        sa.Column("exposure_low", sa.Float(precision=53), nullable=False),
        sa.Column("total", sa.Float(precision=53), nullable=False),
        sa.Column("total_low", sa.Float(precision=53), nullable=False),
        sa.Column("log_likelihood_ratio", sa.Float(precision=53), nullable=False),
        sa.Column("decision", sa.String(length=8), nullable=False),
        sa.Column("decided_sequence", sa.BigInteger(), nullable=True),
        sa.Column("decided_sample_number", sa.BigInteger(), nullable=True),
        sa.Column("decided_exposure", sa.Float(precision=53), nullable=True),
        sa.Column("decided_at", MOMENT, nullable=True),
        sa.Column("decided_cause", sa.String(length=10), nullable=True),
        sa.Column("overrun", sa.BigInteger(), nullable=False),
        sa.CheckConstraint("decided_cause IN ('boundary', 'truncation')", name=op.f("ck_submissions_decided_cause")),
        sa.CheckConstraint("decision IN ('continue', 'accept', 'reject')", name=op.f("ck_submissions_decision")),
        sa.CheckConstraint("first_sequence BETWEEN 1 AND last_sequence", name=op.f("ck_submissions_sequence_order")),
        sa.ForeignKeyConstraint(["test"], ["tests.key"], name=op.f("fk_submissions_tests")),
        sa.PrimaryKeyConstraint("test", "first_sequence", name=op.f("pk_submissions")),
        sa.UniqueConstraint("test", "idempotency_key", name=op.f("uq_submissions_test_idempotency_key")),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "test_labels",
        sa.Column("test", KEY, nullable=False),
        sa.Column("name", KEY, nullable=False),
        sa.Column("value", sa.String(length=200), nullable=False),
        sa.ForeignKeyConstraint(["test"], ["tests.key"], name=op.f("fk_test_labels_tests")),
        sa.PrimaryKeyConstraint("test", "name", name=op.f("pk_test_labels")),
        sqlite_with_rowid=False,
    )
    op.create_index(op.f("ix_test_labels_name_value_test"), "test_labels", ["name", "value", "test"], unique=False)
    op.create_table(
        "units",
        sa.Column("test", KEY, nullable=False),
        sa.Column("unit", sa.String(length=200), nullable=False),
        sa.Column("sequence", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["test"], ["tests.key"], name=op.f("fk_units_tests")),
        sa.PrimaryKeyConstraint("test", "unit", name=op.f("pk_units")),
        sqlite_with_rowid=False,
    )
    op.execute(VIEW_ON_SQLITE if op.get_bind().dialect.name == "sqlite" else VIEW_ON_POSTGRESQL)


def downgrade() -> None:
    op.execute("DROP VIEW observations")
    op.drop_table("units")
    op.drop_index(op.f("ix_test_labels_name_value_test"), table_name="test_labels")
    op.drop_table("test_labels")
    op.drop_table("submissions")
    op.drop_index(op.f("ix_tests_updated_at"), table_name="tests")
    op.drop_index(op.f("ix_tests_subject_name_key"), table_name="tests")
    op.drop_index(op.f("ix_tests_subject_kind_status_decision"), table_name="tests")
    op.drop_index(op.f("ix_tests_plan_key"), table_name="tests")
    op.drop_index(op.f("ix_tests_decision_key"), table_name="tests")
    op.drop_table("tests")
    op.drop_table("plans")
    op.drop_index(
        "uq_api_keys_valid_name",
        table_name="api_keys",
        sqlite_where=sa.text("revoked_at IS NULL"),
        postgresql_where=sa.text("revoked_at IS NULL"),
    )
    op.drop_table("api_keys")
