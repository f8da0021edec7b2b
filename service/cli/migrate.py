"""Bring the database up to the schema of this version."""

import typer

from service.cli.failing import clear_failures


def migrate() -> None:
    """Upgrade the database named by SPRT_DATABASE_URL; does nothing where it is up to date."""
    from service.settings import read_settings
    from service.storage.engine import create_engine_for
    from service.storage.migrate import check_known, current_revision, upgrade

    with clear_failures():
        engine = create_engine_for(read_settings().database_url)
        check_known(engine)
        before = current_revision(engine)
        upgrade(engine)
        after = current_revision(engine)
    if before == after:
        typer.echo(f"The schema is up to date ({after}).", err=True)
    else:
        typer.echo(f"The schema went from {before or 'nothing'} to {after}.", err=True)
