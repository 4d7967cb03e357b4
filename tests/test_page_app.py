"""The page: wiring and logic of each view, without a browser.

Kinds of check: contract (files, address, fields against the planner and the demo heats) and
property (what is written reads back the same). TOML text is read back by the standard
library's reader; a second look at the same state must give the same state.
"""

from __future__ import annotations

import ast
import copy
import json
import math
import string
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import converter_calc
from converter_calc.basis.errors import InputError
from tests.conftest import DEMO, demo_files
from tests.demo import whole

testing = pytest.importorskip("streamlit.testing.v1", reason="the page needs streamlit")

from converter_calc.page import documents, launch  # noqa: E402
from converter_calc.page.address import address_of, form_from, too_long  # noqa: E402
from converter_calc.page.form import (  # noqa: E402
    QUESTIONS,
    document_of,
    form_of,
    heat_part,
    shop_part,
)
from converter_calc.page.numbers import field_fault, help_of, label_of, parse_number  # noqa: E402
from converter_calc.page.session import start_form  # noqa: E402
from converter_calc.page.toml_text import toml_text  # noqa: E402

ROOT = Path(__file__).resolve().parents[1]
NAMES = [path.stem for path in demo_files()]


@pytest.fixture
def page() -> Any:
    return opened()


def opened(**address: str) -> Any:
    app = testing.AppTest.from_file(str(ROOT / "app.py"), default_timeout=60)
    for name, text in address.items():
        app.query_params[name] = text
    return app.run()


def texts(app: Any) -> str:
    """All HTML of our own on the page, the style sheet left out."""
    bodies = [part.proto.body for part in app.get("html")]
    return "\n".join(body for body in bodies if "<style" not in body)


def param(app: Any, name: str) -> str:
    """A query parameter; AppTest gives a text or a list of one."""
    found = app.query_params[name]
    return found if isinstance(found, str) else found[0]


def field(app: Any, label: str) -> Any:
    (found,) = [x for x in app.text_input if x.label == label]
    return found


def recipe_of(outcome: Any) -> dict[str, float]:
    return dict(outcome.document()["recipe"])


# --- numbers as people type them: the decimal comma is common practice in half the world ----


@pytest.mark.parametrize(
    ("text", "number"),
    [("1350.5", 1350.5), ("1350,5", 1350.5), ("0,013", 0.013), (" 185 000 ", 185000.0),
     ("185 000,5", 185000.5), ("-3", -3.0), (".5", 0.5), ("1.85e5", 1.85e5)],
)  # fmt: skip
def test_number_as_typed(text: str, number: float) -> None:
    assert parse_number(text) == number


@pytest.mark.parametrize(
    "text",
    ["1,350", "1.350,5", "1,350.5", "12 34", "", "abc", "nan", "inf", "1e999", "0x10", "9" * 99],
)
def test_unclear_number_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"number|could be"):
        parse_number(text)


def test_every_field_has_unit_and_range_from_the_table() -> None:
    assert label_of("hot_metal_temp_C") == "Temperature, °C"
    assert "1100 to 1550 °C" in str(help_of("hot_metal_temp_C"))
    assert field_fault("hot_metal_temp_C", "1550") is None
    assert "outside 1100 to 1550 °C" in str(field_fault("hot_metal_temp_C", "1551"))


# --- fields, files and address ---------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_fields_give_the_same_recipe_as_the_file(name: str) -> None:
    document = document_of(form_of(whole(name)))
    by_file = converter_calc.plan(DEMO / f"{name}.toml")
    by_fields = converter_calc.plan(document)
    assert recipe_of(by_fields) == pytest.approx(recipe_of(by_file), rel=1e-10)


@pytest.mark.parametrize("name", NAMES)
def test_saved_heat_reads_back(name: str) -> None:
    document = document_of(form_of(whole(name)))
    assert tomllib.loads(toml_text(document)) == document
    assert document_of(form_of(tomllib.loads(toml_text(document)))) == document


@pytest.mark.parametrize("name", NAMES)
def test_address_restores_the_heat(name: str) -> None:
    start, form = start_form(), form_of(whole(name))
    found = address_of(form, start)
    assert not too_long(found)
    again, faults = form_from(found, start)
    assert not faults
    assert document_of(again) == document_of(form)


