"""The register: plans, actuals, parameter sets, imports, comparison, commands.

Kinds of check: "contract" = what is recorded comes back, history only grows, messages; "other
reader" = Python's sqlite3 and the csv module read the files; "identity" = a plan made again from
the inputs recorded gives the same numbers.
"""

from __future__ import annotations

import csv
import json
import sqlite3

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from converter_calc.balance.heats import heats_from_dict
from converter_calc.basis.errors import InfeasibleError, InputError
from converter_calc.cli import main
from converter_calc.heatlog.columns import fixed_columns, names_of_group
from converter_calc.heatlog.reading import read_log
from converter_calc.heatlog.writing import write_log
from converter_calc.planning.plan import plan, predict
from converter_calc.register.register import Register
from converter_calc.register.snapshots import document_of_heat, model_version, whole_document
from tests.conftest import DEMO, demo_files

ORDINARY = DEMO / "ordinary_low_carbon.toml"


@pytest.fixture
def register(tmp_path):
    with Register.open(tmp_path / "register.sqlite") as book:
        yield book


def log_of(n, **columns):
    table = {"heat_id": [f"h{k}" for k in range(n)], "end_temp_C": 1600.0 + np.arange(n) / 7.0}
    return read_log(pd.DataFrame({**table, **columns})).frame


def same_numbers(a, b, rel=1e-9):
    assert a.keys() == b.keys()
    for key, x in a.items():
        if isinstance(x, dict):
            same_numbers(x, b[key], rel)
        else:
            assert x == pytest.approx(b[key], rel=rel, abs=1e-9), key


def test_a_plan_is_kept_whole(register):
    """contract: inputs complete on their own, result to the last digit, versions."""
    number = register.record_plan(ORDINARY)
    stored = register.plan(number)
    outcome = plan(ORDINARY)
    assert stored.result == json.loads(json.dumps(outcome.document()))
    assert stored.heat_id == "ordinary_low_carbon"
    assert stored.model_version == model_version()
    assert "shop" not in stored.inputs
    again = plan(stored.inputs).document()
    same_numbers(again["recipe"], stored.result["recipe"], rel=1e-12)
    listed = register.plans()
    assert listed["plan_id"].tolist() == [number]
    assert listed["aim_temp_C"].tolist() == [1665.0]
    assert listed["oxygen_Nm3"].tolist() == [stored.result["recipe"]["oxygen_Nm3"]]


@pytest.mark.parametrize("path", demo_files(), ids=lambda path: path.stem)
def test_a_plan_already_made_gives_inputs_that_plan_the_same(register, path):
    """identity: by way of the document worked out from it."""
    outcome = plan(path)
    number = register.record_plan(outcome)
    again = plan(register.plan(number).inputs).document()
    same_numbers(again["recipe"], outcome.document()["recipe"])
    same_numbers(again["end_point"]["steel_pct"], outcome.document()["end_point"]["steel_pct"])


def test_materials_with_water_oil_and_rust_come_back():
    """identity: composition as weighed, free water kept apart from bound water."""
    document = whole_document(ORDINARY)
    document["charge"] = {"ladle_skulls_kg": 3000.0, "burnt_lime_kg": 6000.0}
    document["materials"]["burnt_lime"]["moisture_pct"] = 0.7
    document["materials"]["ladle_skulls"]["oil_pct"] = 0.3
    heats = heats_from_dict(document)
    again = heats_from_dict(document_of_heat(heats))
    for name in ("ladle_skulls", "burnt_lime", "heavy_scrap"):
        old, new = heats.materials[name], again.materials[name]
        assert new.species_kg == pytest.approx(dict(old.species_kg), rel=1e-12, abs=1e-15)
        assert new.temp_K == pytest.approx(old.temp_K, abs=1e-9)
        assert (new.price_per_t, new.kind) == (old.price_per_t, old.kind)


def test_only_solved_plans_are_kept(register, plain_heat):
    """contract: nothing is recorded of what has no answer or is wrong."""
    plain_heat["aim"]["P_pct"] = 0.0005
    with pytest.raises(InfeasibleError):
        register.record_plan(plain_heat)
    plain_heat["hot_metal"]["temp_C"] = -3.0
    with pytest.raises(InputError, match="temp_C"):
        register.record_plan(plain_heat)
    with pytest.raises(InputError, match="no parameter set 9"):
        register.record_plan(ORDINARY, set_id=9)
    assert not len(register.plans())
    with pytest.raises(InputError, match="no plan 1"):
        register.plan(1)
    assert register.latest_plan("x") is None


