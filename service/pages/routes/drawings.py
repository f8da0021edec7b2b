"""Drawings and the points behind them as files, for papers and reports."""

import csv
import io
from collections.abc import Iterator
from enum import StrEnum
from typing import Annotated, Literal
from xml.etree.ElementTree import Element

from fastapi import Path, Query, Response
from fastapi.responses import StreamingResponse

from service.domain.names import NAME_PATTERN
from service.domain.path import Path as Walk
from service.domain.path import region_at
from service.domain.procedure import Procedure, procedure_of
from service.pages.charts.svg import file
from service.pages.charts.walk import walk_drawing
from service.pages.routes.one_test import POINTS
from service.pages.routing import page_router
from service.pages.simulating import with_simulation
from service.pages.typesetting import png_of
from service.pages.views.curves import acceptance_drawing, check_curves, sample_number_drawing
from service.pages.views.judging import judged_plan
from service.pages.views.picture import View, picture_of, views_of
from service.web.lookup import known_plan, known_test
from service.web.parts import Parts, PartsOf, computing
from service.web.walks import MOST_POINTS

router = page_router()


class Figure(StrEnum):
    """What is drawn over the true parameter."""

    OC = "oc"
    ASN = "asn"


Key = Annotated[str, Path(pattern=NAME_PATTERN)]
ViewAsked = Annotated[str, Query(max_length=20)]
FigureAsked = Annotated[Figure, Query()]
Form = Literal["svg", "png"]

MEDIA = {"svg": "image/svg+xml", "png": "image/png", "csv": "text/csv; charset=utf-8"}


@router.get("/tests/{key}/drawing.svg")
async def send_drawing_as_svg(key: Key, parts: PartsOf, view: ViewAsked = "") -> Response:
    """The drawing of a test as a file that stands alone."""
    return await _drawing(parts, key, view, "svg")


@router.get("/tests/{key}/drawing.png")
async def send_drawing_as_png(key: Key, parts: PartsOf, view: ViewAsked = "") -> Response:
    """The same as pixels."""
    return await _drawing(parts, key, view, "png")


@router.get("/tests/{key}/path.csv")
async def send_path(key: Key, parts: PartsOf) -> Response:
    """The points of the drawing with the limits at each of them."""
    test, plan = await known_test(parts, key)
    walk = await computing(parts, lambda: parts.walks.path_of(parts.reader, test, plan, MOST_POINTS))
    return StreamingResponse(_lines(procedure_of(plan), walk), headers=_headers(f"{key}-path", "csv"))


@router.get("/plans/{name}/curves.svg")
async def send_curves_as_svg(name: Key, parts: PartsOf, figure: FigureAsked = Figure.OC) -> Response:
    """The operating characteristic of a plan, or its sample numbers, as a file that stands alone."""
    return await _curves(parts, name, figure, "svg")


@router.get("/plans/{name}/curves.png")
async def send_curves_as_png(name: Key, parts: PartsOf, figure: FigureAsked = Figure.OC) -> Response:
    """The same as pixels."""
    return await _curves(parts, name, figure, "png")


async def _drawing(parts: Parts, key: str, view: str, form: Form) -> Response:
    test, plan = await known_test(parts, key)
    views = views_of(procedure_of(plan))
    chosen = View(view) if view in views else views[0]

    def drawn() -> bytes:
        path = parts.walks.path_of(parts.reader, test, plan, POINTS)
        return _file(walk_drawing(picture_of(test, plan, path, chosen)), form)

    return Response(await computing(parts, drawn), headers=_headers(f"{key}-{chosen}", form))


async def _curves(parts: Parts, name: str, figure: Figure, form: Form) -> Response:
    plan = await known_plan(parts, name)
    judged = with_simulation(parts, await computing(parts, lambda: judged_plan(name, plan.document)), may_begin=False)
    check_curves([judged])
    draw = acceptance_drawing if figure is Figure.OC else sample_number_drawing
    drawn = await computing(parts, lambda: _file(draw([judged]), form))
    return Response(drawn, headers=_headers(f"{name}-{figure}", form))


def _file(drawing: Element, form: Form) -> bytes:
    return file(drawing) if form == "svg" else png_of(file(drawing))


def _headers(name: str, form: str) -> dict[str, str]:
    return {"Content-Type": MEDIA[form], "Content-Disposition": f'attachment; filename="{name}.{form}"'}


def _lines(procedure: Procedure, walk: Walk) -> Iterator[str]:
    """A heading, and a line for each point; the limits of the evidence are the same in all of them."""
    thresholds = procedure.thresholds
    ends = ("", "") if thresholds is None else (_cell(thresholds.accept), _cell(thresholds.reject))
    yield _line(
        "sequence",
        "sample_number",
        "progress",
        "total",
        "log_likelihood_ratio",
        "accept_at_log_likelihood_ratio",
        "reject_at_log_likelihood_ratio",
        "accept_at_total",
        "reject_at_total",
        "reject_below_total",
    )
    points = zip(walk.sequence, walk.sample_number, walk.progress, walk.total, walk.log_likelihood_ratio, strict=True)
    for point, region in zip(points, region_at(procedure, walk.progress), strict=True):
        limits = (region.accept, region.reject, region.reject_below)
        yield _line(*(_cell(value.item()) for value in point), *ends, *map(_cell, limits))


def _line(*cells: str) -> str:
    line = io.StringIO()
    csv.writer(line).writerow(cells)
    return line.getvalue()


def _cell(value: float | None) -> str:
    """Every digit; empty where there is no limit."""
    return "" if value is None or value in (float("inf"), float("-inf")) else repr(value)
