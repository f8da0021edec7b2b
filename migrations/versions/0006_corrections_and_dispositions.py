"""Corrections beside the log, dispositions, and a view that shows both what was posted and what counts in its place."""

import sqlalchemy as sa
from alembic import op

revision = "0006"
down_revision = "0005"
branch_labels = None
depends_on = None

MOMENT = sa.DateTime(timezone=True).with_variant(sa.String(27), "sqlite")
KEY = sa.String(100).with_variant(sa.String(100, collation="C"), "postgresql")

COUNTS = ("corrections",)
MARKS = ("decision_changed", "corrected_after_decision")
DISPOSITION = (
    ("disposition", sa.String(10)),
    ("disposition_reason", sa.Text()),
    ("deviation_reason", sa.Text()),
    ("disposed_by", sa.String(100)),
    ("disposed_at", MOMENT),
)

LAST_CORRECTION = """
LEFT JOIN corrections AS c ON c.test = s.test AND c.observation = {sequence}
    AND c.number = (SELECT max(l.number) FROM corrections AS l WHERE l.test = s.test AND l.observation = {sequence})
"""

# New columns stand last, so that views of other people on this one live on.
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
    s.first_sequence + o.key <= coalesce(t.decided_sequence, t.sequence){and_counts} AS counted,
    CASE o.type WHEN 'object' THEN o.value ->> 'a' END AS a,
    CASE o.type WHEN 'object' THEN o.value ->> 'b' END AS b,
    CASE o.type WHEN 'object' THEN o.value ->> 'arm' END AS arm{columns}
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
JOIN json_each(s.body, CASE WHEN json_type(s.body, '$.values') IS NULL THEN '$.observations' ELSE '$.values' END) AS o
{join}
"""

VIEW_ON_POSTGRESQL = """
CREATE VIEW observations AS
SELECT
    s.test,
    s.first_sequence + o.position - 1 AS sequence,
    CASE jsonb_typeof(o.item)
        WHEN 'object' THEN coalesce(o.item ->> 'value', o.item ->> 'time')::float8
        ELSE (o.item #>> '{{}}')::float8
    END AS value,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'exposure')::float8 END AS exposure,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'size')::float8 END AS size,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'failed')::boolean END AS failed,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'unit' END AS unit,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'observed_at' END AS observed_at,
    s.received_at,
    s.actor,
    s.first_sequence + o.position - 1 <= coalesce(t.decided_sequence, t.sequence){and_counts} AS counted,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'a')::float8 END AS a,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'b')::float8 END AS b,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'arm' END AS arm{columns}
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
CROSS JOIN LATERAL jsonb_array_elements(coalesce(s.body::jsonb -> 'values', s.body::jsonb -> 'observations'))
    WITH ORDINALITY AS o (item, position)
{join}
"""

COLUMNS = """,
    c.action AS correction,
    {value} AS corrected_value,
    c.replacement AS corrected_observation,
    c.reason AS correction_reason,
    c.actor AS corrected_by,
    c.received_at AS corrected_at"""
VALUE_ON_SQLITE = "coalesce(c.replacement ->> 'value', c.replacement ->> 'time')"
VALUE_ON_POSTGRESQL = "coalesce(c.replacement::jsonb ->> 'value', c.replacement::jsonb ->> 'time')::float8"


def upgrade() -> None:
    for name in COUNTS:
        op.add_column("tests", sa.Column(name, sa.BigInteger(), nullable=False, server_default="0"))
    for name in MARKS:
        op.add_column("tests", sa.Column(name, sa.Boolean(), nullable=False, server_default=sa.false()))
    for name, kind in DISPOSITION:
        op.add_column("tests", sa.Column(name, kind))
    op.create_index(op.f("ix_tests_disposition_key"), "tests", ["disposition", "key"], unique=False)
    op.create_table(
        "corrections",
        sa.Column("test", KEY, nullable=False),
        sa.Column("observation", sa.BigInteger(), nullable=False),
        sa.Column("action", sa.String(7), nullable=False),
        sa.Column("replacement", sa.Text()),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("body_digest", sa.String(64), nullable=False),
        sa.Column("received_at", MOMENT, nullable=False),
        sa.Column("actor", sa.String(100), nullable=False),
        sa.Column("idempotency_key", sa.String(255)),
        sa.Column("version", sa.BigInteger(), nullable=False),
        sa.Column("decision_before", sa.String(8), nullable=False),
        sa.Column("sequence", sa.BigInteger(), nullable=False),
        sa.Column("sample_number", sa.BigInteger(), nullable=False),
        sa.Column("exposure", sa.Float(53), nullable=False),
        sa.Column("exposure_low", sa.Float(53), nullable=False),
        sa.Column("total", sa.Float(53), nullable=False),
        sa.Column("total_low", sa.Float(53), nullable=False),
        sa.Column("log_likelihood_ratio", sa.Float(53), nullable=False),
        sa.Column("decision", sa.String(8), nullable=False),
        sa.Column("decided_sequence", sa.BigInteger()),
        sa.Column("decided_sample_number", sa.BigInteger()),
        sa.Column("decided_exposure", sa.Float(53)),
        sa.Column("decided_at", MOMENT),
        sa.Column("decided_cause", sa.String(10)),
        sa.Column("overrun", sa.BigInteger(), nullable=False),
        sa.Column("carried", sa.Text()),
        sa.Column("voided", sa.BigInteger(), nullable=False, server_default="0"),
        sa.Column("request_id", sa.String(64)),
        sa.Column("number", sa.BigInteger(), nullable=False, server_default="0"),
        sa.Column("link", sa.String(64), nullable=False, server_default=""),
        sa.CheckConstraint("action IN ('void', 'replace')", name=op.f("ck_corrections_action")),
        sa.CheckConstraint("decided_cause IN ('boundary', 'truncation')", name=op.f("ck_corrections_decided_cause")),
        sa.CheckConstraint("decision IN ('continue', 'accept', 'reject')", name=op.f("ck_corrections_decision")),
        sa.ForeignKeyConstraint(["test"], ["tests.key"], name=op.f("fk_corrections_tests")),
        sa.PrimaryKeyConstraint("test", "number", name=op.f("pk_corrections")),
        sa.UniqueConstraint("test", "idempotency_key", name=op.f("uq_corrections_test_idempotency_key")),
        sqlite_with_rowid=False,
    )
    op.create_index(
        op.f("ix_corrections_test_observation_number"), "corrections", ["test", "observation", "number"], unique=False
    )
    for statement in _guards():
        op.execute(statement)
    _view(is_corrected=True)


def downgrade() -> None:
    _view(is_corrected=False)
    op.drop_table("corrections")
    op.drop_index(op.f("ix_tests_disposition_key"), table_name="tests")
    for name, _ in DISPOSITION:
        op.drop_column("tests", name)
    for name in (*MARKS, *COUNTS):
        op.drop_column("tests", name)


def _guards() -> list[str]:
    if op.get_bind().dialect.name == "sqlite":
        refusal = "SELECT RAISE(ABORT, 'rows of corrections are never changed or removed')"
        return [
            f"CREATE TRIGGER corrections_{name} BEFORE {event} ON corrections BEGIN {refusal}; END"
            for name, event in (("no_change", "UPDATE"), ("no_removal", "DELETE"))
        ]
    return [
        f"CREATE TRIGGER corrections_{name} BEFORE {events} ON corrections FOR EACH {each} "
        "EXECUTE FUNCTION refuse_change()"
        for name, events, each in (("no_change", "UPDATE OR DELETE", "ROW"), ("no_removal", "TRUNCATE", "STATEMENT"))
    ]


def _view(*, is_corrected: bool) -> None:
    is_sqlite = op.get_bind().dialect.name == "sqlite"
    sequence = "s.first_sequence + o.key" if is_sqlite else "s.first_sequence + o.position - 1"
    view = VIEW_ON_SQLITE if is_sqlite else VIEW_ON_POSTGRESQL
    op.execute("DROP VIEW observations")
    op.execute(
        view.format(
            columns=COLUMNS.format(value=VALUE_ON_SQLITE if is_sqlite else VALUE_ON_POSTGRESQL) if is_corrected else "",
            join=LAST_CORRECTION.format(sequence=sequence) if is_corrected else "",
            and_counts=" AND coalesce(c.action, '') <> 'void'" if is_corrected else "",
        )
    )
