"""
Runs the migrations on the connection that it is handed, or on the database that the settings name.

`sprt-monitor migrate` hands over a connection that holds a lock, so that processes wait for each other. Alembic's own
command line, which is for developers, takes no such lock on PostgreSQL: run it alone.
"""

from alembic import context
from sqlalchemy import Connection

from service.settings import read_settings
from service.storage.engine import WRITES, create_engine_for
from service.storage.tables import metadata


def migrate(connection: Connection) -> None:
    """Run what was asked for in the transaction of this connection."""
    context.configure(connection=connection, target_metadata=metadata, transactional_ddl=True)
    context.run_migrations()


handed_over = context.config.attributes.get("connection")
if handed_over is not None:
    migrate(handed_over)
else:
    engine = create_engine_for(read_settings().database_url)
    with engine.connect().execution_options(**{WRITES: True}) as own, own.begin():
        migrate(own)
