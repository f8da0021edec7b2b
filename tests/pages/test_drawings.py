"""Drawings and their points as files."""

import csv
import io
from typing import Any
from xml.etree import ElementTree as ET

import httpx
import numpy as np
import pytest

from tests.api.examples import PUMP, SEAL, SHAFT, Namer, with_plan, with_test
from tests.pages.people import signed_in
from tests.running import Running

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(scope="module")
def lot(admin: httpx.Client, new_name: Namer) -> str:
    key = with_test(admin, new_name, SEAL)
    admin.post(f"/v1/tests/{key}/observations", json={"values": [0, 0, 1, 0]}).raise_for_status()
    return key


def size(png: bytes) -> tuple[int, int]:
    """The width and the height that the head of a PNG file says."""
    assert png[:8] == b"\x89PNG\r\n\x1a\n"
    return int.from_bytes(png[16:20]), int.from_bytes(png[20:24])


def alone(svg: bytes) -> ET.Element:
    """A drawing that needs nothing beside it."""
    assert svg.startswith(b"<?xml")
    root = ET.fromstring(svg)
    assert root.tag == f"{SVG}svg"
    assert root.find(f"{SVG}title") is not None
    for each in root.iter():
        assert not {"style", "class", "href"} & each.attrib.keys()
        assert each.tag not in {f"{SVG}style", f"{SVG}script", f"{SVG}image"}
    return root


@pytest.mark.parametrize("view", ["evidence", "count"])
def test_the_drawing_of_a_test_is_a_file_that_stands_alone(service: Running, lot: str, view: str) -> None:
    with signed_in(service, "viewer") as person:
        svg = person.get(f"/tests/{lot}/drawing.svg?view={view}")
        png = person.get(f"/tests/{lot}/drawing.png?view={view}")
        page = person.get(f"/tests/{lot}?view={view}").text
    assert (svg.headers["content-type"], png.headers["content-type"]) == ("image/svg+xml", "image/png")
    for answer, form in ((svg, "svg"), (png, "png")):
        assert answer.headers["content-disposition"] == f'attachment; filename="{lot}-{view}.{form}"'
    root = alone(svg.content)
    walk = max((each.get("points", "") for each in root.iter(f"{SVG}polyline")), key=lambda points: points.count(" "))
    assert walk in page
    wide, high = (float(root.get(name, "")) for name in ("width", "height"))
    assert np.allclose(size(png.content), (3.0 * wide, 3.0 * high), rtol=0.0, atol=2.0)


def test_measurements_that_only_give_a_mean_have_their_place(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    """Of three measurements whose mean is unknown the region sees two steps; the drawing shows all three."""
    content = {"family": "normal_variance", "h0": 1.0, "h1": 2.0, "alpha": 0.05, "beta": 0.05}
    key = with_test(admin, new_name, {**content, "truncation": {"sample_number": 20}})
    admin.post(f"/v1/tests/{key}/observations", json={"values": [10.0, 11.0, 9.5]}).raise_for_status()
    with signed_in(service, "viewer") as person:
        root = alone(person.get(f"/tests/{key}/drawing.svg?view=count").content)
    marks = [float(each.get("cx", "")) for each in root.iter(f"{SVG}circle")]
    across = [each for each in root.iter(f"{SVG}text") if each.get("text-anchor") == "middle"]
    ticks = {int(each.text): float(each.get("x", "")) for each in across if each.text and each.text.isdigit()}
    unit = (ticks[max(ticks)] - ticks[0]) / max(ticks)
    assert [round((x - ticks[0]) / unit, 2) for x in sorted(marks)] == [0.0, 1.0, 2.0, 3.0]


@pytest.mark.parametrize(("plan", "body"), [(SEAL, {"values": [0, 1, 0]}), (PUMP, {"values": [31.5, 400.0]})])
def test_the_points_are_those_of_the_interface(
    service: Running, admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any]
) -> None:
    key = with_test(admin, new_name, plan)
    admin.post(f"/v1/tests/{key}/observations", json=body).raise_for_status()
    path = admin.get(f"/v1/tests/{key}/path").json()
    with signed_in(service, "viewer") as person:
        answer = person.get(f"/tests/{key}/path.csv")
    assert answer.headers["content-disposition"] == f'attachment; filename="{key}-path.csv"'
    rows = list(csv.DictReader(io.StringIO(answer.text)))
    assert len(rows) == len(path["points"])
    lines = admin.get(f"/v1/plans/{admin.get(f'/v1/tests/{key}').json()['plan']}").json()["lines"]
    for row, point in zip(rows, path["points"], strict=True):
        assert int(row["sequence"]) == point["sequence"]
        assert float(row["log_likelihood_ratio"]) == point["log_likelihood_ratio"]
        assert float(row["total"]) == point["total"]
        progress = point["sample_number"] if point["exposure"] is None else point["exposure"]
        assert float(row["progress"]) == progress
        assert float(row["accept_at_log_likelihood_ratio"]) == path["thresholds"]["accept"]
        assert float(row["reject_at_log_likelihood_ratio"]) == path["thresholds"]["reject"]
        # Whole totals reject at the first whole number at or beyond the line, where there can be so many.
        line = lines["slope"] * progress + lines["reject_intercept"]
        if row["reject_at_total"]:
            assert 0.0 <= float(row["reject_at_total"]) - line < 1.0
        else:
            assert line > progress


@pytest.mark.parametrize("figure", ["oc", "asn"])
def test_the_curves_of_a_plan_are_files(service: Running, admin: httpx.Client, new_name: Namer, figure: str) -> None:
    plan = with_plan(admin, new_name("plan"), SHAFT)
    with signed_in(service, "viewer") as person:
        svg = person.get(f"/plans/{plan}/curves.svg?figure={figure}")
        png = person.get(f"/plans/{plan}/curves.png?figure={figure}")
        page = person.get(f"/plans/{plan}").text
        wrong = person.get(f"/plans/{plan}/curves.svg?figure=other")
        unknown = person.get("/plans/none/curves.svg")
    assert svg.headers["content-disposition"] == f'attachment; filename="{plan}-{figure}.svg"'
    texts = [each.text for each in alone(svg.content).iter(f"{SVG}text")]
    assert {"H0", "H1", "mean"} <= set(texts)
    assert f'href="/plans/{plan}/curves.svg?figure={figure}"' in page
    assert size(png.content)[0] > 1000
    assert (wrong.status_code, unknown.status_code) == (404, 404)


def test_curves_that_are_not_simulated_yet_are_not_drawn(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    content = {**SHAFT, "statistic": "invariant", "h0": 0.0, "h1": 2.0, "known": {"reference": 10.0}}
    plan = with_plan(admin, new_name("plan"), content)
    score = with_plan(admin, new_name("plan"), {"family": "score", "boundaries": "strict", "alpha": 0.05, "beta": 0.1})
    with signed_in(service, "viewer") as person:
        for figure in ("oc", "asn"):
            waiting = person.get(f"/plans/{plan}/curves.svg?figure={figure}")
            assert waiting.status_code == 409
            assert "Press Simulate" in waiting.text
            assert person.get(f"/plans/{score}/curves.png?figure={figure}").status_code == 422


def test_nobody_gets_a_file_without_signing_in(service: Running, lot: str) -> None:
    for part in ("drawing.svg", "drawing.png", "path.csv", "record", "record.pdf"):
        answer = httpx.get(f"{service.url}/tests/{lot}/{part}")
        assert answer.status_code == 303
        assert answer.headers["location"].startswith("/sign-in")
