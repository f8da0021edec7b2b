"""Running sums beyond progress and total, for families that carry them."""

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

TABLES = ("tests", "submissions")


def upgrade() -> None:
    for table in TABLES:
        op.add_column(table, sa.Column("carried", sa.Text()))


def downgrade() -> None:
    for table in TABLES:
        op.drop_column(table, "carried")
