"""Choose a plan: candidates side by side, with what each really promises, without a service."""

import math
from typing import TYPE_CHECKING, Annotated, Any

import typer

from service.cli.failing import fail

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from service.domain.characteristics import Point, Promise
    from service.domain.designing import Suggestion

NONE = "none"
# Candidates that stand side by side on 80 columns, and the figures that are shown of more.
MOST_COLUMNS, SHOWN = 4, 6


def design(
    family: Annotated[str | None, typer.Option(help="bernoulli (where none is given), or another family.")] = None,
    h0: Annotated[float | None, typer.Option(help="Parameter under H0.")] = None,
    h1: Annotated[float | None, typer.Option(help="Parameter under H1.")] = None,
    alpha: Annotated[float | None, typer.Option(help="Producer's risk: P(reject) when H0 is true.")] = None,
    beta: Annotated[float | None, typer.Option(help="Consumer's risk: P(accept) when H1 is true.")] = None,
    sigma: Annotated[float | None, typer.Option(help="Known standard deviation, for normal and lognormal.")] = None,
    known: Annotated[
        list[str] | None, typer.Option(help="What else the family needs to know: exposure_ratio=2; more than once.")
    ] = None,
    boundaries: Annotated[
        list[str] | None, typer.Option(help="wald, strict or calibrated; more than once to compare.")
    ] = None,
    truncation: Annotated[
        list[str] | None, typer.Option(help='Units or exposure, or "none"; more than once to compare.')
    ] = None,
    standard: Annotated[
        str | None, typer.Option(help="A standard plan, such as MIL-HDBK-781A/III-D, alone or beside your own.")
    ] = None,
    scale: Annotated[float | None, typer.Option(help="Lower test mean life, for a reliability standard.")] = None,
    suggest: Annotated[
        float | None, typer.Option(help="Find a small truncation that lengthens tests by at most this share.")
    ] = None,
) -> None:
    """Show exact risks and sample numbers of candidate plans side by side, with their curves."""
    from rich.console import Console

    from service.domain.designing import suggested_truncation
    from service.domain.errors import Invalid

    own: dict[str, Any] = {"h0": h0, "h1": h1, "alpha": alpha, "beta": beta}
    own["known"] = _known(sigma, known or []) or None
    own = {name: value for name, value in own.items() if value is not None}
    asked_of_own = {"--family": family, "--boundaries": boundaries, "--truncation": truncation, "--suggest": suggest}
    idle = [option for option, value in asked_of_own.items() if value is not None and standard and not own]
    if idle:
        raise fail(f"{', '.join(idle)}: say --h0, --h1, --alpha and --beta of a plan of your own to put beside it.")
    if scale is not None and standard is None:
        raise fail("--scale: means nothing without --standard.")
    if standard is None or own:
        own["family"] = family or "bernoulli"
    console = Console(highlight=False)
    try:
        candidates = _candidates(own, boundaries or ["wald"], truncation or [NONE], _standard(standard, scale))
        suggestion = None if suggest is None else suggested_truncation(own, suggest)
        _show(console, candidates)
        if suggestion is not None:
            _show_suggestion(console, suggestion)
    except Invalid as error:
        faults = "".join(f"\n  {_option(fault.pointer)}: {fault.detail}" for fault in error.faults)
        raise fail(f"{error}{faults}") from None


def _known(sigma: float | None, others: list[str]) -> dict[str, float]:
    """What the family needs to know beforehand, by name."""
    found = {} if sigma is None else {"sigma": sigma}
    for text in others:
        name, _, value = text.partition("=")
        try:
            found[name] = float(value)
        except ValueError:
            found[name] = math.nan
        if not math.isfinite(found[name]):
            raise fail(f"--known must have the form name=number; received {text!r}")
    return found


def _standard(name: str | None, scale: float | None) -> dict[str, Any]:
    """The content that stands for a standard; empty for none."""
    given = {"standard": name, "scale": scale}
    return {} if name is None else {key: value for key, value in given.items() if value is not None}


def _candidates(
    own: dict[str, Any], rules: list[str], truncations: list[str], standard: dict[str, Any]
) -> list[tuple[str, str]]:
    """A name and a checked document for each combination of a boundary rule and a truncation, and for the standard."""
    from service.cli.drawing import LETTERS
    from service.domain.checking import checked_candidates

    named = [(_name(rule, wall), _content(own, rule, wall)) for rule in rules for wall in truncations if own]
    named += [(standard["standard"], standard)] if standard else []
    if len(named) > len(LETTERS):
        raise fail(f"At most {len(LETTERS)} candidates; asked for {len(named)}.")
    documents = checked_candidates([content for _, content in named])
    return [(name, document) for (name, _), document in zip(named, documents, strict=True)]


def _name(rule: str, wall: str) -> str:
    return rule if wall == NONE else f"{rule} to {wall}"


def _content(stated: dict[str, Any], rule: str, wall: str) -> dict[str, Any]:
    from service.domain.families import FAMILIES

    content = {**stated, "boundaries": rule}
    if wall != NONE:
        has_exposure = stated["family"] in FAMILIES and FAMILIES[stated["family"]].has_exposure
        try:
            content["truncation"] = {"exposure": float(wall)} if has_exposure else {"sample_number": int(wall)}
        except ValueError:
            raise fail(f'--truncation must be a number or "none"; received {wall!r}') from None
    return content


