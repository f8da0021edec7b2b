"""The view of single observations shows the results of two arms, in columns after all others."""

from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None

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
    s.first_sequence + o.key <= coalesce(t.decided_sequence, t.sequence) AS counted,
    CASE o.type WHEN 'object' THEN o.value ->> 'a' END AS a,
    CASE o.type WHEN 'object' THEN o.value ->> 'b' END AS b,
    CASE o.type WHEN 'object' THEN o.value ->> 'arm' END AS arm
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
JOIN json_each(s.body, CASE WHEN json_type(s.body, '$.values') IS NULL THEN '$.observations' ELSE '$.values' END) AS o
"""

VIEW_ON_POSTGRESQL = """
CREATE OR REPLACE VIEW observations AS
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
    s.first_sequence + o.position - 1 <= coalesce(t.decided_sequence, t.sequence) AS counted,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'a')::float8 END AS a,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN (o.item ->> 'b')::float8 END AS b,
    CASE jsonb_typeof(o.item) WHEN 'object' THEN o.item ->> 'arm' END AS arm
FROM submissions AS s
JOIN tests AS t ON t.key = s.test
CROSS JOIN LATERAL jsonb_array_elements(coalesce(s.body::jsonb -> 'values', s.body::jsonb -> 'observations'))
    WITH ORDINALITY AS o (item, position)
"""

BEFORE_ON_SQLITE = """
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

BEFORE_ON_POSTGRESQL = """
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
    if op.get_bind().dialect.name == "sqlite":
        op.execute("DROP VIEW observations")
        op.execute(VIEW_ON_SQLITE)
    else:
        op.execute(VIEW_ON_POSTGRESQL)


def downgrade() -> None:
    op.execute("DROP VIEW observations")
    op.execute(BEFORE_ON_SQLITE if op.get_bind().dialect.name == "sqlite" else BEFORE_ON_POSTGRESQL)
