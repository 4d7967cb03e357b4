"""Converter aims from a grade, and the scrap share that fits a tramp limit.

Kinds of check: "worked" = a sum of masses worked here by hand, apart from the package's own
solve; "property" = holds for every grade and for random practice; "common practice" = no source;
"contract" = refusals and texts. Nothing here compares with a published aim: none is known to us.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from converter_calc.basis.errors import InfeasibleError, InputError
from converter_calc.data.tables import read_csv_rows, read_toml
from converter_calc.planning.grades import (
    ConverterAim,
    Grade,
    TapPractice,
    converter_aim,
    grade,
    grades,
    ladle_targets,
    largest_fitting_share,
    parse_user_grade,
    tap_practice,
    tell_tramp,
    worst_element,
)


def pour(
    aim: ConverterAim, practice: TapPractice, tapped_pct: dict[str, float]
) -> dict[str, float]:
    """Ladle analysis [mass %] by summing masses over 1000 kg tapped, straight from the tables."""
    table = read_toml("ferroalloys.toml")
    kg = {element: 10.0 * content for element, content in tapped_pct.items()}
    total = 1000.0
    for name, added in aim.additions_kg_per_t.items():
        for element, content in table[name]["pct"].items():
            gain = added * content / 100.0 * practice.recovery.get(element, 1.0)
            kg[element] = kg.get(element, 0.0) + gain
            total += gain
        if table[name]["rest"] == "Fe":
            total += added * (1.0 - sum(table[name]["pct"].values()) / 100.0)
    for element, slag_pct, share in (
        ("P", practice.slag_P_pct, practice.P_return_share),
        ("S", practice.slag_S_pct, practice.S_return_share),
    ):
        returned = practice.carried_slag_kg_per_t * slag_pct / 100.0 * share
        kg[element] = kg.get(element, 0.0) + returned
    return {element: 100.0 * mass / total for element, mass in kg.items()}


def random_practice(seed: int) -> TapPractice:
    """A practice drawn inside the bounds of trade use."""
    rng = np.random.default_rng(seed)
    return tap_practice(
        {
            "margin_C_pct": rng.uniform(0.0, 0.04),
            "margin_P_pct": rng.uniform(0.0, 0.004),
            "margin_S_pct": rng.uniform(0.0, 0.003),
            "carried_slag_kg_per_t": rng.uniform(0.0, 8.0),
            "slag_P_pct": rng.uniform(0.3, 1.2),
            "P_return_share": rng.uniform(0.2, 1.0),
            "lowest_end_C_pct": rng.uniform(0.025, 0.03),
            "highest_end_C_pct": rng.uniform(0.05, 0.9),
            "recovery": {"Mn": rng.uniform(0.85, 0.95), "Si": rng.uniform(0.75, 0.90),
                         "C": rng.uniform(0.7, 1.0)},
            "residual_pct": {"Mn": rng.uniform(0.03, 0.25)},
        }
    )  # fmt: skip


# ---------------------------------------------------------------- worked by hand


def test_low_carbon_grade_worked_by_hand() -> None:
    """Worked: DC04 (C 0.08, P 0.030, S 0.030 max), manganese from 0.10 to 0.20 % by FeMn HC."""
    mn, c, p, s, si = 0.76, 0.07, 0.0020, 0.0002, 0.01
    iron = 1.0 - mn - c - p - s - si
    brings = 0.90 * mn + 0.90 * c + p + s + 0.82 * si + iron  # kg of steel per kg added
    # 1.0 kg Mn in the tapped tonne + 0.684 a = 0.002 (1000 + brings a)
    a = (2.0 - 1.0) / (0.90 * mn - 0.002 * brings)
    steel = 1000.0 + brings * a
    aim = converter_aim(grade("DC04"), tap_practice())
    assert aim.additions_kg_per_t == pytest.approx({"FeMn HC": a}, rel=1e-12)
    carbon = (0.0006 * steel - 0.90 * c * a) / 10.0  # ladle target 0.08 - 0.02
    phosphorus = (0.00027 * steel - p * a - 5.0 * 0.009) / 10.0  # 5 kg/t slag with 0.9 % P
    sulphur = (0.00028 * steel - s * a - 5.0 * 0.001) / 10.0
    assert aim.C_pct == pytest.approx(carbon, rel=1e-12)
    assert aim.P_pct == pytest.approx(phosphorus, rel=1e-12)
    assert aim.S_pct == pytest.approx(sulphur, rel=1e-12)
    assert aim.Mn_pct is None
    assert not aim.needs_vacuum
    assert aim.tramp_max == {}


def test_two_additions_that_share_an_element_worked_by_hand() -> None:
    """Worked: Mn 0.8 %, Si 0.2 %; FeMn brings silicon too. Two equations by Cramer's rule."""
    own = parse_user_grade(
        "X", {"limits": {"C": [0.2, 0.3], "P": {"max": 0.03}, "Mn": [0.7, 0.9], "Si": [0.1, 0.3]}}
    )
    aim = converter_aim(own, tap_practice({"alloy_order": {"Mn": ["FeMn HC"]}}))
    mass_mn = 0.9 * 0.76 + 0.9 * 0.07 + 0.82 * 0.01 + 0.002 + 0.0002 + 0.1578
    mass_si = 0.82 * 0.75 + 0.45 * 0.012 + 0.9 * 0.001 + 0.0003 + 0.0001 + 0.2366
    # rows: manganese, silicon; columns: FeMn HC, FeSi75
    a11, a12, b1 = 0.684 - 0.008 * mass_mn, -0.008 * mass_si, 7.0
    a21, a22, b2 = 0.0082 - 0.002 * mass_mn, 0.615 - 0.002 * mass_si, 2.0
    det = a11 * a22 - a12 * a21
    assert aim.additions_kg_per_t["FeMn HC"] == pytest.approx((b1 * a22 - a12 * b2) / det)
    assert aim.additions_kg_per_t["FeSi75"] == pytest.approx((a11 * b2 - a21 * b1) / det)