def test_start_address_is_empty() -> None:
    assert address_of(start_form(), start_form()) == {}


@pytest.mark.parametrize(
    ("params", "word"),
    [
        ({"hm_Si_pct": "9999"}, "outside"),
        ({"hm_Si_pct": "<b>x</b>"}, "no number"),
        ({"hm_Xx_pct": "1"}, "unknown"),
        ({"lime": "nothing"}, "no material"),
        ({"law_phosphorus": "nobody_1900"}, "allowed"),
        ({"question": "why"}, "must be one of"),
        ({"scrap_mix": "gold:1"}, "no scrap"),
        ({"scrap_order": "gold"}, "no scrap"),
        ({"tables": "broken"}, "cannot be read"),
        ({"why": "x" * 400}, "too long"),
    ],
)  # fmt: skip
def test_bad_address_is_named_and_nothing_of_it_taken(params: dict[str, str], word: str) -> None:
    form, faults = form_from(params, start_form())
    assert [fault.field for fault in faults] == list(params)
    assert word in faults[0].message
    assert form == start_form()


def test_packed_tables_cannot_blow_up() -> None:
    import base64
    import zlib

    bomb = base64.urlsafe_b64encode(zlib.compress(b" " * 50_000_000)).decode()
    form, faults = form_from({"tables": bomb}, start_form())
    assert "too large" in faults[0].message
    assert form == start_form()


KEYS = st.text(string.printable + "°ü\x7f", min_size=1, max_size=8)
LEAVES = st.one_of(
    st.text(max_size=20),
    st.integers(-(2**60), 2**60),
    st.floats(allow_nan=False, allow_infinity=False),
    st.booleans(),
    st.lists(st.text(max_size=5), max_size=3),
)


@settings(max_examples=200, deadline=None)
@given(st.dictionaries(KEYS, st.recursive(LEAVES, lambda x: st.dictionaries(KEYS, x, max_size=4)),
                       max_size=5))  # fmt: skip
def test_toml_text_reads_back(document: dict[str, Any]) -> None:
    assert tomllib.loads(toml_text(document)) == document


@pytest.mark.parametrize("question", list(QUESTIONS))
def test_hidden_fields_never_reach_the_planner(question: str) -> None:
    form = start_form()
    form.question = question
    form.fields |= {"aim_steel_kg": "210000", "scrap_share_pct": "20", "oxygen_Nm3": "11000"}
    document = document_of(form)
    given_ = {f"{s}.{k}" for s, t in document.items() if isinstance(t, dict) for k in t}
    hidden = {
        "scrap": {"aim.steel_kg", "charge.scrap_share_pct", "charge.oxygen_Nm3"},
        "steel": {"hot_metal.mass_kg", "charge.scrap_share_pct", "charge.oxygen_Nm3"},
        "trim": {"aim.steel_kg", "charge.oxygen_Nm3"},
        "predict": {"aim.steel_kg", "choice.ask"},
    }[question]
    assert not hidden & given_


def test_every_wrong_field_is_named_at_once() -> None:
    form = start_form()
    form.fields |= {"hm_Si_pct": "99", "hot_metal_temp_C": "1,350", "aim_temp_C": "hot"}
    with pytest.raises(InputError) as caught:
        document_of(form)
    assert {fault.field for fault in caught.value.faults} == {
        "hot_metal.Si_pct", "hot_metal.temp_C", "aim.temp_C",
    }  # fmt: skip


# --- files through the browser ----------------------------------------------------------------


def test_uploaded_heat_never_reads_a_file_of_the_server(tmp_path: Path) -> None:
    secret = tmp_path / "secret.toml"
    secret.write_text("[practice]\nwait_min = 99\n", encoding="utf-8")
    text = f'shop = "{secret}"\n[hot_metal]\nmass_kg = 100000\n'
    form, message = documents.form_with_heat(
        documents.parse_document(text.encode(), "heat.toml"), start_form()
    )
    assert form.fields["hot_metal_kg"] == "100000"
    assert form.fields["wait_min"] == start_form().fields["wait_min"]
    assert "names a shop file" in message


