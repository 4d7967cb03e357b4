"""Carbon-oxygen, iron oxide, magnesia and lime laws.

Kinds of check: published constants (source beside each), fits against their tables (refitted
here), common practice, properties.
"""

from __future__ import annotations

import numpy as np
import pytest

from converter_calc.basis.dual import seed, slope
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_toml
from converter_calc.laws import carbon_oxygen, iron_oxide, lime, magnesia

T_1650 = 1923.15
BLOWING = ["top", "combined", "bottom"]


def test_product_at_one_atmosphere():
    """JSPS 1988 (from memory): log K = 1160/T + 2.003 gives 0.0024 at 1600 C, 1 atm."""
    assert carbon_oxygen.equilibrium_product(1873.15) == pytest.approx(0.0024, abs=5e-5)


def test_oxygen_satisfies_the_equilibrium():
    """Definition: K a_C a_O = p_CO with the printed interaction coefficients, written out here
    (log of the mass action law; JSPS 1988, from memory). Saturation moves log [O] by under 1e-6."""
    C, T_K = np.meshgrid(np.geomspace(0.02, 1.0, 40), np.linspace(1820.0, 2020.0, 9))
    oxygen = carbon_oxygen.dissolved_oxygen_pct("jsps_1988", C, T_K, 1.0)
    log_f = 0.243 * C - 0.32 * oxygen - 0.17 * oxygen - 0.421 * C
    miss = 1160 / T_K + 2.003 + np.log10(C * oxygen) + log_f
    assert np.max(np.abs(miss)) < 1e-6


def test_implicit_root_is_solved_to_rounding():
    """Property: y = z exp(y) up to the largest z the law can meet (1/e less the corner)."""
    z = np.concatenate([np.geomspace(1e-9, 0.05, 50), np.linspace(0.05, 0.362, 200)])
    y = carbon_oxygen._smallest_root(z)
    assert np.max(np.abs(y / (z * np.exp(y)) - 1.0)) < 1e-13
    assert np.all((y > 0.0) & (y < 1.0))


@pytest.mark.parametrize("blowing", BLOWING)
@pytest.mark.parametrize("law", ["jsps_1988", "effective_product"])
def test_product_by_way_of_blowing(law, blowing):
    """Common practice, no source: products at the end of the blow; jsps_1988 is set to the
    middle of each at 0.04 % C, 1650 C."""
    low, high = {
        "top": (0.0030, 0.0040),
        "combined": (0.0022, 0.0027),
        "bottom": (0.0015, 0.0020),
    }[blowing]
    C = np.array([0.035, 0.04, 0.06, 0.08])
    product = C * carbon_oxygen.dissolved_oxygen_pct(law, C, T_1650, None, blowing)
    assert np.all((product > low) & (product < high))
    assert product[1] == pytest.approx((low + high) / 2, rel=1e-4)


def test_turkdogan_printed_constants():
    """Turkdogan 1996 (from memory): [ppm O] sqrt[%C] = 135 +- 5 (top, combined), 80 +- 5
    (bottom) for C < 0.05."""
    C = np.array([0.02, 0.03, 0.05])
    for blowing, value in {"top": 135.0, "combined": 135.0, "bottom": 80.0}.items():
        oxygen = carbon_oxygen.dissolved_oxygen_pct("turkdogan_1996", C, T_1650, None, blowing)
        assert 1e4 * oxygen * np.sqrt(C) == pytest.approx(value, abs=0.01)


def test_two_laws_agree_at_turndown():
    """jsps_1988 with the products of practice against Turkdogan 1996 (another source): at 0.03
    to 0.05 % C they differ by up to 55 % top, 20 % combined and 28 % bottom (the product makes
    dissolved oxygen run as 1/C, Turkdogan as 1/sqrt(C))."""
    C = np.array([0.03, 0.04, 0.05])
    for blowing, bound in {"top": 0.56, "combined": 0.21, "bottom": 0.29}.items():
        a, b = (
            carbon_oxygen.dissolved_oxygen_pct(law, C, T_1650, None, blowing)
            for law in ("jsps_1988", "turkdogan_1996")
        )
        assert np.max(np.abs(a / b - 1.0)) < bound


