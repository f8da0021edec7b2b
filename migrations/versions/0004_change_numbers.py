"""Numbers in the order of the commits, by which changed tests are told."""

import sqlalchemy as sa
from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None


def upgrade() -> None:
    # A service of the version before leaves the number as it is, or at zero: what it writes is not told.
    op.add_column("tests", sa.Column("change", sa.BigInteger(), nullable=False, server_default="0"))
    op.execute(
        "UPDATE tests SET change = ordered.number FROM "
        "(SELECT key, row_number() OVER (ORDER BY updated_at, key) AS number FROM tests) AS ordered "
        "WHERE ordered.key = tests.key"
    )
    op.create_index(op.f("ix_tests_change"), "tests", ["change"], unique=False)


def downgrade() -> None:
    op.drop_index(op.f("ix_tests_change"), table_name="tests")
    op.drop_column("tests", "change")
