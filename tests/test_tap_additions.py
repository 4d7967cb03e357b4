"""Additions by least cost and in order of preference.

Kinds of check: "enumeration" = every vertex of the programme tried, apart from any solver;
"worked" = by hand; "property"; "contract".
"""

from __future__ import annotations

import dataclasses
import itertools
from typing import Any

import numpy as np
import pytest
from scipy.optimize import linprog

from converter_calc.planning.ladle import LadlePlan, killer_of, plan_ladle
from converter_calc.tapping.aims import converter_aim
from converter_calc.tapping.grade_library import Grade, grade, grades, parse_user_grade
from converter_calc.tapping.least_cost import Demand, Want, choose
from converter_calc.tapping.linear_plans import least_violation, solve_all
from converter_calc.tapping.tap_practice import tap_practice
from tests.tap_cases import BARE, tapped
from tests.test_grade_aims import pour as pour_by_tables

#: Invented prices, per tonne.
PRICES = {"FeMn HC": 1100, "FeMn MC": 1500, "FeMn LC": 1800, "Mn metal": 2300, "SiMn": 1150,
          "FeSi75": 1450, "Al": 2400, "carburiser": 600, "FeCr HC": 1500, "FeCr LC": 2600,
          "FeV": 14000, "FeNb": 30000, "FeTi": 5000, "FeMo": 28000, "Ni": 17000,
          "Cu": 9000}  # fmt: skip


def least_by_enumeration(cost: Any, matrix: Any, limits: Any) -> tuple[float, Any] | None:
    """Smallest cost over all vertices of A x <= b, x >= 0."""
    m, k = matrix.shape
    whole = np.vstack([matrix, -np.eye(k)])
    bounds = np.concatenate([limits, np.zeros(k)])
    best = None
    for rows in itertools.combinations(range(m + k), k):
        part = whole[list(rows)]
        if abs(np.linalg.det(part)) < 1e-10:
            continue
        x = np.linalg.solve(part, bounds[list(rows)])
        if (whole @ x <= bounds + 1e-9).all() and (best is None or cost @ x < best[0]):
            best = (float(cost @ x), x)
    return best


# ---------------------------------------------------------------- linear programmes


@pytest.mark.parametrize("seed", range(6))
def test_least_cost_by_enumeration_of_all_vertices(seed: int) -> None:
    """Enumeration, and HiGHS heat by heat: read off a shared basis or solved anew."""
    rng = np.random.default_rng(seed)
    k, m, n = 3, 5, 40
    cost = rng.uniform(0.5, 2.0, k)
    matrix = rng.normal(size=(m, k))
    base = matrix @ rng.uniform(0.0, 2.0, k) + rng.uniform(-0.3, 1.0, m)
    limits = base + 0.4 * rng.normal(size=(n, m))
    found = solve_all(cost, matrix, limits)
    for row in range(n):
        best = least_by_enumeration(cost, matrix, limits[row])
        assert found.feasible[row] == (best is not None)
        if best is not None:
            assert cost @ found.x[row] == pytest.approx(best[0], rel=1e-9, abs=1e-9)
            assert (matrix @ found.x[row] <= limits[row] + 1e-9).all()
            again = linprog(cost, A_ub=matrix, b_ub=limits[row], method="highs")
            assert again.fun == pytest.approx(best[0], rel=1e-9, abs=1e-9)
    assert found.solved < n


def test_infeasible_rows_are_proven_together() -> None:
    """Worked: x <= a and x >= a + 1 has no answer, whatever a; one proof serves all."""
    a = np.linspace(0.0, 5.0, 200)
    limits = np.stack([a, -(a + 1.0)], axis=1)
    found = solve_all(np.ones(1), np.array([[1.0], [-1.0]]), limits)
    assert not found.feasible.any()
    assert found.solved == 1
    mixed = solve_all(np.ones(1), np.array([[1.0], [-1.0]]), np.stack([a, -2.0 + 0 * a], axis=1))
    np.testing.assert_array_equal(mixed.feasible, a >= 2.0)
    x, broken = least_violation(np.array([[1.0], [-1.0]]), np.array([1.0, -2.0]), np.ones(2))
    assert broken.sum() == pytest.approx(1.0)
    assert 1.0 - 1e-9 <= x[0] <= 2.0 + 1e-9


