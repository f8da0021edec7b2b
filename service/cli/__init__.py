"""The command line, `sprt-monitor`. Each command imports only what it needs, so that all start quickly."""

import os
import sys
from typing import Annotated

import typer

from service.cli import copying, demo, design, keys, load, migrate, serve, verify

app = typer.Typer(
    name="sprt-monitor",
    no_args_is_help=True,
    pretty_exceptions_enable=False,
)


def _show_version(wanted: bool) -> None:
    if wanted:
        from importlib.metadata import version

        typer.echo(version("sprt-monitor"))
        raise typer.Exit


@app.callback()
def main(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version and stop.")
    ] = False,
) -> None:
    """Sequential probability ratio tests as a service: post results, learn whether sampling may stop."""


app.command("serve")(serve.serve)
app.command("demo")(demo.demo)
app.command("design")(design.design)
app.command("migrate")(migrate.migrate)
app.command("backup")(copying.backup)
app.command("copy")(copying.copy)
app.command("load")(load.load)
app.command("verify")(verify.verify)
app.add_typer(keys.app, name="keys")


def run() -> None:
    """The entry point."""
    # The matrices here are small: threads of the linear algebra would only wait for one another.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    sys.stdout.reconfigure(errors="replace")  # type: ignore[union-attr]
    app()
