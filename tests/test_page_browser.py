"""The page in a real browser (Debian's chromium, driven by Playwright).

Kinds of check: contract (page against command line, files that open again, nothing asked of
another host) and accessibility (axe-core's rules, WCAG 2.1 A and AA; deque.com). Skipped with
the reason where there is no browser, except in CI. Screenshots go to a temporary folder.
"""

from __future__ import annotations

import csv
import http.client
import io
import json
import subprocess
import sys
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import pytest

from tests import page_browser as pb
from tests.conftest import DEMO

VIEWS = ["Plan a heat", "Heat balance", "Scrap ratio", "Lime and phosphorus", "Files"]
CHARTS = {"Heat balance": 3, "Scrap ratio": 1, "Lime and phosphorus": 4}
pytestmark = [
    pytest.mark.xdist_group("browser"),
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[str, int]]:
    pb.required_or_skip()
    with pb.served(tmp_path_factory.mktemp("server") / "log.txt") as found:
        yield found


@pytest.fixture(scope="module")
def chromium(server: tuple[str, int]) -> Iterator[Any]:
    with pb.browser() as found:
        yield found


@pytest.fixture
def address(server: tuple[str, int]) -> str:
    return server[0]


@pytest.fixture
def page(chromium: Any, address: str) -> Iterator[Any]:
    """A fresh session; in the end no host but the page's own may have been asked."""
    found, outside = pb.watched(chromium, address)
    pb.go(found, address)
    yield found
    found.context.close()
    assert outside == []


