"""Materials and prices of the shop in the plan: looked at, changed, and new ones added."""

from __future__ import annotations

import streamlit as st

from converter_calc.balance.materials import known_species, library_fields
from converter_calc.balance.schema import material_fields, sections
from converter_calc.basis.errors import InputError
from converter_calc.page import materials as shop
from converter_calc.page.fields import FIELD_PX, WIDE_PX, number_fields, plain_name
from converter_calc.page.form import Form
from converter_calc.page.markup import fault_texts, formula, heading, note, put, table_html
from converter_calc.page.numbers import unit_of
from converter_calc.page.session import form, key_of
from converter_calc.reporting.html_sheet import Markup

#: Labels that are shorter than the description of a field.
LABELS = {
    "price_per_t": "Price",
    "CO2_kg_per_t": "CO₂ of its making",
    "stock_kg": "Stock",
    "max_share_pct": "Largest share",
    "moisture_pct": "Moisture",
    "oil_pct": "Oil",
    "rust_pct": "Rust",
    "yield_pct": "Yield",
    "yield_factor": "Yield factor",
    "temp_C": "Temperature, charged",
    "bulk_density_kg_per_m3": "Bulk density",
    "loss_on_ignition_pct": "Loss on ignition",
    "loss_on_ignition_water_pct": "of it water",
}
SHARE_PX = 82
#: Columns of the overview, what a number is divided by, and their headings; few, as the
#: recipe stands beside them.
OVERVIEW = (
    ("price_per_t", 1.0, "price, /t"),
    ("stock_kg", 1e3, "stock, t"),
    ("moisture_pct", 1.0, "moisture, %"),
    ("yield_pct", 1.0, "yield, %"),
)


def material_group() -> None:
    """Prices, an overview of the shop's materials, and one of them to change."""
    f = form()
    number_fields(row.name for row in sections()["price"].values())
    put(_overview(f))
    names = f.materials()
    key = key_of("material")
    if st.session_state.get(key) not in names:
        st.session_state[key] = next(iter(f.order or f.mix), names[0])
    name = st.selectbox("Material to look at or change", names, key=key, width=WIDE_PX,
                        format_func=plain_name)  # fmt: skip
    _one_material(f, name)
    _new_material(names, name)


def _overview(f: Form) -> Markup:
    used = [*f.order, *f.mix, *(f.fields.get(role, "") for role in
            ("lime", "magnesia_flux", "coolant", "fuel"))]  # fmt: skip
    names = [name for name in dict.fromkeys([*used, *f.rest.get("materials", {})]) if name]
    rows = []
    for name in names:
        fields = shop.whole(f, name)
        cells = [(fields.get(key), by) for key, by, _ in OVERVIEW]
        rows.append((plain_name(name), *("–" if x is None else f"{x / by:,g}" for x, by in cells)))
    headings = ("material", *(text for _, _, text in OVERVIEW))
    return table_html("materials of the shop", headings, rows)


def _label(key: str) -> str:
    row = material_fields()[key]
    label = LABELS.get(key, key.replace("_", " ").capitalize())
    unit = unit_of(row)
    return f"{label}, {unit}" if unit else label


def _one_material(f: Form, name: str) -> None:
    fields = shop.whole(f, name)
    if fields.get("description"):
        put(str(fields["description"]))
    with st.container(horizontal=True):
        for key in shop.number_keys(f, name):
            blank = shop.blank_text(f, name, key)
            _number(f, name, key, _label(key), FIELD_PX, f"{blank} if blank" if blank else None)
    species = list(fields.get("pct") or {})
    key = key_of(f"species_{name}")
    st.session_state.setdefault(key, species)
    chosen = st.multiselect("Analysis of the dry, clean material, mass %", known_species(), key=key,
                            format_func=formula)  # fmt: skip
    shop.set_species(f, name, list(chosen))
    with st.container(horizontal=True):
        for part in chosen:
            _number(f, name, f"pct.{part}", formula(part), SHARE_PX, None)
    _texts(f, name)
    faults = shop.faults_of(f, name)
    if faults:
        put(note("fault", f"{plain_name(name)} cannot be charged like this:", fault_texts(faults)))
    for text in () if faults else shop.notes_of(f, name):
        put(note("note", text))
    if name in f.rest.get("materials", {}):
        label = "Back to the library" if name in library_fields() else "Remove this material"
        st.button(f"{label}: {plain_name(name)}", key=key_of("take_back"), on_click=_take_back,
                  args=(name,))  # fmt: skip
    _told("cc_material_taken_back")


def _number(f: Form, name: str, key: str, label: str, width: int, blank: str | None) -> None:
    widget = key_of(shop.place_of(name, key))
    st.session_state.setdefault(widget, shop.shown_text(f, name, key))
    text = st.text_input(label, key=widget, width=width, placeholder=blank,
                         help=None if width == SHARE_PX else shop.range_of(key))  # fmt: skip
    shop.take_number(f, name, key, text or "")


def _texts(f: Form, name: str) -> None:
    fields, rows = shop.whole(f, name), material_fields()
    with st.container(horizontal=True):
        for key, label, options in (
            ("rest", "Fills up to 100 %", ["", *known_species()]),
            ("kind", "Serves as", list(rows["kind"].allowed)),
        ):
            if key == "kind" and name in library_fields():
                continue  # other heats of the shop count on what it serves as
            now = str(fields.get(key, "Fe" if (key, fields.get("kind")) == ("rest", "scrap") else
                                 rows[key].default))  # fmt: skip
            widget = key_of(f"{key}_{name}")
            st.session_state.setdefault(widget, now)
            text = st.selectbox(label, options, key=widget, width=FIELD_PX,
                                format_func=lambda x: formula(x) or "nothing")  # fmt: skip
            if text != now:
                shop.set_text(f, name, key, text)


def _new_material(names: list[str], shown: str) -> None:
    put(heading("A material of your own"))
    st.session_state.setdefault(key_of("new_like"), shown)
    with st.container(horizontal=True, vertical_alignment="bottom"):
        st.text_input("Its name", key="new_material", max_chars=60, width=FIELD_PX + 40)
        st.selectbox("Starts as a copy of", names, key=key_of("new_like"), width=FIELD_PX + 60,
                     format_func=plain_name)  # fmt: skip
        st.button("Add it", key="add_material", on_click=_add)
    _told("cc_material_added")


def _add() -> None:
    f = form()
    like = st.session_state[key_of("new_like")]
    try:
        name = shop.add_material(f, st.session_state.get("new_material", ""), like)
    except InputError as error:
        st.session_state["cc_material_added"] = ("fault", "It was not added:",
                                                 [x.message for x in error.faults])  # fmt: skip
        return
    st.session_state["new_material"] = ""
    st.session_state[key_of("material")] = name
    text = f"{plain_name(name)} was added; it stands above, ready to be changed."
    st.session_state["cc_material_added"] = ("good", text, [])


def _take_back(name: str) -> None:
    f = form()
    told: tuple[str, str, list[str]]
    try:
        told = ("good", shop.take_back(f, name), [])
    except InputError as error:
        told = ("fault", "It was not removed:", fault_texts(error.faults))
    else:
        start = (key_of(shop.place_of(name, "")), key_of(f"species_{name}"), key_of(f"rest_{name}"))
        for key in [str(k) for k in st.session_state]:
            if key.startswith(start):
                del st.session_state[key]
    st.session_state["cc_material_taken_back"] = told


def _told(key: str) -> None:
    message = st.session_state.pop(key, None)
    if message:
        put(note(*message))
