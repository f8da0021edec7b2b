"""Serve over HTTP."""

import os
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Annotated, Any

import typer

from service.cli.failing import clear_failures, fail

if TYPE_CHECKING:
    from sqlalchemy import Engine

SHUTDOWN_SECONDS = 10


def serve(
    host: Annotated[str, typer.Option(help="Address to listen on.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=1, max=65535, help="Port to listen on.")] = 8000,
    workers: Annotated[int, typer.Option(min=1, max=64, help="Processes; more than one needs PostgreSQL.")] = 1,
) -> None:
    """Start the service. A new SQLite file sets itself up; a schema that this version does not know is refused."""
    import uvicorn

    from service.app import create_app
    from service.logs import set_up_log
    from service.settings import read_settings
    from service.storage.engine import is_sqlite
    from service.web.metrics import FOLDER_VARIABLE

    with clear_failures():
        settings = read_settings()
    set_up_log(settings)
    with clear_failures():
        engine = prepared_engine(settings.database_url)
        engine.dispose()
    if workers > 1 and is_sqlite(engine):
        raise fail(
            "SQLite lets one process write at a time: serve it with one worker, or move to PostgreSQL "
            "(sprt-monitor copy)."
        )
    options: dict[str, Any] = {
        "host": host,
        "port": port,
        "access_log": False,
        "log_config": None,  # its entries go the way of all others
        "log_level": "warning",
        "timeout_graceful_shutdown": SHUTDOWN_SECONDS,
        "server_header": False,
        "limit_concurrency": settings.connection_limit,
        **bounded_connections(),
    }
    said = f"Serving on http://{host}:{port} (description: /openapi.json). Stop with Ctrl-C."
    if workers > 1:
        typer.echo(said, err=True)
        with TemporaryDirectory(prefix="sprt-metrics-") as folder:  # where the processes add up what they count
            os.environ[FOLDER_VARIABLE] = folder
            uvicorn.run("service.app:create_served_app", factory=True, workers=workers, **options)
        return
    config = uvicorn.Config(create_app(settings), **options)
    listening = config.bind_socket()  # ends here where the port is taken
    typer.echo(said, err=True)
    uvicorn.Server(config).run([listening])


def bounded_connections() -> dict[str, Any]:
    """The server's option for connections with limits; none where its fast parser is not installed."""
    try:
        from service.cli.connections import BoundedConnection
    except ImportError:  # on Windows
        return {}
    return {"http": BoundedConnection}


def existing_engine(database_url: str) -> "Engine":
    """
    A database that is there, for what would mean nothing on a new one.

    Raises:
        SchemaMismatch: It has another schema than this version knows.
        typer.Exit: There is no such file.
    """
    from pathlib import Path

    from service.storage.engine import create_engine_for
    from service.storage.migrate import check_schema

    engine = create_engine_for(database_url)
    file = engine.url.database if engine.dialect.name == "sqlite" else None
    if file is not None and not Path(file).exists():
        raise fail(f"There is no database at {Path(file).absolute()}; SPRT_DATABASE_URL says which one is meant.")
    check_schema(engine)
    return engine


def named(engine: "Engine") -> str:
    """Which database that is, for people; without its password."""
    from pathlib import Path

    is_file = engine.dialect.name == "sqlite" and engine.url.database is not None
    return str(Path(engine.url.database or "").absolute()) if is_file else engine.url.render_as_string()


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
        typer.echo(f"A new database: {named(engine)}", err=True)
    check_schema(engine)
    return engine