def test_an_actual_grows_and_keeps_what_was_corrected(register):
    """contract: values laid over one another, history in order, nothing lost."""
    first = register.record_actual("h1", {"end_temp_C": 1650, "end_P_pct": "0.012"})
    register.record_actual("h1", {"slag_CaO_pct": 44.5, "tapped_at": "2026-03-01T06:12+01:00"})
    third = register.record_actual("h1", {"end_temp_C": 1655.5})
    assert register.record_actual("h1", {"end_temp_C": 1655.5}) == third
    register.record_actual("h1", {}, clear=["end_P_pct"], origin="laboratory")
    now = register.actuals()
    assert now["end_temp_C"].tolist() == [1655.5]
    assert now["slag_CaO_pct"].tolist() == [44.5]
    assert now["tapped_at"].tolist() == [pd.Timestamp("2026-03-01T05:12:00")]
    assert "end_P_pct" not in now
    history = register.actuals("h1", history=True)
    assert history["end_temp_C"].tolist() == [1650.0, 1650.0, 1655.5, 1655.5]
    assert history["superseded_at"].isna().tolist() == [False, False, False, True]
    assert history["origin"].tolist() == ["typed", "typed", "typed", "laboratory"]
    assert history["superseded_at"].tolist()[:3] == history["recorded_at"].tolist()[1:]
    assert first == 1
    assert register.current_actual("h1")["end_temp_C"] == 1655.5
    assert register.current_actual("other") is None


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"end_temp_C": "1650,5"}, "end_temp_C: must be a number with a point"),
        ({"end_temp_C": 16500}, "must be 1400 to 1850"),
        ({"end_temp": 1650}, "unknown column; nearest: end_temp_C"),
        ({"ladle_skulls_kg": 3}, "no material of that name"),
        ({"tapped_at": "2026-02-30"}, "calendar"),
        ({"grade": "a\x00b"}, "control character"),
        ({"end_C_pct": float("nan"), "end_P_pct": "nan"}, "leave a cell blank"),
    ],
)
def test_wrong_actuals_are_refused_whole(register, values, message):
    """contract: the good values beside a wrong one are not recorded either."""
    with pytest.raises(InputError, match=message):
        register.record_actual("h1", {"steel_kg": 2e5, **values})
    with pytest.raises(InputError, match="no such value to clear"):
        register.record_actual("h1", {"steel_kg": 2e5}, clear=["end_P_pct"])
    for name in ("", "a\nb", "x" * 201):
        with pytest.raises(InputError, match="heat_id"):
            register.record_actual(name, {"steel_kg": 2e5})
    assert not len(register.actuals())


def test_materials_of_a_shop_are_known_once_it_was_named(register):
    """contract: by a plan, or by the shop given along."""
    with pytest.raises(InputError, match="ladle_skulls_kg"):
        register.record_actual("h1", {"ladle_skulls_kg": 900})
    register.record_plan(ORDINARY)
    register.record_actual("h1", {"ladle_skulls_kg": 900})
    assert register.actuals()["ladle_skulls_kg"].tolist() == [900.0]


def test_history_cannot_be_changed(register):
    """contract: the database itself refuses, whatever program asks."""
    register.record_plan(ORDINARY)
    register.record_actual("h1", {"end_temp_C": 1650})
    register.record_actual("h1", {"end_temp_C": 1651})
    register.save_parameters("shop", {"P_approach": 0.5})
    other = sqlite3.connect(register.path)
    for statement in (
        "DELETE FROM plans",
        "UPDATE plans SET result = ''",
        "DELETE FROM actuals",
        "UPDATE actuals SET content = '{}'",
        "UPDATE actuals SET superseded_at = NULL",
        "UPDATE actuals SET superseded_at = 'x', content = '{}' WHERE superseded_at IS NULL",
        "DELETE FROM parameter_sets",
        "UPDATE parameter_sets SET note = 'x'",
        "INSERT INTO actuals (heat_id, recorded_at, origin, content) VALUES ('h1', '', '', '{}')",
    ):
        with pytest.raises(sqlite3.IntegrityError):
            other.execute(statement)
    other.close()