def _show(console: "Console", candidates: list[tuple[str, str]]) -> None:
    """The table, the fixed sample, and the two curves."""
    from service.cli.drawing import drawn
    from service.domain.characteristics import common_grid, promise_of
    from service.domain.procedure import procedure_of_document

    hypotheses = procedure_of_document(candidates[0][1]).hypotheses
    promises = [(name, document, promise_of(document, hypotheses)) for name, document in candidates]
    console.print("What the candidates really promise")
    console.print(_table(promises))
    fixed = promises[0][2].fixed_sample
    if fixed is not None:
        unit = "units" if promises[0][2].points[0].exposure is None else "of exposure"
        console.print(f"Smallest fixed sample with the same risks: {fixed.size:.6g} {unit}, accept {_limit(fixed)}.")
    grid = common_grid([document for _, document in candidates])
    curves = [promise_of(document, grid).points for _, document in candidates]
    h0, h1 = hypotheses
    console.print(f"\nProbability of acceptance against the true parameter; h0 {h0:.10g}, h1 {h1:.10g}; * several")
    for line in drawn(grid, [[point.probability_of_acceptance for point in points] for points in curves], 1.0):
        console.print(line)
    averages = [[_progress(point) for point in points] for points in curves]
    what = "sample number" if curves[0][0].exposure is None else "exposure"
    console.print(f"\nAverage {what} against the true parameter")
    for line in drawn(grid, averages, max(map(max, averages))):
        console.print(line)


def _table(promises: "list[tuple[str, str, Promise]]") -> "Table":
    """A column for each candidate; where they are many, a row for each."""
    from rich.table import Table

    from service.cli.drawing import LETTERS

    table = Table()
    if len(promises) > MOST_COLUMNS:
        every = [_column(document, promise) for _, document, promise in promises]
        for heading in ("", *list(every[0])[:SHOWN]):
            table.add_column(heading.replace(" at ", "\nat ").replace(" by, ", " by,\n"), justify="right")
        for letter, (name, _, _), column in zip(LETTERS, promises, every, strict=False):
            table.add_row(f"{letter}: {name}", *list(column.values())[:SHOWN])
        return table
    table.add_column("exact figures")
    for letter, (name, _, _) in zip(LETTERS, promises, strict=False):
        table.add_column(f"{letter}: {name}", justify="right")
    columns = [_column(document, promise) for _, document, promise in promises]
    for heading in dict.fromkeys(heading for column in columns for heading in column):
        table.add_row(heading, *(column.get(heading, "") for column in columns))
    return table


def _column(document: str, promise: "Promise") -> dict[str, str]:
    """The figures of one candidate by their headings."""
    from service.domain.procedure import lines_of, procedure_of_document

    first, second = promise.points
    figures = {
        "alpha": f"{promise.alpha:.6f}",
        "beta": f"{promise.beta:.6f}",
        "average at h0": f"{_progress(first):.6g}",
        "average at h1": f"{_progress(second):.6g}",
        "95 % by, at h0": f"{_quantile(first):.6g}",
        "95 % by, at h1": f"{_quantile(second):.6g}",
    }
    procedure = procedure_of_document(document)
    lines = lines_of(procedure)
    if lines is None:
        return {**figures, "limits": "by its table"}
    # The lines are slope * n with these added; where H1 lies below H0, acceptance is above.
    down, up = ("-", "+") if procedure.is_upward else ("+", "-")
    return {
        **figures,
        "line: n times": f"{lines.slope:.10g}",
        "accept: plus": f"{down}{lines.accept_intercept:.5g}",
        "reject: plus": f"{up}{lines.reject_intercept:.5g}",
    }


def _show_suggestion(console: "Console", suggestion: "Suggestion") -> None:
    unit = "units" if suggestion.axis == "sample_number" else "of exposure"
    console.print(
        f"\nSuggested truncation: {suggestion.at:.6g} {unit}, calibrated, lengthens tests by "
        f"{100 * suggestion.inflation:.3g} % at most; average {suggestion.average_at_h0:.6g} at h0, "
        f"{suggestion.average_at_h1:.6g} at h1; alpha {suggestion.attained.alpha:.5f}, "
        f"beta {suggestion.attained.beta:.5f}."
    )


def _progress(point: "Point") -> float:
    spread = point.exposure or point.sample_number
    return 0.0 if spread is None else spread.mean


def _quantile(point: "Point") -> float:
    spread = point.exposure or point.sample_number
    return 0.0 if spread is None else spread.quantiles["0.95"]


def _limit(fixed: Any) -> str:  # noqa: ANN401 - a value of the domain, which is imported late
    of = "" if float(fixed.acceptance_limit).is_integer() else "a sum of "
    return f"{of}{'at most' if fixed.accepts_at_most else 'at least'} {fixed.acceptance_limit:.10g}"


def _option(pointer: str) -> str:
    """The option that a pointer into a plan's body stands for."""
    parts = [part for part in pointer.split("/") if part and not part.isdigit() and part != "candidates"]
    if parts[:1] == ["known"]:
        return "--sigma" if parts[1:] == ["sigma"] else f"--known {parts[-1]}"
    names = {"suggest_truncation": "suggest"}
    return f"--{names.get(parts[0], parts[0])}" if parts else "plan"
