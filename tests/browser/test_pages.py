"""The pages as a browser shows them: read, tried, pasted into, dropped on, by keyboard and on a phone."""

from __future__ import annotations

import json
import shlex
import subprocess
import sys
from collections.abc import Callable
from typing import Any

import pytest

from browser.chromium import Page
from contract import served

Keep = Callable[[str], None]

PAGES = {
    "start": "",
    "try": "try",
    "contents": "docs/reading",
    "operation": "docs/reading/fitPLimits",
    "picture": "docs/reading/drawEconomicDesign",
    "methods": "methods",
    "problems": "problems",
    "problem": "problems/busy",
}
SHEET = "document.getElementById('sheet')"


@pytest.mark.parametrize("name", PAGES)
def test_a_page_shows_itself_at_every_width(page: Page, host: str, keep: Keep, name: str) -> None:
    page.open(f"http://{host}/{PAGES[name]}")
    assert page.text("h1")
    for width in (360, 390, 768, 1280):
        page.size(width)
        assert page.value("document.documentElement.scrollWidth <= innerWidth"), width
    keep(name)


@pytest.mark.parametrize("name", [*PAGES, "docs", "try-judged", "try-faults", "start-chosen"])
def test_no_serious_fault_of_accessibility_is_ours(page: Page, host: str, axe: str, name: str) -> None:
    if name == "docs":
        page.open(f"http://{host}/docs#/Charts/fitPLimits")
        page.wait("document.querySelector('.opblock-body .execute')")
    elif name.startswith("try-"):
        page.open(f"http://{host}/try")
        if name == "try-judged":
            judged(page)
            page.value("document.querySelectorAll('#outcome details').forEach((one) => { one.open = true; })")
        else:
            paste(page, "car\ta\tb\nK-1\t2,51\t2,49\nK-2\t2,50\t2,52\n")
            page.wait("document.querySelector('#faults li')")
    elif name == "start-chosen":
        page.open(f"http://{host}/")
        page.click("#chooser button")
        page.wait("document.querySelector('#choice .advice')")
    else:
        page.open(f"http://{host}/{PAGES[name]}")
    page.value(axe + "; undefined")
    # What the reference page's library writes is not ours to write.
    found = page.value("axe.run({exclude: ['#reference']}, {resultTypes: ['violations']})")
    serious = {
        f"{one['id']}: {node['target']} {node['html'][:160]}"
        for one in found["violations"]
        if one["impact"] in ("serious", "critical")
        for node in one["nodes"]
    }
    assert serious == set()


# The reference -----------------------------------------------------------------------------------------


def execute(page: Page) -> None:
    """Sends the example of the operation that is open, once the page has put it in."""
    page.wait("document.querySelector('.opblock.is-open textarea.body-param__text')?.value")
    page.click(".opblock.is-open .execute")


def test_the_reference_tries_a_call(page: Page, host: str, keep: Keep) -> None:
    page.open(f"http://{host}/docs#/Choosing%20a%20chart/recommendChart")
    execute(page)
    page.wait("document.querySelector('.responses-table.live-responses-table .response-col_status')")
    assert page.text(".live-responses-table tbody .response-col_status").startswith("200")
    assert '"chart"' in page.text(".live-responses-table .highlight-code")
    page.size(390)
    assert page.value("document.documentElement.scrollWidth <= innerWidth")
    keep("docs-call")


@pytest.mark.parametrize("operation_id", ["drawXbarRLimits", "drawEconomicDesign", "drawReleaseCheck"])
def test_the_reference_shows_a_picture_as_one(page: Page, host: str, keep: Keep, operation_id: str) -> None:
    page.open(f"http://{host}/docs#/Pictures/{operation_id}")
    execute(page)
    picture = "document.querySelector('.live-responses-table img')"
    page.wait(f"{picture}?.complete && {picture}.naturalWidth > 300")
    assert page.value(f"{picture}.src.startsWith('data:image/svg+xml')")
    keep(f"docs-{operation_id}")


