"""Copies of the database: a backup, and a move to another server."""

from pathlib import Path
from typing import Annotated

import typer

from service.cli.failing import clear_failures, fail


def backup(file: Annotated[Path, typer.Argument(help="The file to write; it must not exist.")]) -> None:
    """Copy the SQLite database of SPRT_DATABASE_URL to a file, while the service goes on."""
    from service.settings import read_settings
    from service.storage.copying import CopyRefused, back_up
    from service.storage.engine import create_engine_for
    from service.storage.migrate import check_schema

    with clear_failures():
        engine = create_engine_for(read_settings().database_url)
        check_schema(engine)
        try:
            back_up(engine, file)
        except CopyRefused as refusal:
            raise fail(str(refusal)) from None
    typer.echo(f"{file}: {file.stat().st_size} bytes, sound.", err=True)


def copy(
    source: Annotated[str, typer.Argument(metavar="FROM", help="Address of the database to copy.")],
    target: Annotated[str, typer.Argument(metavar="TO", help="Address of an empty database.")],
) -> None:
    """Copy everything from one database to another, and compare them row by row. Stop the service first."""
    from service.storage.copying import CopyDiffers, CopyRefused, copy_all
    from service.storage.engine import create_engine_for
    from service.storage.migrate import check_schema, is_empty, upgrade

    with clear_failures():
        origin, destination = create_engine_for(source), create_engine_for(target)
        check_schema(origin)
        if is_empty(destination):
            upgrade(destination)
        check_schema(destination)
        try:
            copy_all(origin, destination, lambda table, rows: typer.echo(f"{table}: {rows} rows", err=True))
        except (CopyRefused, CopyDiffers) as refusal:
            raise fail(str(refusal)) from None
    typer.echo("Every row was compared and is the same.", err=True)
