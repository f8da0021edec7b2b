"""What people do on the pages, in a real browser."""

import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import httpx
import pytest
from playwright.sync_api import Browser, expect, sync_playwright
from pypdf import PdfReader

from tests.api.examples import SEAL, Namer, with_test
from tests.pages.browser import Watched, launched, watched
from tests.running import Running

PHONE = {"width": 380, "height": 760}


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    """One for the module and no longer: while it runs, nothing else of the process may run an event loop."""
    with sync_playwright() as playwright:
        started = launched(playwright)
        yield started
        started.close()


@pytest.fixture
def person(browser: Browser, service: Running) -> Iterator[Watched]:
    """An engineer who has signed in."""
    with watched(browser, service.url) as seen:
        seen.go("/sign-in")
        seen.sign_in(service.keys["engineer"])
        yield seen


@pytest.fixture
def lot(admin: httpx.Client, new_name: Namer) -> str:
    """A lot without a result."""
    return with_test(admin, new_name, SEAL)


def post(admin: httpx.Client, key: str, *values: Any) -> None:
    admin.post(f"/v1/tests/{key}/observations", json={"values": list(values)}).raise_for_status()


def test_somebody_signs_in_finds_a_lot_and_signs_out(browser: Browser, service: Running, lot: str) -> None:
    with watched(browser, service.url) as seen:
        seen.expected = ("401",)
        seen.go(f"/tests/{lot}")
        seen.sign_in("wrong")
        expect(seen.page.get_by_text("No such key")).to_be_visible()
        seen.sign_in(service.keys["viewer"])
        expect(seen.page).to_have_url(f"{service.url}/tests/{lot}")
        seen.page.get_by_role("link", name="SPRT Monitor").click()
        seen.page.get_by_label("Key or subject").fill(lot)
        seen.page.get_by_role("button", name="Show").click()
        seen.page.get_by_role("link", name=f"{lot}/A").click()
        expect(seen.page.get_by_role("heading", level=1)).to_have_text(f"{lot}/A")
        seen.page.get_by_role("button", name="Sign out").click()
        expect(seen.page).to_have_url(f"{service.url}/sign-in")
        seen.go("/")
        expect(seen.page.get_by_label("Access key")).to_be_visible()


def test_a_live_test_goes_from_continue_to_reject_while_results_come_in(
    person: Watched, admin: httpx.Client, lot: str
) -> None:
    person.go(f"/tests/{lot}")
    verdict = person.page.locator("#verdict")
    expect(verdict).to_contain_text("24 conforming units more")
    expect(person.page.locator("#stream")).to_contain_text("Live")
    post(admin, lot, 0, 0, 1)
    expect(verdict).to_contain_text("1 nonconforming unit more and it is rejected")
    post(admin, lot, 1)
    expect(verdict).to_contain_text("Reject the lot")
    expect(person.page.locator("#picture svg title").first).to_contain_text("Reject")
    expect(person.page.locator("#figures")).to_contain_text("Sample number4")


def test_the_list_follows_what_changes(person: Watched, admin: httpx.Client, lot: str) -> None:
    person.go(f"/?words={lot}")
    expect(person.page.locator("#stream")).to_contain_text("Live")
    expect(person.page.locator("#rows")).to_contain_text("Go on sampling")
    post(admin, lot, 1, 1)
    expect(person.page.locator("#rows")).to_contain_text("Reject")


def test_a_page_left_behind_a_stopped_service_says_so(person: Watched, lot: str) -> None:
    person.expected = ("ERR_", "Failed to load")
    person.go(f"/tests/{lot}")
    expect(person.page.locator("#stream")).to_contain_text("Live")
    person.page.context.set_offline(True)
    person.page.evaluate("lookAgain()")
    expect(person.page.locator("#stream")).to_contain_text("cannot be reached")


