"""The record of a test: on the page and on paper it says what the interface says."""

import io
import re
from datetime import UTC, datetime
from typing import Any
from urllib.parse import urlsplit

import httpx
import pypdf
import pytest

from service.pages.typesetting import pdf_of
from service.pages.words import figure, percent
from tests.api.examples import PUMP, SEAL, SHAFT, Namer, with_test
from tests.pages.people import signed_in, words
from tests.running import Running

STRANGE = '2042/A <b>bold</b> & "Ω" #let x = [1] $E$ *no* Größe 試験'
SIZES = {"a4": (595, 842), "us-letter": (612, 792)}


def read(pdf: bytes) -> str:
    """The text of all pages, with single spaces."""
    pages = pypdf.PdfReader(io.BytesIO(pdf)).pages
    return re.sub(r"\s+", " ", " ".join(page.extract_text() for page in pages)).replace("\u200b", "")


def post(admin: httpx.Client, key: str, body: dict[str, Any], act: str = "observations") -> dict[str, Any]:
    answer = admin.post(f"/v1/tests/{key}/{act}", json=body)
    assert answer.status_code in {200, 201}, answer.text
    found: dict[str, Any] = answer.json()
    return found


@pytest.fixture(scope="module")
def rejected(admin: httpx.Client, new_name: Namer) -> str:
    """A test that was rejected, with a replaced and a voided result, overrun, and a disposition against it."""
    key = with_test(admin, new_name, SEAL, labels={"line": "3 <i>", "bench": "north"})
    some = [{"value": int(i in (5, 10)), "unit": f"S-{i}"} for i in range(12)]
    post(admin, key, {"observations": some})
    replaced = {"action": "replace", "sequence": 3, "observation": {"value": 1}, "reason": "Misread <lamp>"}
    post(admin, key, replaced, "corrections")
    post(admin, key, {"action": "void", "sequence": 7, "reason": "Belongs to another lot"}, "corrections")
    done = {"disposition": "concession", "reason": "Bench spares", "deviation_reason": "Leak is tolerable there"}
    post(admin, key, done, "disposition")
    return key


def both(service: Running, key: str, paper: str = "a4") -> tuple[str, str]:
    """What the page says, and what the pages of the PDF say, to a viewer."""
    with signed_in(service, "viewer") as person:
        shown = person.get(f"/tests/{key}/record")
        printed = person.get(f"/tests/{key}/record.pdf", params={"paper": paper})
    assert (shown.status_code, printed.status_code) == (200, 200)
    assert printed.headers["content-type"] == "application/pdf"
    assert printed.headers["content-disposition"] == f'attachment; filename="{key}-record.pdf"'
    first = pypdf.PdfReader(io.BytesIO(printed.content)).pages[0]
    assert (round(first.mediabox.width), round(first.mediabox.height)) == SIZES[paper]
    return words(shown.text), read(printed.content)


@pytest.mark.parametrize("paper", sorted(SIZES))
def test_the_record_of_a_rejected_lot_says_everything(
    service: Running, admin: httpx.Client, rejected: str, paper: str
) -> None:
    test = admin.get(f"/v1/tests/{rejected}").json()
    plan = admin.get(f"/v1/plans/{test['plan']}").json()
    found = admin.get(f"/v1/tests/{rejected}/inference").json()
    history = admin.get(f"/v1/tests/{rejected}/history").json()
    promise = admin.get(f"/v1/plans/{test['plan']}/characteristics", params={"at": [0.01]}).json()
    for said in both(service, rejected, paper):
        for part in (
            test["subject"]["name"],
            rejected,
            plan["fingerprint"],
            "Label line 3 <i>",
            "Reject the lot",
            "proportion nonconforming = 0.01",
            f"Log-likelihood ratio Λ +{figure(test['log_likelihood_ratio'])}",
            f"Producer's risk attained {percent(promise['attained']['alpha'], 4)}",
            f"Consumer's risk attained {percent(promise['attained']['beta'], 4)}",
            f"at most {figure(plan['lines']['slope'])} × units − {figure(plan['lines']['accept_intercept'])}",
            f"at least {figure(plan['lines']['slope'])} × units + {figure(plan['lines']['reject_intercept'])}",
            figure(found["p_value"]),
            figure(found["estimates"]["median_unbiased"]),
            f"{figure(found['interval']['lower'])} to {figure(found['interval']['upper'])}",
            "value 0, unit S-2",
            "value 1, unit S-2",
            "Misread <lamp>",
            "Belongs to another lot",
            "by the-administrator",
            "released on concession",
            "not followed",
            "Leak is tolerable there",
            "Inspected by",
            "Approved by",
            f"Acts {history['length']}",
            history["link"],
        ):
            assert part in said, part


def test_each_page_of_the_pdf_has_its_number_the_key_and_the_moment(service: Running, rejected: str) -> None:
    with signed_in(service) as person:
        reader = pypdf.PdfReader(io.BytesIO(person.get(f"/tests/{rejected}/record.pdf").content))
    texts = [page.extract_text() for page in reader.pages]
    printed = re.search(r"printed (\d{4}-\d\d-\d\d \d\d:\d\d:\d\d UTC)", texts[0])
    assert printed is not None
    for number, text in enumerate(texts, start=1):
        assert f"page {number} of {len(texts)}" in text
        assert f"Test {rejected} · printed {printed[1]}" in text
    root: Any = reader.trailer["/Root"]
    assert (root["/Lang"], root["/MarkInfo"]["/Marked"]) == ("en", True)
    assert reader.metadata is not None
    assert reader.metadata.title is not None
    assert reader.metadata.title.startswith("Record of lot")


