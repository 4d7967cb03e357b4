"""Grade library: guards of the tables, limits of named standards, user grades.

Kinds of check: "EN 10027-1" = the naming rule of that standard (a grade's name states its mean
carbon and alloy content), from memory; "standard" = limits of the standard named, from memory
(written a second time, by element, so that a slip in the data file shows); "contract" = texts
and refusals promised to the user; "guard" = shape of our own tables.
"""

from __future__ import annotations

import pytest

from converter_calc.basis.elements import atomic_weight
from converter_calc.basis.errors import DataError, InputError
from converter_calc.data.tables import read_csv_rows, read_toml
from converter_calc.laws import deoxidation
from converter_calc.planning.grades import (
    Grade,
    additions,
    grade,
    grades,
    parse_user_grade,
    tap_practice,
)

# ---------------------------------------------------------------- guards


def test_every_grade_names_its_standard_and_how_it_is_known() -> None:
    """Guard."""
    library = grades()
    assert len(library) >= 25
    assert len({g.name.replace(" ", "").casefold() for g in library}) == len(library)
    for g in library:
        assert g.standard, g.name
        assert g.edition.isdigit(), g.name
        assert 1990 <= int(g.edition) <= 2026, g.name
        assert g.known == "from memory", g.name
        assert not g.invented
        assert {"C", "P", "S"} <= set(g.limits), g.name
        for element, (low, high) in g.limits.items():
            assert atomic_weight(element) > 0.0
            assert low is not None or high is not None
            assert 0.0 <= (low or 0.0) <= (100.0 if high is None else high)


def test_every_addition_has_a_source_and_a_sum_under_100() -> None:
    """Guard."""
    for name, row in read_toml("ferroalloys.toml").items():
        assert row["source"], name
        assert row["supplies"] in row["pct"], name
        assert max(row["pct"], key=row["pct"].get) == row["supplies"], name
        assert 50.0 < sum(row["pct"].values()) <= 100.0, name
        assert row["rest"] in {"Fe", "none"}, name
        assert not any("price" in key for key in row), name


def test_practice_rows_are_unique_sourced_and_inside_their_bounds() -> None:
    """Guard."""
    rows = read_csv_rows("tap_practice.csv")
    keys = [(row["group"], row["name"]) for row in rows]
    assert len(set(keys)) == len(keys)
    for row in rows:
        assert row["source"], row["name"]
        if row["group"] == "alloy_order":
            for name in row["value"].split(";"):
                assert row["name"] in additions()[name].pct
        elif row["group"] == "text":
            assert row["value"] in {*row["description"].replace(":", ";").split("; "), ""} or (
                row["value"] in deoxidation.laws()
            )
        elif not row["value"]:  # not given unless the shop gives it
            assert float(row["min"]) < float(row["max"])
        else:
            assert float(row["min"]) <= float(row["value"]) <= float(row["max"]), row["name"]


# ---------------------------------------------------------------- EN 10027-1, from memory


@pytest.mark.parametrize(
    ("name", "carbon"),
    [("C7D", 7), ("C22E", 22), ("C35E", 35), ("C45E", 45), ("C60E", 60), ("C70D", 70),
     ("42CrMo4", 42), ("16MnCr5", 16)],
)  # fmt: skip
def test_name_states_a_hundred_times_the_mean_carbon(name: str, carbon: int) -> None:
    """EN 10027-1: 100 x mean carbon. Old names differ by up to 1.5 (C22E: 0.17-0.24)."""
    low, high = grade(name).limits["C"]
    assert low is not None
    assert high is not None
    assert 50.0 * (low + high) == pytest.approx(carbon, abs=1.5 + 1e-9)


@pytest.mark.parametrize(
    ("name", "element", "number"), [("42CrMo4", "Cr", 4), ("16MnCr5", "Mn", 5)]
)
def test_name_states_four_times_the_mean_chromium_or_manganese(
    name: str, element: str, number: int
) -> None:
    """EN 10027-1: multiplier 4 for Cr and Mn, the first alloying element, rounded."""
    low, high = grade(name).limits[element]
    assert low is not None
    assert high is not None
    assert round(4.0 * 0.5 * (low + high)) == number