def test_import_reports_and_takes_whole_rows(register, tmp_path):
    """contract: new, updated, unchanged, refused; again the same log says nothing new."""
    path = tmp_path / "log.csv"
    path.write_text(
        "heat_id,end_temp_C,end_P_pct,heavy_scrap_kg\n"
        "h1,1650,0.012,40000\nh2,9999,0.011,41000\nh3,1652,,\nh3,1653,,\n",
        encoding="utf-8",
    )
    strict = register.import_log(path, strict=True)
    assert (strict.taken, strict.new, strict.rows_refused) == (False, 0, 2)
    assert not len(register.actuals())
    report = register.import_log(path)
    assert (report.new, report.updated, report.unchanged) == (2, 0, 0)
    assert report.refused["row"].tolist() == [3, 5]
    again = register.import_log(path)
    assert (again.new, again.updated, again.unchanged) == (0, 0, 2)
    path.write_text("heat_id,end_temp_C,end_S_pct\nh1,1651,0.01\nh4,1650,\n", encoding="utf-8")
    more = register.import_log(path, strict=True)
    assert (more.taken, more.new, more.updated, more.unchanged) == (True, 1, 1, 0)
    frame = register.log_frame().set_index("heat_id")
    assert frame.loc["h1", ["end_temp_C", "end_P_pct", "end_S_pct"]].tolist() == [
        1651.0, 0.012, 0.01
    ]  # fmt: skip
    assert len(register.actuals("h1", history=True)) == 2
    with pytest.raises(InputError, match="no such file"):
        register.import_log(tmp_path / "none.csv")
    path.write_text("heat_id,what\nh9,1\n", encoding="utf-8")
    with pytest.raises(InputError, match="unknown column"):
        register.import_log(path)
    assert register.import_log(path, skip_unknown=True).skipped == ("what",)


def test_a_log_that_breaks_off_leaves_nothing(register, tmp_path, monkeypatch):
    """contract: one transaction, also where a late part of the file cannot be read."""
    monkeypatch.setattr("converter_calc.heatlog.sources.BLOCK_BYTES", 2000)
    path = tmp_path / "log.csv"
    write_log(log_of(500), path)
    with path.open("ab") as file:
        file.write(b"h\xff\xfe,,,,1650\n")
    with pytest.raises(InputError, match="UTF-8"):
        register.import_log(path)
    assert not len(register.actuals())


@pytest.mark.parametrize("ending", [".csv", ".parquet", ".xlsx"])
def test_a_log_goes_through_the_register_unchanged(register, tmp_path, ending):
    """contract: import, log_frame, export, read: the same doubles."""
    rng = np.random.default_rng(3)
    columns = {
        name: rng.uniform(fixed_columns()[name].low, min(fixed_columns()[name].high, 2e5), 20)
        for name in ("hot_metal_kg", "end_C_pct", "slag_MgO_pct", "steel_kg")
    }
    columns["steel_kg"][::3] = np.nan
    columns["tapped_at"] = pd.Timestamp("2026-03-01") + pd.to_timedelta(np.arange(20), "h")
    columns["grade"] = [None, "=A1"] * 10
    frame = log_of(20, **columns)
    write_log(frame, tmp_path / f"log{ending}")
    report = register.import_log(tmp_path / f"log{ending}")
    assert report.new == 20
    pd.testing.assert_frame_equal(register.log_frame(), frame, check_exact=True)
    assert register.export_log(tmp_path / f"out{ending}") == 20
    back = read_log(tmp_path / f"out{ending}").frame.reset_index(drop=True)
    pd.testing.assert_frame_equal(back, frame, check_exact=True)


def test_a_long_register_is_read_in_pieces(register, tmp_path, monkeypatch):
    """identity: pieces of 7 rows, columns that only some of them have."""
    frame = log_of(40, end_S_pct=[0.01] + [np.nan] * 39, steel_kg=[np.nan] * 39 + [2e5])
    write_log(frame, tmp_path / "log.parquet")
    monkeypatch.setattr("converter_calc.register.actuals.ROWS_AT_ONCE", 7)
    register.import_log(tmp_path / "log.parquet")
    pd.testing.assert_frame_equal(register.log_frame(), frame, check_exact=True)
    assert register.actuals(history=True)["origin"].tolist() == ["log.parquet"] * 40


def contents():
    number_columns = [name for name, column in fixed_columns().items() if column.kind == "number"]
    cells = {
        name: st.floats(fixed_columns()[name].low, fixed_columns()[name].high)
        for name in number_columns
        if not name.startswith(("hm_", "slag_"))
    }
    return st.fixed_dictionaries({}, optional=cells)