def test_medium_carbon_is_caught_and_high_carbon_filled_up() -> None:
    """Worked: C45E lies under the catch limit of 0.5 %, C70D above it."""
    caught = converter_aim(grade("C45E"), tap_practice())
    assert "carburiser" not in caught.additions_kg_per_t
    assert 0.35 < caught.C_pct < 0.46
    filled = converter_aim(grade("C70D"), tap_practice())
    assert filled.C_pct == pytest.approx(0.5, rel=1e-12)
    ladle = pour(filled, tap_practice(), {"C": filled.C_pct, "Mn": 0.10, "Si": 0.0})
    assert ladle["C"] == pytest.approx(0.705, rel=1e-12)


def test_carbon_budget_chooses_the_leaner_manganese() -> None:
    """Worked: 0.5 % Mn more by FeMn HC brings 0.046 % C: too much where 0.06 % is all there is."""
    limits = {"C": {"max": 0.06}, "P": {"max": 0.03}, "S": {"max": 0.03}, "Mn": [0.5, 0.7]}
    lean = converter_aim(parse_user_grade("X", {"limits": limits}), tap_practice())
    assert list(lean.additions_kg_per_t) == ["FeMn MC"]
    wide = {**limits, "C": {"max": 0.15}}
    rich = converter_aim(parse_user_grade("X", {"limits": wide}), tap_practice())
    assert list(rich.additions_kg_per_t) == ["FeMn HC"]


def test_leanest_additions_where_none_fit() -> None:
    """Worked: 0.01 % C aimed at leaves no room for any ferro-manganese: the leanest is taken."""
    own = parse_user_grade("X", {"limits": {"C": {"max": 0.02}, "Mn": [0.5, 0.7]}})
    aim = converter_aim(own, tap_practice())
    assert aim.needs_vacuum
    assert list(aim.additions_kg_per_t) == ["Mn metal"]


def test_no_negative_addition_and_excess_is_told() -> None:
    """Worked: 2 % Mn by FeMn HC brings 0.022 % Si: no FeSi for a target of 0.01 %."""
    limits = {"C": [0.3, 0.4], "Mn": [1.9, 2.1], "Si": [0.0, 0.02]}
    aim = converter_aim(parse_user_grade("X", {"limits": limits}), tap_practice())
    assert list(aim.additions_kg_per_t) == ["FeMn HC"]
    assert any("above the maximum 0.02 %" in note for note in aim.notes)
    told = converter_aim(parse_user_grade("X", {"limits": {**limits, "Si": [0.0, 0.03]}}),
                         tap_practice()).notes  # fmt: skip
    assert told == []


