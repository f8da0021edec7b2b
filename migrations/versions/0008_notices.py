"""
Receivers that are told of decisions, and the outbox of what they are told.

Services that know only 0007 may go on running on this: they neither read nor write the new tables. What they decide is
not told, so register the first receiver once they are replaced.
"""

import sqlalchemy as sa
from alembic import op

revision = "0008_since_0007"
down_revision = "0007"
branch_labels = None
depends_on = None

MOMENT = sa.DateTime(timezone=True).with_variant(sa.String(27), "sqlite")
KEY = sa.String(100).with_variant(sa.String(100, collation="C"), "postgresql")


def upgrade() -> None:
    op.create_table(
        "receivers",
        sa.Column("id", sa.String(32), nullable=False),
        sa.Column("name", KEY, nullable=False),
        sa.Column("address", sa.Text(), nullable=False),
        sa.Column("secret", sa.String(100)),
        sa.Column("fingerprint", sa.String(64), nullable=False),
        sa.Column("created_at", MOMENT, nullable=False),
        sa.Column("created_by", sa.String(100), nullable=False),
        sa.Column("removed_at", MOMENT),
        sa.Column("subjects", sa.Text()),
        sa.Column("labels", sa.Text()),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_receivers")),
    )
    op.create_index(
        "uq_receivers_present_name",
        "receivers",
        ["name"],
        unique=True,
        sqlite_where=sa.text("removed_at IS NULL"),
        postgresql_where=sa.text("removed_at IS NULL"),
    )
    op.create_table(
        "notices",
        sa.Column("id", KEY, nullable=False),
        sa.Column("receiver", sa.String(32), nullable=False),
        sa.Column("test", KEY),
        sa.Column("version", sa.BigInteger(), nullable=False),
        sa.Column("kind", sa.String(30), nullable=False),
        sa.Column("body", sa.Text(), nullable=False),
        sa.Column("created_at", MOMENT, nullable=False),
        sa.Column("due_at", MOMENT, nullable=False),
        sa.Column("state", sa.String(9), nullable=False),
        sa.Column("attempts", sa.BigInteger(), nullable=False),
        sa.Column("lease", sa.String(32)),
        sa.Column("outcome", sa.Text()),
        sa.CheckConstraint("state IN ('waiting', 'delivered', 'dead')", name=op.f("ck_notices_state")),
        sa.ForeignKeyConstraint(["receiver"], ["receivers.id"], name=op.f("fk_notices_receivers")),
        sa.ForeignKeyConstraint(["test"], ["tests.key"], name=op.f("fk_notices_tests")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_notices")),
        sa.UniqueConstraint("receiver", "test", "version", name=op.f("uq_notices_receiver_test_version")),
    )
    for columns in (("state", "receiver", "due_at"), ("receiver", "id"), ("receiver", "state", "id")):
        op.create_index(op.f(f"ix_notices_{'_'.join(columns)}"), "notices", list(columns), unique=False)


def downgrade() -> None:
    op.drop_table("notices")
    op.drop_table("receivers")