@given(st.lists(contents(), min_size=1, max_size=4))
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_any_values_come_back_to_the_last_digit(tmp_path_factory, corrections):
    """contract: laid over one another as dicts are."""
    path = tmp_path_factory.mktemp("any") / "r.sqlite"
    expected = {}
    with Register.open(path) as book:
        for values in corrections:
            book.record_actual("h", values)
            expected |= values
    with Register.open(path) as book:
        assert book.current_actual("h") == expected


def test_aims_that_were_not_logged_are_the_plans(register):
    """contract: the log's own aim stays."""
    register.record_plan(ORDINARY)
    register.record_actual("ordinary_low_carbon", {"end_temp_C": 1650, "aim_temp_C": 1660})
    register.record_actual("unplanned", {"end_temp_C": 1651})
    frame = register.log_frame().set_index("heat_id")
    assert frame.loc["ordinary_low_carbon", list(names_of_group("aim"))].tolist() == [
        1660.0, 0.04, 0.013
    ]  # fmt: skip
    assert frame.loc["unplanned", list(names_of_group("aim"))].isna().all()
    overview = register.overview()
    assert overview["heat_id"].tolist() == ["ordinary_low_carbon", "unplanned"]
    assert overview["aim_temp_C"].tolist()[0] == 1660.0
    assert register.overview(1)["heat_id"].tolist() == ["unplanned"]


def actual_of_plan(document):
    """What a shop would log that made exactly what was planned."""
    recipe = {name: x for name, x in document["recipe"].items() if name != "scrap_total_kg"}
    end = document["end_point"]
    recipe.pop("stirring_gas_Nm3", None)
    return recipe | {
        "end_temp_C": end["temperature_C"],
        "end_P_pct": end["steel_pct"]["P"],
        "end_C_pct": end["steel_pct"]["C"],
        "steel_kg": end["steel_kg"],
    }


def test_plan_and_actual_side_by_side(register):
    """identity: differences by hand; what is expected is what `predict` says of the charge made."""
    register.record_plan(ORDINARY)
    made = actual_of_plan(plan(ORDINARY).document())
    register.record_actual("ordinary_low_carbon", made)
    found = register.compare("ordinary_low_carbon")
    rows = found.rows.set_index("quantity")
    assert rows["difference"].abs().max() < 1e-6
    assert rows["unexplained"].abs().max() < 1e-4  # predict from oxygen, plan from carbon
    assert rows.loc["end_temp_C", "aim"] == 1665.0
    assert "hm_C_pct" in found.notes[0]

    changed = made | {"oxygen_Nm3": made["oxygen_Nm3"] + 150.0, "end_temp_C": 1660.0,
                      "hot_metal_temp_C": 1330.0}  # fmt: skip
    register.record_actual("ordinary_low_carbon", changed)
    rows = register.compare("ordinary_low_carbon").rows.set_index("quantity")
    document = whole_document(ORDINARY)
    document["hot_metal"] |= {"temp_C": 1330.0, "mass_kg": made["hot_metal_kg"]}
    document["charge"] = {
        name: x for name, x in changed.items()
        if name.endswith("_kg") and name not in ("hot_metal_kg", "steel_kg")
    } | {"oxygen_Nm3": changed["oxygen_Nm3"]}  # fmt: skip
    by_hand = predict(document).document()["end_point"]["temperature_C"]
    assert rows.loc["end_temp_C", "difference"] == pytest.approx(1660.0 - 1665.0, abs=1e-6)
    assert rows.loc["end_temp_C", "expected"] == pytest.approx(by_hand, abs=1e-6)
    assert rows.loc["end_temp_C", "unexplained"] == pytest.approx(1660.0 - by_hand, abs=1e-6)
    assert rows.loc["oxygen_Nm3", "difference"] == pytest.approx(150.0)
    assert rows.loc["scrap_total_kg", "actual"] == pytest.approx(
        sum(made[f"{name}_kg"] for name in ("heavy_scrap", "shop_scrap", "galvanised_bundles"))
    )


def test_total_iron_is_compared_as_iron_oxide(register):
    """identity: FeO + 0.8998 Fe2O3; g/mol 71.844 and 159.687 (CIAAW weights, from memory)."""
    number = register.record_plan(ORDINARY)
    slag = register.plan(number).result["end_point"]["slag_pct"]
    expected = slag["FeO"] + slag["Fe2O3"] * 2.0 * 71.844 / 159.687
    assert register.plan(number).planned["slag_FeO_pct"] == pytest.approx(expected, rel=1e-5)


