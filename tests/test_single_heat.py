"""Identity: a single heat solved by recorded formulas ends where the ordinary way ends.

The formulas are recorded on the third heat of a kind; each check runs the same heat before and
after, and one with other numbers. Nothing here is compared with a stored answer.
"""

from __future__ import annotations

import copy
import math
from typing import Any

import numpy as np
import pytest

import converter_calc
from converter_calc.balance import recordings, single, solving
from converter_calc.balance.heats import heats_from_dict
from converter_calc.balance.problem import build_problem
from converter_calc.basis import dual as ad
from converter_calc.basis.errors import ConverterError
from converter_calc.basis.tape import Tape
from converter_calc.basis.written import write_out
from converter_calc.planning.solving import plan_groups
from converter_calc.thermo.enthalpy import EnthalpySet
from tests.bench.conftest import CHARGED, SHOP, draw_heats
from tests.conftest import demo_files
from tests.demo import whole

NAMES = [path.stem for path in demo_files()]


@pytest.fixture(autouse=True)
def no_recordings(monkeypatch: pytest.MonkeyPatch) -> recordings.Recordings:
    """An empty store, so that no test rests on the heats of another."""
    store = recordings.Recordings()
    monkeypatch.setattr(recordings, "RECORDINGS", store)
    return store


def by_arrays(monkeypatch: pytest.MonkeyPatch, document: dict[str, Any]) -> Any:
    with monkeypatch.context() as patch:
        patch.setattr(solving, "solve_single", lambda *_: None)
        return answer(document)


def answer(document: dict[str, Any]) -> Any:
    """The whole document of the plan, or the text of the error."""
    try:
        return converter_calc.plan(copy.deepcopy(document)).document()
    except ConverterError as error:
        return str(error)


def numbers(found: Any, path: str = "") -> dict[str, float]:
    """Every number of a result by its place."""
    if isinstance(found, dict):
        return {k: x for key in found for k, x in numbers(found[key], f"{path}/{key}").items()}
    if isinstance(found, list):
        return {
            k: x for i, part in enumerate(found) for k, x in numbers(part, f"{path}/{i}").items()
        }
    return {path: found} if isinstance(found, float) else {}


def shifted(document: dict[str, Any], k: int) -> dict[str, Any]:
    new = copy.deepcopy(document)
    new["hot_metal"]["Si_pct"] = new["hot_metal"].get("Si_pct", 0.4) + 0.01 * k
    new["hot_metal"]["temp_C"] += 2 * k
    return new


@pytest.mark.parametrize("name", NAMES)
def test_recorded_heat_equals_ordinary_heat(
    name: str, monkeypatch: pytest.MonkeyPatch, no_recordings: recordings.Recordings
) -> None:
    document = whole(name)
    for k in range(6):
        heat = shifted(document, k)
        ordinary, got = by_arrays(monkeypatch, heat), answer(heat)
        if isinstance(ordinary, str):
            assert got == ordinary
            continue
        for place, x in numbers(ordinary).items():
            if "relative_closure" in place or place.startswith("/solver"):
                continue
            # small differences of large sums, such as undissolved lime, have lost digits
            assert numbers(got)[place] == pytest.approx(x, rel=1e-10, abs=1e-6), place
    assert no_recordings._made


def test_recordings_are_made_once_and_kept_within_bounds(
    monkeypatch: pytest.MonkeyPatch, no_recordings: recordings.Recordings
) -> None:
    monkeypatch.setattr(recordings, "RECORDINGS_KEPT", 2)
    made = []
    record = recordings._record
    monkeypatch.setattr(recordings, "_record", lambda *a: made.append(1) or record(*a))
    document = whole("ordinary_low_carbon")
    for k in range(5):
        answer(shifted(document, k))
    assert len(made) == 1
    for share in (0.5, 0.6, 0.7):
        document["choice"]["scrap_mix"] = {"heavy_scrap": share, "shop_scrap": 1.0 - share}
        for _ in range(3):
            answer(document)
    assert len(made) == 4
    assert len(no_recordings._made) == 2
    for share in (0.51, 0.61, 0.71):
        document["choice"]["scrap_mix"] = {"heavy_scrap": share, "shop_scrap": 1.0 - share}
        answer(document)
    assert len(no_recordings._seen) == 2