def test_shop_goes_under_the_heat() -> None:
    shop = tomllib.loads((DEMO / "shop.toml").read_text(encoding="utf-8"))
    shop["practice"]["wait_min"] = 33
    form = documents.form_with_shop(shop, start_form())
    assert form.fields["wait_min"] == "33"
    assert form.fields["hm_Si_pct"] == start_form().fields["hm_Si_pct"]


@pytest.mark.parametrize("name", NAMES)
def test_shop_then_heat_make_the_demo_heat(name: str) -> None:
    shop, heat = (
        tomllib.loads((DEMO / f"{stem}.toml").read_text(encoding="utf-8"))
        for stem in ("shop", name)
    )
    form = documents.form_with_shop(shop, start_form())
    form, _ = documents.form_with_heat(heat, form, shop)
    by_file = converter_calc.plan(DEMO / f"{name}.toml")
    found = converter_calc.plan(document_of(form))
    assert recipe_of(found) == pytest.approx(recipe_of(by_file), rel=1e-10)


def test_heat_and_shop_saved_apart_make_the_whole() -> None:
    from converter_calc.balance.documents import lay_over

    document = document_of(start_form())
    assert lay_over(shop_part(document), heat_part(document)) == document


@pytest.mark.parametrize(
    ("content", "word"),
    [(b"", "no field"), (b"\xff\xfe", "UTF-8"), (b"a = ", "not TOML"),
     (b"a=" + b"[" * 5000, "nested"),
     (b"#" * 2_100_000, "MB"), (b"[a.b.c.d.e.f.g.h.i.j]\nx=1", "deeper")],
)  # fmt: skip
def test_broken_file_is_told(content: bytes, word: str) -> None:
    with pytest.raises(InputError, match=word):
        documents.parse_document(content, "x.toml")


def test_table_of_heats_equals_single_heats() -> None:
    import pandas as pd

    frame = pd.DataFrame({
        "heat_id": ["a", "b"], "hot_metal_kg": [180000.0, 190000.0],
        "hot_metal_temp_C": [1330.0, 1360.0], "hm_C_pct": [4.5, 4.6], "hm_Si_pct": [0.4, 0.6],
        "hm_Mn_pct": [0.3, 0.3], "hm_P_pct": [0.08, 0.09],
    })  # fmt: skip
    shares: list[float] = []
    form = start_form()
    found = documents.solve_frame(
        frame, documents.table_defaults(form), shares.append, predict=False
    )
    assert shares[0] == 0.0
    assert shares[-1] == 1.0
    form.fields = {k: v for k, v in form.fields.items() if not k.startswith("hm_")}
    form.fields |= {
        "hot_metal_kg": "190000", "hot_metal_temp_C": "1360", "hm_C_pct": "4.6",
        "hm_Si_pct": "0.6", "hm_Mn_pct": "0.3", "hm_P_pct": "0.09",
    }  # fmt: skip
    one = recipe_of(converter_calc.plan(document_of(form)))
    for name in ("scrap_total_kg", "oxygen_Nm3", "burnt_lime_kg"):
        assert found[name].iloc[1] == pytest.approx(one[name], rel=1e-10)


# --- the views ---------------------------------------------------------------------------------


@pytest.mark.parametrize("view", ["plan", "balance", "scrap", "lime", "files"])
def test_each_view_opens_without_fault(view: str) -> None:
    app = opened(view=view)
    assert not app.exception
    assert "cc-fault" not in texts(app)
    assert app.get("html")


@pytest.mark.parametrize("question", list(QUESTIONS))
def test_every_group_of_fields_opens(question: str) -> None:
    app = testing.AppTest.from_file(str(ROOT / "app.py"), default_timeout=60)
    app.query_params["question"] = question
    app.run()
    few = len(app.text_input)
    groups = [box.label for box in app.expander if ":" not in box.label]
    for label in groups:
        app.session_state["group_" + label] = True
    app.run()
    assert not app.exception
    assert "This part of the page failed" not in texts(app)
    assert len(app.text_input) > few + 60
    labels = [x.label for x in app.text_input]
    assert len(labels) == len({x.key for x in app.text_input})