def test_comparing_what_is_not_there(register):
    """contract."""
    with pytest.raises(InputError, match="no plan of heat x"):
        register.compare("x")
    number = register.record_plan(ORDINARY)
    with pytest.raises(InputError, match="no actual of heat"):
        register.compare("ordinary_low_carbon")
    register.record_actual("x", {"end_temp_C": 1650})
    with pytest.raises(InputError, match="is of heat ordinary_low_carbon"):
        register.compare("x", number)
    register.record_actual("ordinary_low_carbon", {"end_temp_C": 1650})
    found = register.compare("ordinary_low_carbon", number)
    assert "oxygen_Nm3 not logged" in found.notes[0]
    assert found.rows["expected"].isna().all()


def test_parameter_sets_have_versions(register):
    """contract: values and covariance to the last digit, by shop, newest first."""
    matrix = np.array([[0.1, 0.03], [0.03, 0.2]]) / 3.0
    assert register.save_parameters("north", {"P_approach": 0.5, "b": 1 / 3}, matrix, "march") == 1
    assert register.save_parameters("north", {"P_approach": 0.6}) == 2
    assert register.save_parameters("south", {"P_approach": 0.7}) == 1
    current = register.current_parameters("north")
    assert (current.version, current.values, current.covariance) == (2, {"P_approach": 0.6}, None)
    old = register.parameter_sets("north")[1]
    assert old.values == {"P_approach": 0.5, "b": 1 / 3}
    assert old.note == "march"
    np.testing.assert_array_equal(old.covariance, matrix)
    assert register.current_parameters("east") is None
    number = register.record_plan(ORDINARY, set_id=current.set_id)
    assert register.plan(number).set_id == current.set_id


@pytest.mark.parametrize(
    ("values", "covariance", "message"),
    [
        ({"a": float("nan")}, None, "finite"),
        ({"a": True}, None, "must be a number"),
        ({"a": "1"}, None, "must be a number"),
        ({"a": 1.0}, [[1.0, 0.0], [0.0, 1.0]], "must be 1 x 1"),
        ({"a": 1.0}, [[np.inf]], "finite"),
        ({"a": 1.0}, "x", "matrix of numbers"),
        ({"a": 1.0}, [[-1e-9]], "negative variance"),
        ({"a": 1.0, "b": 1.0}, [[1.0, 0.5], [0.4, 1.0]], "symmetric"),
        ({"a": 1.0, "b": 1.0}, [[1e-8, 2e-4], [2e-4, 1.0]], "negative variance"),
    ],
)
def test_parameter_sets_that_are_none(register, values, covariance, message):
    """contract: the last matrix has a correlation of 2."""
    with pytest.raises(InputError, match=message):
        register.save_parameters("shop", values, covariance)
    with pytest.raises(InputError, match="name of the shop"):
        register.save_parameters(" ", {"a": 1.0})
    assert register.parameter_sets() == []


def run(*args, **extra):
    return CliRunner().invoke(main, [str(arg) for arg in args], **extra)


def test_commands_from_plan_to_comparison(tmp_path):
    """contract: exit codes, texts, JSON; the register by option or environment."""
    path = tmp_path / "r.sqlite"
    env = {"CONVERTER_REGISTER": str(path)}
    result = run("record", ORDINARY, "--register", path)
    assert result.exit_code == 0
    assert "CHARGE SHEET" in result.stdout
    assert "kept as plan 1 of heat ordinary_low_carbon" in result.stdout
    assert "new register" in result.stderr
    result = run("record", ORDINARY, "--json", "-", env=env)
    assert json.loads(result.stdout)["plan_id"] == 2
    assert result.stderr == ""
    heat = "ordinary_low_carbon"
    result = run("actual", heat, "--end-temp-C", "1652", "--oxygen-Nm3", 11090,
                 "--set", "hot_metal_kg=185200", "--tapped-at", "2026-03-01T05:12Z",
                 env=env)  # fmt: skip
    assert result.exit_code == 0, result.stderr
    values = tmp_path / "more.toml"
    values.write_text("end_P_pct = 0.0102\nslag_FeO_pct = 22.5\n", encoding="utf-8")
    assert run("actual", heat, "--from", values, env=env).exit_code == 0
    laboratory = tmp_path / "laboratory.csv"
    laboratory.write_text(f"heat_id,end_S_pct\nother,0.01\n{heat},0.009\n", encoding="utf-8")
    assert run("actual", heat, "--from", laboratory, env=env).exit_code == 0
    shown = json.loads(run("log", "show", heat, "--json", "-", env=env).stdout)
    assert [one["plan_id"] for one in shown["plans"]] == [2, 1]
    assert shown["actuals"][-1]["end_S_pct"] == 0.009
    assert shown["actuals"][-1]["tapped_at"].startswith("2026-03-01")
    assert len(shown["actuals"]) == 3
    assert shown["inputs"]["hot_metal"]["mass_kg"] == 185000
    assert "superseded" in run("log", "show", heat, env=env).stdout
    compared = run("log", "compare", heat, env=env)
    assert "-13.0" in compared.stdout  # 1652 less 1665
    rows = json.loads(run("log", "compare", heat, "--json", "-", env=env).stdout)["rows"]
    found = {row["quantity"]: row for row in rows}
    assert found["end_temp_C"]["difference"] == pytest.approx(-13.0, abs=1e-6)
    listed = run("log", "list", env=env).stdout
    assert heat in listed
    assert "1,652.0" in listed


