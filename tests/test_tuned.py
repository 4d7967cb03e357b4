"""Tuned parameters kept, read back and applied; the report. Kind of check: identity."""

from __future__ import annotations

import json
import tomllib
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner, Result

import converter_calc
from converter_calc.balance.heats import heats_from_dict, read_heat_file
from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.laws import phosphorus
from converter_calc.learning.tuned import Tuned, load_tuned, tuned_from
from converter_calc.learning.tuning import tune
from tests.conftest import DEMO
from tests.heat_logs import SHOP, made_log

HEAT = DEMO / "ordinary_low_carbon.toml"
NAMES = ("heat_loss_MJ_per_t", "P_approach", "hot_metal_weight_error_pct",
         "heavy_scrap_yield_factor")  # fmt: skip


@cache
def tuned() -> Tuned:
    truth = {"heat_loss_MJ_per_t": 60.0, "P_approach": 0.6, "heavy_scrap_yield_factor": 0.97}
    log = made_log(60, truth, noise=1.0)
    log.loc[3, "end_temp_C"] = 1290.0
    log.loc[4, "hm_C_pct"] = np.nan
    return tune(log, SHOP, only=NAMES)


def run(*arguments: Any) -> Result:
    return CliRunner().invoke(main, [str(x) for x in arguments])


def test_a_file_gives_back_what_was_saved(tmp_path: Path) -> None:
    tuned().save(tmp_path / "tuned.json")
    again = load_tuned(tmp_path / "tuned.json")
    assert again.document() == tuned().document()
    assert again.covariance == pytest.approx(tuned().covariance, rel=1e-15)
    assert again.names == NAMES or set(again.names) == set(NAMES)


def test_covariance_is_that_of_the_standard_errors() -> None:
    found = tuned()
    errors = np.array(list(found.standard_errors().values()))
    assert np.sqrt(np.diag(found.covariance)) == pytest.approx(errors)
    assert np.linalg.eigvalsh(found.covariance).min() > 0.0


def test_what_was_not_used_is_listed_with_its_reason() -> None:
    table = tuned().gross_frame().set_index("heat_id")
    assert table.loc["H00004", "reason"] == "not given"
    assert table.loc["H00003", "field"] == "end_temp_C"
    assert "the whole heat is not used" in table.loc["H00003", "reason"]
    assert (tuned().unusable, tuned().gross_heats, tuned().heats) == (1, 1, 58)


def test_applied_parameters_are_those_of_a_file_that_gives_them() -> None:
    """The same heat with the values written into its file."""
    found = converter_calc.plan(tuned().apply(read_heat_file(HEAT)))
    values = tuned().practice_values()
    factor = values.pop("heavy_scrap_yield_factor")
    document: dict[str, Any] = {
        "shop": str(SHOP),
        "practice": values,
        "materials": {"heavy_scrap": {"yield_factor": factor}},
    }
    heat = tomllib.loads(HEAT.read_text(encoding="utf-8"))
    expected = converter_calc.plan({**heat, **document})
    for name, kg in expected.recipe().items():
        assert float(np.ravel(found.recipe()[name])[0]) == pytest.approx(float(np.ravel(kg)[0]))
    assert found.check_closures().all()


def test_another_law_than_the_log_was_read_with_is_refused() -> None:
    heat = tomllib.loads(HEAT.read_text(encoding="utf-8"))
    other = next(name for name in phosphorus.laws() if name != tuned().laws["phosphorus"])
    heats = heats_from_dict({**heat, "shop": str(SHOP), "law": {"phosphorus": other}})
    with pytest.raises(InputError, match=f"law.phosphorus: tuned with assis_2019.*{other}"):
        tuned().apply(heats)


def changed(**changes: Any) -> dict[str, Any]:
    return {**json.loads(json.dumps(tuned().document())), **changes}


def first_parameter(**changes: Any) -> dict[str, Any]:
    document = changed()
    document["parameters"][0] |= changes
    return document


@pytest.mark.parametrize(
    ("document", "words"),
    [
        ([], "is no file of tuned parameters"),
        ({"format": "other"}, "is no file of tuned parameters"),
        (changed(version=9), "is of version 9; this program reads 1"),
        (changed(covariance=[[1.0]]), "covariance: must be 4 by 4"),
        (changed(covariance=(-np.eye(4)).tolist()), "covariance: has a negative variance"),
        (changed(parameters="x"), "is incomplete or misshapen"),
        (first_parameter(name="wait"), "wait: is no numeric input"),
        (first_parameter(value=1e9), "must be 0 to 500 MJ/t steel, given 1e"),
        (first_parameter(value="40"), "has no finite value"),
        (first_parameter(extra=1), "is incomplete or misshapen"),
    ],
)
def test_a_broken_document_is_refused_in_one_sentence(document: Any, words: str) -> None:
    with pytest.raises(InputError, match=words):
        tuned_from(document)


@pytest.mark.parametrize(
    ("content", "words"),
    [(None, "cannot be read"), (b"{", "is not JSON"), (b"\xff\xfe", "is not JSON")],
)
def test_a_broken_file_is_refused(tmp_path: Path, content: bytes | None, words: str) -> None:
    path = tmp_path / "tuned.json"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputError, match=words):
        load_tuned(path)


def test_commands_from_log_to_plan(tmp_path: Path) -> None:
    log, kept = tmp_path / "log.csv", tmp_path / "tuned.json"
    made_log(40, {"P_approach": 0.6}, noise=1.0).to_csv(log, index=False)
    result = run("tune", log, "--shop", SHOP, "--out", kept, "--only", "P_approach")
    assert result.exit_code == 0, result.stderr
    assert "40 of 40 heats used." in result.stdout
    assert "P_approach" in result.stdout
    assert "13,528 heats (Xie et al." in result.stdout
    value = load_tuned(kept).practice_values()["P_approach"]
    plain = json.loads(run("plan", HEAT, "--json", "-").stdout)
    planned = json.loads(run("plan", HEAT, "--tuned", kept, "--json", "-").stdout)
    law = planned["laws"]["values"]["L_P"]
    assert value > 0.5
    assert law > plain["laws"]["values"]["L_P"]
    shown = run("explain", HEAT, "phosphorus", "--tuned", kept).stdout
    assert f"{value:.4g}" in shown


def test_commands_refuse_in_one_line(tmp_path: Path) -> None:
    missing = run("plan", HEAT, "--tuned", tmp_path / "none.json")
    assert missing.exit_code == 2
    assert "cannot be read" in missing.stderr
    log = tmp_path / "log.csv"
    made_log(4).drop(columns="oxygen_Nm3").to_csv(log, index=False)
    result = run("tune", log, "--shop", SHOP)
    assert result.exit_code == 2
    assert result.stderr.strip() == "oxygen_Nm3: the log has no such column"


def test_json_of_the_command_is_the_document(tmp_path: Path) -> None:
    log = tmp_path / "log.csv"
    made_log(30, noise=1.0).to_csv(log, index=False)
    result = run("tune", log, "--shop", SHOP, "--only", "S_approach", "--json", "-")
    assert tuned_from(json.loads(result.stdout)).names == ("S_approach",)