def test_recipe_of_the_plan_is_carried_to_the_prediction() -> None:
    app = opened()
    (choice,) = [x for x in app.radio if x.label == "Question"]
    choice.set_value("predict").run()
    app.session_state["group_Scrap and materials"] = True
    app.run()
    next(b for b in app.button if b.key == "take_recipe").click().run()
    outcome = converter_calc.plan(document_of(start_form()))
    assert float(param(app, "oxygen_Nm3")) == outcome.document()["recipe"]["oxygen_Nm3"]
    assert "1,665.0 °C" in texts(app)


def test_plan_shows_the_planners_figures(page: Any) -> None:
    recipe = recipe_of(converter_calc.plan(document_of(start_form())))
    for name in ("scrap_total_kg", "burnt_lime_kg"):
        assert f"{recipe[name]:,.0f} kg" in texts(page)
    assert f"{recipe['oxygen_Nm3']:,.0f} Nm³" in texts(page)


def test_decimal_comma_is_read_as_one(page: Any) -> None:
    """Trap: a number field of the browser drops the comma and makes 0,6 a 6."""
    field(page, "Si, %").set_value("0,6").run()
    form = start_form()
    form.fields["hm_Si_pct"] = "0.6"
    scrap = recipe_of(converter_calc.plan(document_of(form)))["scrap_total_kg"]
    assert f"{scrap:,.0f} kg" in texts(page)
    assert param(page, "hm_Si_pct") == "0,6"


def test_out_of_range_shows_no_result_of_another_value(page: Any) -> None:
    """Trap: a form shows 5000 and works with the value before."""
    field(page, "Temperature, °C").set_value("5000").run()
    assert "outside 1100 to 1550 °C" in texts(page)
    assert "hot_metal.temp_C" in texts(page)
    assert "Recipe:" not in texts(page)
    assert field(page, "Temperature, °C").value == "5000"
    assert field(page, "Si, %").value == "0.48"
    field(page, "Temperature, °C").set_value("1345").run()
    assert "Recipe:" in texts(page)


def test_emptied_field_is_named_not_filled(page: Any) -> None:
    """Trap: an emptied field falls back to its default in silence."""
    field(page, "Hot metal, kg").set_value("").run()
    assert "hot_metal.mass_kg: not given" in texts(page)
    assert field(page, "Hot metal, kg").value == ""


def test_bad_link_is_told(page: Any) -> None:
    """Trap: a value of a link that is out of range vanishes without a word."""
    app = opened(hm_Si_pct="9999", nonsense="1", view="attic")
    told = texts(app)
    for word in ("hm_Si_pct: 9999 is outside", "nonsense: unknown", "view: must be one of"):
        assert word in told
    assert field(app, "Si, %").value == "0.48"


def test_link_restores_the_heat() -> None:
    app = opened(hm_Si_pct="0.7", question="steel", aim_steel_kg="200000")
    assert field(app, "Si, %").value == "0.7"
    assert field(app, "Steel to tap, kg").value == "200000"
    assert "200,000 kg" in texts(app)


def test_infeasible_heat_says_what_binds_and_what_frees(page: Any) -> None:
    field(page, "Most phosphorus, %").set_value("0.0005").run()
    told = texts(page)
    assert "No charge reaches the aim" in told
    assert "It would be freed by" in told


def test_every_figure_has_a_why(page: Any) -> None:
    from converter_calc.page.reasons import figures, reason_for

    outcome = converter_calc.plan(document_of(start_form()))
    names = [figure.name for figure in figures(outcome)]
    (choice,) = [box for box in page.selectbox if box.key == "why_figure"]
    assert choice.options == names
    for figure in figures(outcome):
        reason = reason_for(outcome, figure)
        assert reason.reason
        assert reason.value == pytest.approx(figure.value, rel=1e-9)
    assert {"hot metal", "scrap, all", "burnt lime", "oxygen"} <= set(names)
    choice.set_value("oxygen").run()
    assert reason_for(outcome, next(f for f in figures(outcome) if f.name == "oxygen")).reason in (
        texts(page)
    )
    assert "oxidation of silicon" in texts(page)