def test_another_analysis_of_a_material_is_another_recording() -> None:
    """Trap: a recording of the same names holds the material of the shop before."""
    document = whole("ordinary_low_carbon")
    for _ in range(4):
        before = answer(document)
    document.setdefault("materials", {}).setdefault("burnt_lime", {})["pct"] = {
        "CaO": 80.0, "SiO2": 6.0, "MgO": 6.0, "CO2": 8.0,
    }  # fmt: skip
    first = answer(document)
    assert first["recipe"]["burnt_lime_kg"] > 1.1 * before["recipe"]["burnt_lime_kg"]
    for _ in range(4):
        again = answer(document)
    assert again["recipe"] == pytest.approx(first["recipe"], rel=1e-10)


def test_wanted_derivatives_go_the_ordinary_way() -> None:
    heats = heats_from_dict(whole("ordinary_low_carbon"))
    ((_, group, ask),) = plan_groups(heats)
    start = solving.first_guess(build_problem(group), ask)
    p = build_problem(group, seeds=["hm_Si_pct"])
    assert all(single.solve_single(p, ask, start) is None for _ in range(4))


def test_scalar_text_is_the_formula() -> None:
    """Every operation of a recording, with exact derivatives, against arrays."""

    def formula(x: Any, y: Any) -> list[Any]:
        a = ad.exp(x * 0.2) + ad.log(y) - 2.0 / x
        both = (ad.value(x) > 0.5) & (ad.value(y) < 2.5)
        b = ad.where(both, a, ad.sqrt(y))
        c = ad.smooth_min(a, b, 0.01) * (-x) / y
        d = 3.0 - np.minimum(ad.value(y), 2.0) + np.maximum(ad.value(x), 1.0)
        h = EnthalpySet([("CO", "stable"), ("CaO", "top solid")]).evaluate_dual(y * 900.0)
        return [a, b, c + ad.square(a), d, *h]

    tape = Tape()
    seeded = formula(ad.seed(tape.input("x"), "x"), ad.seed(tape.input("y"), "y"))
    outputs = [part for z in seeded for part in (ad.value(z), ad.slope(z, "x"), ad.slope(z, "y"))]
    made = write_out(tape, [*outputs, 7.0], ["unused", "y", "x"])
    for x, y in np.random.default_rng(5).uniform(0.4, 3.0, (40, 2)).tolist():
        got = made.floats([math.nan, y, x])
        wanted = formula(ad.seed(np.array([x]), "x"), ad.seed(np.array([y]), "y"))
        plain = [
            float(np.reshape(part, -1)[0])
            for z in wanted
            for part in (ad.value(z), ad.slope(z, "x"), ad.slope(z, "y"))
        ]
        np.testing.assert_allclose(got, [*plain, 7.0], rtol=1e-13, atol=1e-13)


def test_scalar_refuses_what_it_cannot_write() -> None:
    tape = Tape()
    with pytest.raises(TypeError, match="no text for"):
        write_out(tape, [np.arctan(tape.input("x"))], ["x"])


def test_recorded_table_equals_ordinary_table(no_recordings: recordings.Recordings) -> None:
    """Short tables too: values, heats without an answer, and rows that are cut out on the way."""
    frame = draw_heats(40)
    frame.loc[5, "hot_metal_temp_C"] = 1180.0
    frame.loc[7, "hm_Si_pct"] = 0.0
    for solve, table in (
        (converter_calc.predict, frame),
        (converter_calc.plan, frame.drop(columns=CHARGED)),
    ):
        found = [solve(table, shop=SHOP) for _ in range(4)]
        assert no_recordings._made
        for name in found[0]:
            if found[0][name].dtype == float:
                np.testing.assert_allclose(
                    found[-1][name], found[0][name], rtol=1e-10, atol=1e-7, err_msg=name
                )
            else:
                assert found[-1][name].tolist() == found[0][name].tolist()


def test_written_text_over_arrays_is_the_formula() -> None:
    tape = Tape()
    x, y = tape.input("x"), tape.input("y")
    X, Y = np.random.default_rng(6).uniform(0.4, 3.0, (2, 30))

    def formula(a: Any, b: Any) -> list[Any]:
        low = ad.where((a > 0.5) & (b < 2.0), np.minimum(a, b), np.maximum(b, 1.0))
        return [low, *EnthalpySet([("CO", "stable"), ("N2", "stable")]).evaluate_dual(b * 900.0)]

    made = write_out(tape, formula(x, y), ["x", "y"])
    for got, wanted in zip(made.arrays([X, Y]), formula(X, Y), strict=True):
        np.testing.assert_allclose(got, wanted, rtol=1e-14)
    for got, wanted in zip(made.arrays([X, 1.5]), formula(X, np.full(30, 1.5)), strict=True):
        np.testing.assert_allclose(got, wanted, rtol=1e-14)
