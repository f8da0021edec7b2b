"""The figures of plans in rows, in words, and as CSV."""

import csv
import io
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from service.domain.characteristics import Fixed, Spread
from service.domain.names import is_name
from service.domain.plan import Content
from service.domain.procedure import Procedure, lines_of
from service.domain.tables import FIELDS
from service.pages.views.curves import QUANTILE, spread_of
from service.pages.views.judging import Judged
from service.pages.views.plan_words import subject_words
from service.pages.words import figure, percent, signed

# Digits of a probability on a page.
RISK_DIGITS = 5
# A risk that is larger than stated by more than a hundredth of it is worth a warning.
NEARLY = 1.01
CSV_COLUMNS = (
    "plan",
    "parameter",
    "probability_of_acceptance",
    "average_sample_number",
    "sample_number_standard_deviation",
    "sample_number_quantile_0.5",
    "sample_number_quantile_0.9",
    "sample_number_quantile_0.95",
    "sample_number_quantile_0.99",
    "average_exposure",
    "exposure_standard_deviation",
    "exposure_quantile_0.5",
    "exposure_quantile_0.9",
    "exposure_quantile_0.95",
    "exposure_quantile_0.99",
)


@dataclass(frozen=True)
class Row:
    """One figure of each plan; a cell is empty where a plan has none."""

    name: str
    cells: tuple[str, ...]


def rows_of(judged: Sequence[Judged]) -> tuple[Row, ...]:
    """The figures of plans side by side; rows in which no plan says anything are left out."""
    columns = [dict(_column(each)) if each.document is not None else {} for each in judged]
    names = dict.fromkeys(name for column in columns for name in column)
    return tuple(Row(name, tuple(column.get(name, "") for column in columns)) for name in names)


def words_of(judged: Judged) -> tuple[str, ...]:
    """What a plan promises, in sentences."""
    if judged.document is None:
        return ()
    what = subject_words(judged.procedure.family.name)
    if judged.curve is None:
        return _without_figures(judged, what)
    family = judged.procedure.family
    said = [
        f"If the {family.parameter} is {figure(point.parameter)} (H{number}), {what} is accepted with a probability of "
        f"{percent(point.probability_of_acceptance, RISK_DIGITS)}{_lasting(spread_of(point), family.axis)}."
        for number, point in enumerate(judged.ends)
    ]
    fixed = judged.curve.fixed_sample
    said += [*_not_kept(judged), *(() if fixed is None else (_beside_fixed(judged.procedure, fixed),))]
    return tuple(said)


def _not_kept(judged: Judged) -> Iterator[str]:
    """A warning where a plan does not keep the risks that it states."""
    curve, stated = judged.curve, judged.procedure.risks
    attained = (None, None) if curve is None else (curve.alpha, curve.beta)
    broken = [
        f"{name} is {percent(found, RISK_DIGITS)} where {percent(said)} is stated"
        for name, found, said in zip("αβ", attained, stated, strict=True)
        if found is not None and said is not None and found > said * NEARLY
    ]
    if broken:
        yield f"Mind: it does not keep its stated risks; {' and '.join(broken)}. What it saves is paid for with them."


def table_of(procedure: Procedure, content: Content) -> tuple[tuple[str, ...], tuple[tuple[str, ...], ...]]:
    """Headings and rows of a plan that is a table; both empty for others."""
    if "table" not in content or procedure.family.table is None:
        return (), ()
    names = FIELDS[procedure.family.table]
    rows = tuple(tuple(figure(row.get(name)) for name in names) for row in content["table"])
    return tuple(name.replace("_", " ") for name in names), rows


def csv_of(judged: Sequence[Judged]) -> str:
    """Every point of the curves with all digits; a cell is empty where there is no figure."""
    text = io.StringIO()
    writer = csv.writer(text)
    writer.writerow(CSV_COLUMNS)
    for each in judged:
        for point in () if each.curve is None else each.curve.points:
            spreads = (*_cells(point.sample_number), *_cells(point.exposure))
            writer.writerow(
                (
                    each.title if is_name(each.title) else each.letter,
                    repr(point.parameter),
                    repr(point.probability_of_acceptance),
                    *spreads,
                )
            )
    return text.getvalue()


def _without_figures(judged: Judged, what: str) -> tuple[str, ...]:
    """What holds of a plan that may go on for ever: strict boundaries keep their risk at every look (Ville)."""
    if not judged.procedure.may_go_on_for_ever or judged.content["boundaries"] != "strict":
        return ()
    alpha = percent(judged.procedure.risks[0], RISK_DIGITS)
    return (f"However long it runs, {what} for which H0 is true is rejected with a probability of at most {alpha}.",)