def test_explained_figure_that_is_gone_is_not_asked_for(page: Any) -> None:
    def asked() -> Any:
        return next(box for box in page.selectbox if box.key == "why_figure")

    page.session_state["group_Scrap and materials"] = True
    asked().set_value("galvanised bundles").run()
    field(page, "Si, %").set_value("0.5").run()
    assert asked().value == "galvanised bundles"
    mix = next(box for box in page.multiselect if box.label == "Scraps of the mix")
    mix.set_value(["heavy_scrap", "shop_scrap"]).run()
    assert not page.exception
    assert "Recipe:" in texts(page)
    assert asked().value is None


def test_two_sessions_do_not_mix() -> None:
    first, second = opened(), opened()
    field(first, "Si, %").set_value("0.8").run()
    second.run()
    assert field(second, "Si, %").value == "0.48"
    assert "hm_Si_pct" not in second.query_params


def test_lime_is_carried_to_the_plan_with_one_click() -> None:
    app = opened(view="lime")
    (button,) = [b for b in app.button if b.key == "carry_lime"]
    kg = float(button.label.split()[2].replace(",", ""))
    button.click().run()
    assert float(param(app, "burnt_lime_kg")) == kg
    plan = opened(burnt_lime_kg=param(app, "burnt_lime_kg"))
    assert f"{kg:,.0f} kg" in texts(plan)


def test_heat_file_is_loaded_through_the_page() -> None:
    app = opened(view="files")
    text = toml_text(document_of(form_of(whole("high_silicon"))))
    app.get("file_uploader")[0].set_value(("h.toml", text.encode(), "application/toml")).run()
    assert "was taken" in texts(app)
    assert param(app, "hm_Si_pct") == "0.95"


def test_broken_heat_file_changes_nothing() -> None:
    app = opened(view="files", hm_Si_pct="0.6")
    bad = b"[hot_metal]\nSi_pct = 77\nnonsense = '<img src=x>'\n"
    app.get("file_uploader")[0].set_value(("<b>.toml", bad, "application/toml")).run()
    told = texts(app)
    assert "was not taken" in told
    assert "hot_metal.Si_pct" in told
    assert "<b>.toml" not in told
    assert "&lt;b&gt;.toml" in told
    assert param(app, "hm_Si_pct") == "0.6"


def test_pasted_table_is_planned() -> None:
    app = opened(view="files")
    table = "heat_id;hot_metal_kg;hot_metal_temp_C;hm_C_pct;hm_Si_pct\n=a;180000;1340;4,5;0,45\n"
    app.text_area[0].set_value(table).run()
    next(b for b in app.button if b.key == "solve_table").click().run()
    assert "1 solved" in texts(app)
    assert app.dataframe[0].value["status"].tolist() == ["solved"]


def test_broken_table_names_column_and_row() -> None:
    app = opened(view="files")
    app.text_area[0].set_value("heat_id,hot_metal_kg,bogus\nx,180000,1\n").run()
    next(b for b in app.button if b.key == "solve_table").click().run()
    assert "bogus" in texts(app)
    assert not app.exception


def test_unforeseen_error_is_owned_up_to_without_a_trace(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: Any, **__: Any) -> None:
        raise RuntimeError("secret path /nowhere")

    monkeypatch.setattr("converter_calc.page.plan_view.shown_answer", fail)
    app = opened()
    assert not app.exception
    assert "This part of the page failed" in texts(app)
    assert "secret" not in texts(app)


# --- how it is started ---------------------------------------------------------------------------


def test_both_ways_of_starting_set_the_same() -> None:
    """Traps: open to the network, usage statistics, tracebacks with paths."""
    config = tomllib.loads((ROOT / ".streamlit" / "config.toml").read_text(encoding="utf-8"))
    flat: dict[str, Any] = {}
    stack: list[tuple[str, Any]] = [("", config)]
    while stack:
        place, table = stack.pop()
        for key, x in table.items():
            name = f"{place}.{key}".lstrip(".")
            stack.append((name, x)) if isinstance(x, dict) else flat.update({name: x})
    plain = {k: x if isinstance(x, str | list) else json.dumps(x) for k, x in flat.items()}
    assert plain == launch.SETTINGS
    assert launch.SETTINGS["server.address"] == "127.0.0.1"
    assert launch.SETTINGS["browser.gatherUsageStats"] == "false"
    assert launch.SETTINGS["client.showErrorDetails"] == "type"
    assert Path(launch.arguments(8501)[2]).is_file()