def test_a_page_to_read_shows_what_its_examples_draw(page: Page, host: str) -> None:
    page.open(f"http://{host}/docs/reading/drawReleaseCheck")
    picture = "document.querySelector('figure img')"
    page.wait(f"{picture}.complete && {picture}.naturalWidth === 640")
    assert page.value(f"{picture}.alt").startswith("Release check of K-0442.")


# The start page ----------------------------------------------------------------------------------------


def test_the_start_page_tells_its_health_and_a_chart(page: Page, host: str, keep: Keep) -> None:
    page.open(f"http://{host}/")
    page.wait("document.getElementById('health').className === 'well'")
    assert "Ready" in page.text("#health")
    page.choose("#kind", "nonconforming-units")
    assert not page.value("document.getElementById('subgroup_size').checkVisibility()")
    page.value("document.querySelector('[name=sizes_vary]').click()")
    page.click("#chooser button")
    page.wait("document.querySelector('#choice .advice')")
    assert "(p)" in page.text("#choice h3")
    keep("start-chosen")


def test_a_contradiction_in_the_chooser_is_told(page: Page, host: str) -> None:
    page.open(f"http://{host}/")
    page.click("[name=differs_between_subgroups]")
    page.click("#chooser button")
    page.wait("document.querySelector('#choice .fault')")
    assert "two measurements or more" in page.text("#choice")


# One's own numbers -------------------------------------------------------------------------------------


def paste(page: Page, text: str) -> None:
    page.value(f"{SHEET}.focus()")
    page.type(text)


def sheet_of(values: list[list[Any]], ids: list[str]) -> str:
    return "\n".join(
        "\t".join([name, *("" if one is None else str(one) for one in row)])
        for name, row in zip(ids, values, strict=True)
    )


def judged(page: Page) -> dict[str, Any]:
    """The example of the contract, pasted and judged; what the page is to show."""
    body = served.example("xbar-r-limits-screening")
    paste(
        page,
        "car\tfront\tleft\tmiddle\tright\tback\n" + sheet_of(body["data"]["values"], body["data"]["ids"]),
    )
    page.wait("document.querySelector('#advice .advice')")
    page.choose("#chart", "xbar-r")
    page.choose("#rules", "western-electric-1956")
    for name, value in {
        "characteristic": "wall thickness",
        "unit": "mm",
        "lower": "2.45",
        "upper": "2.55",
    }.items():
        page.value(f"document.getElementById('{name}').value = '{value}'")
    page.click("#trial [type=submit]")
    page.wait("!document.getElementById('outcome').hidden")
    return served.answer_of(
        "fitXbarRLimits",
        {
            "data": {name: body["data"][name] for name in ("values", "ids")},
            "characteristic": {"name": "wall thickness", "unit": "mm"},
            "rules": {"published": "western-electric-1956"},
        },
    )


def test_a_paste_becomes_a_picture_a_verdict_and_a_request(page: Page, host: str, keep: Keep) -> None:
    page.open(f"http://{host}/try")
    answer = judged(page)
    shown = page.text("#outcome")
    assert answer["baseline"]["signals_found"] > 0
    assert f"{answer['baseline']['signals_found']} signal" in page.text("#verdict")
    for signal in answer["baseline"]["signals"]:
        assert signal["sentence"] in shown
        assert signal["id"] in shown
    for caution in answer["cautions"]:
        assert caution["sentence"].replace("`", "") in shown
    assert page.value("document.activeElement.id") == "verdict"
    for at in (0, 1):
        picture = f"document.querySelectorAll('#outcome img')[{at}]"
        page.wait(f"{picture}.complete && {picture}.naturalWidth > 300")
        assert "wall thickness" in page.value(f"{picture}.alt")
    assert "Cpk" in shown
    keep("try-judged")

    taken = page.value(
        "[...document.querySelectorAll('#outcome details code')].map((one) => one.textContent)"
    )
    request, curl, python = taken[:3]
    assert served.answer_of("fitXbarRLimits", json.loads(request))["limits"] == answer["limits"]
    assert f"http://{host}/v1/charts/xbar-r/limits" in curl
    done = subprocess.run(
        [sys.executable, "-c", python], capture_output=True, text=True, check=True, timeout=20
    )
    assert json.loads(done.stdout)["limits"] == answer["limits"]


