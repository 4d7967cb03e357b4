"""Spread, register and learning in a real browser (Debian's chromium, driven by Playwright).

Kinds of check: contract (what a person clicks reaches the plan; files open again; nothing is
asked of another host), responsiveness (a long job leaves the page alone and can be stopped) and
accessibility (axe-core's rules, WCAG 2.1 A and AA; deque.com). Skipped with the reason where
there is no browser, except in CI.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from converter_calc.learning.tuned import load_tuned
from converter_calc.register.register import Register
from tests import page_browser as pb
from tests.conftest import DEMO

HEATS = 50
pytestmark = [
    pytest.mark.xdist_group("browser"),
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("server")


@pytest.fixture(scope="module")
def server(folder: Path) -> Iterator[tuple[str, int]]:
    pb.required_or_skip()
    with pb.served(folder / "log.txt") as found:
        yield found


@pytest.fixture(scope="module")
def chromium(server: tuple[str, int]) -> Iterator[Any]:
    with pb.browser() as found:
        yield found


@pytest.fixture
def page(chromium: Any, server: tuple[str, int]) -> Iterator[Any]:
    found, outside = pb.watched(chromium, server[0])
    pb.go(found, server[0])
    yield found
    found.context.close()
    assert outside == []


def log_of(heats: int) -> bytes:
    lines = (DEMO / "heat_log.csv").read_bytes().splitlines(keepends=True)
    return b"".join(lines[: heats + 1])


def upload(page: Any, place: int, name: str, content: bytes) -> None:
    page.locator("input[type=file]").nth(place).set_input_files(
        {"name": name, "mimeType": "application/octet-stream", "buffer": content}
    )
    pb.settled(page)


def load_shop(page: Any) -> None:
    pb.show(page, "Files")
    upload(page, 1, "shop.toml", (DEMO / "shop.toml").read_bytes())
    upload(page, 0, "h.toml", (DEMO / "ordinary_low_carbon.toml").read_bytes())


def press(page: Any, name: str) -> None:
    page.get_by_role("button", name=name, exact=True).click()
    pb.settled(page)


def choose(page: Any, name: str) -> None:
    page.get_by_role("radiogroup").get_by_text(name, exact=True).click()
    pb.settled(page)


def download(page: Any, label: str, into: Path) -> Path:
    with page.expect_download(timeout=20000) as waiting:
        page.get_by_role("button", name=label, exact=True).click()
    path = into / waiting.value.suggested_filename
    waiting.value.save_as(path)
    return path


def whole_and_accessible(page: Any, view: str) -> None:
    from axe_playwright_python.sync_playwright import Axe

    assert page.locator("[role=alert].cc-fault, .stException").count() == 0, view
    wide = "document.querySelector('.stMain').scrollWidth - innerWidth"
    assert page.evaluate(wide) <= 0, f"{view} runs over the side"
    serious = [
        (broken["id"], node["html"][:200])
        for broken in Axe().run(page).response["violations"]
        if broken["impact"] in ("serious", "critical")
        for node in broken["nodes"]
    ]
    assert serious == [], view


def test_spread_opens_beside_the_recipe_and_its_margin_is_taken(page: Any) -> None:
    from playwright.sync_api import expect

    page.get_by_text("How sure is this plan").click()
    page.get_by_text("All together", exact=True).wait_for(timeout=30000)
    pb.settled(page)
    assert page.get_by_role("img", name="carbon: 90 % of heats end between").is_visible()
    page.get_by_text("What makes the scatter, and").click()
    page.get_by_role("table", name="worth of better measurements").wait_for(timeout=30000)
    pb.settled(page)
    whole_and_accessible(page, "spread")
    scrap = pb.figure_in(page, "scrap, all")
    press(page, "Find the aims for 90 %")
    press(page, "Plan with these aims; the windows stay where they are")
    carbon = expect(pb.box(page, "End carbon, %"))  # the browser fills the field in its own time
    carbon.to_have_value(re.compile(r"0\.03\d+"))
    assert pb.figure_in(page, "scrap, all") != scrap
    press(page, "Put the aims back as they were")
    carbon.to_have_value("0.04")
    assert pb.figure_in(page, "scrap, all") == scrap


def test_heat_recorded_made_compared_and_opened_again(page: Any, folder: Path) -> None:
    pb.write(page, "Heat", "7-1001")
    pb.write(page, "Si, %", "0.61")
    pb.show(page, "Register")
    press(page, "Record the plan of heat 7-1001")
    page.get_by_text("What became of it").click()
    pb.settled(page)
    pb.write(page, "End temperature, °C", "1671,5")
    pb.write(page, "Oxygen blown, Nm³", "11200")
    page.get_by_text("Charge as it was made").click()
    pb.write(page, "Hot metal, kg", "186000")
    press(page, "Record")
    page.get_by_text("Kept as record").wait_for(timeout=20000)
    table = page.get_by_role("table", name="plan and actual")
    assert table.get_by_text("+6.5").is_visible()
    whole_and_accessible(page, "register")
    with Register.open(folder / "converter_register.sqlite", create=False) as book:
        assert book.current_actual("7-1001")["end_temp_C"] == 1671.5
        expected = book.compare("7-1001").rows.set_index("quantity").loc["end_temp_C", "expected"]
    assert table.get_by_text(f"{expected:,.1f}").first.is_visible()
    pb.show(page, "Plan a heat")
    pb.write(page, "Si, %", "0.3")
    pb.show(page, "Register")
    page.get_by_role("button", name="Open plan").click()
    page.locator("table.cc-large").wait_for(timeout=20000)
    pb.settled(page)
    assert pb.value_in(page, "Si, %") == "0.61"


def test_log_taken_in_and_every_download_opens(page: Any, tmp_path: Path) -> None:
    load_shop(page)
    pb.show(page, "Register")
    choose(page, "Logs in and out, backup")
    broken = log_of(HEATS).replace(b",1356,", b",9356,", 1)
    upload(page, 0, "log.csv", broken)
    press(page, "Take it in")
    page.get_by_text("1 rows refused").wait_for(timeout=30000)
    assert page.get_by_role("table", name="refused rows").get_by_text("given 9356").is_visible()
    assert "2-26001" in download(page, "Refused rows (CSV)", tmp_path).read_text("utf-8")
    text = download(page, "Heat log (CSV)", tmp_path).read_text("utf-8")
    assert "2-26050" in text
    assert "2-26001" not in text
    assert download(page, "Heat log (Parquet)", tmp_path).read_bytes().startswith(b"PAR1")
    copy = download(page, "Backup of the register", tmp_path)
    with Register.open(copy, create=False) as book:
        assert book.current_actual("2-26050") is not None


def test_job_leaves_the_page_alone_and_is_cancelled(page: Any) -> None:
    load_shop(page)
    pb.show(page, "Learning")
    upload(page, 0, "log.csv", log_of(400))
    choose(page, "Proof out of sample")
    page.get_by_role("button", name="Prove it out of sample").click()
    page.get_by_role("progressbar").wait_for(timeout=20000)
    pb.show(page, "Plan a heat")
    pb.write(page, "Si, %", "0.7")
    assert page.locator("table.cc-large").is_visible()
    pb.show(page, "Learning")
    page.get_by_role("button", name="Cancel: proof out of sample").click()
    page.get_by_text("was cancelled").wait_for(timeout=20000)
    pb.settled(page)
    assert page.get_by_role("progressbar").count() == 0
    assert page.get_by_role("button", name="Prove it out of sample").is_visible()


def test_learnt_from_a_log_into_the_plan(
    page: Any, chromium: Any, server: Any, tmp_path: Path
) -> None:
    load_shop(page)
    pb.show(page, "Learning")
    upload(page, 0, "log.csv", log_of(HEATS))
    choose(page, "Tuned parameters")
    other, _ = pb.watched(chromium, server[0])  # another session sees nothing of it
    pb.go(other, server[0] + "?view=learning")
    press(page, "Tune the parameters to the log")
    page.get_by_text("Tuning is done").wait_for(timeout=60000)
    pb.settled(page)
    choose(other, "Tuned parameters")
    assert other.get_by_text("Choose a heat log first").is_visible()
    other.context.close()
    whole_and_accessible(page, "tuned")
    tuned = load_tuned(download(page, "Tuned parameters (JSON)", tmp_path))
    choose(page, "Drift")
    page.locator(".js-plotly-plot .main-svg").first.wait_for(timeout=60000)
    whole_and_accessible(page, "drift")
    today = json.loads(download(page, "Offsets of the day (JSON)", tmp_path).read_text("utf-8"))
    assert [entry["name"] for entry in today["tuned"]["parameters"]] == list(tuned.names)
    press(page, "Take today's offsets into the plan")
    pb.show(page, "Plan a heat")
    page.get_by_text("Vessel and practice").click()
    pb.settled(page)
    shown = float(pb.value_in(page, "P approach"))
    assert shown != 0.45
    assert 0.1 < shown < 1.5
    pb.show(page, "Learning")
    assert page.get_by_role("radio", name="Drift").is_checked()
    press(page, "Put back what the fields held before")
    page.get_by_text("The fields hold what they held before").wait_for(timeout=20000)


@pytest.mark.parametrize(("width", "scheme"), [(820, "dark")])
def test_views_at_other_widths_and_themes(
    chromium: Any, server: tuple[str, int], width: int, scheme: str
) -> None:
    found, outside = pb.watched(
        chromium, server[0], viewport={"width": width, "height": 1000}, color_scheme=scheme
    )
    pb.go(found, server[0])
    found.get_by_text("How sure is this plan").click()
    found.get_by_text("All together", exact=True).wait_for(timeout=30000)
    whole_and_accessible(found, "spread")
    for view in ("Register", "Learning"):
        pb.show(found, view)
        whole_and_accessible(found, view)
    found.context.close()
    assert outside == []
