"""The metallurgist's places in a real browser (Debian's chromium, driven by Playwright).

Kinds of check: contract (page against command line, downloads that open again, nothing asked
of another host) and accessibility (axe-core's rules, WCAG 2.1 A and AA; deque.com). Skipped
with the reason where there is no browser, except in CI.
"""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import parse_qsl, urlsplit

import pytest

from converter_calc import plan
from converter_calc.page.form import document_of
from tests import page_browser as pb
from tests.conftest import DEMO

pytest.importorskip("streamlit", reason="the page needs streamlit")
from converter_calc.page.session import start_form

pytestmark = [
    pytest.mark.xdist_group("browser"),
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]
WIDE = "document.querySelector('.stMain').scrollWidth - innerWidth"
#: Charts have a text beside them and no parts to reach; the lists of what is right are not sent.
AXE = ({"exclude": [[".js-plotly-plot"]]}, {"resultTypes": ["violations"]})
LIME, PRACTICE, TAP = "Lime and phosphorus", "Slag practice", "Tap and ladle"
#: View, part of it, button that starts the work, charts then on the page.
PLACES = [
    (LIME, "", "Plan under every law", 4),
    (LIME, "Cost of low phosphorus", "", 1),
    (LIME, "Choice of fluxes", "Compare fluxes", 0),
    (LIME, "Laws against measured heats", "Rank the laws by this log", 1),
    (PRACTICE, "", "", 1),
    (PRACTICE, "The slag as a product", "", 0),
    (PRACTICE, "Where each element goes", "", 1),
    (TAP, "", "", 2),
]


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    pb.required_or_skip()
    with pb.served(tmp_path_factory.mktemp("server") / "log.txt") as (found, _):
        yield found


@pytest.fixture(scope="module")
def chromium(address: str) -> Iterator[Any]:
    with pb.browser() as found:
        yield found