def test_the_curl_request_is_the_same(page: Page, host: str) -> None:
    """As a shell reads it, a quotation mark in a name included."""
    page.open(f"http://{host}/try")
    paste(page, "\n".join(f"{value}" for value in (5.1, 5.3, 4.9, 5.0, 5.2, 5.1, 4.8, 5.0)))
    page.wait("document.querySelector('#advice .advice')")
    page.value("document.getElementById('characteristic').value = \"baker's glaze\"")
    page.click("#trial [type=submit]")
    page.wait("!document.getElementById('outcome').hidden")
    request, curl = page.value(
        "[...document.querySelectorAll('#outcome details code')].slice(0, 2).map((one) => one.textContent)"
    )
    words = shlex.split(curl)
    assert json.loads(words[words.index("--data") + 1]) == json.loads(request)
    assert json.loads(request)["characteristic"]["name"] == "baker's glaze"


def drop(page: Page, name: str, content: str) -> None:
    """Drops a file; ``content`` is a JavaScript expression of its text or bytes."""
    page.value(
        f"""(() => {{
          const carried = new DataTransfer();
          carried.items.add(new File([{content}], {json.dumps(name)}));
          const dropped = new DragEvent("drop", {{dataTransfer: carried, bubbles: true, cancelable: true}});
          document.getElementById("drop").dispatchEvent(dropped);
        }})()"""
    )


def test_a_file_is_dropped(page: Page, host: str, keep: Keep) -> None:
    page.open(f"http://{host}/try")
    body = served.example("p-limits")["data"]
    text = "car;cracked;fired\n" + "\n".join(
        f"K-{at};{count};{of}"
        for at, (count, of) in enumerate(zip(body["counts"], body["inspected"], strict=True))
    )
    drop(page, "cracked.csv", json.dumps(text))
    page.wait("document.querySelector('#advice .advice')")
    assert "semicolons" in page.text("#read")
    assert page.value("document.querySelector('[name=form]:checked').value") == "counts"
    assert page.value("document.getElementById('chart').value") == "p"
    page.click("#trial [type=submit]")
    page.wait("!document.getElementById('outcome').hidden")
    verdict = served.answer_of("fitPLimits", {"data": body})["baseline"]["verdict"]
    assert ("In control" in page.text("#verdict")) == (verdict == "in-control")
    keep("try-dropped")


def test_a_spreadsheets_own_file_is_refused_in_words(page: Page, host: str) -> None:
    page.open(f"http://{host}/try")
    drop(page, "cars.xlsx", "new Uint8Array([0x50, 0x4b, 3, 4])")
    page.wait("document.querySelector('#read .fault')")
    assert "Save it as CSV" in page.text("#read")


def test_a_bad_paste_gets_help(page: Page, host: str, keep: Keep) -> None:
    page.open(f"http://{host}/try")
    paste(page, "car\tfront\tback\nK-1\t2,51\t2,49\nK-2\t2.50 mm\t<2.4\nK-3\tcrack\t2,50\nK-4\t#REF!\t2,52\n")
    page.wait("document.querySelector('#faults li')")
    shown = page.text("#faults")
    assert "Line 2, front: “2,51” has a comma" in shown
    assert "Line 3, front: “2.50 mm” carries a unit" in shown
    assert "Line 3, back: “<2.4” is a result beyond a limit of detection" in shown
    assert "Line 4, front: “crack” is not a number" in shown
    assert "Line 5, front: “#REF!” is an error of the spreadsheet" in shown
    assert not page.value("document.getElementById('asked').checkVisibility()")
    page.click("#faults li:nth-child(3) button")
    assert page.value(f"{SHEET}.value.slice({SHEET}.selectionStart, {SHEET}.selectionEnd)").startswith("K-2")
    keep("try-faults")