@pytest.mark.parametrize("name", ["SAE 1006", "SAE 1008", "SAE 1020", "SAE 1045"])
def test_last_two_digits_lie_in_the_carbon_range(name: str) -> None:
    """SAE J403 numbering: the last two digits are hundredths of a per cent of carbon."""
    low, high = grade(name).limits["C"]
    assert high is not None
    assert (low or 0.0) <= int(name[-2:]) / 100.0 <= high


@pytest.mark.parametrize(
    "family",
    [("DC01", "DC03", "DC04", "DC05", "DC06"), ("DD11", "DD12", "DD13", "DD14")],
)
def test_better_drawing_grades_never_allow_more(family: tuple[str, ...]) -> None:
    """EN 10130, EN 10111: each next grade draws deeper, so no limit rises."""
    for softer, harder in zip(family[1:], family, strict=False):
        for element in ("C", "Mn", "P", "S"):
            assert grade(softer).highest_pct(element) <= grade(harder).highest_pct(element)


# ---------------------------------------------------------------- limits, from memory


@pytest.mark.parametrize(
    ("name", "element", "low", "high"),
    [
        ("S235JR", "C", None, 0.17),  # EN 10025-2:2019, table of the ladle analysis
        ("S235JR", "Cu", None, 0.55),
        ("S355J2", "Mn", None, 1.60),
        ("S355J2", "P", None, 0.025),
        ("DC01", "C", None, 0.12),  # EN 10130:2006
        ("DC04", "P", None, 0.030),
        ("DD13", "Mn", None, 0.40),  # EN 10111:2008
        ("S355MC", "S", None, 0.020),  # EN 10149-2:2013
        ("S700MC", "Mn", None, 2.10),
        ("C45E", "C", 0.42, 0.50),  # EN ISO 683-1:2018
        ("C45E", "Mn", 0.50, 0.80),
        ("42CrMo4", "Mo", 0.15, 0.30),  # EN ISO 683-2:2018
        ("16MnCr5", "Cr", 0.80, 1.10),  # EN ISO 683-3:2018
        ("C4D", "C", None, 0.06),  # EN 10016-2:1994
        ("P265GH", "S", None, 0.010),  # EN 10028-2:2017
        ("B500B", "Cu", None, 0.80),  # EN 10080:2005
        ("R260", "C", 0.62, 0.80),  # EN 13674-1:2011
        ("R260", "Cu", None, 0.15),
        ("A1011 CS B", "C", 0.02, 0.15),  # ASTM A1011
        ("SAE 1045", "Mn", 0.60, 0.90),  # ASTM A29
    ],
)
def test_limit_of_the_standard(
    name: str, element: str, low: float | None, high: float | None
) -> None:
    """Standard, from memory."""
    assert grade(name).limits[element] == (low, high)


# ---------------------------------------------------------------- contract


def test_name_is_found_whatever_its_case_and_blanks() -> None:
    """Contract."""
    assert grade("s235 jr") == grade("S235JR")
    assert grade("sae1008").name == "SAE 1008"


def test_unknown_grade_is_refused_with_the_nearest_names() -> None:
    """Contract."""
    with pytest.raises(InputError) as caught:
        grade("S235JX")
    assert "aim.grade" in str(caught.value)
    assert "no grade 'S235JX'" in str(caught.value)
    assert "S235JR" in str(caught.value)


def test_user_grade_goes_before_the_library() -> None:
    """Contract."""
    own = {"DC04": {"limits": {"C": [0.02, 0.05], "P": {"max": 0.015}}, "note": "for a test"}}
    found = grade("DC04", own)
    assert found.invented
    assert found.known == "given by the user"
    assert found.limits == {"C": (0.02, 0.05), "P": (None, 0.015)}
    assert grade("DC04", {"DC04": found}) is found
    assert isinstance(grade("DC05", own), Grade)