def test_saturated_oxygen_published():
    """Liquid iron at 1600 C under pure iron oxide holds 0.23 % O (Taylor, Chipman, Trans. AIME 154
    (1943) 228, from memory); the other print is within 10 %."""
    assert carbon_oxygen.saturated_oxygen_pct(1873.15) == pytest.approx(0.23, abs=0.005)
    other = carbon_oxygen.saturated_oxygen_pct(1873.15, "textbook")
    assert other == pytest.approx(0.23, rel=0.1)


@pytest.mark.parametrize("blowing", BLOWING)
@pytest.mark.parametrize("law", carbon_oxygen.laws())
def test_oxygen_falls_with_carbon_and_stays_below_saturation(law, blowing):
    """Property; also finite at no carbon at all."""
    C = np.concatenate([[0.0], np.geomspace(1e-4, 1.0, 100)])
    oxygen = carbon_oxygen.dissolved_oxygen_pct(law, C, T_1650, None, blowing)
    assert np.all(np.diff(oxygen) < 1e-9 * oxygen[0])
    assert np.all(np.diff(oxygen[C > 0.02]) < 0.0)
    assert np.all((oxygen > 0.0) & (oxygen < carbon_oxygen.saturated_oxygen_pct(T_1650)))


def test_pressure_given_missing_or_mixed():
    """Property: NaN or None takes the pressure of the way of blowing; more pressure, more O."""
    law, C = "jsps_1988", np.full(3, 0.05)
    default = carbon_oxygen.dissolved_oxygen_pct(law, C, T_1650)
    mixed = carbon_oxygen.dissolved_oxygen_pct(law, C, T_1650, np.array([np.nan, 0.5, 2.0]))
    assert mixed[0] == default[0]
    assert mixed[1] < default[0] < mixed[2]


def test_unknown_blowing_and_law():
    """Contract: clear error."""
    with pytest.raises(DataError, match="did you mean 'bottom'"):
        carbon_oxygen.dissolved_oxygen_pct("jsps_1988", 0.05, T_1650, None, "botom")
    with pytest.raises(DataError, match="unknown carbon-oxygen law"):
        carbon_oxygen.dissolved_oxygen_pct("nothing", 0.05, T_1650)


@pytest.mark.parametrize("blowing", BLOWING)
def test_iron_oxide_fit(blowing):
    """Table of common practice, no source. Refit: the stored coefficients are the least squares;
    greatest deviation 0.30 (top), 0.14 (combined), 0.28 (bottom) % T.Fe."""
    data = read_toml("iron_oxide.toml")
    C, table = np.array(data["table"]["C_pct"]), np.array(data["table"][blowing])
    x = (C**2 + data["C_floor_pct"] ** 2) ** -0.25
    refit = np.polyval(np.polyfit(x, table, 2), x)
    got = iron_oxide.total_iron_pct(C, T_1650, blowing)
    assert got == pytest.approx(refit, abs=2e-4)
    bound = {"top": 0.31, "combined": 0.15, "bottom": 0.29}[blowing]
    assert np.max(np.abs(got - table)) < bound


def test_iron_oxide_table_as_given():
    """Common practice, no source: three entries of the table, against slips of the pen."""
    for blowing, C, value in (("top", 0.02, 28), ("combined", 0.04, 17), ("bottom", 0.40, 4)):
        assert iron_oxide.total_iron_pct(C, T_1650, blowing) == pytest.approx(value, abs=0.31)