# ---------------------------------------------------------------- additions


def low_carbon(C_max: float = 0.2, **more: Any) -> Grade:
    limits = {"C": {"max": C_max}, "Mn": [0.9, 1.1], "Si": [0.15, 0.25], "P": {"max": 0.03}}
    return parse_user_grade("X", {"limits": {**limits, **more}})


def plan_for(steel_grade: Grade, killer: str = "Al", **practice: Any) -> LadlePlan:
    return plan_ladle(tapped(killer, **practice), steel_grade, ["1"])


def test_choice_of_the_tap_by_enumeration() -> None:
    """Enumeration of the vertices over eight additions of the very programme of a heat."""
    use = {name: PRICES[name] for name in ("FeMn HC", "FeMn LC", "SiMn", "FeSi75", "Al")}
    case = tapped("Al", price_per_t=use)
    demand = Demand(case, np.array([0.005]), {})
    wants = [
        Want("Mn", "low", 1.0, ""), Want("Mn", "high", 1.1, ""), Want("Si", "low", 0.2, ""),
        Want("Si", "high", 0.25, ""), Want("C", "high", 0.08, ""), Want("Al", "low", 0.03, ""),
        Want("P", "high", 0.02, ""),
    ]  # fmt: skip
    choice = choose(demand, wants, [])
    assert choice.feasible[0]
    cost = np.array([use[name] * 1e-3 for name in use])
    best = []
    for binds in (True, False):
        matrix, limits = demand.rows(list(use), wants, binds=binds)
        rows = np.isfinite(limits[0])
        found = least_by_enumeration(cost, matrix[rows], limits[0][rows])
        best += [] if found is None else [found[0]]
    spent = sum(choice.kg_per_t[name][0] * use[name] * 1e-3 for name in use)
    assert spent == pytest.approx(min(best), rel=1e-9)


def test_two_additions_worked_by_hand() -> None:
    """Worked: bare steel, no losses: Mn 1.0 and Si 0.2 by Cramer's rule with dilution."""
    whole = dict.fromkeys(("Mn", "Si", "C", "Al", "P", "S"), 1.0)
    case = tapped("none", **BARE, recovery=whole, alloy_order={"Mn": ["FeMn HC"]})
    ladle = plan_ladle(case, low_carbon(), ["1"])
    have_Mn, have_Si = 1.2, 0.0  # kg in the tapped tonne
    a11, a12 = 0.76 - 0.010, -0.010
    a21, a22 = 0.01 - 0.002, 0.75 - 0.002
    b1, b2 = 10.0 - have_Mn, 2.0 - have_Si
    det = a11 * a22 - a12 * a21
    assert ladle.added_kg["FeMn HC"][0] / 200 == pytest.approx((b1 * a22 - a12 * b2) / det)
    assert ladle.added_kg["FeSi75"][0] / 200 == pytest.approx((a11 * b2 - a21 * b1) / det)


def test_silicomanganese_serves_both_where_it_is_cheap() -> None:
    """Worked: at the price of FeMn, SiMn brings its silicon for nothing."""
    ladle = plan_for(low_carbon(), price_per_t=PRICES)
    assert ladle.added_kg["SiMn"][0] > 0.0
    dear = plan_for(low_carbon(), price_per_t={**PRICES, "SiMn": 5000})
    assert "SiMn" not in dear.added_kg
    assert dear.cost_per_t[0] > ladle.cost_per_t[0]


def test_carbon_limit_buys_the_dearer_manganese() -> None:
    """Worked: 0.9 % Mn by FeMn HC brings 0.08 % C on 0.05 %; the limit of 0.08 forbids it."""
    wide = plan_for(low_carbon(0.25), price_per_t={**PRICES, "SiMn": 9000})
    tight = plan_for(low_carbon(0.08), price_per_t={**PRICES, "SiMn": 9000})
    assert set(wide.added_kg) & {"FeMn HC", "FeMn MC", "FeMn LC"} == {"FeMn HC"}
    assert set(tight.added_kg) & {"FeMn MC", "FeMn LC", "Mn metal"}
    assert tight.poured.steel_pct()["C"][0] <= 0.08 * (1 + 1e-9)
    assert tight.cost_per_t[0] > wide.cost_per_t[0]


