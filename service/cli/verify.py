"""Verify that the records are what they were, and that the log still says what the tests say."""

from functools import partial
from typing import Annotated

import typer

from service.cli.failing import clear_failures, fail

# Differences that are told; more would only repeat what is wrong.
MOST_TOLD = 20


def verify(
    test: Annotated[list[str] | None, typer.Option(help="Key of a test to look at alone; may be given again.")] = None,
) -> None:
    """
    Run every test again from its log and walk the chains of its history; name the first place that differs in each.

    Goes on beside a running service. Ends with exit code 1 where anything differs.
    """
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

    from service.cli.serve import existing_engine, named
    from service.domain.families.base import plural
    from service.settings import read_settings
    from service.storage.auditing import audited, snapshot
    from service.storage.migrate import check_schema

    columns = (TextColumn("verify"), BarColumn(), MofNCompleteColumn(), TextColumn("tests"), TimeElapsedColumn())
    differences: list[str] = []
    tests = acts = observations = 0
    with clear_failures(), Progress(*columns, console=Console(stderr=True)) as progress:
        engine = existing_engine(read_settings().database_url)
        check_schema(engine)
        with snapshot(engine) as rows:
            total = len(test) if test else rows.counts().by_table["tests"]
        task = progress.add_task("verify", total=total)
        for audit in audited(partial(snapshot, engine), test):
            tests, acts = tests + audit.is_of_test, acts + audit.acts
            observations += audit.observations
            progress.update(task, completed=tests)
            if audit.difference is not None:
                differences.append(audit.difference)
            if len(differences) >= MOST_TOLD:
                break
    for difference in differences:
        typer.echo(difference, err=True)
    if differences:
        more = ", and maybe more" if len(differences) >= MOST_TOLD else ""
        raise fail(f"The records differ in {len(differences)} of the chains looked at{more}.")
    found = f"{plural(tests, 'test')}: {plural(acts, 'act')} and {plural(observations, 'observation')}"
    typer.echo(f"{found} are as they were recorded in {named(engine)}.")
