"""The metallurgist's places on the page: wiring and numbers of each view, without a browser.

Kinds of check: contract (what the page shows against the same question asked in Python) and
property (what is typed reaches the heat file and the address and nothing else changes).
"""

from __future__ import annotations

import itertools
import json
import math
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import converter_calc
from converter_calc.balance.heats import heats_from_dict
from converter_calc.heatlog.reading import read_log
from converter_calc.metallurgy.element_shares import element_shares
from converter_calc.metallurgy.flux_choice import choose_fluxes
from converter_calc.metallurgy.flux_mixes import flux_mixes
from converter_calc.metallurgy.flux_search import FluxLimits
from converter_calc.metallurgy.law_ranking import rank_laws
from converter_calc.metallurgy.laws_compared import compare_laws
from converter_calc.metallurgy.lime_limits import lime_limits
from converter_calc.metallurgy.marginal_cost import marginal_cost
from converter_calc.metallurgy.practices import compare_practices
from converter_calc.metallurgy.slag_product import slag_product
from converter_calc.planning.ladle import ladle_of
from converter_calc.planning.lime_sweeps import lime_curve, lime_lines
from converter_calc.planning.outcome import at
from converter_calc.planning.tap import tap
from converter_calc.reporting import tap_charts
from converter_calc.reporting.phosphorus_charts import (
    limits_figure,
    measured_figure,
    measured_text,
    numbered,
)
from converter_calc.reporting.practice_charts import shares_figure
from converter_calc.reporting.tap_charts import drawn_limits, steps_figure, steps_table
from tests.conftest import DEMO
from tests.demo import whole

testing = pytest.importorskip("streamlit.testing.v1", reason="the page needs streamlit")

from converter_calc.page.form import document_of, form_of  # noqa: E402
from converter_calc.page.session import start_form  # noqa: E402
from tests.test_page_app import field, opened, param, texts  # noqa: E402


def heat(app: Any) -> dict[str, Any]:
    """The heat document as the fields of the page make it."""
    return document_of(app.session_state["cc_form"])


def choose(app: Any, key: str, value: str) -> Any:
    """Set the box or radio of a key."""
    (found,) = [x for x in [*app.selectbox, *app.radio] if x.key == key]
    return found.set_value(value).run()


def shown(app: Any, label: str) -> Any:
    (found,) = [x for x in app.selectbox if x.label == label]
    return found


def pictures(app: Any) -> list[Any]:
    found = app.get("plotly_chart")
    assert all(chart.proto.alt for chart in found)
    return list(found)


def put_in(app: Any, document: dict[str, Any]) -> Any:
    """A heat document in the fields of the page."""
    app.session_state["cc_form"] = form_of(document)
    app.session_state["cc_generation"] += 1
    return app.run()


# --- slag practice ---------------------------------------------------------------------------


def test_practices_show_what_python_says_for_typed_inputs() -> None:
    app = opened(view="practice")
    field(app, "First slag poured off, %").set_value("70").run()
    field(app, "Carbon at slag-off, %").set_value("2,8").run()
    document = heat(app)
    assert document["slag_off"] == {"share_pct": 70.0, "C_pct": 2.8}
    assert param(app, "slag_off_share_pct") == "70"
    table = compare_practices(document).table().set_index("practice")
    page = texts(app)
    for name in table.index:
        assert f"{table.loc[name, 'lime_kg']:,.0f}" in page
        assert f"{table.loc[name, 'end_P_pct']:.4f}" in page
    (chart,) = pictures(app)
    bars = json.loads(chart.proto.spec)["data"]
    assert len(bars) == 6
    assert "two slags" in chart.proto.alt
    assert not app.exception


def test_a_practice_opens_its_stages_and_its_explanation() -> None:
    app = opened(view="practice")
    app.session_state["practice_two_slags"] = True
    app.run()
    page = texts(app)
    assert "to slag-off" in page
    assert "ogawa_2001" in page
    assert "Closure over all stages" in page
    choose(app, "why_practices", "two slags, after slag-off: phosphorus")
    assert "L_P" in texts(app)
    choose(app, "why_practices", "kept slag: every number and what it counts")
    assert "liquid slag poured off and at the end, less what came back" in texts(app)


