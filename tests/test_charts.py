"""Tables and pictures of a heat and of the sweeps.

Kinds of check: "closure" = sums agree; "source" = colour vision and contrast by published
measures; "contract" = titles with units, one-line labels, hover texts, sentences.
"""

from __future__ import annotations

import re

import numpy as np
import pytest

from converter_calc.basis.errors import InputError
from converter_calc.planning.lime_sweeps import lime_curve, lime_lines, phosphorus_effects
from converter_calc.planning.plan import plan
from converter_calc.planning.sweeps import map_columns, scrap_ratio_map, today_point
from converter_calc.reporting import charts, sweep_charts, tables

from .conftest import DEMO

pytest.importorskip("plotly", reason="plotly is needed for the pictures")

HEATS = ["ordinary_low_carbon", "scrap_short_needs_ore", "cold_hot_metal"]
#: Full protanopia and deuteranopia in linear RGB: Machado, Oliveira, Fernandes, IEEE Trans.
#: Vis. Comput. Graph. 15 (2009) 1291, table 1 at severity 1.0 (from memory).
DEFICIENCIES = {
    "normal": np.eye(3),
    "protan": np.array([[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
                        [-0.003882, -0.048116, 1.051998]]),
    "deutan": np.array([[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
                        [-0.011820, 0.042940, 0.968881]]),
}  # fmt: skip


@pytest.fixture(scope="module", params=HEATS)
def outcome(request):
    return plan(DEMO / f"{request.param}.toml")


@pytest.fixture(scope="module")
def ordinary():
    return plan(DEMO / "ordinary_low_carbon.toml")


@pytest.fixture(scope="module")
def sweep(ordinary):
    heats = ordinary.heats
    frame = scrap_ratio_map(heats, np.linspace(6, 34, 8), np.linspace(1260, 1420, 5), [0.3, 0.48])
    curve = lime_curve(heats, np.linspace(2000, 12000, 9))
    return {
        "frame": frame, "columns": map_columns(heats), "today": today_point(ordinary),
        "curve": curve, "lines": lime_lines(heats, curve), "effects": phosphorus_effects(heats),
    }  # fmt: skip


def linear(colour: str) -> np.ndarray:
    """Linear RGB of #rrggbb: IEC 61966-2-1 (sRGB)."""
    rgb = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255.0
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def lab(rgb: np.ndarray) -> np.ndarray:
    """CIE 1976 L*a*b* of linear sRGB, D65."""
    to_xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722],
                       [0.0193, 0.1192, 0.9505]])  # fmt: skip
    t = to_xyz @ np.clip(rgb, 0.0, 1.0) / np.array([0.9505, 1.0, 1.089])
    f = np.where(t > 0.008856, np.cbrt(t), 7.787 * t + 16.0 / 116.0)
    return np.array([116.0 * f[1] - 16.0, 500.0 * (f[0] - f[1]), 200.0 * (f[1] - f[2])])


def contrast(a: str, b: str) -> float:
    """Contrast ratio: WCAG 2.2, section 1.4.3."""
    light = sorted(float(linear(c) @ [0.2126, 0.7152, 0.0722]) for c in (a, b))
    return (light[1] + 0.05) / (light[0] + 0.05)


@pytest.mark.parametrize("vision", DEFICIENCIES)
def test_palette_is_told_apart(vision):
    """source: CIE 1976 distance of each pair above 20 (2.3 is just noticeable), for each vision."""
    seen = {name: lab(DEFICIENCIES[vision] @ linear(colour))
            for name, colour in charts.PALETTE.items()}  # fmt: skip
    names = list(seen)
    for k, one in enumerate(names):
        for other in names[k + 1 :]:
            distance = float(np.linalg.norm(seen[one] - seen[other]))
            assert distance > 20.0, f"{one} and {other}: {distance:.1f}"


def test_text_is_readable_in_both_themes():
    """source: WCAG 2.2 asks for 4.5 of text, 3 of parts of a picture."""
    assert contrast(charts.THEMES["light"][0], "#ffffff") > 4.5
    assert contrast(charts.THEMES["dark"][0], "#0e1117") > 4.5
    with pytest.raises(InputError, match="light or dark"):
        charts.themed("sepia")