def by_command_line(heat: Path) -> dict[str, Any]:
    run = subprocess.run(
        [sys.executable, "-m", "converter_calc", "plan", str(heat), "--json", "-"],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    return dict(json.loads(run.stdout))


def download(page: Any, label: str, into: Path) -> Path:
    with page.expect_download(timeout=20000) as waiting:
        page.get_by_role("button", name=label).click()
    path = into / waiting.value.suggested_filename
    waiting.value.save_as(path)
    return path


def upload(page: Any, place: int, name: str, content: bytes) -> None:
    page.locator("input[type=file]").nth(place).set_input_files(
        {"name": name, "mimeType": "application/octet-stream", "buffer": content}
    )
    pb.settled(page)


def same_as_command_line(page: Any, result: dict[str, Any]) -> None:
    for key, name in (("hot_metal_kg", "hot metal"), ("scrap_total_kg", "scrap, all"),
                      ("burnt_lime_kg", "burnt lime")):  # fmt: skip
        assert pb.figure_in(page, name) == f"{result['recipe'][key]:,.0f} kg"
    assert pb.figure_in(page, "oxygen") == f"{result['recipe']['oxygen_Nm3']:,.0f} Nm³"


def test_typed_heat_equals_command_line(page: Any, tmp_path: Path) -> None:
    for label, text in (("Si, %", "0.62"), ("Temperature, °C", "1362"), ("P, %", "0,091"),
                        ("End carbon, %", "0.05")):  # fmt: skip
        pb.write(page, label, text)
    shown = {name: pb.figure_in(page, name) for name in ("scrap, all", "burnt lime", "oxygen")}
    pb.show(page, "Files")
    heat = download(page, "Heat file, complete", tmp_path)
    saved = tomllib.loads(heat.read_text(encoding="utf-8"))
    assert saved["hot_metal"]["Si_pct"] == 0.62
    assert saved["hot_metal"]["P_pct"] == 0.091
    pb.show(page, "Plan a heat")
    assert shown["scrap, all"] == pb.figure_in(page, "scrap, all")
    same_as_command_line(page, by_command_line(heat))


def test_demo_heat_with_its_shop_equals_command_line(page: Any) -> None:
    pb.show(page, "Files")
    upload(page, 1, "shop.toml", (DEMO / "shop.toml").read_bytes())
    upload(page, 0, "h.toml", (DEMO / "high_silicon.toml").read_bytes())
    assert page.get_by_text("h.toml was taken").is_visible()
    pb.show(page, "Plan a heat")
    same_as_command_line(page, by_command_line(DEMO / "high_silicon.toml"))


def test_reload_and_shared_address_restore_the_heat(page: Any, chromium: Any, address: str) -> None:
    pb.write(page, "Si, %", "0.7")
    scrap = pb.figure_in(page, "scrap, all")
    link = page.url
    assert "hm_Si_pct=0.7" in link
    page.reload()
    pb.box(page, "Si, %").wait_for(timeout=30000)
    pb.settled(page)
    assert pb.value_in(page, "Si, %") == "0.7"
    assert pb.figure_in(page, "scrap, all") == scrap
    other, outside = pb.watched(chromium, address)
    pb.go(other, link)
    assert pb.figure_in(other, "scrap, all") == scrap
    other.context.close()
    assert outside == []


def test_two_sessions_do_not_mix(page: Any, chromium: Any, address: str) -> None:
    other, _ = pb.watched(chromium, address)
    pb.go(other, address)
    before = pb.figure_in(other, "scrap, all")
    pb.write(page, "Si, %", "0.9")
    pb.write(other, "End carbon, %", "0.041")
    assert pb.value_in(other, "Si, %") == "0.48"
    assert pb.figure_in(page, "scrap, all") != before
    other.context.close()


def test_decimal_comma_typed(page: Any) -> None:
    """Trap: number fields of the browser drop the comma: 0,6 becomes 6, or 06."""
    pb.write(page, "Si, %", "0.6")
    with_point = pb.figure_in(page, "scrap, all")
    pb.write(page, "Si, %", "0.48")
    pb.write(page, "Si, %", "0,6")
    assert pb.figure_in(page, "scrap, all") == with_point


def test_out_of_range_and_emptied_field_never_show_another_values_result(page: Any) -> None:
    """Traps: a form works on with the value before; an emptied field takes its default."""
    pb.write(page, "Temperature, °C", "5000")
    assert page.get_by_text("outside 1100 to 1550 °C").first.is_visible()
    assert page.locator("table.cc-large").count() == 0
    pb.write(page, "Temperature, °C", "")
    assert page.get_by_text("hot_metal.temp_C").first.is_visible()
    assert pb.box(page, "Temperature, °C").input_value() == ""
    assert page.locator("table.cc-large").count() == 0
    pb.write(page, "Temperature, °C", "1345")
    assert page.locator("table.cc-large").count() == 1


def test_bad_link_is_told(chromium: Any, address: str) -> None:
    found, outside = pb.watched(chromium, address)
    pb.go(found, address + "?hm_Si_pct=9999&nonsense=%3Cimg%20src%3Dx%20onerror%3Dalert(1)%3E")
    found.get_by_text("hm_Si_pct: 9999 is outside 0 to 5 %").wait_for(timeout=30000)
    found.get_by_text("nonsense: unknown").wait_for(timeout=30000)
    found.context.close()
    assert outside == []


def test_why_opens_its_explanation(page: Any) -> None:
    page.get_by_role("combobox", name="Why this number").click()
    page.keyboard.type("oxygen", delay=20)
    page.keyboard.press("Enter")
    pb.settled(page)
    assert page.get_by_text("Oxygen blown follows from the oxygen balance").is_visible()
    assert page.get_by_role("table", name="oxygen").get_by_text("oxidation of silicon").is_visible()


def test_own_price_and_material_as_a_person_does_it(page: Any, tmp_path: Path) -> None:
    """Trap: a grid of the browser drops the decimal comma: 30,5 becomes 305."""
    page.get_by_text("Materials of the shop and prices").click()
    pb.settled(page)
    pb.write(page, "Price, currency/t", "410,5")
    pb.write(page, "Moisture, %", "99")
    assert page.get_by_text("99 is outside 0 to 30 %").first.is_visible()
    assert pb.value_in(page, "Price, currency/t") == "410,5"
    pb.write(page, "Moisture, %", "0,4")
    pb.write(page, "Its name", "Rail ends")
    page.get_by_role("button", name="Add it").click()
    page.get_by_text("rail ends was added").wait_for(timeout=30000)
    pb.write(page, "Mn", "0,9")
    scrap = pb.figure_in(page, "scrap, all")
    page.reload()
    page.locator("table.cc-large").wait_for(timeout=30000)
    pb.settled(page)
    assert pb.figure_in(page, "scrap, all") == scrap
    pb.show(page, "Files")
    saved = tomllib.loads(download(page, "Heat file, complete", tmp_path).read_text("utf-8"))
    assert saved["materials"]["heavy_scrap"]["price_per_t"] == 410.5
    assert saved["materials"]["heavy_scrap"]["moisture_pct"] == 0.4
    assert saved["materials"]["rail_ends"]["pct"]["Mn"] == 0.9


def test_every_download_opens_again(page: Any, tmp_path: Path) -> None:
    """Trap: a deferred download that needs its session fails only here."""
    from openpyxl import load_workbook

    scrap = pb.figure_in(page, "scrap, all")
    pb.show(page, "Files")
    sheet = download(page, "Charge sheet to print", tmp_path).read_text(encoding="utf-8")
    assert "<script" not in sheet
    assert "http" not in sheet
    book = load_workbook(download(page, "Workbook (XLSX)", tmp_path))
    assert book["recipe"]["A2"].value == "hot metal"
    rows = list(csv.DictReader(download(page, "Recipe (CSV)", tmp_path).open(encoding="utf-8")))
    amount = next(float(row["amount"]) for row in rows if row["name"] == "scrap, all")
    assert f"{amount:,.0f} kg" == scrap
    result = json.loads(download(page, "Everything (JSON)", tmp_path).read_text(encoding="utf-8"))
    assert f"{result['recipe']['scrap_total_kg']:,.0f} kg" == scrap
    assert result["inputs"]["hot_metal.Si_pct"]["value"] == 0.48
    shop = tomllib.loads(download(page, "Shop file", tmp_path).read_text(encoding="utf-8"))
    assert "materials" in shop
    assert "hot_metal" not in shop


def test_table_good_broken_and_hostile(page: Any, tmp_path: Path) -> None:
    pb.show(page, "Files")
    heading = "heat_id,hot_metal_kg,hot_metal_temp_C,hm_C_pct,hm_Si_pct\n"
    # markdown, HTML and a formula where a spreadsheet or page might run them
    evil = "![t](http://evil.invalid/p.png)"
    hostile = heading + f'"{evil}",180000,1340,4.5,0.45\n"=1+1",181000,1340,4.5,0.45\n'
    upload(page, 2, "<img src=x>.csv", hostile.encode())
    page.get_by_role("button", name="Work out all heats").click()
    page.get_by_text("2 solved").wait_for(timeout=30000)
    pb.settled(page)
    table = download(page, "Results (CSV)", tmp_path).read_text(encoding="utf-8")
    rows = list(csv.reader(io.StringIO(table)))
    assert rows[1][0] == evil
    assert rows[2][0] == "'=1+1"
    upload(page, 2, "bad.csv", (heading + "a,180000,9999,4.5,0.45\n").encode())
    page.get_by_role("button", name="Work out all heats").click()
    page.get_by_text("The table was not worked out").wait_for(timeout=30000)
    assert page.get_by_text("hot_metal_temp_C").last.is_visible()
    upload(page, 2, "broken.xlsx", b"PK\x03\x04 no workbook")
    page.get_by_role("button", name="Work out all heats").click()
    page.get_by_text("is no workbook").wait_for(timeout=30000)
    assert page.locator("img[src*=evil]").count() == 0


def test_lime_carried_back(page: Any) -> None:
    pb.show(page, "Lime and phosphorus")
    button = page.get_by_role("button", name="Plan with")
    kg = button.inner_text().split()[2]
    button.click()
    pb.settled(page)
    pb.show(page, "Plan a heat")
    assert pb.figure_in(page, "burnt lime") == f"{kg} kg"


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [1280, 820])
def test_each_view_is_whole_and_accessible(
    chromium: Any, address: str, tmp_path: Path, width: int, scheme: str
) -> None:
    from axe_playwright_python.sync_playwright import Axe

    axe = Axe()
    found, outside = pb.watched(
        chromium, address, viewport={"width": width, "height": 1000}, color_scheme=scheme
    )
    pb.go(found, address)
    found.get_by_text("Materials of the shop and prices").click()
    for view in VIEWS:
        pb.show(found, view)
        for _ in range(CHARTS.get(view, 0)):
            found.locator(".js-plotly-plot .main-svg").first.wait_for(timeout=60000)
        pb.settled(found)
        assert found.locator(".js-plotly-plot").count() == CHARTS.get(view, 0)
        assert found.locator("[role=alert].cc-fault, .stException").count() == 0
        wide = "document.querySelector('.stMain').scrollWidth - innerWidth"
        assert found.evaluate(wide) <= 0, f"{view} runs over the side at {width} px"
        serious = [
            (broken["id"], node["html"][:200])
            for broken in axe.run(found).response["violations"]
            if broken["impact"] in ("serious", "critical")
            for node in broken["nodes"]
        ]
        assert serious == [], view
        found.set_viewport_size({"width": width, "height": pb.height_of(found) + 80})
        found.screenshot(path=str(tmp_path / f"{view}_{width}_{scheme}.png"))
        found.set_viewport_size({"width": width, "height": 1000})
    found.context.close()
    assert outside == []