def test_wrong_input_of_a_practice_is_named_and_nothing_is_shown_for_it() -> None:
    app = opened(view="practice")
    field(app, "Carbon at slag-off, %").set_value("4.5").run()
    assert "No plan" not in texts(app)
    field(app, "Carbon at slag-off, %").set_value("0,03").run()
    assert "0.03 is outside 0.1 to 4.5 %" in texts(app)
    assert not app.get("plotly_chart")
    field(app, "Carbon at slag-off, %").set_value("").run()
    assert pictures(app)


def test_practices_belong_to_planning() -> None:
    app = opened(view="practice", question="predict")
    assert not app.get("plotly_chart")
    assert not app.exception


def test_slag_is_shown_with_definitions() -> None:
    app = opened(view="practice", **{"practice.part": "slag"})
    product = slag_product(converter_calc.plan(document_of(start_form())))
    page = texts(app)
    for name in ("basicity_MgO", "optical_basicity"):
        quantity = product.quantities[name]
        assert f"{float(at(quantity.values, 0)):.3f}" in page
    assert "swell when it takes up water" in page


def test_elements_show_shares_law_and_sources() -> None:
    app = opened(view="practice", **{"practice.part": "elements"})
    shares = element_shares(converter_calc.plan(document_of(start_form())))
    page = texts(app)
    for el in ("Mn", "P", "V", "Ti"):
        for place in ("steel", "slag"):
            assert f"{shares.elements[el].pct()[place][0]:.2f}" in page
    assert "park_dzo" in page
    (chart,) = pictures(app)
    spec = json.loads(chart.proto.spec)
    assert {bar["name"] for bar in spec["data"]} >= {"steel", "slag", "gas", "dust"}
    choose(app, "why_elements", "P: charged and leaving")
    assert "brought by hot metal" in texts(app)
    assert "Assis" in texts(app)


# --- tap and ladle ---------------------------------------------------------------------------


def demo_tap(app: Any) -> Any:
    """The demo heat with a grade, in the fields of the page."""
    return put_in(app, whole("structural_grade_to_ladle"))


def test_tap_shows_what_python_says() -> None:
    app = demo_tap(opened(view="tap"))
    told = tap(whole("structural_grade_to_ladle")).document()["tap"]
    page = texts(app)
    assert f"{told['temperature_C']:,.1f} °C" in page
    for row in told["additions"]:
        assert f"{row['mass_kg']:,.1f}" in page
    for row in told["limits"]:
        assert f"{row['pct']:.4f}" in page
    assert "✓ inside" in page
    assert "boils and may throw" in page
    assert len(pictures(app)) == 2
    choose(app, "why_tap", "phosphorus in the ladle")
    assert "given back by the carried-over slag" in texts(app)
    assert not app.exception


def test_choices_of_the_tap_reach_the_heat_file_and_the_answer() -> None:
    app = demo_tap(opened(view="tap"))
    field(app, "From tap to ladle station, min").set_value("20").run()
    shown(app, "Additions aim at").set_value("minimum").run()
    document = heat(app)
    assert document["tap"]["standing_min"] == 20.0
    assert document["tap"]["aim_at"] == "minimum"
    expected = whole("structural_grade_to_ladle")
    expected["tap"] |= {"standing_min": 20, "aim_at": "minimum"}
    told = tap(expected).document()["tap"]
    assert f"{told['temperature_C']:,.1f} °C" in texts(app)
    field(app, "From tap to ladle station, min").set_value("").run()
    shown(app, "Additions aim at").set_value("middle").run()
    assert "aim_at" not in heat(app)["tap"]
    assert "standing_min" not in heat(app)["tap"]