def test_interstitial_free_grade_asks_for_vacuum() -> None:
    """Common practice: DC06 (C 0.02 at most) is decarburised under vacuum."""
    practice = tap_practice()
    aim = converter_aim(grade("DC06"), practice)
    assert aim.needs_vacuum
    assert aim.C_pct == practice.lowest_end_C_pct
    assert any("vacuum" in note for note in aim.notes)
    ordinary = [g.name for g in grades() if converter_aim(g, practice).needs_vacuum]
    assert ordinary == ["DC06"]


# ---------------------------------------------------------------- properties


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("g", grades(), ids=lambda g: g.name)
def test_aim_and_additions_end_inside_the_grade(g: Grade, seed: int) -> None:
    """Property: metal at the aims, poured with the additions, keeps every limit."""
    practice = random_practice(seed)
    aim = converter_aim(g, practice)
    tapped = {"C": aim.C_pct, "P": aim.P_pct, "S": aim.S_pct, **aim.tramp_max}
    tapped = {e: x for e, x in tapped.items() if e not in ladle_targets(g, practice)}
    residual = {e: x for e, x in practice.residual_pct.items() if e not in tapped}
    if aim.Mn_pct is not None:
        residual["Mn"] = aim.Mn_pct
    ladle = pour(aim, practice, {**tapped, **residual})
    for element, content in ladle.items():
        low, high = g.limits.get(element, (None, None))
        if element == "C" and aim.needs_vacuum:
            continue
        assert content <= (math.inf if high is None else high) * (1 + 1e-12), element
        if element not in {"P", "S", "Al"}:
            assert content >= (low or 0.0) * (1 - 1e-12), element
    for element, target in ladle_targets(g, practice).items():
        assert ladle[element] >= target * (1 - 1e-12), element
    for element, margin in (("P", practice.margin_P_pct), ("S", practice.margin_S_pct)):
        assert ladle[element] == pytest.approx(g.limits[element][1] - margin, rel=1e-9)


@pytest.mark.parametrize("g", grades(), ids=lambda g: g.name)
def test_terms_add_up_to_the_aims_and_have_sources(g: Grade) -> None:
    """Property: what is told is what was reckoned."""
    aim = converter_aim(g, tap_practice())
    for element, told in (("C", aim.C_pct), ("P", aim.P_pct), ("S", aim.S_pct)):
        terms = [t for t in aim.terms if t.label.startswith(f"{element}: ")]
        assert sum(t.value for t in terms) == pytest.approx(told, rel=1e-12)
    assert all(term.source and term.unit for term in aim.terms)


def test_more_slag_carried_over_lowers_the_phosphorus_aim_in_proportion() -> None:
    """Worked: each kg/t of slag with 0.9 % P, all returned, costs 0.0009 % P."""
    aims = [
        converter_aim(grade("S235JR"), tap_practice({"carried_slag_kg_per_t": kg})).P_pct
        for kg in (3.0, 6.0, 10.0)
    ]
    assert aims[0] - aims[1] == pytest.approx(3 * 0.0009, rel=1e-9)
    assert aims[1] - aims[2] == pytest.approx(4 * 0.0009, rel=1e-9)


def test_phosphorus_return_of_default_practice_is_what_shops_see() -> None:
    """Common practice: 3 to 10 kg/t of carried-over slag give back 0.001 to 0.01 % P."""
    aim = converter_aim(grade("DC04"), tap_practice())
    returned = [-t.value for t in aim.terms if t.label.startswith("P: returned")]
    assert 0.001 <= returned[0] <= 0.010


# ---------------------------------------------------------------- contract


def test_no_room_for_phosphorus_is_told_as_infeasible() -> None:
    """Contract."""
    own = parse_user_grade("X", {"limits": {"C": {"max": 0.1}, "P": {"max": 0.005}}})
    with pytest.raises(InfeasibleError, match="nothing is left for P") as caught:
        converter_aim(own, tap_practice())
    assert caught.value.binding == "P of the grade"
    assert "less slag carried over" in caught.value.frees


def test_grade_without_carbon_limit_leaves_the_carbon_aim_to_the_user() -> None:
    """Contract."""
    aim = converter_aim(parse_user_grade("X", {"limits": {"P": {"max": 0.05}}}), tap_practice())
    assert aim.C_pct is None
    assert aim.S_pct is None
    assert "no carbon limit" in aim.notes[0]


def test_manganese_limit_under_the_residual_becomes_an_aim() -> None:
    """Worked: 0.05 % at most, 0.10 % usual: the blow has to end at 0.05."""
    own = parse_user_grade("X", {"limits": {"C": {"max": 0.1}, "Mn": {"max": 0.05}}})
    assert converter_aim(own, tap_practice()).Mn_pct == pytest.approx(0.05, rel=1e-12)