def test_a_corrected_result_changes_the_decision_and_the_lot_is_disposed_of(
    person: Watched, admin: httpx.Client, lot: str
) -> None:
    post(admin, lot, 0, 1, 1)
    page = person.page
    person.go(f"/tests/{lot}")
    page.get_by_role("link", name="Results").click()
    page.get_by_role("link", name="Correct result 3").click()
    page.get_by_label("value").fill("0")
    page.get_by_label("Reason", exact=True).fill("The lamp was off")
    page.get_by_role("button", name="See what would follow").click()
    expect(page.locator("#consequence")).to_contain_text("This changes the decision")
    page.get_by_role("button", name="Make this correction").click()
    expect(page.locator("#result-3")).to_contain_text("The lamp was off")
    page.get_by_role("link", name="Where it stands").click()
    expect(page.locator("#verdict")).to_contain_text("Go on sampling")
    expect(page.locator("#verdict")).to_contain_text("A correction has changed the decision.")
    page.get_by_role("link", name="Dispose of the lot").click()
    page.get_by_label(re.compile("withdrawn")).check()
    page.get_by_label("Reason", exact=True).fill("Drawn from the wrong melt")
    page.get_by_role("button", name="See what would follow").click()
    page.get_by_label("Why it is not what the test decided").fill("No decision is needed any more")
    page.get_by_role("button", name="Do it, and close the test").click()
    expect(page.locator("#verdict")).to_contain_text("Withdrawn")
    assert admin.get(f"/v1/tests/{lot}").json()["disposition"]["disposition"] == "withdrawn"


def test_a_plan_is_designed_by_looking_then_saved_and_a_lot_registered_under_it(
    person: Watched, admin: httpx.Client, new_name: Namer
) -> None:
    page, name = person.page, new_name("looked-at")
    page.get_by_role("navigation", name="Pages").get_by_role("link", name="Design a plan").click()
    promise = page.locator("#promise")
    expect(promise).to_contain_text("If the proportion nonconforming is")
    before = promise.inner_text()
    page.get_by_label("H1").fill("0.12")
    expect(promise).to_contain_text("If the proportion nonconforming is 0.12 (H1)")
    assert promise.inner_text() != before
    assert "h1=0.12" in page.url
    body = {"family": "bernoulli", "h0": 0.02, "h1": 0.12, "alpha": 0.05, "beta": 0.10, "at": [0.02]}
    told = admin.post("/v1/characteristics", json=body).json()["points"][0]
    expect(promise).to_contain_text(f"after {told['average_sample_number']:.6g} units on average")
    page.get_by_label("H1").fill("0.01x")
    expect(page.locator("#state")).to_contain_text("Something is not right yet")
    expect(page.get_by_label("H1")).to_have_value("0.01x")
    page.get_by_label("H1").fill("0.12")
    page.get_by_role("button", name="Lay another beside it").click()
    expect(page.get_by_text("Candidate B")).to_be_visible()
    page.get_by_role("button", name="Take B away").click()
    page.get_by_role("button", name="Save it as a plan").click()
    page.get_by_label("Name").fill(name)
    page.get_by_role("button", name="Store the plan").click()
    expect(page).to_have_url(re.compile(f"/plans/{name}"))
    assert admin.get(f"/v1/plans/{name}").json()["h1"] == 0.12
    page.get_by_role("link", name="Register a lot or an experiment").click()
    page.get_by_label("Key").fill(f"{name}-1")
    page.get_by_label("Name of the subject").fill("Seals 17")
    page.get_by_label("Labels").fill("line: 3")
    page.get_by_role("button", name="Register it").click()
    expect(page).to_have_url(f"{person.url}/tests/{name}-1")
    assert admin.get(f"/v1/tests/{name}-1").json()["labels"] == {"line": "3"}


def test_the_record_is_printed_from_the_browser_and_taken_as_a_file(
    person: Watched, admin: httpx.Client, lot: str, tmp_path: Path
) -> None:
    post(admin, lot, *[0] * 24)
    person.go(f"/tests/{lot}")
    person.page.get_by_role("link", name="Print the record").click()
    expect(person.page.get_by_role("heading", name="Signatures")).to_be_visible()
    printed = tmp_path / "printed.pdf"
    person.page.pdf(path=printed, format="A4")
    with person.page.expect_download() as download:
        person.page.get_by_role("link", name="PDF, A4").click()
    made = tmp_path / "made.pdf"
    download.value.save_as(made)
    state = admin.get(f"/v1/tests/{lot}").json()
    for file in (printed, made):
        text = " ".join(" ".join(each.extract_text() for each in PdfReader(file).pages).split())
        assert "Accept the lot" in text
        assert f"{lot}/A" in text
        assert f"{state['log_likelihood_ratio']:.6g}".replace("-", "−") in text
        assert "Approved by" in text