@pytest.mark.parametrize("prices", [{}, PRICES], ids=["in order", "least cost"])
@pytest.mark.parametrize("g", grades(), ids=lambda g: g.name)
def test_every_grade_of_the_library_is_reached(g: Grade, prices: dict[str, float]) -> None:
    """Property: steel that ends at the converter aim is brought inside the grade by the plan.

    The ladle is worked out by the mass balance of the tap, not by the programme.
    """
    practice = tap_practice({"price_per_t": prices})
    aim = converter_aim(g, practice)
    steel = {"C": aim.C_pct, "P": min(aim.P_pct, 0.02), "S": min(aim.S_pct, 0.012), "Mn": 0.1,
             "Al": 0.0, "Si": 0.0}  # fmt: skip
    case = dataclasses.replace(tapped(killer_of(g, practice), steel=steel), practice=practice)
    ladle = plan_ladle(case, g, ["1"])
    assert ladle.choice.feasible[0], ladle.choice.binding
    outside = [e for e in ladle.outside(0) if not (e == "C" and aim.needs_vacuum)]
    pct = ladle.poured.steel_pct()
    assert outside == [], {e: float(pct[e][0]) for e in outside}
    for want in ladle.wants:
        if want.side == "low" and want.element != "C":
            assert pct[want.element][0] >= want.pct * (1 - 1e-6), want.element
    assert not ladle.poured.short[0]


@pytest.mark.parametrize("name", ["S355J2", "S355MC", "42CrMo4", "C70D", "16MnCr5"])
def test_least_cost_is_never_dearer_than_the_order_of_preference(name: str) -> None:
    """Property: the same limits, more freedom."""
    g = grade(name)
    steel = {"C": 0.05, "Mn": 0.1}
    free = plan_ladle(tapped("Al", steel=steel, price_per_t=PRICES), g, ["1"])
    ordered = plan_ladle(tapped("Al", steel=steel), g, ["1"])
    spent = sum(float(kg[0]) * PRICES[n] * 1e-3 for n, kg in ordered.added_kg.items())
    if ordered.choice.preferred[0] == free.choice.preferred[0]:
        assert float(sum(free.cost.values())[0]) <= spent * (1 + 1e-9)


def test_minimum_of_the_grade_takes_less_than_its_middle() -> None:
    """Worked: manganese from 0.12 to 1.00 or 0.90 % by FeMn HC, with dilution."""
    g = parse_user_grade("Mn only", {"limits": {"C": {"max": 0.3}, "Mn": [0.9, 1.1]}})
    brings = 0.9 * 0.76 + 0.9 * 0.07 + 0.82 * 0.01 + 0.002 + 0.0002 + 0.1578
    for aim_at, pct in (("middle", 1.0), ("minimum", 0.9)):
        ladle = plan_ladle(tapped("none", **BARE, aim_at=aim_at), g, ["1"])
        assert ladle.poured.steel_pct()["Mn"][0] == pytest.approx(pct, rel=1e-6)
        kg_per_t = (10.0 * pct - 1.2) / (0.684 - 0.01 * pct * brings)
        # the oxygen that its losses bind makes the steel 0.5 kg/t lighter
        assert ladle.added_kg["FeMn HC"][0] / 200.0 == pytest.approx(kg_per_t, rel=1e-3)


def test_carburiser_fills_up_to_the_middle_but_not_for_a_trifle() -> None:
    """Worked: C45E aims at 0.46 %; 0.455 % is left alone, 0.40 % is filled up to 0.46."""
    g = parse_user_grade("C only", {"limits": {"C": [0.42, 0.50]}})
    near = plan_ladle(tapped("Al", steel={"C": 0.455}), g, ["1"])
    assert "carburiser" not in near.added_kg
    low = plan_ladle(tapped("Al", steel={"C": 0.40}), g, ["1"])
    assert low.poured.steel_pct()["C"][0] == pytest.approx(0.46, rel=1e-6)