@pytest.fixture(scope="module")
def short_log(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The first 200 heats of the invented log."""
    path = tmp_path_factory.mktemp("log") / "log.csv"
    lines = (DEMO / "heat_log.csv").read_text(encoding="utf-8").splitlines(keepends=True)
    path.write_text("".join(lines[:201]), encoding="utf-8")
    return path


@pytest.fixture
def page(chromium: Any, address: str) -> Iterator[Any]:
    """A fresh session; in the end no host but the page's own may have been asked."""
    found, outside = pb.watched(chromium, address)
    yield found
    found.context.close()
    assert outside == []


def go_to(page: Any, view: str, part: str, button: str, log: Path) -> None:
    pb.show(page, view)
    if part:
        page.get_by_text(part, exact=True).first.click()
        pb.settled(page)
    if part == "Laws against measured heats":
        page.locator("input[type=file]").set_input_files(log)
        pb.settled(page)
    if button:
        page.get_by_role("button", name=button).click()
        pb.settled(page)


@pytest.mark.parametrize(("width", "scheme"), [(1280, "light"), (820, "dark")])
def test_each_place_is_whole_and_accessible(
    chromium: Any, address: str, short_log: Path, width: int, scheme: str
) -> None:
    from axe_playwright_python.sync_playwright import Axe

    axe = Axe()
    size = {"width": width, "height": 1000}
    found, outside = pb.watched(chromium, address, viewport=size, color_scheme=scheme)
    pb.go(found, address + "?grade=S355MC")
    for view, part, button, charts in PLACES:
        if scheme == "dark" and (not charts or (view, part) == (LIME, "")):
            continue  # tables alone do not differ; the lime curve is looked at with all views
        go_to(found, view, part, button, short_log)
        place = f"{view}, {part}"
        if charts:
            found.locator(".js-plotly-plot .main-svg").first.wait_for(timeout=60000)
            pb.settled(found)
        assert found.locator(".js-plotly-plot").count() == charts, place
        assert found.locator("[role=alert].cc-fault, .stException").count() == 0, place
        assert found.evaluate(WIDE) <= 0, f"{place} runs over the side at {width} px"
        serious = [
            (broken["id"], node["html"][:200])
            for broken in axe.run(found, *AXE).response["violations"]
            if broken["impact"] in ("serious", "critical")
            for node in broken["nodes"]
        ]
        assert serious == [], place
    found.context.close()
    assert outside == []


def by_command_line(*words: str) -> dict[str, Any]:
    run = subprocess.run(
        [sys.executable, "-m", "converter_calc", *words, "--json", "-"],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return dict(json.loads(run.stdout))


def test_typed_practice_equals_command_line_and_opens_again(
    page: Any, address: str, tmp_path: Path
) -> None:
    from openpyxl import load_workbook

    pb.go(page, address + "?view=practice")
    pb.write(page, "First slag poured off, %", "62,5")
    pb.write(page, "Carbon at slag-off, %", "2.6")
    page.get_by_text("Two slags", exact=True).click()
    pb.settled(page)
    assert page.get_by_role("table", name="closure of Two slags").is_visible()
    with page.expect_download(timeout=20000) as waiting:
        page.get_by_role("button", name="All tables (XLSX)").click()
    book = tmp_path / "practices.xlsx"
    waiting.value.save_as(book)
    assert load_workbook(book).sheetnames == ["practices", "stages"]
    with page.expect_download(timeout=20000) as waiting:
        page.get_by_role("button", name="Practices (CSV)").click()
    table = tmp_path / "practices.csv"
    waiting.value.save_as(table)
    rows = {row["practice"]: row for row in csv.DictReader(table.open(encoding="utf-8"))}
    link = page.url
    assert "slag_off_share_pct=62" in link
    pb.show(page, "Files")
    with page.expect_download(timeout=20000) as waiting:
        page.get_by_role("button", name="Heat file, complete").click()
    heat = tmp_path / "heat.toml"
    waiting.value.save_as(heat)
    told = by_command_line("practices", str(heat))["practices"]
    for name, practice in told.items():
        for key in ("lime_kg", "end_P_pct", "slag_made_kg_per_t"):
            assert float(rows[name][key]) == pytest.approx(practice["numbers"][key], rel=1e-9)


def test_law_of_the_log_is_taken_over_with_one_click(
    page: Any, address: str, short_log: Path
) -> None:
    pb.go(page, address + "?view=lime&lime.part=measured")
    page.locator("input[type=file]").set_input_files(short_log)
    pb.settled(page)
    page.get_by_role("button", name="Rank the laws by this log").click()
    button = page.get_by_role("button", name="Plan with")
    button.wait_for(timeout=30000)
    law = button.inner_text().split()[2]
    button.click()
    page.get_by_text(f"The plan now uses {law}").wait_for(timeout=30000)
    pb.settled(page)
    taken = dict(parse_qsl(urlsplit(page.url).query))
    form = start_form()
    form.fields |= {name: taken[name] for name in ("law_phosphorus", "P_approach")}
    assert form.fields["law_phosphorus"] == law
    recipe = plan(document_of(form)).document()["recipe"]
    pb.show(page, "Plan a heat")
    assert pb.figure_in(page, "burnt lime") == f"{recipe['burnt_lime_kg']:,.0f} kg"


def test_keyboard_reaches_the_tap_in_reading_order(page: Any, address: str) -> None:
    pb.go(page, address + "?view=tap&grade=S355MC")
    pb.box(page, "Wanted in the ladle, °C").focus()
    seen = []
    for _ in range(30):
        name = page.evaluate(
            "() => { const e = document.activeElement; return e.getAttribute('aria-label') || "
            "e.innerText.trim() }"
        )
        seen.append(str(name))
        page.keyboard.press("Tab")
    wanted = ["Wanted in the ladle, °C", "Slag carried over, kg/t", "Tap, min",
              "From tap to ladle station, min", "More of the tap practice"]  # fmt: skip
    places = [next(k for k, name in enumerate(seen) if want in name) for want in wanted]
    assert places == sorted(places)