def test_iron_oxide_with_temperature_carbon_and_factor():
    """Common practice, no source: +1 % T.Fe per 15 to 20 K; falls with carbon; finite at 0."""
    base = iron_oxide.total_iron_pct(0.05, T_1650)
    for step in (-50.0, 10.0, 50.0):
        rise = iron_oxide.total_iron_pct(0.05, T_1650 + step) - base
        assert 15.0 < step / rise < 20.0
        assert rise == pytest.approx(step / 17.5, rel=4e-3)
    # the line levels off, so that a heat far too hot does not run away on its own iron
    far = iron_oxide.total_iron_pct(0.05, T_1650 + np.array([300.0, 600.0])) - base
    assert np.all(far < 150.0 / 17.5 * 1.001)
    C = np.concatenate([[0.0], np.geomspace(1e-3, 4.5, 60)])
    for blowing in BLOWING:
        iron = iron_oxide.total_iron_pct(C, T_1650, blowing)
        assert np.all(np.diff(iron) < 0.0)
        assert np.all((iron > 0.0) & (iron < 70.0))
    twice = iron_oxide.total_iron_pct(0.05, T_1650, "top", 2.0)
    assert twice == pytest.approx(2.0 * iron_oxide.total_iron_pct(0.05, T_1650, "top"))
    assert 15.0 < iron_oxide.ferric_share_pct() < 35.0


def test_magnesia_fit():
    """Usual isotherms (from memory). Greatest deviation 0.49 % MgO, at B 1.5 and 1700 C; 0.3 % for
    basicities of 2 and more."""
    data = read_toml("magnesia.toml")["table"]
    B, temp = np.array(data["basicity"]), np.array(data["temperature_C"])
    table = np.array(data["MgO_pct"])
    got = magnesia.saturation_pct(B[None, :], temp[:, None] + 273.15)
    assert np.max(np.abs(got - table)) < 0.50
    assert np.max(np.abs(got - table)[:, B >= 2.0]) < 0.31
    assert got[1, 5] == pytest.approx(6.4, abs=0.05)  # B 3.5 at 1650 C
    fall = np.exp(-B / read_toml("magnesia.toml")["fit"]["B_scale"])[None, :] + 0.0 * table
    dT = (temp - 1650.0)[:, None] + 0.0 * table
    terms = np.stack([np.ones_like(table), fall, dT, dT * fall], axis=-1).reshape(-1, 4)
    refit = terms @ np.linalg.lstsq(terms, table.ravel(), rcond=None)[0]
    assert got.ravel() == pytest.approx(refit, abs=1e-3)  # the fit as claimed
    assert np.all(np.diff(got, axis=1) < 0.0)
    assert np.all(np.diff(got, axis=0) > 0.0)


def test_magnesia_with_temperature():
    """From memory: about +0.02 % MgO per K at the end of the blow (B 3 to 4)."""
    T = seed(np.full(3, T_1650), "T")
    rise = slope(magnesia.saturation_pct(np.array([3.0, 3.5, 4.0]), T), "T")
    assert rise == pytest.approx(0.02, abs=0.002)


def test_lime_limit_as_given():
    """From memory: 47 % at 15 % FetO and 1650 C; +2.5 % per 10 % FetO; +0.04 % per K."""
    assert lime.dissolution_limit_pct(15.0, T_1650) == pytest.approx(47.0)
    assert lime.dissolution_limit_pct(25.0, T_1650) == pytest.approx(49.5)
    assert lime.dissolution_limit_pct(15.0, T_1650 + 25.0) == pytest.approx(48.0)


def test_ranges_are_reported():
    """Contract: each law tells which heats leave its range."""
    C, T_K = np.array([0.04, 0.6]), np.array([T_1650, T_1650])
    found = iron_oxide.out_of_range(C, T_K)
    assert [(name, flags.tolist()) for name, _, _, flags in found] == [("C_pct", [False, True])]
    found = carbon_oxygen.out_of_range("turkdogan_1996", C, T_K)
    assert found[0][3].tolist() == [False, True]
    assert magnesia.out_of_range(np.array([3.0, 5.0]), T_K)[0][3].tolist() == [False, True]
    slag = {"SiO2": 14.0, "FeO": np.array([20.0, 50.0])}
    assert [name for name, *_ in lime.out_of_range(slag, T_1650)] == ["FetO_pct"]
