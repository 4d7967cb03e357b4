"""Materials and prices on the page: what is typed is what the planner gets, and nothing is lost.

Kinds of check: contract (the page's document against the planner, the saved file and the
address) and property (a wrong entry changes nothing else). All numbers are invented.
"""

from __future__ import annotations

import tomllib
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import converter_calc
from converter_calc.balance.materials import compile_material, library_fields
from converter_calc.balance.schema import material_fields
from converter_calc.basis.errors import InfeasibleError, InputError

testing = pytest.importorskip("streamlit.testing.v1", reason="the page needs streamlit")

from converter_calc.page import materials as shop  # noqa: E402
from converter_calc.page.address import address_of, form_from, too_long  # noqa: E402
from converter_calc.page.form import document_of, form_of  # noqa: E402
from converter_calc.page.session import start_form  # noqa: E402
from converter_calc.page.toml_text import toml_text  # noqa: E402
from tests.test_page_app import field, opened, param, texts  # noqa: E402

GROUP = "group_Materials of the shop and prices"


def planned(form: Any) -> Any:
    return converter_calc.plan(document_of(form))


def test_price_and_stock_reach_the_planner() -> None:
    form = start_form()
    before = float(planned(form).cost()[0])
    shop.take_number(form, "heavy_scrap", "price_per_t", "410,5")
    assert document_of(form)["materials"]["heavy_scrap"]["price_per_t"] == 410.5
    outcome = planned(form)
    kg, steel = outcome.charged_kg["heavy_scrap"], outcome.state.steel_kg
    rise = (410.5 - 310.0) * float(kg[0]) / float(steel[0])
    assert float(outcome.cost()[0]) - before == pytest.approx(rise, rel=1e-9)
    shop.take_number(form, "heavy_scrap", "stock_kg", "9000")
    with pytest.raises(InfeasibleError, match=r"materials\.heavy_scrap\.stock_kg"):
        planned(form)


def test_changed_moisture_keeps_the_analysis_of_the_library() -> None:
    form = start_form()
    shop.take_number(form, "lump_ore", "moisture_pct", "7")
    wet = compile_material("lump_ore", shop.whole(form, "lump_ore"))
    dry = compile_material("lump_ore", library_fields()["lump_ore"])
    assert wet.species_kg["H2O"] > dry.species_kg.get("H2O", 0.0)
    iron = {name: x.species_kg["Fe2O3"] for name, x in (("wet", wet), ("dry", dry))}
    left = (100.0 - 7.0) / (100.0 - library_fields()["lump_ore"].get("moisture_pct", 0.0))
    assert iron["wet"] == pytest.approx(iron["dry"] * left, rel=1e-9)


def test_changed_analysis_keeps_moisture_and_loss_on_ignition() -> None:
    """Trap: a new analysis replaces the whole composition of the library."""
    form = start_form()
    library = library_fields()["burnt_lime"]
    shares = library["pct"]
    shop.take_number(form, "burnt_lime", "pct.SiO2", f"{shares['SiO2'] + 0.5}")
    fields = document_of(form)["materials"]["burnt_lime"]
    assert fields["pct"] == {**shares, "SiO2": shares["SiO2"] + 0.5}
    for key in ("loss_on_ignition_pct", "moisture_pct"):
        assert fields.get(key) == library.get(key)
    assert fields["price_per_t"] == 118


def test_blank_field_goes_back_to_the_library() -> None:
    form = start_form()
    start = document_of(form)
    density = library_fields()["heavy_scrap"]["bulk_density_kg_per_m3"]
    assert shop.shown_text(form, "heavy_scrap", "bulk_density_kg_per_m3") == ""
    assert shop.blank_text(form, "heavy_scrap", "bulk_density_kg_per_m3") == f"{density}"
    shop.take_number(form, "heavy_scrap", "bulk_density_kg_per_m3", "700")
    assert document_of(form) != start
    shop.take_number(form, "heavy_scrap", "bulk_density_kg_per_m3", "")
    assert document_of(form) == start


@pytest.mark.parametrize(
    ("key", "text", "word"),
    [("price_per_t", "-3", "outside 0 to"), ("moisture_pct", "1,350", "could be"),
     ("stock_kg", "lots", "no number"), ("pct.CaO", "300", "outside 0 to 100")],
)  # fmt: skip
def test_wrong_entry_is_named_and_the_rest_is_kept(key: str, text: str, word: str) -> None:
    form = start_form()
    before = document_of(form)
    shop.take_number(form, "burnt_lime", key, text)
    assert shop.shown_text(form, "burnt_lime", key) == text
    with pytest.raises(InputError, match=word) as caught:
        document_of(form)
    (fault,) = caught.value.faults
    assert fault.field == f"materials.burnt_lime.{key}"
    assert shop.faults_of(form, "burnt_lime") == [fault]
    shop.take_number(form, "burnt_lime", "stock_kg", "" if key == "stock_kg" else "50000")
    old = shop.shown_text(start_form(), "burnt_lime", key)
    shop.take_number(form, "burnt_lime", key, old)
    now = document_of(form)
    if key != "stock_kg":
        assert now["materials"]["burnt_lime"].pop("stock_kg") == 50000
    compiled = [
        compile_material("burnt_lime", {**library_fields()["burnt_lime"], **x}).species_kg
        for x in (before["materials"]["burnt_lime"], now["materials"]["burnt_lime"])
    ]
    assert compiled[1] == compiled[0]