def test_wrong_tap_input_is_kept_and_named() -> None:
    app = opened(view="tap")
    field(app, "Slag carried over, kg/t").set_value("99").run()
    assert "99 is outside 0 to 30 kg/t" in texts(app)
    assert not app.get("plotly_chart")
    assert field(app, "Slag carried over, kg/t").value == "99"
    field(app, "Slag carried over, kg/t").set_value("7,5").run()
    assert heat(app)["tap"] == {"carried_slag_kg_per_t": 7.5}
    assert pictures(app)


def test_tap_temperature_follows_from_the_ladle() -> None:
    app = demo_tap(opened(view="tap"))
    field(app, "Wanted in the ladle, °C").set_value("1585").run()
    (button,) = [x for x in app.button if x.key == "free_tap_temp"]
    button.click().run()
    assert "temp_C" not in heat(app)["aim"]
    assert "1,585.0 °C" in texts(app)


def test_price_of_an_addition_decides() -> None:
    app = demo_tap(opened(view="tap"))
    app.session_state["tap_prices"] = True
    app.run()
    field(app, "FeMn HC, currency/t").set_value("90000").run()
    expected = whole("structural_grade_to_ladle")
    expected["tap"]["price_per_t"]["FeMn HC"] = 90000
    told = tap(expected).document()["tap"]
    assert "FeMn HC" not in [row["name"] for row in told["additions"]]
    page = texts(app)
    for row in told["additions"]:
        assert f"{row['mass_kg']:,.1f}" in page


# --- lime and phosphorus ---------------------------------------------------------------------


def press(app: Any, key: str) -> Any:
    (button,) = [x for x in app.button if x.key == key]
    return button.click().run()


def test_limits_stand_on_the_curve_and_in_the_table() -> None:
    app = opened(view="lime")
    limits = lime_limits(heats_from_dict(document_of(start_form())))
    page = texts(app)
    for mark in limits.marks:
        assert mark.label in page
        if math.isfinite(mark.lime_kg):
            assert f"{mark.lime_kg:,.0f}" in page
    lime = pictures(app)[0]
    notes = [note["text"] for note in json.loads(lime.proto.spec)["layout"]["annotations"]]
    assert "<b>1</b>" in notes
    assert "lime stops dissolving" in lime.proto.alt
    choose(app, "why_limits", "lime stops dissolving")
    assert "(CaO) at which dissolution stops" in texts(app)


def test_every_law_is_planned_once_asked() -> None:
    app = opened(view="lime")
    assert "balajiva_vajragupta_1946" not in texts(app)
    press(app, "compare_laws")
    page = texts(app)
    table = compare_laws(heats_from_dict(document_of(start_form())), ["ogawa_2001"]).table
    assert "balajiva_vajragupta_1946" in page
    assert f"{table['lime_kg'][0]:,.0f}" in page
    assert f"{table['iron_to_slag_kg'][0]:,.0f}" in page
    choose(app, "why_laws", "ogawa_2001: lime")
    assert "approach times the law" in texts(app)
    field(app, "Lime from, kg").set_value("4000").run()
    assert "balajiva_vajragupta_1946" in texts(app)  # still the same heat


def test_cost_of_low_phosphorus_is_that_of_python() -> None:
    app = opened(view="lime", aim_P_pct="0.008", **{"lime.part": "margin"})
    form = start_form()
    form.fields["aim_P_pct"] = "0.008"
    cost = marginal_cost(heats_from_dict(document_of(form)))
    assert cost.binding
    page = texts(app)
    assert f"{cost.change['lime_kg']:+,.1f}" in page
    assert f"{cost.cost:+,.2f}" in page
    assert len(pictures(app)) == 1
    easy = opened(view="lime", **{"lime.part": "margin"})
    assert "nothing: the least basicity sets the lime" in texts(easy)