def test_tramp_limit_is_the_standard_less_what_additions_bring() -> None:
    """Worked: molybdenum by FeMo (0.5 % Cu) takes its copper off the limit of 42CrMo4."""
    aim = converter_aim(grade("42CrMo4"), tap_practice())
    copper = aim.additions_kg_per_t["FeMo"] * 0.005 / 10.0
    assert aim.tramp_max["Cu"] == pytest.approx(0.40 - copper, rel=1e-12)
    assert aim.tramp_max["Mo"] == pytest.approx(0.225)
    assert aim.tramp_max["Cr"] == pytest.approx(1.05)


# ---------------------------------------------------------------- scrap mix against tramp limits

ANALYSES = {
    "shredded": {"Cu": 0.35, "Sn": 0.02},
    "plate": {"Cu": 0.05, "Sn": 0.005},
    "home": {"Cu": 0.02},
}


def copper(
    mix: dict[str, float], scrap_kg: float, charge_kg: float, gain: float, hm: float
) -> float:
    """Copper of the steel [mass %], by summing kilograms."""
    kg = sum(scrap_kg * x * ANALYSES[s].get("Cu", 0.0) / 100.0 for s, x in mix.items())
    kg += (charge_kg - scrap_kg) * hm / 100.0
    return 100.0 * kg / (charge_kg * gain)


@pytest.mark.parametrize("seed", range(20))
def test_share_that_fits_sits_at_the_limit(seed: int) -> None:
    """Property: put the fitting share in, and the steel is at the limit, to rounding."""
    rng = np.random.default_rng(seed)
    x = rng.dirichlet([4.0, 2.0, 2.0])
    mix = dict(zip(ANALYSES, x, strict=True))
    charge, hm = 230e3, rng.uniform(0.0, 0.01)
    scrap, gain = charge * rng.uniform(0.15, 0.3), rng.uniform(0.88, 0.93)
    limit = 0.5 * copper(mix, scrap, charge, gain, hm) + 0.5 * copper(
        {"plate": 0.5, "home": 0.5}, scrap, charge, gain, hm
    )
    (check,) = largest_fitting_share(ANALYSES, mix, scrap, charge, gain, {"Cu": limit}, {"Cu": hm})
    assert check.steel_pct[0] == pytest.approx(copper(mix, scrap, charge, gain, hm), rel=1e-12)
    assert check.breaks[0]
    assert check.offender == ["shredded"]
    assert check.fits_when_cut[0]
    w = float(check.fitting_share[0])
    assert 0.0 < w < mix["shredded"]
    others = (1.0 - w) / (1.0 - mix["shredded"])
    cut = {s: w if s == "shredded" else share * others for s, share in mix.items()}
    assert copper(cut, scrap, charge, gain, hm) == pytest.approx(limit, rel=1e-10)
    less = float(check.fitting_scrap_share[0]) * charge
    assert copper(mix, less, charge, gain, hm) == pytest.approx(limit, rel=1e-10)
    again = largest_fitting_share(ANALYSES, cut, scrap, charge, gain, {"Cu": limit * (1 + 1e-9)},
                                  {"Cu": hm})  # fmt: skip
    assert not again[0].breaks[0]


def test_table_of_heats_equals_the_loop() -> None:
    """Property: n heats at once are n heats one by one."""
    rng = np.random.default_rng(3)
    x = rng.dirichlet([1.0, 1.0, 1.0], size=50).T
    mix = dict(zip(ANALYSES, x, strict=True))
    scrap = rng.uniform(0.0, 6e4, 50)
    scrap[0] = 0.0
    limits = {"Cu": 0.04, "Sn": 0.002}
    stays, hm = rng.uniform(0.5, 1.0, 50), rng.uniform(0.0, 0.02, 50)
    table = largest_fitting_share(
        ANALYSES, mix, scrap, 2e5, 0.9, limits, {"Cu": hm}, {"Sn": stays, "Cu": stays}
    )
    for k in range(50):
        one = largest_fitting_share(
            ANALYSES, {s: v[k] for s, v in mix.items()}, scrap[k], 2e5, 0.9, limits,
            {"Cu": hm[k]}, {"Sn": stays[k], "Cu": stays[k]},
        )  # fmt: skip
        for many, single in zip(table, one, strict=True):
            assert many.offender[k] == single.offender[0]
            for name in ("steel_pct", "breaks", "fitting_share", "fitting_scrap_share"):
                np.testing.assert_allclose(getattr(many, name)[k], getattr(single, name)[0])
    assert not table[0].breaks[0]
    assert 0 < int(table[0].breaks.sum()) < 50


