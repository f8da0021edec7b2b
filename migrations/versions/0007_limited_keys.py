"""Access keys that are limited to subjects and labels."""

import sqlalchemy as sa
from alembic import op

# Services that know only 0004 would let a limited key see everything, so they must not run on this.
revision = "0007"
down_revision = "0006"
branch_labels = None
depends_on = None

COLUMNS = ("subjects", "labels")


def upgrade() -> None:
    for column in COLUMNS:
        op.add_column("api_keys", sa.Column(column, sa.Text()))


def downgrade() -> None:
    # A key without its limits would be one for everything.
    op.execute(
        "UPDATE api_keys SET revoked_at = created_at "
        "WHERE revoked_at IS NULL AND (subjects IS NOT NULL OR labels IS NOT NULL)"
    )
    for column in COLUMNS:
        op.drop_column("api_keys", column)