def test_decimal_commas_are_an_explicit_choice(page: Page, host: str) -> None:
    page.open(f"http://{host}/try")
    paste(page, "\n".join(["car;a;b", *(f"K-{n};2,5{n};2,4{n}" for n in range(9))]))
    page.wait("document.querySelector('#faults li')")
    assert not any("/v1/" in url for url in page.requests)  # nothing is sent that was not understood
    page.click("#faults .fault > p button")
    page.wait("document.querySelector('#advice .advice')")
    assert page.value("document.querySelector('[name=decimal]:checked').value") == "comma"
    assert "2.51" in page.text("#preview")


def test_what_the_service_refuses_leads_to_the_line(page: Page, host: str) -> None:
    page.open(f"http://{host}/try")
    paste(page, "\n".join(["car\ta\tb", *(f"K-{n}\t2.5\t2.5" for n in range(9))]))
    page.wait("document.querySelector('#advice').innerText")
    page.click("#trial [type=submit]")
    page.wait("!document.getElementById('outcome').hidden")
    assert page.text("#outcome .fault li")
    assert "The request that was refused" in page.text("#outcome")


@pytest.mark.parametrize(
    ("text", "form", "points"),
    [
        ("subgroup,value\nA,1.5\nA,1.7\nB,1.4\nB,1.9\nC,1.6\nC,1.2", "long", "3 subgroups"),
        ("1.5\n1.7\n\n1.4\n1.9", "singles", "4 points"),
        ('"car","a","b"\n"K,1","2.5","2.6"\n"K,2","2.4","2.7"', "rows", "2 subgroups"),
        ("2.5 2.6 2.4\n2.7 2.5 2.5\n2.4 2.4 2.8", "rows", "3 subgroups"),
        ("tray;pinholes;area\n1;4;1\n2;7;2\n3;5;1", "counts", None),
    ],
)
def test_sheets_are_understood(page: Page, host: str, text: str, form: str, points: str | None) -> None:
    page.open(f"http://{host}/try")
    paste(page, text)
    page.wait("!document.getElementById('columns').hidden")
    if form == "counts":
        page.value("document.querySelector('[name=form][value=counts]').click()")
        page.choose("#counted", "events")
    assert page.value("document.querySelector('[name=form]:checked').value") == form
    if points:
        assert points in page.text("#preview")


def test_the_page_works_without_a_mouse(page: Page, host: str) -> None:
    """Tab and Enter alone, from the address bar to the verdict."""
    page.open(f"http://{host}/try")
    for _ in range(12):
        page.press("Tab")
        if page.value("document.activeElement.dataset.example") == "singles":
            break
    page.press("Enter")
    page.wait("document.querySelector('#advice .advice')")
    for _ in range(60):
        page.press("Tab")
        if page.value("document.activeElement.type") == "submit":
            break
    page.press("Enter")
    page.wait("!document.getElementById('outcome').hidden")
    assert "control" in page.text("#verdict")


def test_a_service_that_asks_for_a_key_is_given_one(page: Page, guarded: str) -> None:
    page.hosts.add(guarded)
    page.open(f"http://{guarded}/try")
    page.click("[data-example=singles]")
    page.wait("document.getElementById('admission').checkVisibility()")
    page.value("document.getElementById('key').focus()")
    page.type("open-sesame")
    page.click("#trial [type=submit]")
    page.wait("!document.getElementById('outcome').hidden")
    assert "control" in page.text("#verdict")
    taken = page.value("document.getElementById('outcome').textContent")
    assert "open-sesame" not in taken
    assert "$API_KEY" in taken


def test_a_request_to_elsewhere_and_a_script_in_the_page_would_be_noticed(page: Page, host: str) -> None:
    page.open(f"http://{host}/")
    page.value("fetch('http://elsewhere.example/').catch(() => {})")
    page.value("document.body.append(Object.assign(document.createElement('script'), {textContent: '1'}))")
    page.wait("true")
    assert any("connect-src" in one for one in page.complaints)
    assert any("script-src" in one for one in page.complaints)
    page.complaints.clear()
    page.requests.append("http://elsewhere.example/")
    assert page.strangers() == ["http://elsewhere.example/"]
    page.requests.remove("http://elsewhere.example/")