def test_analysis_above_100_is_named_at_the_material() -> None:
    form = start_form()
    shop.take_number(form, "burnt_lime", "pct.SiO2", "40")
    (fault,) = shop.faults_of(form, "burnt_lime")
    assert fault.field == "materials.burnt_lime.pct"
    assert "above 100" in fault.message


@pytest.mark.parametrize(
    ("text", "word"),
    [("", "a name first"), ("burnt lime", "there already"), ("hot metal", "field of its own"),
     ("<b>x</b>", "is no name"), ("9 tonnes", "is no name"), ("x" * 60, "is no name")],
)  # fmt: skip
def test_unfit_name_of_a_new_material_is_refused(text: str, word: str) -> None:
    form = start_form()
    with pytest.raises(InputError, match=word):
        shop.add_material(form, text, "heavy_scrap")
    assert form == start_form()


def test_own_material_is_planned_saved_and_shared() -> None:
    form = start_form()
    name = shop.add_material(form, "Rail Ends", "heavy_scrap")
    assert name == "rail_ends"
    shop.take_number(form, name, "price_per_t", "295")
    shop.take_number(form, name, "pct.Mn", "0,95")
    shop.set_species(form, name, [*shop.whole(form, name)["pct"], "V"])
    shop.take_number(form, name, "pct.V", "0.05")
    form.mix = {"rail_ends": "0.6", "shop_scrap": "0.4"}
    found = planned(form)
    assert float(found.charged_kg["rail_ends"][0]) > 20000.0
    saved = tomllib.loads(toml_text(document_of(form)))
    assert document_of(form_of(saved)) == document_of(form)
    link = address_of(form, start_form())
    assert not too_long(link)
    again, faults = form_from(link, start_form())
    assert not faults
    assert document_of(again) == document_of(form)


def test_a_material_in_use_is_not_removed() -> None:
    form = start_form()
    name = shop.add_material(form, "rail ends", "heavy_scrap")
    form.mix[name] = "0.2"
    with pytest.raises(InputError, match="scrap mix"):
        shop.take_back(form, name)
    del form.mix[name]
    assert "was removed" in shop.take_back(form, name)
    assert form == start_form()
    assert "as in the library" in shop.take_back(form, "burnt_lime")
    assert shop.whole(form, "burnt_lime") == library_fields()["burnt_lime"]


NUMBERS = [row.key for row in material_fields().values() if row.kind == "number"]


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.sampled_from(NUMBERS), st.text("0123456789.,- x", max_size=6))))
def test_any_typing_is_kept_or_named(typed: list[tuple[str, str]]) -> None:
    """Property: the last text of each field is either in the document, blank, or a fault."""
    form = start_form()
    for key, text in typed:
        shop.take_number(form, "shop_scrap", key, text)
    wrong = {place.rsplit(".", 1)[1] for place in form.wrong}
    fields = form.rest["materials"].get("shop_scrap", {})
    for key, text in dict(typed).items():
        if key in wrong:
            assert shop.shown_text(form, "shop_scrap", key).strip() == text.strip()
        elif text.strip():
            assert key in fields


# --- in the page -------------------------------------------------------------------------------


@pytest.fixture
def page() -> Any:
    app = opened()
    app.session_state[GROUP] = True
    return app.run()


def test_price_typed_in_the_page_moves_the_cost(page: Any) -> None:
    form = start_form()
    field(page, "Price, currency/t").set_value("410,5").run()
    shop.take_number(form, "heavy_scrap", "price_per_t", "410.5")
    assert f"{float(planned(form).cost()[0]):,.2f} /t" in texts(page)
    assert "tables" in page.query_params
    again = opened(tables=param(page, "tables"))
    assert f"{float(planned(form).cost()[0]):,.2f} /t" in texts(again)


def test_wrong_entry_in_the_page_is_told_and_stays(page: Any) -> None:
    field(page, "Moisture, %").set_value("99").run()
    told = texts(page)
    assert "materials.heavy_scrap.moisture_pct: 99 is outside 0 to 30 %" in told
    assert "No recipe yet" in told
    assert field(page, "Moisture, %").value == "99"
    choice = next(box for box in page.selectbox if box.label == "Material to look at or change")
    choice.set_value("burnt_lime").run()
    assert field(page, "Moisture, %").value == ""
    assert "materials.heavy_scrap.moisture_pct" in texts(page)
    next(b for b in page.selectbox if b.label == choice.label).set_value("heavy_scrap").run()
    assert field(page, "Moisture, %").value == "99"
    field(page, "Moisture, %").set_value("0,4").run()
    assert "Recipe:" in texts(page)


def test_new_material_through_the_page(page: Any) -> None:
    field(page, "Its name").set_value("Rail ends").run()
    next(b for b in page.button if b.key == "add_material").click().run()
    assert "rail ends was added" in texts(page)
    choice = next(box for box in page.selectbox if box.label == "Material to look at or change")
    assert choice.value == "rail_ends"
    next(b for b in page.button if b.key == "add_material").click().run()
    assert "give the new material a name first" in texts(page)
    remove = next(b for b in page.button if b.label.startswith("Remove this material"))
    remove.click().run()
    assert not page.exception
    assert "rail ends was removed" in texts(page)
    assert "tables" not in page.query_params
