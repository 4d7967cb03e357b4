"""The printable charge sheet: same numbers, everything escaped, nothing fetched.

Kinds of check: "contract" = read back with the standard library's HTML parser.
"""

from __future__ import annotations

import datetime as dt
import re
from html.parser import HTMLParser

import pytest

from converter_calc.basis.errors import InputError
from converter_calc.planning.plan import as_heats, plan, plan_heats
from converter_calc.reporting import tables
from converter_calc.reporting.charge_sheet import SAFETY
from converter_calc.reporting.html_sheet import Markup, element, html_sheet

from .conftest import DEMO, demo_files

VOID = {"meta"}
EVIL = "<script>alert(1)</script>\"'&<img src=http://evil.example/x onerror=1>"


class Reader(HTMLParser):
    """Tags, attributes and texts, with a check that every element is closed in order."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.attributes, self.texts, self.open = [], [], [], []
        self.feed(text)
        self.close()
        assert not self.open

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.texts.append(data)


@pytest.fixture(scope="module")
def outcome():
    return plan(DEMO / "ordinary_low_carbon.toml")


def test_numbers_are_those_of_the_plan(outcome):
    """contract: each weight of the recipe, the end point, the aims, the flows."""
    page = Reader(html_sheet(outcome))
    texts = [text.strip() for text in page.texts]
    document = outcome.document()
    for key in ("hot_metal_kg", "scrap_total_kg", "burnt_lime_kg", "oxygen_Nm3"):
        assert f"{document['recipe'][key]:,.0f}" in texts
    end = document["end_point"]
    assert f"{end['steel_pct']['P']:.4f}" in texts
    assert f"{outcome.heats.values['aim_P_pct'][0]:.4f}" in texts
    assert f"{end['slag_pct']['CaO']:.2f}" in texts
    for row in tables.heat_flow_table(outcome).to_dict("records"):
        assert f"{row['heat_MJ']:,.0f} ({row['share_pct']:.1f} %)" in texts
    for warning in outcome.warnings(0):
        assert any(warning["message"] in text for text in texts)
    for caution in SAFETY:
        assert caution in texts


@pytest.mark.parametrize("path", demo_files(), ids=lambda p: p.stem)
def test_page_is_whole_and_fetches_nothing(path):
    """contract: well formed; no script, link, image, style import or address anywhere."""
    ((_, outcome),) = plan_heats(as_heats(path))
    text = html_sheet(outcome, date=dt.date(2026, 12, 1))
    page = Reader(text)
    assert text.startswith("<!DOCTYPE html>")
    assert not {"script", "link", "img", "iframe", "object", "embed", "a", "form"} & set(page.tags)
    assert not {"src", "href", "action", "xlink:href", "style"} & {k for k, _ in page.attributes}
    assert not any(name.startswith("on") for name, _ in page.attributes)
    assert "http" not in text
    assert "@import" not in text
    assert "url(" not in text
    assert text.count("<svg") == 2
    assert "2026-12-01" in text


def test_bars_are_as_long_as_the_heat(outcome):
    """contract: width of each bar in proportion to its MJ, to the rounding of the picture."""
    text = html_sheet(outcome)
    widths = sorted(float(w) for w in re.findall(r'<rect [^>]*?width="([\d.]+)"', text))
    heats = sorted(tables.heat_flow_table(outcome)["heat_MJ"])
    assert len(widths) == len(heats)
    for width, heat in zip(widths, heats, strict=True):
        assert width == pytest.approx(heat / heats[-1] * widths[-1], abs=0.11)


def test_text_from_the_user_is_escaped(plain_heat):
    """contract: names, notes and materials of a hostile file are text, not tags."""
    plain_heat["heat_id"] = EVIL
    plain_heat["why"] = EVIL
    text = html_sheet(plan(plain_heat))
    page = Reader(text)
    assert "script" not in page.tags
    assert "img" not in page.tags
    assert any(EVIL in part for part in page.texts)
    assert "<script" not in text
    assert element("p", "<b>", title='"x"') == '<p title="&quot;x&quot;">&lt;b&gt;</p>'
    assert element("p", Markup("<b></b>")) == "<p><b></b></p>"


def test_blanks_for_actual_values_signature_and_date(outcome):
    """contract: one blank a row of charge, end point and slag; a blank date without one."""
    text = html_sheet(outcome)
    rows = len(tables.recipe_table(outcome))
    assert text.count('class="blank"') > rows + 12
    for role in ("charge calculated by", "checked by", "blown by"):
        assert role in text
    assert "Date: ____" in text


def test_paper_and_units(outcome):
    """contract: @page of the paper asked for; pounds and Fahrenheit on request."""
    assert "@page { size: A4; margin" in html_sheet(outcome, paper="A4")
    assert "@page { size: letter; margin" in html_sheet(outcome, paper="Letter")
    us = html_sheet(outcome, units="us")
    fahrenheit = outcome.document()["end_point"]["temperature_C"] * 1.8 + 32.0
    assert f"{fahrenheit:,.0f}" in us
    short_tons = outcome.document()["recipe"]["hot_metal_kg"] / 907.18474  # NIST SP 811
    assert f"{short_tons:,.3f}"[:-1] in us
    with pytest.raises(InputError, match="paper"):
        html_sheet(outcome, paper="A3")
    with pytest.raises(InputError, match="units"):
        html_sheet(outcome, units="stone")


def test_heat_that_cannot_be_made_says_so(plain_heat):
    """contract"""
    plain_heat["limit"] = {"charge_kg": 150000.0}
    ((_, outcome),) = plan_heats(as_heats(plain_heat))
    assert outcome.status == ["infeasible"]
    text = html_sheet(outcome)
    assert "NOT TO BE CHARGED: infeasible" in text
    assert "NOT TO BE CHARGED" not in html_sheet(plan(DEMO / "ordinary_low_carbon.toml"))