def test_heat_tables_close(outcome):
    """closure: terms sum to zero; both sides of the flows are equal; supplied heat is 100 %."""
    terms = tables.heat_balance_table(outcome)
    total = terms["heat_MJ"].abs().sum()
    assert abs(terms["heat_MJ"].sum()) < 1e-9 * total
    flows = tables.heat_flow_table(outcome)
    assert (flows["heat_MJ"] > 0.0).all()
    sides = flows.groupby("side")["heat_MJ"].sum()
    assert abs(sides["in"] - sides["out"]) < 1e-9 * sides["in"]
    steel_t = outcome.document()["end_point"]["steel_kg"] / 1000.0
    np.testing.assert_allclose(flows["heat_MJ_per_t"] * steel_t, flows["heat_MJ"], rtol=1e-12)
    streams = [n.replace("_", " ") for n in tables.DESTINATIONS]
    carried = terms["term"].isin([f"heat content of {n}" for n in streams] + ["heat loss"])
    np.testing.assert_allclose(terms.loc[carried, "share_pct"].sum(), -100.0, rtol=1e-9)


def test_heat_content_of_steel_is_that_of_the_document(outcome):
    """closure: the pure elements are the zero, so a metal's enthalpy is its heat content."""
    steel = next(s for s in outcome.document()["streams"] if s["name"] == "steel")
    flows = tables.heat_flow_table(outcome).set_index("name")
    np.testing.assert_allclose(flows.loc["steel", "heat_MJ"], steel["enthalpy_MJ"], rtol=1e-9)


def test_ore_stands_on_the_other_side():
    """property: reduced ore takes heat, so iron is no input of that heat, and nothing is lost."""
    outcome = plan(DEMO / "scrap_short_needs_ore.toml")
    flows = tables.heat_flow_table(outcome)
    iron = flows[flows["name"].str.startswith("iron oxide reduced")]
    assert iron["side"].tolist() == ["out"]
    figure = charts.heat_flow_figure(flows)
    assert min(figure.data[0].link.value) > 0.0
    drawn = [customdata[0] for customdata in figure.data[0].link.customdata]
    assert sorted(drawn) == sorted(flows["name"])


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_flow_picture_closes_and_has_room(outcome, theme):
    """closure and contract: in = out at the middle, one-line labels in slots of 24 px or more."""
    figure = charts.heat_flow_figure(tables.heat_flow_table(outcome), theme)
    (sankey,) = figure.data
    link, node = sankey.link, sankey.node
    middle = len(node.label) - 1
    value, source, target = (np.array(x) for x in (link.value, link.source, link.target))
    inflow, outflow = value[target == middle].sum(), value[source == middle].sum()
    assert abs(inflow - outflow) < 1e-9 * inflow
    assert sankey.arrangement == "fixed"
    assert all(re.fullmatch(r"[^\n]+ [\d,]+ MJ( \(\d+\.\d %\))?", text) for text in node.label)
    room = figure.layout.height - figure.layout.margin.t - figure.layout.margin.b
    for place in (0.001, 0.999):
        y = np.sort([y for x, y in zip(node.x, node.y, strict=True) if x == place])
        assert (np.diff(y) * room >= 24.0 - 1e-6).all()
        assert y[0] > 0.0
        assert y[-1] < 1.0
    assert sankey.textfont.color == charts.THEMES[theme][0]
    assert sankey.textfont.shadow == "none"
    assert "MJ/t" in link.hovertemplate


def test_bars_carry_the_table(outcome):
    """closure: bars are the flows; signs stand beside the colour."""
    flows = tables.heat_flow_table(outcome)
    figure = charts.heat_bars_figure(flows)
    drawn = np.concatenate([bar.x for bar in figure.data])
    np.testing.assert_allclose(np.sort(drawn), np.sort(flows["heat_MJ"]), rtol=1e-12)
    assert all(name.startswith("+ ") for name in figure.data[0].y)
    assert all(name.startswith("− ") for name in figure.data[1].y)
    assert figure.layout.xaxis.title.text == "heat, MJ"


