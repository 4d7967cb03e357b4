"""The fields of a heat, grouped as the trade thinks, built from the parameter table."""

from __future__ import annotations

import streamlit as st

from converter_calc.balance.schema import allowed_texts, parameters, sections
from converter_calc.basis.errors import ConverterError
from converter_calc.page.fields import (
    FIELD_PX,
    SMALL_PX,
    choice_field,
    number_fields,
    plain_name,
    text_field,
)
from converter_calc.page.form import QUESTIONS, Form
from converter_calc.page.markup import heading, put
from converter_calc.page.material_view import material_group
from converter_calc.page.numbers import number_text
from converter_calc.page.session import form, key_of, replace_form
from converter_calc.planning.grades import grades
from converter_calc.planning.outcome import at
from converter_calc.planning.solving import complete_charge

ELEMENTS = ("C", "Si", "Mn", "P", "S", "Ti", "V", "Cr")
AIMS = ("aim_temp_C", "aim_C_pct", "aim_P_pct", "aim_S_pct", "aim_Mn_pct", "aim_basicity",
        "aim_MgO_pct")  # fmt: skip
PRACTICE_FIRST = ("heat_loss_MJ_per_t", "heat_loss_MJ_per_min", "wait_min", "blow_min",
                  "post_combustion_ratio", "oxygen_purity_pct", "P_approach",
                  "iron_oxide_factor")  # fmt: skip


def question_choice() -> None:
    """The choice at the top: what is given and what is asked."""
    f = form()
    keys = list(QUESTIONS)
    key = key_of("question")
    st.session_state.setdefault(key, f.question)
    f.question = st.radio(
        "Question", keys, format_func=QUESTIONS.__getitem__, key=key, horizontal=True
    )


def all_fields() -> None:
    """Every group of fields; the later ones are built only once opened."""
    hot_metal_fields()
    aim_fields()
    for title, group in (
        ("Scrap and materials", material_fields),
        ("Vessel and practice", practice_fields),
        ("Limits of vessel, boxes and pot", limit_fields),
        ("Materials of the shop and prices", material_group),
        ("Slag-metal laws", law_fields),
        ("Values pinned in place of the model's own", pin_fields),
    ):
        opened = st.expander(title, key="group_" + title, on_change="rerun")
        if opened.open:
            with opened:
                group()


def hot_metal_fields() -> None:
    """Weight, temperature and analysis of the hot metal."""
    put(heading("Hot metal"))
    f = form()
    text_field("heat_id", "Heat")
    names = ["hot_metal_temp_C"]
    if f.question != "steel":
        names.insert(0, "hot_metal_kg")
    number_fields(names)
    extra = [name for name in f.fields if name.startswith("hm_") and name[3:-4] not in ELEMENTS]
    number_fields([f"hm_{el}_pct" for el in ELEMENTS] + extra, SMALL_PX)


def aim_fields() -> None:
    """What the steel should be at the end of the blow."""
    put(heading("Aim at the end of the blow"))
    f = form()
    steel = f.question == "steel" or (f.question == "trim" and not f.fields.get("hot_metal_kg"))
    number_fields([*(["aim_steel_kg"] if steel else []), *AIMS])
    names = ["", *(grade.name for grade in grades()), *map(str, f.rest.get("grades", {}))]
    choice_field("grade", "Steel grade (gives aims left blank)", names)


def material_fields() -> None:
    """Scrap mix, materials by what they serve as, and masses that are given."""
    f = form()
    if f.question == "predict":
        st.button("Put the planned recipe into these fields", on_click=_take_recipe,
                  key="take_recipe", disabled=not st.session_state.get("cc_planned"))  # fmt: skip
        number_fields(["oxygen_Nm3"])
    if f.question in ("trim", "predict"):
        number_fields(["scrap_share_pct", "scrap_kg"])
    _scrap_fields(f)
    with st.container(horizontal=True):
        for name, kind, label in (
            ("lime", "flux", "Lime"),
            ("magnesia_flux", "flux", "Magnesia flux"),
            ("coolant", "coolant", "Coolant"),
            ("fuel", "fuel", "Fuel"),
        ):
            choice_field(name, label, f.materials(kind), FIELD_PX)
    text = "Masses that are given; what is blank is solved for, or is not charged."
    put(text)
    # what has a field of its own, as retained slag, is not charged by name
    charged = [name for name in f.materials() if f"{name}_kg" not in parameters()]
    used = [*f.order, *f.mix] if f.question != "steel" else []
    used += [f.fields.get(name, "") for name in ("lime", "magnesia_flux", "coolant", "fuel")]
    filled = [name for name in charged if f.fields.get(f"{name}_kg", "").strip()]
    more = st.multiselect("Further materials", charged, key=key_of("more"),
                          format_func=plain_name)  # fmt: skip
    names = dict.fromkeys([*used, *filled, *more])
    number_fields([f"{name}_kg" for name in names if name in charged])


def _scrap_fields(f: Form) -> None:
    scraps = f.materials("scrap")
    ways = {"mix": "by shares of a mix", "order": "in order of preference, up to the stock"}
    key = key_of("scrap_way")
    st.session_state.setdefault(key, "order" if f.order else "mix")
    way = st.radio("Scrap is taken", list(ways), format_func=ways.__getitem__, key=key,
                   horizontal=True)  # fmt: skip
    key = key_of("scraps_" + way)
    st.session_state.setdefault(key, [name for name in (f.order or f.mix) if name in scraps])
    label = "Scraps, first choice first" if way == "order" else "Scraps of the mix"
    chosen = st.multiselect(label, scraps, key=key, format_func=plain_name)
    if way == "order":
        f.order = list(chosen)
        return
    f.order = []
    f.mix = {name: f.mix.get(name, "0") for name in chosen}
    with st.container(horizontal=True):
        for name in chosen:
            key = key_of("mix_" + name)
            st.session_state.setdefault(key, f.mix[name])
            f.mix[name] = st.text_input(f"Share of {plain_name(name)}", key=key, width=FIELD_PX)


def practice_fields() -> None:
    """Practice of the shop and the vessel."""
    choice_field("blowing", "Way of blowing", list(allowed_texts("blowing")))
    names = [row.name for row in sections()["practice"].values() if row.kind == "number"]
    number_fields([*PRACTICE_FIRST, *(name for name in names if name not in PRACTICE_FIRST)])


def limit_fields() -> None:
    """What vessel, boxes and slag pot hold."""
    number_fields(row.name for row in sections()["limit"].values())


def law_fields() -> None:
    """Which published law is taken for each element."""
    for row in sections()["law"].values():
        choice_field(row.name, row.description, list(allowed_texts(row.name)))


def pin_fields() -> None:
    """Values that a published heat or a measurement gives."""
    number_fields(row.name for row in sections()["pin"].values())


def _take_recipe() -> None:
    """Fill the charge with the recipe of the last plan."""
    outcome = st.session_state.get("cc_planned")
    if outcome is None:
        return
    try:
        charge = complete_charge(outcome)
    except ConverterError:
        return
    new = form().copy()
    for name in ("scrap_kg", "scrap_share_pct"):
        new.fields[name] = ""
    for name in ("hot_metal_kg", "oxygen_Nm3"):
        new.fields[name] = number_text(float(at(charge.values[name], 0)))
    for name, kg in charge.masses_kg.items():
        new.fields[f"{name}_kg"] = number_text(float(at(kg, 0)))
    replace_form(new)