def test_no_way_into_the_grade_says_what_binds_and_what_frees() -> None:
    """Worked: 1 % Mn by FeMn HC alone brings 0.09 % C; 0.06 % is all that the grade allows."""
    ladle = plan_for(low_carbon(0.06), use=["FeMn HC", "FeSi75", "Al"])
    assert not ladle.choice.feasible[0]
    assert "C (at most 0.06 % of X)" in ladle.choice.binding[0]
    assert any("less C" in text for text in ladle.choice.frees[0])
    assert ladle.status() == ["infeasible"]


def test_limit_broken_before_anything_is_added_is_told_apart() -> None:
    """Contract: too much phosphorus at the end of the blow does not make the additions fail."""
    ladle = plan_ladle(tapped("Al", steel={"P": 0.05}), low_carbon(), ["1"])
    assert ladle.choice.feasible[0]
    assert ladle.mark("P", 0) == "above"
    assert any(text.startswith("P 0.0") for text in ladle.already[0])


def test_shared_basis_serves_a_table() -> None:
    """Property: 500 heats of one grade take a handful of programmes, and each is at its limits."""
    rng = np.random.default_rng(2)
    n = 500
    steel = {"Mn": rng.uniform(0.05, 0.3, n), "C": rng.uniform(0.03, 0.06, n),
             "O": rng.uniform(0.03, 0.08, n)}  # fmt: skip
    case = tapped("Al", n=n, steel=steel, price_per_t=PRICES)
    ladle = plan_ladle(case, low_carbon(), [str(k) for k in range(n)])
    assert ladle.choice.feasible.all()
    assert ladle.choice.programmes < 20
    np.testing.assert_allclose(ladle.poured.steel_pct()["Mn"], 1.0, rtol=1e-6)
    np.testing.assert_allclose(ladle.poured.steel_pct()["Al"], 0.035, rtol=1e-5)


# ---------------------------------------------------------------- converter aim


@pytest.mark.parametrize("g", grades(), ids=lambda g: g.name)
def test_aim_with_prices_counts_the_carbon_and_phosphorus_of_the_cheapest(g: Grade) -> None:
    """Property: a tonne at the aims, with the additions of the aim poured in, keeps the grade."""
    practice = tap_practice({"price_per_t": PRICES})
    aim = converter_aim(g, practice)
    tapped_pct = {"C": aim.C_pct, "P": aim.P_pct, "S": aim.S_pct, **practice.residual_pct}
    ladle = pour_by_tables(aim, practice, tapped_pct)
    for element, margin in (("P", practice.margin_P_pct), ("S", practice.margin_S_pct)):
        assert ladle[element] == pytest.approx(g.limits[element][1] - margin, rel=1e-9)
    if not aim.needs_vacuum:
        assert ladle["C"] <= (g.highest_pct("C") or 9.0) * (1 + 1e-9)
        told = [t.value for t in aim.terms if t.label.startswith("C: ")]
        assert sum(told) == pytest.approx(aim.C_pct, rel=1e-12)
    spent = sum(kg * PRICES[name] for name, kg in aim.additions_kg_per_t.items())
    ordered = converter_aim(g, tap_practice())
    if not aim.needs_vacuum:
        assert spent <= sum(
            kg * PRICES[name] for name, kg in ordered.additions_kg_per_t.items()
        ) * (1 + 1e-9)


def test_aim_and_tap_choose_the_same_additions() -> None:
    """Property: what the aim counted with is what the tap then asks for."""
    for name in ("S355MC", "S235JR", "C45E", "R260"):
        practice = tap_practice({"price_per_t": PRICES})
        aim = converter_aim(grade(name), practice)
        case = tapped("none", **BARE, steel={"C": aim.C_pct, "Mn": 0.10})
        case = dataclasses.replace(case, practice=practice)
        ladle = plan_ladle(case, grade(name), ["1"])
        alloys = {n for n, kg in ladle.added_kg.items() if kg[0] > 1e-6} - {"Al", "carburiser"}
        assert alloys == set(aim.additions_kg_per_t) - {"Al", "carburiser"}, name