def test_elements_go_somewhere(outcome):
    """closure: shares of each element sum to 100 %; in equals out to 1e-9."""
    table = tables.element_balance_table(outcome)
    shares = table.filter(like="to ")
    np.testing.assert_allclose(shares.sum(axis=1), 100.0, rtol=1e-9)
    np.testing.assert_allclose(table["in_kg"], table["out_kg"], rtol=1e-9)
    P = table.set_index("element").loc["P"]
    end = outcome.document()["end_point"]
    np.testing.assert_allclose(
        P["to steel"] / 100.0 * P["out_kg"], end["steel_kg"] * end["steel_pct"]["P"] / 100.0,
        rtol=1e-9,
    )  # fmt: skip
    figure = charts.element_figure(table)
    assert figure.layout.barmode == "stack"
    np.testing.assert_allclose(np.sum([bar.x for bar in figure.data], axis=0), 100.0, rtol=1e-6)
    assert abs(tables.energy_closure(outcome)["relative"]) < 1e-9


def test_recipe_table_is_the_recipe(outcome):
    """closure"""
    document = outcome.document()
    table = tables.recipe_table(outcome).set_index("name")
    steel_t = document["end_point"]["steel_kg"] / 1000.0
    assert table.loc["oxygen", "amount"] == document["recipe"]["oxygen_Nm3"]
    assert table.loc["oxygen", "unit"] == "Nm³"
    assert table.loc["scrap, all", "amount"] == document["recipe"]["scrap_total_kg"]
    np.testing.assert_allclose(table["per_t"] * steel_t, table["amount"], rtol=1e-12)
    slag = tables.slag_table(outcome)
    np.testing.assert_allclose(slag["pct"].sum(), 100.0, rtol=1e-12)
    np.testing.assert_allclose(slag["kg"].sum(), document["end_point"]["slag_kg"], rtol=1e-9)
    streams = tables.streams_table(outcome)
    sides = streams.groupby("side")["mass_kg"].sum()
    np.testing.assert_allclose(sides["in"], sides["out"], rtol=1e-9)


def test_inputs_used_hold_defaults_and_choices(ordinary):
    """contract: what the file gives, what the shop gives, and a default."""
    used = tables.inputs_table(ordinary.heats).set_index("field")["value"]
    assert used["hot_metal.mass_kg"] == 185000.0
    assert used["hot_metal.Si_pct"] == pytest.approx(ordinary.heats.hm_pct["Si"][0])
    assert used["practice.oxygen_purity_pct"] == 99.6
    assert used["practice.dust_kg_per_t"] == 15.0
    assert used["choice.lime"] == "burnt_lime"
    assert "heavy_scrap 50 %" in used["choice.scrap_mix"]
    assert used["law.phosphorus"] == "assis_2019"
    assert "charge.oxygen_Nm3" not in used.index


def all_figures(ordinary, sweep, theme):
    flows = tables.heat_flow_table(ordinary)
    yield charts.heat_bars_figure(flows, theme)
    yield charts.element_figure(tables.element_balance_table(ordinary), theme=theme)
    for quantity, column in sweep["columns"].items():
        if column.unit and quantity not in ("scrap_share_pct", "hot_metal_temp_C", "hm_Si_pct"):
            yield sweep_charts.scrap_map_figure(
                sweep["frame"], sweep["columns"], quantity, sweep["today"], theme=theme
            )
    yield sweep_charts.lime_figure(sweep["curve"], sweep["lines"], theme)
    for kind, table in sweep["effects"].items():
        yield sweep_charts.effect_figure(table, kind, theme)


@pytest.mark.parametrize("theme", ["light", "dark"])
def test_every_picture_has_titles_with_units_and_clear_ground(ordinary, sweep, theme):
    """contract"""
    count = 0
    for figure in all_figures(ordinary, sweep, theme):
        count += 1
        layout = figure.layout
        assert re.search(r", (MJ|%|kg|°C|mass %|kg/t steel)", layout.xaxis.title.text)
        titles = (layout.yaxis.title.text or "", layout.xaxis.title.text)
        assert titles[0] == "" or titles[0] == "element" or re.search(r", (°C|mass %)", titles[0])
        assert layout.paper_bgcolor == "rgba(0,0,0,0)"
        assert layout.font.color == charts.THEMES[theme][0]
        assert layout.autosize
        assert len(figure.to_json()) > 500
    assert count > 15