def test_no_address_and_no_secret_stand_in_the_record(service: Running, rejected: str) -> None:
    with signed_in(service, "viewer") as person:
        pdf = person.get(f"/tests/{rejected}/record.pdf").content
    for told in (*both(service, rejected), pdf.decode("latin-1")):
        for hidden in (service.url, urlsplit(service.url).netloc, "127.0.0.1", "sqlite", *service.keys.values()):
            assert hidden not in told


def test_names_are_text_on_paper_and_on_the_page(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    """Neither HTML nor the language of the typesetter is taken for one; letters without a form are spelled."""
    subject = {"kind": "lot", "name": STRANGE}
    key = with_test(admin, new_name, SEAL, subject=subject, labels={"long": "x" * 90})
    page, pdf = both(service, key)
    assert STRANGE in page
    assert 'Record of lot 2042/A <b>bold</b> & "Ω" #let x = [1] $E$ *no* Größe' in pdf
    for said in (page, pdf):
        assert "*no* Größe [U+8A66][U+9A13]" in said
        assert "No result has come in yet." in said
        assert "x" * 90 in said.replace(" ", "")


def test_a_running_test_has_its_ways_and_no_estimate(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, PUMP)
    post(admin, key, {"observations": [{"time": 20.5, "failed": False, "unit": "P-1"}]})
    for said in both(service, key):
        assert "Go on sampling" in said
        assert "There is no estimate before the decision" in said
        assert "mean life = 1000" in said
        assert "P-1" in said
        assert "Nothing was corrected." in said


@pytest.mark.parametrize(
    ("plan", "body", "parts"),
    [
        (
            {**SHAFT, "statistic": "invariant", "h0": 0.0, "h1": 0.5, "known": {"reference": 10.0}},
            {"values": [10.3, 9.6] * 20},
            ("p-value, simulated", "standard error", "figures of an invariant plan are simulated", "Student's t"),
        ),
        (
            {"standard": "MIL-HDBK-781A/III-D", "scale": 100.0},
            {"observations": [{"time": 30.0, "failed": False}]},
            ("MIL-HDBK-781A (1996), sequential test plans", "unit-time", "risk attained"),
        ),
    ],
)
def test_other_plans_have_their_own_words(
    service: Running, admin: httpx.Client, new_name: Namer, plan: dict[str, Any], body: dict[str, Any], parts: list[str]
) -> None:
    key = with_test(admin, new_name, plan)
    post(admin, key, body)
    for said in both(service, key):
        for part in parts:
            assert part in said, part


def test_a_long_log_is_set_in_part_and_says_where_the_rest_is(
    service: Running, admin: httpx.Client, new_name: Namer
) -> None:
    key = with_test(admin, new_name, {**SHAFT, "alpha": 1e-9, "beta": 1e-9})
    values = [10.25 + i % 7 / 100 for i in range(1300)]
    post(admin, key, {"values": values})
    for said in both(service, key):
        assert "Here are the first 100 and the last 100" in said
        assert f"/tests/{key}/results" in said
        for shown in (1, 100, 1201, 1300):
            assert re.search(rf"\b{shown} {figure(values[shown - 1])} ", said), shown
        assert not re.search(r"\b101 10\.", said)


def test_results_that_are_alike_stand_together(service: Running, admin: httpx.Client, new_name: Namer) -> None:
    key = with_test(admin, new_name, SEAL)
    post(admin, key, {"values": [0] * 7 + [1] + [0] * 3})
    for said in both(service, key):
        for row in ("1 to 7 0 1 ", "8 1 1 ", "9 to 11 0 1 "):
            assert row in said


def test_an_unknown_test_and_a_paper_that_is_none_are_told(service: Running, rejected: str) -> None:
    with signed_in(service) as person:
        for address in ("/tests/none/record", "/tests/none/record.pdf", f"/tests/{rejected}/record.pdf?paper=a5"):
            answer = person.get(address)
            assert answer.status_code == 404
            assert answer.headers["content-type"].startswith("text/html")


def test_the_same_record_is_the_same_file() -> None:
    nothing: dict[str, Any] = {"columns": [], "rows": [], "figures": []}
    svg = '<svg xmlns="http://www.w3.org/2000/svg" width="9" height="9"><path d="M0 0H9"/></svg>'
    texts = dict.fromkeys(("headline", "sentence", "results_note", "corrections_note", "estimates_note", "key"), "x")
    lists: dict[str, Any] = {
        name: [] for name in ("identity", "notes", "standing", "promises", "disposition", "history", "estimates")
    }
    tables = dict.fromkeys(("results", "last_results", "corrections", "checks", "estimates"), nothing)
    more = {"title": "x", "printed": "now", "decision": "accept", "checks_summary": "", "verifying": "", "paper": "a4"}
    drawn = {"drawing": svg, "drawing_words": "x", "mark": svg, "cautions": [], "signing": ["x"]}
    data = {**texts, **lists, **tables, **more, **drawn}
    at = datetime(2031, 5, 4, 9, 30, 0, 123456, UTC)
    assert pdf_of("record.typ", data, at) == pdf_of("record.typ", data, at)
