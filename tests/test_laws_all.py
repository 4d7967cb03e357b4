"""Every law alike: derivatives, shapes, and guards of the data files.

Kinds of check: property (exact derivative against central differences; array equals loop; NaN
stays where it is), contract (each law has a source, a range, a name of its own).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

import numpy as np
import pytest

from converter_calc.basis.dual import Dual, seed, slope
from converter_calc.basis.elements import parse_formula
from converter_calc.data.tables import read_csv_rows, read_toml
from converter_calc.laws import (
    carbon_oxygen,
    iron_oxide,
    lime,
    magnesia,
    manganese,
    minor,
    phosphorus,
    sulphur,
)

GIVEN = {
    "CaO": [48.0, 42.0, 51.0],
    "SiO2": [14.0, 16.0, 12.0],
    "MgO": [8.0, 6.0, 9.0],
    "Al2O3": [1.5, 2.0, 1.0],
    "FeO": [18.0, 14.0, 24.0],
    "Fe2O3": [5.0, 4.0, 7.0],
    "MnO": [4.0, 6.0, 2.0],
    "P2O5": [2.5, 1.0, 3.0],
    "T": [1923.0, 1880.0, 1960.0],
    "C": [0.04, 0.3, 0.025],
    "O": [0.06, 0.02, 0.09],
    "fS": [1.0, 1.1, 1.0],
    "B": [3.0, 2.0, 4.0],
}
OXIDES = ("CaO", "SiO2", "MgO", "Al2O3", "FeO", "Fe2O3", "MnO", "P2O5")


def _slag(x):
    return {oxide: x[oxide] for oxide in OXIDES}


def _all_laws() -> dict[str, Callable]:
    found: dict[str, Callable] = {}
    for law in phosphorus.laws():
        found[f"P {law}"] = partial(
            lambda law, x: phosphorus.partition_ratio(law, _slag(x), x["T"], x["C"], x["O"]), law
        )
    for law in manganese.laws():
        found[f"Mn {law}"] = partial(
            lambda law, x: manganese.partition_ratio(law, _slag(x), x["T"]), law
        )
    for law in sulphur.laws():
        found[f"S {law}"] = partial(
            lambda law, x: sulphur.partition_ratio(law, _slag(x), x["T"], x["O"], x["fS"]), law
        )
    for law in carbon_oxygen.laws():
        for blowing in carbon_oxygen.blowing_kinds():
            found[f"O {law} {blowing}"] = partial(
                lambda law, blowing, x: carbon_oxygen.dissolved_oxygen_pct(
                    law, x["C"], x["T"], None, blowing
                ),
                law,
                blowing,
            )
    for blowing in carbon_oxygen.blowing_kinds():
        found[f"T.Fe {blowing}"] = partial(
            lambda blowing, x: iron_oxide.total_iron_pct(x["C"], x["T"], blowing), blowing
        )
    found["MgO"] = lambda x: magnesia.saturation_pct(x["B"], x["T"])
    found["lime"] = lambda x: lime.dissolution_limit_pct(x["FeO"], x["T"])
    for law in minor.CHROMIUM_LAWS:
        found[f"Cr {law}"] = partial(
            lambda law, x: minor.chromium_ratio(law, x["FeO"], x["O"], x["T"]), law
        )
    found["V equilibrium"] = lambda x: minor.vanadium_ratio("equilibrium", x["O"], x["T"])
    found["O saturation"] = lambda x: carbon_oxygen.saturated_oxygen_pct(x["T"])
    return found


LAWS = _all_laws()
each_law = pytest.mark.parametrize("name", LAWS)


def _arrays():
    return {key: np.array(values) for key, values in GIVEN.items()}


@each_law
def test_derivative_against_differences(name):
    """Property: central differences, relative step 1e-5, truncation about 1e-9 of the value."""
    law, plain = LAWS[name], _arrays()
    result = law({key: seed(values, key) for key, values in plain.items()})
    assert isinstance(result, Dual)
    assert result.v == pytest.approx(law(plain), rel=1e-14)
    for key, values in plain.items():
        step = 1e-5 * values
        high, low = (law(plain | {key: values + sign * step}) for sign in (1.0, -1.0))
        by_difference = (high - low) / (2.0 * step)
        exact = np.broadcast_to(slope(result, key), values.shape)
        noise = 1e-7 * np.abs(law(plain)) / values
        assert np.all(np.abs(exact - by_difference) < noise + 1e-6 * np.abs(exact)), key


@each_law
def test_array_equals_loop_and_nan_stays_in_its_row(name):
    """Property: scalar, array, NaN and empty."""
    law, plain = LAWS[name], _arrays()
    whole = law(plain)
    assert whole.shape == (3,)
    for row in range(3):
        alone = law({key: values[row] for key, values in GIVEN.items()})
        assert np.ndim(alone) == 0
        assert alone == pytest.approx(whole[row], rel=1e-14)
    spoilt = {key: values.copy() for key, values in plain.items()}
    for values in spoilt.values():
        values[1] = np.nan
    got = law(spoilt)
    assert np.isnan(got[1])
    assert got[[0, 2]].tolist() == whole[[0, 2]].tolist()
    assert law({key: values[:0] for key, values in plain.items()}).shape == (0,)


@each_law
def test_derivatives_stay_finite_at_zero(name):
    """Property: no carbon, no phosphorus, no iron oxide, no oxygen (but for sulphur, which divides
    by the oxygen of the metal): values and derivatives stay finite."""
    law, plain = LAWS[name], _arrays()
    for key in (
        ("P2O5", "MnO", "FeO", "Fe2O3", "C")
        if name.startswith("S ")
        else (
            "P2O5",
            "MnO",
            "FeO",
            "Fe2O3",
            "C",
            "O",
        )
    ):
        zeroed = plain | {key: np.zeros(3)}
        if key == "FeO":
            zeroed["Fe2O3"] = np.zeros(3)
        result = law({k: seed(values, k) for k, values in zeroed.items()})
        assert np.all(np.isfinite(result.v)), key
        assert all(np.all(np.isfinite(d)) for d in result.d.values()), key


LAW_FILES = ("phosphorus.toml", "manganese.toml", "sulphur.toml", "carbon_oxygen.toml")
ONE_LAW_FILES = ("iron_oxide.toml", "magnesia.toml", "lime.toml", "saturation.toml")
#: What a law row may hold; anything else is a slip of the pen that would be ignored.
LAW_KEYS = {
    *("name", "source", "year", "known", "range", "scatter_log10", "formula"),
    *("left_side", "linear", "log_factor", "inside_log", "per_T", "constant"),
    "activity",
    *("carbon_per_T", "carbon_constant", "printed_K", "printed_k", "iron_oxide", "basis"),
    *("optical_basicity", "lambda_1", "lambda_2", "lambda_per_T", "unused_branch"),
    *("e_C_C", "e_C_O", "e_O_O", "e_O_C", "top", "combined", "bottom", "spread"),
}
QUANTITIES = {
    *("temperature_C", "C_pct", "T_Fe_pct", "FetO_pct", "basicity", "optical_basicity"),
    *(f"{row['component']}_pct" for row in read_csv_rows("optical_basicity.csv")),
}
KNOWN = {"read", "from memory", "common practice"}


def _check_ranges(row):
    assert row["range"]
    for limit in row["range"]:
        assert limit["quantity"] in QUANTITIES
        assert limit["low"] < limit["high"]
        assert limit["known"].strip()


@pytest.mark.parametrize("file", LAW_FILES)
def test_every_law_row_is_complete(file):
    """Contract: unique name, source, how known, year, range; only known fields and oxides."""
    rows = read_toml(file)["law"]
    names = [row["name"] for row in rows]
    assert len(set(names)) == len(names)
    oxides = {row["component"] for row in read_csv_rows("optical_basicity.csv")} | {"FetO"}
    for row in rows:
        assert set(row) <= LAW_KEYS, row["name"]
        assert row["source"].strip()
        assert row["known"] in KNOWN
        assert row["year"] == 0 or 1900 < row["year"] < 2030
        assert str(row["year"]) in row["source"] or row["year"] == 0
        assert set(row.get("linear", {})) | set(row.get("inside_log", {})) <= oxides
        _check_ranges(row)


def test_left_sides_are_known():
    """Contract."""
    known = {phosphorus.PLAIN, phosphorus.IRON, phosphorus.OXYGEN, phosphorus.QUINTIC}
    known.add(phosphorus.ACTIVITY)
    assert {row["left_side"] for row in read_toml("phosphorus.toml")["law"]} <= known


@pytest.mark.parametrize("file", ONE_LAW_FILES)
def test_single_rule_files_are_complete(file):
    """Contract: source, how known, range."""
    data = read_toml(file)
    assert data["source"].strip()
    assert data["known"] in KNOWN
    _check_ranges(data)


def test_minor_and_saturation_rows_have_a_source():
    """Contract."""
    data = read_toml("minor.toml")
    groups = [data["constant"], data["iron_oxide"], data["equilibrium"]]
    groups.append(read_toml("carbon_oxygen.toml")["saturation"])
    for group in groups:
        for row in group.values():
            assert row["source"].strip()
            assert row["known"] in KNOWN


def test_optical_basicity_table():
    """Contract: unique components, oxygen as the formula has it (CaF2 and CaS: one), source."""
    rows = read_csv_rows("optical_basicity.csv")
    assert len({row["component"] for row in rows}) == len(rows)
    for row in rows:
        expected = {"CaF2": 1.0, "CaS": 1.0}.get(row["component"])
        if expected is None:
            expected = parse_formula(row["component"])["O"]
        assert float(row["oxygen"]) == expected
        for scale in ("pauling", "density"):
            assert 0.3 < float(row[scale]) < 1.5
        assert row["source"].strip()


@pytest.mark.parametrize("module", [phosphorus, manganese, sulphur, carbon_oxygen])
def test_describe_gives_text_source_and_range(module):
    """Contract."""
    for law in module.laws():
        note = module.describe(law)
        assert note.name == law
        assert "=" in note.formula
        assert note.source
        assert note.ranges