def test_keyboard_goes_in_reading_order(page: Any) -> None:
    pb.box(page, "Heat").focus()
    places = []
    for _ in range(40):
        place = page.evaluate(
            "() => { const e = document.activeElement, r = e.getBoundingClientRect();"
            "return e.matches('input[type=text]') ?"
            " [Math.round((r.top + document.querySelector('.stMain').scrollTop) / 10), r.left]"
            " : null }"
        )
        if place:
            places.append(place)
        page.keyboard.press("Tab")
    assert len(places) >= 12
    assert places == sorted(places)


def test_server_listens_on_this_machine_only(server: tuple[str, int]) -> None:
    psutil = pytest.importorskip("psutil")
    places = {
        found.laddr.ip
        for found in psutil.Process(server[1]).net_connections(kind="inet")
        if found.status == psutil.CONN_LISTEN
    }
    assert places == {"127.0.0.1"}


@pytest.mark.parametrize("header", [{"Host": "evil.invalid"}, {"Origin": "http://evil.invalid"}])
def test_foreign_host_or_origin_gets_no_session(address: str, header: dict[str, str]) -> None:
    """RFC 6455: the server may refuse a WebSocket by Host and Origin."""
    own = urlsplit(address).netloc
    asked = {
        "Host": own, "Origin": f"http://{own}", "Connection": "Upgrade", "Upgrade": "websocket",
        "Sec-WebSocket-Version": "13", "Sec-WebSocket-Key": "dGhlIHNhbXBsZSBub25jZQ==",
    }  # fmt: skip
    for headers, status in ((asked, 101), (asked | header, 403)):
        link = http.client.HTTPConnection(own, timeout=10)
        link.putrequest("GET", "/_stcore/stream", skip_host=True)
        for name, text in headers.items():
            link.putheader(name, text)
        link.endheaders()
        assert link.getresponse().status == status
        link.close()
