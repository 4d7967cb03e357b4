"""Property: the solver solves, says so when it cannot, and no heat touches its neighbours.

Small systems with known roots, and tables solved by every path there is.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
import pytest

import converter_calc
from converter_calc.balance import solving, system
from converter_calc.balance.asks import evaluate_ask
from converter_calc.balance.heats import heats_from_frame
from converter_calc.balance.newton import Reach, factorise, solve, substitute
from converter_calc.balance.problem import build_problem
from converter_calc.basis.errors import InputError
from converter_calc.planning import tables
from converter_calc.planning.solving import plan_groups, predict_groups
from tests.bench.conftest import CHARGED, SHOP, draw_heats


class Circle:
    """x^2 + y^2 = r^2 and y = x: root x = y = r / sqrt 2; none where r^2 is negative."""

    def __init__(self, r_squared: Any) -> None:
        self.r_squared = r_squared

    def residuals(self, rows: Any, x: Mapping[str, Any]) -> list[Any]:
        return [x["x"] * x["x"] + x["y"] * x["y"] - self.r_squared[rows], x["y"] - x["x"]]

    def jacobian(self, rows: Any, x: Mapping[str, Any]) -> tuple[list[Any], list[list[Any]]]:
        return self.residuals(rows, x), [[2.0 * x["x"], 2.0 * x["y"]], [-1.0, 1.0]]


def test_roots_are_found_and_a_heat_without_one_says_so() -> None:
    r_squared = np.array([2.0, -1.0, 8.0, 0.5])
    start = {"x": np.full(4, 3.0), "y": np.full(4, 0.5)}
    found = solve(Circle(r_squared), start, {"x": Reach(step=5.0)}, np.arange(4))
    assert found.converged.tolist() == [True, False, True, True]
    good = found.converged
    root = np.sqrt(r_squared[good] / 2.0)
    np.testing.assert_allclose(found.unknowns["x"][good], root, rtol=1e-12)
    np.testing.assert_allclose(found.unknowns["y"][good], root, rtol=1e-12)


def test_a_bad_neighbour_changes_nothing() -> None:
    start = {"x": np.full(3, 3.0), "y": np.full(3, 0.5)}
    with_bad = solve(Circle(np.array([2.0, np.nan, 8.0])), start, {}, np.arange(3))
    alone = solve(Circle(np.array([2.0, 4.0, 8.0])), start, {}, np.arange(3))
    for name in start:
        np.testing.assert_array_equal(with_bad.unknowns[name][[0, 2]], alone.unknowns[name][[0, 2]])


def test_factors_solve_random_systems() -> None:
    rng = np.random.default_rng(1)
    full = rng.normal(size=(50, 5, 5)) + 4.0 * np.eye(5)
    right = rng.normal(size=(50, 5))
    J = [[full[:, r, c] for c in range(5)] for r in range(5)]
    A, inverse, trouble = factorise(J)
    assert not np.any(trouble)
    got = np.stack(substitute((A, inverse), [right[:, r] for r in range(5)]), axis=1)
    wanted = np.linalg.solve(full, right[:, :, None])[:, :, 0]
    np.testing.assert_allclose(got, wanted, rtol=1e-9)


@pytest.mark.parametrize("plan", [False, True], ids=["predict", "plan"])
def test_recorded_residuals_are_the_residuals(plan: bool) -> None:
    frame = draw_heats(300)
    frame = frame.drop(columns=CHARGED) if plan else frame
    heats = heats_from_frame(frame, shop=SHOP)
    ((_, group, ask),) = plan_groups(heats) if plan else predict_groups(heats)
    p = build_problem(group)
    x = solving.solve_ask(p, ask).unknowns
    off = {name: values * (1.0 + 0.01 * k) for k, (name, values) in enumerate(x.items())}
    equations = system.System(p, ask)
    equations._program = equations._prepare()
    state = evaluate_ask(p, ask, dict(off))
    for name, got in zip(ask.residuals, equations.residuals(np.arange(300), off), strict=True):
        np.testing.assert_allclose(got, state.residuals[name], rtol=1e-9, atol=1e-12)


def test_jacobian_is_the_slope_of_the_residuals() -> None:
    heats = heats_from_frame(draw_heats(5).drop(columns=CHARGED), shop=SHOP)
    ((_, group, ask),) = plan_groups(heats)
    p = build_problem(group)
    x = {name: 1.01 * values for name, values in solving.solve_ask(p, ask).unknowns.items()}
    equations, rows = system.System(p, ask), np.arange(5)
    _, J = equations.jacobian(rows, x)
    slopes = [
        [
            np.broadcast_to(entry, (5,)) * x[name]
            for entry, name in zip(row, ask.unknowns, strict=True)
        ]
        for row in J
    ]
    size = [np.max(np.abs(row), axis=0) for row in slopes]
    for c, name in enumerate(ask.unknowns):
        up = equations.residuals(rows, x | {name: x[name] * (1.0 + 1e-6)})
        down = equations.residuals(rows, x | {name: x[name] * (1.0 - 1e-6)})
        for r in range(len(ask.residuals)):
            slope = (up[r] - down[r]) / 2e-6
            np.testing.assert_allclose(slopes[r][c] / size[r], slope / size[r], atol=1e-6)


def equal_tables(one: pd.DataFrame, two: pd.DataFrame) -> None:
    assert list(one.columns) == list(two.columns)
    for name in one:
        if one[name].dtype == float:
            np.testing.assert_allclose(one[name], two[name], rtol=1e-10, atol=1e-9, err_msg=name)
        else:
            assert one[name].tolist() == two[name].tolist(), name


def test_sampled_and_shared_tables_equal_plain_newton(monkeypatch: pytest.MonkeyPatch) -> None:
    frame = draw_heats(900)
    frame.loc[17, "hot_metal_temp_C"] = 1180.0  # far outside the sample
    frame.loc[300:320, "lump_ore_kg"] = np.nan  # another pattern of gaps
    plain = converter_calc.predict(frame, shop=SHOP)
    monkeypatch.setattr(solving, "SAMPLED_FROM", 200)
    monkeypatch.setattr(system, "RECORDED_FROM", 200)
    equal_tables(plain, converter_calc.predict(frame, shop=SHOP))
    monkeypatch.setattr(tables, "SHARED_FROM", 300)
    monkeypatch.setattr(tables, "ROWS_AT_ONCE", 250)
    monkeypatch.setattr(tables, "ROWS_READ_OFF", 100)
    equal_tables(plain, converter_calc.predict(frame, shop=SHOP))


def test_a_wrong_row_is_named_from_any_process(monkeypatch: pytest.MonkeyPatch) -> None:
    frame = draw_heats(400)
    frame.loc[333, "hm_C_pct"] = 60.0
    monkeypatch.setattr(tables, "SHARED_FROM", 100)
    with pytest.raises(InputError, match=r"hm_C_pct.*60.*row 333"):
        converter_calc.predict(frame, shop=SHOP)