def test_fluxes_by_least_cost_and_taken_into_the_plan() -> None:
    app = opened(view="lime", **{"lime.part": "fluxes"})
    put_in(app, whole("ordinary_low_carbon"))
    field(app, "Value of a tonne of steel, currency").set_value("420").run()
    press(app, "compare_fluxes")
    heats = heats_from_dict(heat(app))
    choice = choose_fluxes(heats, None, FluxLimits(), 420.0)
    page = texts(app)
    assert f"{choice.cost_per_t:.2f} a tonne of steel" in page
    mixes = flux_mixes(heats).table
    stone = mixes[(mixes["lime"] == "limestone") & (mixes["magnesia"] == "dolomitic_lime")]
    assert f"{stone['heat_MJ'].iloc[0]:+,.0f}" in page
    assert f"{stone['d_CO2_kg_per_t'].iloc[0]:+,.1f}" in page
    press(app, "take_fluxes")
    kg = {use.material: use.kg for use in choice.uses if use.kg > 0.0}
    assert kg
    for name, mass in kg.items():
        assert heat(app)["charge"][f"{name}_kg"] == round(mass)
    press(app, "free_fluxes")
    assert "charge" not in heat(app) or "burnt_lime_kg" not in heat(app)["charge"]


def test_flux_number_out_of_range_is_named() -> None:
    app = opened(view="lime", **{"lime.part": "fluxes", "lime.fluorspar": "-1"})
    assert "-1 is outside 0 to 100" in texts(app)
    assert not app.exception


def test_log_ranks_the_laws_and_one_click_takes_one_over(tmp_path: Path) -> None:
    app = opened(view="lime", **{"lime.part": "measured"})
    press(app, "rank_laws")
    assert "choose a file first" in texts(app)
    rows = (DEMO / "heat_log.csv").read_bytes().splitlines(keepends=True)[:301]
    app.get("file_uploader")[0].set_value(("log.csv", b"".join(rows), "text/csv")).run()
    press(app, "rank_laws")
    path = tmp_path / "log.csv"
    path.write_bytes(b"".join(rows))
    ranking = rank_laws(read_log(path, materials=["ladle_skulls"]).frame)
    page = texts(app)
    for row in ranking.table.to_dict("records"):
        assert f"{row['approach']:,.3f}" in page
    assert len(pictures(app)) == 1
    fit = ranking.fits[str(ranking.offered)]
    press(app, "take_law")
    document = heat(app)
    assert document["law"]["phosphorus"] == fit.law
    assert document["practice"]["P_approach"] == pytest.approx(fit.approach, rel=5e-4)
    assert "The plan now uses" in texts(app)
    assert converter_calc.plan(document).status[0] == "solved"


def test_foreign_log_is_told_in_sentences() -> None:
    app = opened(view="lime", **{"lime.part": "measured"})
    content = b"heat_id,end_P_pct\n=1+1,![x](http://evil.invalid/p.png)\n"
    app.get("file_uploader")[0].set_value(("log.csv", content, "text/csv")).run()
    press(app, "rank_laws")
    page = texts(app)
    assert "The log was not taken" in page
    assert "slag_CaO_pct: no such column in the log" in page
    assert "Refused rows" in page
    assert "converter_calc_" not in page  # no folder of the server
    assert not app.exception


def test_grade_out_of_reach_says_what_binds_and_what_frees() -> None:
    document = whole("structural_grade_to_ladle")
    limits = {"C": {"max": 0.06}, "P": {"max": 0.03}, "Mn": [0.9, 1.1]}
    document["grades"] = {"tight": {"limits": limits}}
    document["aim"]["grade"] = "tight"
    document["tap"]["use"] = ["FeMn HC", "Al"]
    app = put_in(opened(view="tap"), document)
    page = texts(app)
    assert "No additions reach tight" in page
    assert "at most 0.06 % of tight" in page
    assert "freed by" in page
    ladle = ladle_of(converter_calc.plan(document))
    marks = {el: ladle.mark(el, 0) for el in ladle.grade.limits}
    assert "below" in marks.values() or "above" in marks.values()
    signs = {"below": "▼ below", "above": "▲ above", "inside": "✓ inside"}
    assert all(signs[mark] in page for mark in marks.values() if mark in signs)
    assert not app.exception


