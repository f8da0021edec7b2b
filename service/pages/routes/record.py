"""The record of a test: one document with all that is known of it, to be signed and filed."""

from dataclasses import asdict, replace
from enum import StrEnum
from typing import Annotated, Any

from fastapi import Path, Query, Request, Response

from service.domain.names import NAME_PATTERN
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.pages.charts.marks import mark
from service.pages.charts.svg import file, markup
from service.pages.rendering import page
from service.pages.routing import page_router
from service.pages.typesetting import pdf_of
from service.pages.views.record import Record, record_of
from service.web.lookup import known_test
from service.web.parts import Parts, PartsOf, computing

router = page_router()

Key = Annotated[str, Path(pattern=NAME_PATTERN)]


class Paper(StrEnum):
    """What it is printed on."""

    A4 = "a4"
    LETTER = "us-letter"


@router.get("/tests/{key}/record")
async def show_record(request: Request, key: Key, parts: PartsOf) -> Response:
    """The record as a page, which prints as well."""
    test, plan = await known_test(parts, key)
    record = await computing(parts, lambda: _record(parts, test, plan))
    return page(request, "record.html", test=test, record=record, drawing=markup(record.drawing))


@router.get("/tests/{key}/record.pdf")
async def send_record(key: Key, parts: PartsOf, paper: Annotated[Paper, Query()] = Paper.A4) -> Response:
    """The same set on pages."""
    test, plan = await known_test(parts, key)
    now = parts.clock()

    def set_on_paper() -> bytes:
        return pdf_of("record.typ", _data(record_of(parts.reader, parts.walks, test, plan, now), paper), now)

    headers = {"Content-Disposition": f'attachment; filename="{key}-record.pdf"'}
    return Response(await computing(parts, set_on_paper), media_type="application/pdf", headers=headers)


def _record(parts: Parts, test: SequentialTest, plan: Plan) -> Record:
    return record_of(parts.reader, parts.walks, test, plan, parts.clock())


def _data(record: Record, paper: Paper) -> dict[str, Any]:
    """The record as JSON, its drawings as text."""
    drawn = file(record.drawing).decode()
    words = f"{record.headline}. {record.sentence}"
    plain = asdict(replace(record, drawing=None))  # type: ignore[arg-type]
    return {**plain, "paper": paper, "drawing": drawn, "drawing_words": words, "mark": str(mark(record.decision))}
