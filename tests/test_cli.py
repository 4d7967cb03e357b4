"""The command line. Kind of check: contract (exit codes, JSON keys, one line a fault)."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import periodictable
import pytest
from click.testing import CliRunner, Result

import converter_calc
from converter_calc.cli import main
from converter_calc.planning.explain import QUANTITIES
from tests.conftest import DEMO
from tests.test_closure import assert_closed

ORDINARY = DEMO / "ordinary_low_carbon.toml"

COMPLETE = """
[hot_metal]
mass_kg = 180000
temp_C = 1340
C_pct = 4.4
Si_pct = 0.45
Mn_pct = 0.35
P_pct = 0.085
[charge]
oxygen_Nm3 = 10600
heavy_scrap_kg = 42000
burnt_lime_kg = 8000
dolomitic_lime_kg = 3000
"""


def run(*args: Any) -> Result:
    return CliRunner().invoke(main, [str(arg) for arg in args])


def shell(*args: Any) -> subprocess.CompletedProcess[str]:
    root = str(Path(converter_calc.__file__).resolve().parents[1])
    return subprocess.run(
        [sys.executable, "-m", "converter_calc", *map(str, args)],
        capture_output=True,
        text=True,
        check=False,
        cwd=root,
        timeout=60,
    )


@pytest.fixture
def complete(tmp_path: Path) -> Path:
    file = tmp_path / "complete.toml"
    file.write_text(COMPLETE, encoding="utf-8")
    return file


def assert_contract(document: dict[str, Any]) -> None:
    """Keys of the JSON result, and what the contract says of them."""
    assert document["recipe"]["oxygen_Nm3"] > 0.0
    end = document["end_point"]
    for key in ("temperature_C", "steel_kg", "slag_kg", "dissolved_oxygen_ppm"):
        assert isinstance(end[key], float), key
    assert sum(end["steel_pct"].values()) == pytest.approx(100.0, abs=1e-6)
    assert sum(end["slag_pct"].values()) == pytest.approx(100.0, abs=1e-6)
    assert isinstance(document["heat_loss_MJ"], float)
    names = [stream["name"] for stream in document["streams"]]
    assert len(set(names)) == len(names)
    keys = {"name", "side", "kind", "temperature_C", "mass_kg", "species_kg", "enthalpy_MJ"}
    for stream in document["streams"]:
        assert set(stream) == keys
        assert stream["side"] in ("in", "out")
        assert stream["kind"] in ("metal", "slag", "gas", "solid")
        for formula in stream["species_kg"]:
            periodictable.formula(formula)
    assert {"hot_metal", "oxygen", "steel", "slag", "off_gas", "dust"} <= set(names)
    for warning in document["warnings"]:
        assert set(warning) == {"code", "field", "message"}
    assert_closed(document)


def test_plan_prints_a_charge_sheet() -> None:
    result = run("plan", ORDINARY)
    assert result.exit_code == 0
    assert result.stderr == ""
    for word in ("hot metal", "scrap", "lime", "oxygen", "End of blow", "Slag", "Off-gas"):
        assert word in result.stdout
    assert "Heat balance" in result.stdout
    assert "closure" in result.stdout


def test_json_to_standard_output_is_nothing_but_json() -> None:
    result = run("plan", ORDINARY, "--json", "-")
    assert result.exit_code == 0
    assert_contract(json.loads(result.stdout))


def test_json_to_a_file_beside_the_sheet(tmp_path: Path) -> None:
    target = tmp_path / "out.json"
    result = run("plan", ORDINARY, "--json", target)
    assert result.exit_code == 0
    assert "CHARGE SHEET" in result.stdout
    document = json.loads(target.read_text(encoding="utf-8"))
    assert document == json.loads(run("plan", ORDINARY, "--json", "-").stdout)


def test_predict(complete: Path) -> None:
    result = run("predict", complete, "--json", "-")
    assert result.exit_code == 0
    document = json.loads(result.stdout)
    assert_contract(document)
    assert document["recipe"]["oxygen_Nm3"] == 10600.0
    assert 1550.0 < document["end_point"]["temperature_C"] < 1750.0
    assert "CHARGE SHEET" in run("predict", complete).stdout


def test_what_is_charged_stands_in_recipe_and_streams() -> None:
    document = json.loads(run("plan", ORDINARY, "--json", "-").stdout)
    masses = {stream["name"]: stream["mass_kg"] for stream in document["streams"]}
    for key, kg in document["recipe"].items():
        name = key.removesuffix("_kg")
        if key.endswith("_kg") and name != "scrap_total" and kg > 0.0:
            assert masses[name] == pytest.approx(kg, rel=1e-9), name


# --- wrong input ----------------------------------------------------------------------------

HOT_METAL = "[hot_metal]\nmass_kg = 180000\ntemp_C = 1340\nC_pct = 4.4\nSi_pct = 0.4\n"
AIM = "[aim]\ntemp_C = 1650\nC_pct = 0.05\n"
MIX = "[choice]\nscrap_mix = { heavy_scrap = 1.0 }\n"
GOOD = HOT_METAL + AIM + MIX

#: name: (content of the file, what the lines name)
NASTY: dict[str, tuple[str | bytes, list[str]]] = {
    "empty": ("", ["is empty"]),
    "blank": ("\n \t\n", ["is empty"]),
    "not TOML": ("mass = = 3", ["line 1"]),
    "not UTF-8": (b"why = '\xff\xfe'\n", ["UTF-8"]),
    "a null byte": (GOOD + "why = 'a\x00b'\n", []),
    "unknown field": (GOOD.replace("Si_pct", "Sl_pct"), ["hot_metal.Sl_pct"]),
    "unknown section": (GOOD + "[aims]\nC_pct = 0.1\n", ["aims", "aim"]),
    "text for a number": (GOOD.replace("1340", "'hot'"), ["hot_metal.temp_C"]),
    "a date for a number": (GOOD.replace("1340", "2020-01-01"), ["hot_metal.temp_C"]),
    "true for a number": (GOOD.replace("1340", "true"), ["hot_metal.temp_C"]),
    "kelvin": (GOOD.replace("1340", "1613"), ["hot_metal.temp_C", "K"]),
    "tonnes": (GOOD.replace("180000", "0.18"), ["hot_metal.mass_kg"]),
    "negative mass": (GOOD.replace("180000", "-5"), ["hot_metal.mass_kg"]),
    "infinite": (GOOD.replace("180000", "inf"), ["hot_metal.mass_kg"]),
    "not a number": (GOOD.replace("4.4", "nan"), ["hot_metal.C_pct"]),
    "huge integer": (GOOD.replace("180000", "1" + "0" * 400), ["hot_metal.mass_kg"]),
    "analysis above 100": (
        GOOD.replace("[aim]", "Cr_pct = 9\nMn_pct = 9\nNi_pct = 90\n[aim]"), ["hot_metal"],
    ),
    "no aim": (HOT_METAL + MIX, ["aim.temp_C", "aim.C_pct"]),
    "no scrap named": (HOT_METAL + AIM, ["choice.scrap_mix"]),
    "no hot metal mass": (GOOD.replace("mass_kg = 180000\n", ""), ["hot_metal.mass_kg"]),
    "unknown material": (GOOD.replace("heavy_scrap", "heavvy_scrap"), ["heavy_scrap"]),
    "a flux as scrap": (GOOD.replace("heavy_scrap", "burnt_lime"), ["scrap_mix.burnt_lime"]),
    "shop file missing": ("shop = 'none.toml'\n" + GOOD, ["none.toml", "no such file"]),
    "shop is the heat": ("shop = 'nasty.toml'\n" + GOOD, ["shop"]),
    "pins that contradict": (
        GOOD + "[pin]\nL_P = 90\nend_P_pct = 0.01\n", ["pin.L_P", "pin.end_P_pct"],
    ),
    "pinned oxides above 100": (
        GOOD + "[pin]\nslag_FeO_pct = 60\nslag_CaO_pct = 70\n", ["pin.slag_FeO_pct"],
    ),
    "unknown law": (GOOD + "[law]\nphosphorus = 'nobody_1900'\n", ["law.phosphorus"]),
    "unknown grade": (GOOD.replace("[aim]", "[aim]\ngrade = 'X0'"), ["X0"]),
    "material of nothing": (
        GOOD + "[materials.heavy_scrap]\npct = { Xx = 1 }\n", ["materials.heavy_scrap"],
    ),
    "material above 100": (
        GOOD + "[materials.own]\nkind='scrap'\npct = { C = 60, Si = 60 }\n", ["materials.own"],
    ),
    "section as a number": ("hot_metal = 3\n" + AIM + MIX, ["hot_metal"]),
    "deeply nested": (GOOD + "why = " + "[" * 500 + "]" * 500 + "\n", []),
    "a name with a newline": (GOOD + '[charge]\n"a\\nb_kg" = 3\n', ["charge.a"]),
    "two faults": (
        GOOD.replace("1340", "5").replace("4.4", "-1"), ["hot_metal.temp_C", "hot_metal.C_pct"],
    ),
    "steel and hot metal": (GOOD.replace("[aim]", "[aim]\nsteel_kg = 1e5"), ["hot_metal.mass_kg"]),
}  # fmt: skip


def assert_wrong_input(result: Result, names: list[str]) -> None:
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    assert isinstance(result.exception, SystemExit)
    assert "Traceback" not in result.stderr
    lines = result.stderr.splitlines()
    assert lines
    for line in lines:
        assert re.match(r"^\S[^:]*: \S", line), line
    for name in names:
        assert name in result.stderr


@pytest.mark.parametrize("kind", NASTY)
@pytest.mark.parametrize("command", ["plan", "explain"])
def test_wrong_input_is_told_in_a_line_a_fault(kind: str, command: str, tmp_path: Path) -> None:
    content, names = NASTY[kind]
    file = tmp_path / "nasty.toml"
    file.write_bytes(content.encode() if isinstance(content, str) else content)
    extra = ["lime"] if command == "explain" else ["--json", "-"]
    assert_wrong_input(run(command, file, *extra), names)


def test_each_fault_has_its_line(tmp_path: Path) -> None:
    file = tmp_path / "heat.toml"
    file.write_text(GOOD.replace("1340", "5").replace("4.4", "-1"), encoding="utf-8")
    lines = run("plan", file).stderr.splitlines()
    assert [line.split(":")[0] for line in lines] == ["hot_metal.temp_C", "hot_metal.C_pct"]


@pytest.mark.parametrize("command", ["plan", "predict", "sensitivity"])
def test_files_that_are_none(command: str, tmp_path: Path) -> None:
    for path in (tmp_path, tmp_path / "none.toml"):
        assert_wrong_input(run(command, path), [])


def test_huge_file(tmp_path: Path) -> None:
    file = tmp_path / "huge.toml"
    file.write_text("# " + "x" * 20_000_000, encoding="utf-8")
    assert_wrong_input(run("plan", file), [])


def test_prediction_needs_a_complete_charge() -> None:
    result = run("predict", DEMO / "high_silicon.toml")
    assert_wrong_input(result, ["hot_metal.mass_kg"])


def test_json_that_cannot_be_written(tmp_path: Path) -> None:
    assert_wrong_input(run("plan", ORDINARY, "--json", tmp_path / "no" / "x.json"), ["--json"])


def test_infeasible_is_3_and_prints_no_json(tmp_path: Path) -> None:
    file = tmp_path / "cold.toml"
    cold = GOOD.replace("1340", "1150").replace("1650", "1750").replace("4.4", "3.4")
    file.write_text(cold, encoding="utf-8")
    result = run("plan", file, "--json", "-")
    assert result.exit_code == 3
    assert result.stdout == ""
    assert "what binds is heat" in result.stderr
    assert "it would be freed by" in result.stderr
    assert "Traceback" not in result.stderr


def test_oxygen_that_no_bath_can_take_has_no_traceback(tmp_path: Path) -> None:
    for volume in ("0", "100", "60000"):
        file = tmp_path / "odd.toml"
        file.write_text(COMPLETE.replace("10600", volume), encoding="utf-8")
        result = run("predict", file)
        assert result.exit_code in (0, 3), volume
        assert "Traceback" not in result.stderr


# --- units ----------------------------------------------------------------------------------


def shown(text: str, label: str) -> tuple[float, str]:
    """First number on the line of a label, and its unit."""
    line = next(line for line in text.splitlines() if line.strip().startswith(label))
    number, unit = re.search(r"\s(\d[\d,.]*) ([A-Za-z3]+(?: ton)?)", line).groups()  # type: ignore[union-attr]
    return float(number.replace(",", "")), unit


def test_us_units_convert_back() -> None:
    """NIST SP 811 (from memory): short ton 907.18474 kg; scf at 60 °F, 1 atm."""
    metric, us = (run("plan", ORDINARY, "--units", units).stdout for units in ("metric", "us"))
    for label in ("hot metal ", "scrap, all", "burnt lime", "steel tapped", "liquid slag"):
        kg, unit = shown(metric, label)
        tons, us_unit = shown(us, label)
        assert (unit, us_unit) == ("kg", "short ton")
        assert tons * 907.18474 == pytest.approx(kg, abs=1.0), label
    for label in ("oxygen ", "volume"):
        (Nm3, _), (scf, unit) = shown(metric, label), shown(us, label)
        assert unit == "scf"
        back = scf * 0.3048**3 * 273.15 / 288.7056
        assert back == pytest.approx(Nm3, abs=0.6), label  # printed to a whole number
    celsius, fahrenheit = shown(metric, "temperature")[0], shown(us, "temperature")
    assert fahrenheit[1] == "F"
    assert (fahrenheit[0] - 32.0) / 1.8 == pytest.approx(celsius, abs=0.06)


# --- other commands -------------------------------------------------------------------------


@pytest.mark.parametrize("quantity", QUANTITIES)
def test_explain(quantity: str) -> None:
    result = run("explain", ORDINARY, quantity)
    assert result.exit_code == 0
    assert len(result.stdout.splitlines()) > 4


def test_explain_a_prediction(complete: Path) -> None:
    assert run("explain", complete, "temperature", "--predict").exit_code == 0


def test_explain_of_nothing() -> None:
    result = run("explain", ORDINARY, "weather")
    assert_wrong_input(result, ["weather", "phosphorus"])


def test_grades() -> None:
    listed = run("grades")
    assert listed.exit_code == 0
    assert "EN 10130" in listed.stdout
    one = run("grades", "S355J2")
    assert one.exit_code == 0
    assert "EN 10025-2" in one.stdout
    assert "2019" in one.stdout
    assert_wrong_input(run("grades", "S355J9"), ["S355J2"])


def test_laws() -> None:
    result = run("laws")
    assert result.exit_code == 0
    for author in ("Healy", "Suito", "Assis", "Turkdogan", "Sosinsky"):
        assert author in result.stdout


# --- as a program ---------------------------------------------------------------------------


def test_program_plans() -> None:
    result = shell("plan", ORDINARY, "--json", "-")
    assert result.returncode == 0
    assert result.stderr == ""
    assert_contract(json.loads(result.stdout))


def test_program_tells_faults(tmp_path: Path) -> None:
    result = shell("plan", tmp_path / "none.toml")
    assert result.returncode == 2
    assert result.stdout == ""
    assert len(result.stderr.splitlines()) == 1


def test_program_refuses(tmp_path: Path) -> None:
    file = tmp_path / "cold.toml"
    cold = GOOD.replace("1340", "1150").replace("1650", "1750").replace("4.4", "3.4")
    file.write_text(cold, encoding="utf-8")
    result = shell("plan", file)
    assert result.returncode == 3
    assert "Traceback" not in result.stderr


def test_no_dissolved_oxygen_has_no_traceback(tmp_path: Path) -> None:
    """0 is within the bounds of pin.end_O_ppm: a heat, a fault or exit 3, but no traceback."""
    file = tmp_path / "dry.toml"
    text = GOOD.replace("[aim]", "S_pct = 0.01\n[aim]") + "[pin]\nend_O_ppm = 0\n"
    file.write_text(text, encoding="utf-8")
    result = run("plan", file)
    assert result.exit_code in (0, 2, 3)


def test_a_heat_without_any_silicon_predicts_quietly(tmp_path: Path) -> None:
    """Contract: plain JSON, nothing on standard error; CaO/SiO2 that does not exist is null."""
    file = tmp_path / "no_silicon.toml"
    text = (
        "[hot_metal]\nmass_kg = 1000\ntemp_C = 1300\nC_pct = 4.0\n[aim]\nC_pct = 0.1\n"
        "[charge]\npure_iron_kg = 100\npure_lime_kg = 50\n"
        "[practice]\ncarryover_slag_pct = 0\nlining_wear_kg_per_t = 0\ndust_kg_per_t = 0\n"
        "[pin]\nend_temp_C = 1650\n"
        '[materials.pure_iron]\nkind = "scrap"\npct = { Fe = 100 }\n'
        '[materials.pure_lime]\nkind = "flux"\npct = { CaO = 100 }\n'
    )
    file.write_text(text, encoding="utf-8")
    result = run("predict", file, "--json", "-")
    assert result.exit_code == 0
    assert json.loads(result.stdout)["end_point"]["basicity"] is None
    assert run("predict", file).exit_code == 0


# --- files to write, and comparisons without an answer ---------------------------------------


@pytest.mark.parametrize("words", [
    ("replay", "LOG", "--shop", DEMO / "shop.toml", "--out", "LOG"),
    ("tune", "LOG", "--shop", DEMO / "shop.toml", "--json", "LOG"),
    ("log", "import", "LOG", "--refused", "LOG"),
])  # fmt: skip
def test_what_is_read_is_never_written_over(words: tuple[Any, ...], tmp_path: Path) -> None:
    log = tmp_path / "log.csv"
    lines = (DEMO / "heat_log.csv").read_text(encoding="utf-8").splitlines()[:3]
    log.write_text("\n".join(lines), encoding="utf-8")
    before = log.read_bytes()
    extra = ("--register", tmp_path / "r.sqlite") if words[0] == "log" else ()
    result = run(*(log if word == "LOG" else word for word in words), *extra)
    assert_wrong_input(result, [words[-2]])
    assert "is read by this command" in result.stderr
    assert log.read_bytes() == before
    assert [file.name for file in tmp_path.iterdir()] == ["log.csv"]


def test_two_outputs_do_not_share_a_file(tmp_path: Path) -> None:
    log, out = DEMO / "heat_log.csv", tmp_path / "x"
    result = run("replay", log, "--shop", DEMO / "shop.toml", "--out", out, "--json", out)
    assert_wrong_input(result, ["--out"])
    assert not out.exists()


@pytest.mark.parametrize("target", [".", "no/x.parquet", "x" * 300])
def test_a_bad_target_is_told_before_the_work(target: str, tmp_path: Path) -> None:
    where = tmp_path / target
    shop = DEMO / "shop.toml"
    result = run("replay", DEMO / "heat_log.csv", "--shop", shop, "--out", where)
    assert_wrong_input(result, ["--out"])
    assert list(tmp_path.iterdir()) == []


def test_nothing_is_recorded_where_the_result_cannot_be_written(tmp_path: Path) -> None:
    register = tmp_path / "r.sqlite"
    words = ("record", ORDINARY, "--register", register, "--json", tmp_path / "no" / "x.json")
    assert_wrong_input(run(*words), ["--json"])
    assert not register.exists()


def test_backup_to_a_folder_that_is_none_names_the_target(tmp_path: Path) -> None:
    register = tmp_path / "r.sqlite"
    assert run("record", ORDINARY, "--register", register).exit_code == 0
    for target in (tmp_path / "no" / "b.sqlite", tmp_path):
        result = run("log", "backup", target, "--register", register)
        assert_wrong_input(result, [str(target)])


def test_a_blank_value_is_not_an_actual(tmp_path: Path) -> None:
    register = tmp_path / "r.sqlite"
    result = run("actual", "7", "--end-C-pct", " ", "--register", register)
    assert_wrong_input(result, ["end_C_pct"])
    assert not register.exists()


def test_a_practice_named_twice_is_compared_once() -> None:
    twice = run("practices", ORDINARY, "--of", "one_slag,one_slag", "--json", "-")
    once = run("practices", ORDINARY, "--of", "one_slag", "--json", "-")
    assert (twice.exit_code, twice.stdout) == (0, once.stdout)


@pytest.mark.parametrize("value", ["nan", "-5", "0", "1e300"])
def test_a_value_of_steel_that_is_none(value: str) -> None:
    assert_wrong_input(run("fluxes", ORDINARY, "--steel-value", value), ["steel_value_per_t"])


@pytest.mark.parametrize("command", ["phosphorus", "practices", "lime"])
def test_comparisons_without_an_answer_are_3_and_say_why(command: str, tmp_path: Path) -> None:
    file = tmp_path / "cold.toml"
    cold = GOOD.replace("1340", "1150").replace("1650", "1750").replace("4.4", "3.4")
    if command == "lime":  # a kilogram of hot metal under the heat loss of a whole vessel
        cold = re.sub(r"mass_kg = \S+", "mass_kg = 1", cold)
    file.write_text(cold, encoding="utf-8")
    result = run(command, file)
    assert result.exit_code == 3
    assert re.search("what binds is|gives this heat an end point", result.stderr)
    assert "Traceback" not in result.stderr
