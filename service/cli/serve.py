"""Serve over HTTP."""

from typing import TYPE_CHECKING, Annotated

import typer

from service.cli.failing import clear_failures

if TYPE_CHECKING:
    from sqlalchemy import Engine

SHUTDOWN_SECONDS = 10


def serve(
    host: Annotated[str, typer.Option(help="Address to listen on.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=1, max=65535, help="Port to listen on.")] = 8000,
) -> None:
    """Start the service. A new SQLite file sets itself up; a schema that this version does not know is refused."""
    import logging

    import uvicorn

    from service.app import create_app
    from service.settings import read_settings

    with clear_failures():
        settings = read_settings()
    logging.basicConfig(level=settings.log_level, format="%(asctime)s %(levelname)s %(name)s %(message)s")
    logging.getLogger("alembic").setLevel(logging.WARNING)  # it would speak at every look at the schema
    with clear_failures():
        prepared_engine(settings.database_url).dispose()
    config = uvicorn.Config(
        create_app(settings),
        host=host,
        port=port,
        access_log=False,
        log_level="warning",
        timeout_graceful_shutdown=SHUTDOWN_SECONDS,
        server_header=False,
    )
    listening = config.bind_socket()  # ends here where the port is taken
    typer.echo(f"Serving on http://{host}:{port} (description: /openapi.json). Stop with Ctrl-C.", err=True)
    uvicorn.Server(config).run([listening])


def prepared_engine(database_url: str) -> "Engine":
    """
    The database, with a brand-new SQLite file set up.

    Raises:
        SchemaMismatch: It has another schema than this version knows.
    """
    from service.storage.engine import create_engine_for, is_sqlite
    from service.storage.migrate import check_schema, is_empty, upgrade

    engine = create_engine_for(database_url)
    if is_sqlite(engine) and is_empty(engine):
        upgrade(engine)
    check_schema(engine)
    return engine