def test_everything_can_be_done_by_keyboard_alone(
    browser: Browser, service: Running, admin: httpx.Client, lot: str
) -> None:
    post(admin, lot, 0, 1, 0)
    with watched(browser, service.url) as seen:
        page, keyboard = seen.page, seen.page.keyboard

        def tab_to(name: str) -> None:
            for _ in range(80):
                keyboard.press("Tab")
                label = page.evaluate(
                    "(e => (e.getAttribute('aria-label') || (e.labels && e.labels[0] ? e.labels[0].innerText : '') || "
                    "e.innerText || '').trim())(document.activeElement)"
                )
                if label.startswith(name):
                    outline = page.evaluate("getComputedStyle(document.activeElement).outlineStyle")
                    assert outline != "none", f"nobody sees that {name} has the focus"
                    return
            raise AssertionError(f"{name} cannot be reached")

        seen.go(f"/tests/{lot}/results")
        keyboard.type(service.keys["engineer"])  # the field has the focus
        keyboard.press("Enter")
        expect(page).to_have_url(f"{service.url}/tests/{lot}/results")
        tab_to("Correct result 2")
        keyboard.press("Enter")
        page.wait_for_url("**/correct?*")
        tab_to("Nothing: the result is void") if page.get_by_label("Nothing").is_checked() else tab_to("This, in")
        keyboard.press("ArrowDown")
        tab_to("Reason")
        keyboard.type("counted twice")
        tab_to("See what would follow")
        keyboard.press("Enter")
        expect(page.locator("#consequence")).to_contain_text("The decision stays.")
        tab_to("Make this correction")
        keyboard.press("Enter")
        expect(page.locator("#result-2")).to_contain_text("voided by the-engineer")


ADDRESSES = ["/", "/design", "/design/standards", "/plans", "/plans/{plan}", "/plans/{plan}/register",
             "/tests/{key}/record",
             "/tests/{key}", "/tests/{key}?view=count", "/tests/{key}/results", "/tests/{key}/assumptions",
             "/tests/{key}/estimates", "/tests/{key}/history", "/tests/{key}/correct?sequence=1",
             "/tests/{key}/dispose", "/tests/{key}/record", "/tests/none"]  # fmt: skip


def test_no_page_has_a_serious_finding_nor_is_wider_than_a_phone(
    browser: Browser, service: Running, admin: httpx.Client, lot: str
) -> None:
    post(admin, lot, 0, 1, 0, 1)
    other = with_test(admin, lambda prefix: f"{prefix}-beside-{lot}", SEAL)
    plan = admin.get(f"/v1/tests/{lot}").json()["plan"]
    with watched(browser, service.url, viewport=PHONE) as seen:
        seen.expected = ("404",)
        seen.go("/sign-in")
        assert (seen.findings(), seen.width_beyond()) == ([], 0)
        seen.sign_in(service.keys["engineer"])
        for address in ADDRESSES:
            for key in (lot, other):
                if key == other and ("correct" in address or "key" not in address):
                    continue
                seen.go(address.format(key=key, plan=plan))
                assert (address, seen.findings()) == (address, [])
                assert (address, seen.width_beyond()) == (address, 0)


def test_without_script_the_decision_the_figures_and_the_drawing_are_there(
    browser: Browser, service: Running, admin: httpx.Client, lot: str
) -> None:
    post(admin, lot, 0, 1, 1)
    with watched(browser, service.url, java_script_enabled=False) as seen:
        seen.go(f"/tests/{lot}")
        seen.sign_in(service.keys["viewer"])
        expect(seen.page.locator("#verdict")).to_contain_text("Reject the lot")
        expect(seen.page.locator("#figures")).to_contain_text("Log-likelihood ratio Λ")
        expect(seen.page.locator("#picture svg")).to_be_visible()
        expect(seen.page.locator("#figures time").first).to_contain_text("UTC")


def test_times_are_shown_in_the_zone_of_the_viewer_with_its_name(
    browser: Browser, service: Running, admin: httpx.Client, lot: str
) -> None:
    registered = admin.get(f"/v1/tests/{lot}").json()["registered_at"]
    with watched(browser, service.url, timezone_id="Asia/Tokyo", locale="en-GB") as seen:
        seen.go(f"/tests/{lot}")
        seen.sign_in(service.keys["viewer"])
        hour = (int(registered[11:13]) + 9) % 24
        expect(seen.page.locator("#figures time").first).to_contain_text(re.compile(rf" {hour:02}:\d\d:\d\d GMT\+9"))
        expect(seen.page.locator("[data-zone]")).to_have_text("Japan Standard Time")