def test_only_the_page_imports_streamlit() -> None:
    for path in (ROOT / "converter_calc").rglob("*.py"):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        names = {a.name for n in ast.walk(tree) if isinstance(n, ast.Import) for a in n.names}
        names |= {n.module or "" for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
        if any(name.split(".")[0] == "streamlit" for name in names):
            assert path.parent.name == "page", path


def test_start_heat_is_a_whole_heat() -> None:
    document = document_of(start_form())
    outcome = converter_calc.plan(copy.deepcopy(document))
    assert math.isfinite(recipe_of(outcome)["scrap_total_kg"])


# --- what is set in a view is part of the address ---------------------------------------------


def test_axes_of_the_views_are_in_the_address_and_come_back() -> None:
    app = opened(view="scrap")
    field(app, "Scrap share, %, from").set_value("12,5").run()
    next(b for b in app.selectbox if b.label == "Shown").set_value("oxygen_Nm3").run()
    assert param(app, "scrap.scrap_share_pct.from") == "12,5"
    assert param(app, "scrap.shown") == "oxygen_Nm3"
    again = opened(**{name: param(app, name) for name in app.query_params})
    assert field(again, "Scrap share, %, from").value == "12,5"
    assert next(b for b in again.selectbox if b.label == "Shown").value == "oxygen_Nm3"
    assert "cc-fault" not in texts(again)
    field(again, "Scrap share, %, from").set_value("").run()
    assert "scrap.scrap_share_pct.from" not in again.query_params


def test_axes_stay_when_the_heat_changes() -> None:
    app = opened(**{"lime.from": "5000", "lime.to": "9000"})
    field(app, "Si, %").set_value("0.6").run()
    assert param(app, "lime.from") == "5000"
    assert param(app, "lime.to") == "9000"


@pytest.mark.parametrize(
    ("address", "word"),
    [
        ({"view": "scrap", "scrap.scrap_share_pct.from": "many"}, "no number"),
        ({"view": "scrap", "scrap.shown": "gold"}, "'gold' of before is not there"),
        ({"view": "lime", "lime.to": "-5"}, "outside 0 to"),
        ({"view": "lime", "lime.sideways": "1"}, "lime.sideways: unknown"),
    ],
)
def test_bad_axis_of_a_link_is_told(address: dict[str, str], word: str) -> None:
    app = opened(**address)
    assert not app.exception
    assert word in texts(app).replace("&#x27;", "'")


# --- what keeps a change quick, without a clock ------------------------------------------------


def test_same_fields_have_the_same_answer_within_bounds() -> None:
    from converter_calc.page.session import Answer
    from converter_calc.page.store import Store

    worked_out: list[str] = []
    store: Store[Answer] = Store(most=2)

    def solve(name: str) -> Answer:
        worked_out.append(name)
        return Answer(document={"heat_id": name})

    for name in ("a", "b", "a", "c", "a", "b"):
        found = store.find(name, lambda name=name: solve(name))  # type: ignore[misc]
        assert found.document == {"heat_id": name}
    assert worked_out == ["a", "b", "c", "b"]


def test_a_change_works_out_the_whole_heat_once(page: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    """Newton runs over recorded formulas; the full state is worked out at its answer only."""
    from converter_calc.planning import solving

    for text in ("0.51", "0.52", "0.53"):
        field(page, "Si, %").set_value(text).run()
    calls = []
    evaluate = solving.evaluate_ask
    for module in ("planning.solving", "balance.system"):
        monkeypatch.setattr(
            f"converter_calc.{module}.evaluate_ask", lambda *a: calls.append(1) or evaluate(*a)
        )
    field(page, "Si, %").set_value("0.54").run()
    assert "Recipe:" in texts(page)
    assert len(calls) == 1


def test_plan_sends_few_elements(page: Any) -> None:
    """Each element of a run costs about a millisecond, whatever it shows."""
    parts = ("text_input", "html", "expander", "selectbox", "radio", "button", "multiselect")
    assert sum(len(page.get(part)) for part in parts) <= 40