def _column(judged: Judged) -> Iterator[tuple[str, str]]:
    procedure = judged.procedure
    axis = procedure.family.axis
    yield from _risks(judged)
    for number, point in enumerate(judged.ends):
        spread = spread_of(point)
        if spread is not None:
            yield f"Average at H{number}, {axis}", figure(spread.mean)
            yield f"95 % of the tests need at most, at H{number}, {axis}", figure(spread.quantiles[QUANTILE])
    longest = _longest(judged)
    if longest is not None:
        yield f"Longest average on the curve, {axis}", longest
    fixed = None if judged.curve is None else judged.curve.fixed_sample
    if fixed is not None:
        yield f"Fixed sample with the stated risks, {axis}", figure(fixed.size)
        yield "… it accepts with", _limit(procedure, fixed)
        yield "… its risks α, β", f"{percent(fixed.alpha, RISK_DIGITS)}, {percent(fixed.beta, RISK_DIGITS)}"
        yield "Saved on average at H0", percent(fixed.saving_at_h0)
        yield "Saved on average at H1", percent(fixed.saving_at_h1)
    yield from _limits(procedure)
    yield from _method(judged)


def _risks(judged: Judged) -> Iterator[tuple[str, str]]:
    curve = judged.curve
    for name, stated in zip(("α", "β"), judged.procedure.risks, strict=True):
        if stated is not None:
            yield f"Stated risk {name}", percent(stated, RISK_DIGITS)
    yield from _stored_risks(judged)
    if curve is None:
        return
    simulation = curve.simulation
    errors = (None, None) if simulation is None else (simulation.alpha_error, simulation.beta_error)
    for name, risk, error in zip(("α", "β"), (curve.alpha, curve.beta), errors, strict=True):
        if risk is not None:
            give = "" if error is None else f" ± {percent(error, 2)}"
            yield f"Attained risk {name}", f"{percent(risk, RISK_DIGITS)}{give}"


def _stored_risks(judged: Judged) -> Iterator[tuple[str, str]]:
    """What was found when the plan was checked: bounds for every model, or the worst over composite hypotheses."""
    attained = judged.content.get("attained", {})
    for name, risk in (("α", "alpha"), ("β", "beta")):
        value, at = attained.get(risk), attained.get(f"{risk}_at")
        if value is not None and not judged.procedure.family.has_model:
            yield f"Risk {name} whatever the model is, at most", percent(value, RISK_DIGITS)
        elif value is not None and at is not None:
            yield f"Largest risk {name} over its hypothesis", f"{percent(value, RISK_DIGITS)}, at {figure(at, 4)}"


def _longest(judged: Judged) -> str | None:
    points = () if judged.curve is None else judged.curve.points
    found = [(spread.mean, point.parameter) for point in points if (spread := spread_of(point)) is not None]
    if not found:
        return None
    mean, at = max(found)
    return f"{figure(mean)}, at {figure(at, 4)}"


def _limits(procedure: Procedure) -> Iterator[tuple[str, str]]:
    thresholds = procedure.thresholds
    if thresholds is not None:
        if math.isfinite(thresholds.accept):
            yield "Accept at Λ of at most", signed(thresholds.accept)
        yield "Reject at Λ of at least", signed(thresholds.reject)
    lines = lines_of(procedure)
    if lines is not None:
        down, up = ("−", "+") if procedure.is_upward else ("+", "−")
        yield "Lines: slope", figure(lines.slope)
        yield "… accept from the slope's line", _shifted(down, lines.accept_intercept)
        yield "… reject from the slope's line", _shifted(up, lines.reject_intercept)


def _shifted(sign: str, intercept: float) -> str:
    """An intercept with the sign that it has on the drawing."""
    other = {"−": "+", "+": "−"}[sign]
    return f"{sign}{figure(intercept)}" if intercept >= 0.0 else f"{other}{figure(-intercept)}"


def _method(judged: Judged) -> Iterator[tuple[str, str]]:
    curve = judged.curve
    if curve is None:
        return
    if curve.simulation is not None:
        yield "Figures", f"simulated, {figure(curve.simulation.courses)} courses, seed {curve.simulation.seed}"
    elif curve.error_bound is not None:
        yield "Figures", f"exact by {curve.method}, error at most {figure(curve.error_bound, 2)}"


def _lasting(spread: Spread | None, axis: str) -> str:
    if spread is None:
        return ""
    most = figure(spread.quantiles[QUANTILE])
    return f", after {figure(spread.mean)} {axis} on average; 95 % of the tests need at most {most}"


def _beside_fixed(procedure: Procedure, fixed: Fixed) -> str:
    size = f"The smallest fixed sample that keeps the stated risks takes {figure(fixed.size)} {procedure.family.axis}"
    at_h0, at_h1 = (_saving(share) for share in (fixed.saving_at_h0, fixed.saving_at_h1))
    saving = f"on average sequential sampling takes {at_h0} under H0 and {at_h1} under H1"
    return f"{size} and accepts with {_limit(procedure, fixed)}; {saving}."


def _saving(share: float) -> str:
    return f"{percent(abs(share))} {'less' if share >= 0.0 else 'more'}"


def _limit(procedure: Procedure, fixed: Fixed) -> str:
    """The total that a fixed sample accepts with, in the terms of the family."""
    bound = "at most" if fixed.accepts_at_most else "at least"
    counted, total = procedure.family.counted, figure(fixed.acceptance_limit)
    return f"{bound} {total} {counted}" if procedure.family.span.is_integer else f"a {counted} of {bound} {total}"


def _cells(spread: Spread | None) -> tuple[Any, ...]:
    if spread is None:
        return ("",) * 6
    return (repr(spread.mean), repr(spread.standard_deviation), *(repr(value) for value in spread.quantiles.values()))