@pytest.mark.parametrize(
    ("fields", "text"),
    [
        ({}, "grades.X.limits: missing"),
        ({"limits": 3}, "grades.X.limits: missing"),
        ({"limits": {"C": [0.1, 0.05]}}, "grades.X.limits.C: minimum 0.1 above maximum 0.05"),
        ({"limits": {"C": [0.1, 101]}}, "must be 0 to 100 mass %, given 101"),
        ({"limits": {"C": [-0.1, 0.2]}}, "must be 0 to 100 mass %, given -0.1"),
        ({"limits": {"C": [float("nan"), 0.2]}}, "must be 0 to 100 mass %, given nan"),
        ({"limits": {"C": [True, 0.2]}}, "given True"),
        ({"limits": {"C": 0.2}}, "must be [low, high]"),
        ({"limits": {"C": [0.2]}}, "must be [low, high]"),
        ({"limits": {"C": {"most": 0.2}}}, "must be [low, high]"),
        ({"limits": {"Xx": [0, 1]}}, "'Xx' is not the symbol of an element"),
        ({"limits": {"Cr": [60, 70], "Ni": [60, 70]}}, "minima add up to 120"),
        ({"limits": {"Mn": {"min": 1.0}}}, "only a minimum"),
        ({"limits": {"C": {"max": 0.1}}, "targets": {"C": 0.2}}, "outside the limits"),
        ({"limits": {"C": {"max": 0.1}}, "targets": {"Zz": 0.2}}, "'Zz' is not the symbol"),
        ({"limits": {"C": {"max": 0.1}}, "targets": [1]}, "must be a table"),
        ({"limit": {"C": [0, 1]}}, "grades.X.limit: unknown field; nearest: limits"),
        ({"limits": {"C": [0, 1]}, "note": 3}, "grades.X.note: must be text"),
        ("C 0.2", "must be a table with limits"),
    ],
)
def test_faulty_user_grade_is_refused_by_field(fields: object, text: str) -> None:
    """Contract."""
    with pytest.raises(InputError) as caught:
        parse_user_grade("X", fields)  # type: ignore[arg-type]
    assert text in str(caught.value)


def test_all_faults_of_a_user_grade_are_told_at_once() -> None:
    """Contract."""
    with pytest.raises(InputError) as caught:
        parse_user_grade("X", {"limits": {"C": [2, 1], "Qq": [0, 1]}, "nope": 1})
    assert len(caught.value.faults) == 3


@pytest.mark.parametrize(
    ("overrides", "text"),
    [
        ({"margin_Q_pct": 1}, "tap.margin_Q_pct: unknown field; nearest: margin_"),
        ({"margin_P_pct": -1}, "tap.margin_P_pct: must be 0 to 0.05 mass %, given -1"),
        ({"margin_P_pct": "x"}, "given 'x'"),
        ({"margin_P_pct": True}, "given True"),
        ({"recovery": {"Mn": 0}}, "tap.recovery.Mn: must be 0.01 to 1 share, given 0"),
        ({"recovery": 0.9}, "tap.recovery: must be a table by element"),
        ({"residual_pct": {"Mn": float("inf")}}, "tap.residual.Mn: must be 0 to 2"),
        ({"alloy_order": {"Mn": ["FeMn XC"]}}, "no addition 'FeMn XC'; nearest: FeMn"),
        ({"alloy_order": {"Mn": ["FeSi75"]}}, "'FeSi75' holds no Mn"),
        ({"alloy_order": {"Mn": [["FeMn HC"]]}}, "must be a list of additions"),
        ({"lowest_end_C_pct": 0.2, "highest_end_C_pct": 0.1}, "is above highest_end_C_pct"),
    ],
)
def test_faulty_practice_is_refused_by_field(overrides: dict[str, object], text: str) -> None:
    """Contract."""
    with pytest.raises(InputError) as caught:
        tap_practice(overrides)
    assert text in str(caught.value)


def test_practice_of_the_shop_replaces_the_default_only() -> None:
    """Contract."""
    own = tap_practice({"margin_P_pct": 0.001, "residual_pct": {"Mn": 0.2}})
    assert own.margin_P_pct == 0.001
    assert own.residual_pct["Mn"] == 0.2
    assert own.sources["margin_P_pct"] == "given by the shop"
    assert tap_practice().margin_P_pct != 0.001


def test_faults_in_the_library_are_data_errors(monkeypatch: pytest.MonkeyPatch) -> None:
    """Contract: a broken data file is not the user's fault."""
    from converter_calc.tapping import grade_library

    grade_library._library.cache_clear()
    monkeypatch.setattr(grade_library, "read_toml", lambda _: {"Q": {"limits": {"C": [0, 1]}}})
    with pytest.raises(DataError, match=r"grades.toml"):
        grades()
    monkeypatch.undo()
    grade_library._library.cache_clear()
    assert grades()