def test_map_shows_what_cannot_be_made_and_today(sweep):
    """closure: the grid is the frame's, the cross is today's heat, the table is NaN there."""
    frame, columns, today = sweep["frame"], sweep["columns"], sweep["today"]
    assert 0 < frame["feasible"].sum() < len(frame)
    figure = sweep_charts.scrap_map_figure(frame, columns, "oxygen_Nm3", today)
    part = frame[frame["hm_Si_pct"] == 0.48]
    assert np.sort(np.ravel(figure.data[0].z)) == pytest.approx(np.sort(part["oxygen_Nm3"]))
    barred = np.array(figure.data[1].z)
    assert barred.sum() == (~part["feasible"]).sum()
    cross = next(trace for trace in figure.data if trace.name == "today's heat")
    assert (cross.x[0], cross.y[0]) == (today["scrap_share_pct"], today["hot_metal_temp_C"])
    table = sweep_charts.scrap_map_table(frame, "oxygen_Nm3", today)
    assert table.isna().to_numpy().sum() == (~part["feasible"]).sum()
    row = part[part["feasible"]].iloc[0]
    assert table.loc[row["hot_metal_temp_C"], row["scrap_share_pct"]] == row["oxygen_Nm3"]
    with pytest.raises(InputError, match="no number"):
        sweep_charts.scrap_map_figure(frame, columns, "binding")


def test_map_picks_the_silicon_asked_for(sweep):
    """contract"""
    figure = sweep_charts.scrap_map_figure(sweep["frame"], sweep["columns"], Si_pct=0.31)
    assert "0.30 % Si" in figure.layout.yaxis.title.text
    part = sweep["frame"][sweep["frame"]["hm_Si_pct"] == 0.3]
    assert np.nanmax(figure.data[0].z) == part["trim_kg"].max()


def test_lime_picture_spans_all_laws(sweep):
    """closure: the band spans all laws; the cross is the lime for the aim."""
    curve, lines = sweep["curve"], sweep["lines"]
    band = sweep_charts.lime_band(curve).set_index("lime_kg")
    kg = curve["lime_kg"].iloc[3]
    at = curve.loc[curve["lime_kg"] == kg, "end_P_pct"]
    assert (band.loc[kg, "lowest_P_pct"], band.loc[kg, "highest_P_pct"]) == (at.min(), at.max())
    figure = sweep_charts.lime_figure(curve, lines)
    cross = next(trace for trace in figure.data if trace.name.startswith("lime for the aim"))
    assert cross.x[0] == lines.for_aim_kg[lines.law]
    upright = [shape.x0 for shape in figure.layout.shapes if shape.yref == "paper"]
    named = sweep_charts.lime_lines_table(lines)
    assert upright == named["lime_kg"].iloc[:3].tolist()
    assert len(named) == 3 + curve["law"].nunique()
    chosen = [trace for trace in figure.data if "(chosen)" in trace.name]
    assert len(chosen) == 1
    assert chosen[0].y == pytest.approx(band["chosen_P_pct"])


def test_sentences_tell_the_numbers(ordinary, sweep):
    """contract: each picture has one sentence that holds its main numbers."""
    flows = tables.heat_flow_table(ordinary)
    total = flows.loc[flows["side"] == "in", "heat_MJ"].sum()
    lines = sweep["lines"]
    frame, columns = sweep["frame"], sweep["columns"]
    made = int(frame.loc[frame["hm_Si_pct"] == 0.48, "feasible"].sum())
    effect = sweep["effects"]["tap_temperature"]["end_P_pct"]
    expected = {
        charts.heat_flow_text(flows): f"{total:,.0f} MJ",
        charts.heat_bars_text(flows): "most: hot metal",
        charts.element_text(tables.element_balance_table(ordinary)): "% to gas",
        sweep_charts.scrap_map_text(frame, columns, "trim_kg", sweep["today"]): f"{made} of 40",
        sweep_charts.lime_text(sweep["curve"], lines): f"{lines.for_aim_kg[lines.law]:,.0f} kg",
        sweep_charts.effect_text(sweep["effects"]["tap_temperature"], "tap_temperature"):
            f"{effect.iloc[-1]:.4f} %",
    }  # fmt: skip
    for sentence, part in expected.items():
        assert part in sentence
        assert sentence.endswith(".")
        assert "\n" not in sentence