def test_practice_without_a_plan_stands_beside_those_that_have_one() -> None:
    """A heat with no answer by one slag can still be made of pre-treated hot metal."""
    app = opened(view="practice", aim_P_pct="0.004")
    table = compare_practices(heat(app)).table().set_index("practice")
    assert table.loc["one_slag", "status"] != "solved"
    assert table.loc["pretreated", "status"] == "solved"
    page = texts(app)
    assert "One slag: no plan" in page
    assert f"{table.loc['pretreated', 'lime_kg']:,.0f}" in page
    assert len(pictures(app)) == 1


def test_views_say_where_to_go_when_the_heat_is_wrong() -> None:
    app = opened(view="tap", aim_P_pct="0.001")
    assert "The heat has no answer as it stands; see Plan a heat" in texts(app)
    app = opened(view="practice")
    app.session_state["cc_form"].fields["hot_metal_kg"] = "many"
    app.run()
    assert "hot_metal.mass_kg: &#x27;many&#x27; is no number" in texts(app)
    assert not app.get("plotly_chart")


# --- pictures --------------------------------------------------------------------------------


def test_temperature_steps_end_at_the_ladle() -> None:
    """Closure: the steps add up to the ladle temperature, and the bars are those steps."""
    told = tap(whole("structural_grade_to_ladle")).document()["tap"]
    steps = steps_table(told)
    assert steps["temp_C"].iloc[-2] == pytest.approx(told["temperature_C"], abs=1e-6)
    (bars,) = steps_figure(steps).data
    drawn = steps[steps["change_K"].isna() | (steps["change_K"].abs() >= 0.05)]
    ends = [base + size for base, size in zip(bars.base, bars.x, strict=True)]
    assert ends == pytest.approx(drawn["temp_C"].tolist())
    assert bars.y[0] == "end of the blow"


def test_place_in_the_range_of_the_grade() -> None:
    row = {"element": "Mn", "pct": 1.25, "min_pct": 0.9, "max_pct": 1.6, "mark": "inside"}
    over = {"element": "P", "pct": 0.03, "min_pct": None, "max_pct": 0.02, "mark": "above"}
    open_side = {"element": "Al", "pct": 0.03, "min_pct": 0.015, "max_pct": None, "mark": "inside"}
    assert drawn_limits([row, over, open_side]) == [row, over]
    inside, outside = tap_charts.limits_figure([row, over]).data
    assert (inside.name, list(inside.x)) == ("inside", [pytest.approx(50.0)])
    assert (outside.name, list(outside.x)) == ("outside", [pytest.approx(150.0)])
    assert inside.marker.symbol != outside.marker.symbol


def test_shares_fill_the_bar() -> None:
    """Closure: what is drawn of each element adds up to what was charged."""
    frame = element_shares(converter_calc.plan(document_of(start_form()))).main().frame()
    total = [0.0] * len(frame)
    for bar in shares_figure(frame).data:
        total = [a + b for a, b in zip(total, bar.x, strict=True)]
    assert total == pytest.approx([100.0] * len(frame), rel=1e-9)


def test_numbers_of_the_limits_do_not_overlap() -> None:
    heats = heats_from_dict(document_of(start_form()))
    limits = lime_limits(heats)
    curve = lime_curve(heats, [3000.0, 6000.0, 13000.0], [])
    figure = limits_figure(curve, lime_lines(heats, curve), limits)
    boxes = [(n.x, n.yshift) for n in figure.layout.annotations if n.text.startswith("<b>")]
    assert len(boxes) == len(numbered(limits))
    rows = {shift: sorted(x for x, s in boxes if s == shift) for _, shift in boxes}
    for places in rows.values():
        assert all(b - a >= 0.035 * 10000.0 for a, b in itertools.pairwise(places))


def test_a_wild_analysis_is_counted_and_does_not_squash_the_picture() -> None:
    P = np.linspace(0.005, 0.02, 100)
    tests = pd.DataFrame({"law": "a", "measured_P_pct": P, "calculated_P_pct": P})
    tests.loc[3, "measured_P_pct"] = 0.22
    figure = measured_figure(tests, "a")
    assert figure.layout.xaxis.range[1] < 0.03
    assert "1 beyond the picture" in figure.data[0].name
    assert "1 of them beyond the picture" in measured_text(tests, "a")