def test_worst_element_and_its_sentence() -> None:
    """Worked: 0.2 x 0.35 / 0.9 = 0.0778 % Cu, twice 0.0389; Sn 0.0044 % is 1.1 times 0.004."""
    checks = largest_fitting_share(
        ANALYSES, {"shredded": 1.0}, 2e4, 1e5, 0.9, {"Sn": 0.004, "Cu": 0.35 / 9}
    )
    worst = worst_element(checks)
    assert worst is not None
    assert worst.element == "Cu"
    text = tell_tramp(worst)
    assert "Cu 0.0778 % exceeds 0.0388889 %" in text
    assert "'shredded' at 100.0 % of the mix" in text
    assert "50.00 % of it would fit" in text  # the other half free of copper
    assert "up to 10.00 % of the charge" in text
    fine = largest_fitting_share(ANALYSES, {"home": 1.0}, 2e4, 1e5, 0.9, {"Cu": 0.3})
    assert worst_element(fine) is None
    assert fine[0].fitting_share[0] == 1.0


def test_others_alone_may_break_the_limit() -> None:
    """Contract."""
    mix = {"shredded": 0.5, "plate": 0.5}
    (check,) = largest_fitting_share(ANALYSES, mix, 5e4, 1e5, 0.9, {"Cu": 0.01})
    assert not check.fits_when_cut[0]
    assert check.fitting_share[0] == 0.0
    assert "the others alone break the limit" in tell_tramp(check)
    hot = largest_fitting_share(ANALYSES, mix, 5e4, 1e5, 0.9, {"Cu": 0.01}, {"Cu": 0.4})
    assert hot[0].fitting_scrap_share[0] == 0.0


def test_nothing_that_stays_breaks_nothing_and_nan_and_empty_pass() -> None:
    """Contract."""
    mix, limit = {"shredded": 1.0}, {"Cu": 0.01}
    (gone,) = largest_fitting_share(ANALYSES, mix, 2e4, 1e5, 0.9, limit, stays_share={"Cu": 0.0})
    assert not gone.breaks[0]
    (half,) = largest_fitting_share(ANALYSES, mix, [2e4, np.nan], 1e5, 0.9, limit)
    assert half.breaks.tolist() == [True, False]
    (none,) = largest_fitting_share(ANALYSES, mix, np.empty(0), 1e5, 0.9, limit)
    assert none.steel_pct.shape == (0,)
    (two,) = largest_fitting_share(
        ANALYSES, mix, 2e4, 1e5, 0.9, limit, stays_share={"Cu": np.array([0.0, 1.0])}
    )
    assert two.breaks.tolist() == [False, True]
    assert two.offender == ["shredded"] * 2
    assert none.offender == []


def test_oxidised_share_counts() -> None:
    """Worked: of 0.1 % Cr in half the charge, 0.7 stays, in 0.9 of the mass: 0.0389 %."""
    (check,) = largest_fitting_share(
        {"a": {"Cr": 0.1}}, {"a": 1.0}, 5e4, 1e5, 0.9, {"Cr": 1.0}, stays_share={"Cr": 0.7}
    )
    assert check.steel_pct[0] == pytest.approx(0.7 * 0.1 * 0.5 / 0.9, rel=1e-12)
    assert not check.breaks[0]


@pytest.mark.parametrize(
    ("mix", "text"),
    [
        ({}, "is empty"),
        ({"plate": 0.5}, "shares add up to 0.5"),
        ({"q": 1.0}, "q: has no analysis"),
    ],
)
def test_faulty_mix_is_refused(mix: dict[str, float], text: str) -> None:
    """Contract."""
    with pytest.raises(InputError) as caught:
        largest_fitting_share(ANALYSES, mix, 1.0, 2.0, 0.9, {"Cu": 0.1})
    assert text in str(caught.value)


def test_every_default_recovery_is_a_share() -> None:
    """Guard."""
    for row in read_csv_rows("tap_practice.csv"):
        if row["group"] in {"recovery", "stays"}:
            assert 0.0 < float(row["value"]) <= 1.0