def test_commands_on_logs_and_backups(tmp_path):
    """contract: refused rows told and written, strict, export, backup once."""
    path = tmp_path / "r.sqlite"
    log = tmp_path / "log.csv"
    log.write_text("heat_id;end_temp_C\n=h1;1650\nh2;1650,5\nh\x1b3;1651\n", encoding="utf-8")
    refused = tmp_path / "refused.csv"
    result = run("log", "import", log, "--register", path, "--strict")
    assert result.exit_code == 2
    assert "nothing recorded" in result.stderr
    result = run("log", "import", log, "--register", path, "--refused", refused)
    assert result.exit_code == 0
    assert "1 heats new" in result.stdout
    assert "row 3, heat h2: end_temp_C must be a number with a point" in result.stdout
    assert "\x1b" not in result.stdout
    with refused.open(newline="", encoding="utf-8") as file:
        assert [line["row"] for line in csv.DictReader(file)] == ["3", "4"]
    comma = tmp_path / "comma.csv"
    comma.write_text("heat_id;end_temp_C\nh2;1650,5\n", encoding="utf-8")
    assert run("log", "import", comma, "--register", path, "--decimal-comma").exit_code == 0
    out = tmp_path / "out.parquet"
    assert "2 heats written" in run("log", "export", out, "--register", path).stdout
    assert read_log(out).frame["end_temp_C"].tolist() == [1650.0, 1650.5]
    copy = tmp_path / "copy.sqlite"
    assert "found sound" in run("log", "backup", copy, "--register", path).stdout
    with Register.open(copy, create=False) as book:
        assert len(book.actuals()) == 2
    again = run("log", "backup", copy, "--register", path)
    assert again.exit_code == 2
    assert "exists already" in again.stderr


@pytest.mark.parametrize(
    ("args", "message"),
    [
        (["log", "list"], "no register here"),
        (["log", "export", "out.csv"], "no register here"),
        (["actual", "h1"], "no value given"),
        (["actual", "h1", "--set", "x"], "must be NAME=VALUE"),
        (["actual", "h1", "--end-temp-C", "1650,5"], "point as decimal mark"),
        (["actual", "h1", "--from", "none.csv"], "no such file"),
        (["actual", "h1", "--from", "none.toml"], "no such file"),
        (["log", "import", "none.csv"], "no such file"),
        (["record", "none.toml"], "no such file"),
    ],
)
def test_wrong_commands_say_what_is_wrong(tmp_path, args, message):
    """contract: exit code 2, one line, no traceback."""
    result = run(*args, "--register", tmp_path / "r.sqlite")
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert isinstance(result.exception, SystemExit)


def test_an_unreachable_aim_has_its_own_exit_code(tmp_path):
    """contract: 3, and nothing is recorded, not even a file."""
    heat = tmp_path / "heat.toml"
    text = ORDINARY.read_text(encoding="utf-8").replace("shop.toml", str(DEMO / "shop.toml"))
    heat.write_text(text.replace("P_pct = 0.013", "P_pct = 0.0005"), encoding="utf-8")
    result = run("record", heat, "--register", tmp_path / "r.sqlite")
    assert result.exit_code == 3
    assert not (tmp_path / "r.sqlite").exists()
