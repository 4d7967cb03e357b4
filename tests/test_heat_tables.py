"""Tables of heats as pandas frames. Kind of check: contract (columns of the heat log, messages)."""

import numpy as np
import pandas as pd
import pytest

from converter_calc.balance.heats import heats_from_dict, heats_from_frame
from converter_calc.basis.errors import InputError

#: Columns of a heat log; those after `aim_P_pct` tell what came of the heat.
HEAT_LOG = [
    "heat_id",
    "tapped_at",
    "vessel",
    "grade",
    "hot_metal_kg",
    "hot_metal_temp_C",
    "hm_C_pct",
    "hm_Si_pct",
    "hm_Mn_pct",
    "hm_P_pct",
    "hm_S_pct",
    "hm_Ti_pct",
    "hm_V_pct",
    "hm_Cr_pct",
    "heavy_scrap_kg",
    "burnt_lime_kg",
    "oxygen_Nm3",
    "wait_min",
    "blow_min",
    "aim_temp_C",
    "aim_C_pct",
    "aim_P_pct",
    "end_temp_C",
    "end_C_pct",
    "end_Mn_pct",
    "end_P_pct",
    "end_S_pct",
    "end_O_ppm",
    "slag_CaO_pct",
    "slag_SiO2_pct",
    "slag_MgO_pct",
    "slag_FeO_pct",
    "slag_MnO_pct",
    "slag_P2O5_pct",
    "slag_Al2O3_pct",
    "steel_kg",
]
LOW = {"hot_metal_kg": 1.8e5, "hot_metal_temp_C": 1340.0, "hm_C_pct": 4.5, "hm_Si_pct": 0.4,
       "oxygen_Nm3": 1e4, "wait_min": 20.0, "blow_min": 17.0, "aim_temp_C": 1660.0,
       "aim_C_pct": 0.04, "aim_P_pct": 0.012}  # fmt: skip


def log(n=3, **columns):
    frame = pd.DataFrame({name: [LOW.get(name, 0.01)] * n for name in HEAT_LOG})
    frame["heat_id"] = [f"H{i}" for i in range(n)]
    frame["tapped_at"], frame["vessel"], frame["grade"] = "2026-01-01T10:00", "2", "S235JR"
    for name, values in columns.items():
        frame[name] = values
    return frame


def test_heat_log_is_read_as_it_stands():
    table = heats_from_frame(log())
    assert table.ids == ["H0", "H1", "H2"]
    assert table.grade == "S235JR"
    np.testing.assert_allclose(table.values["wait_min"], 20.0)
    assert set(table.masses_kg) == {"heavy_scrap", "burnt_lime"}
    assert np.isnan(table.values["pin_end_P_pct"]).all()  # an outcome is no pin


def test_one_row_and_one_dict_give_the_same_table():
    choice = {"scrap_mix": {"heavy_scrap": 60, "shop_scrap": 40}}
    one = heats_from_dict(
        {
            "hot_metal": {"mass_kg": 180000.0, "temp_C": 1340, "C_pct": 4.5, "Si_pct": 0.45},
            "aim": {"temp_C": 1665, "C_pct": 0.04, "P_pct": 0.012},
            "charge": {"oxygen_Nm3": 9000, "burnt_lime_kg": 8000},
            "choice": choice,
        }
    )
    frame = pd.DataFrame({"hot_metal_kg": [180000], "hot_metal_temp_C": [1340], "hm_C_pct": [4.5],
                          "hm_Si_pct": [0.45], "aim_temp_C": [1665], "aim_C_pct": [0.04],
                          "aim_P_pct": [0.012], "oxygen_Nm3": [9000],
                          "burnt_lime_kg": [8000]})  # fmt: skip
    many = heats_from_frame(frame, shop={"choice": choice})
    for mine, theirs in ((one.values, many.values), (one.hm_pct, many.hm_pct),
                         (one.masses_kg, many.masses_kg)):  # fmt: skip
        assert mine.keys() == theirs.keys()
        for name in mine:
            np.testing.assert_array_equal(mine[name], theirs[name], err_msg=name)
    assert one.choices == many.choices


def test_blank_cell_is_missing_not_zero_and_takes_what_the_shop_gives():
    frame = log(wait_min=[10.0, np.nan, 30.0], oxygen_Nm3=[None, 9000, 9100])
    frame["burnt_lime_kg"] = [8000.0, np.nan, 8100.0]
    frame["hm_Ti_pct"] = [0.05, np.nan, 0.05]
    table = heats_from_frame(
        frame, {"practice": {"wait_min": 17}}, defaults={"aim_S_pct": 0.01, "coke_kg": 5}
    )
    np.testing.assert_array_equal(table.values["wait_min"], [10.0, 17.0, 30.0])
    np.testing.assert_array_equal(table.values["oxygen_Nm3"], [np.nan, 9000.0, 9100.0])
    np.testing.assert_array_equal(table.values["aim_S_pct"], [0.01] * 3)
    np.testing.assert_array_equal(table.masses_kg["burnt_lime"], [8000.0, np.nan, 8100.0])
    np.testing.assert_array_equal(table.masses_kg["coke"], [5.0] * 3)
    assert table.warnings == ["hm_Ti_pct: blank in 1 heats, taken as 0 there"]


@pytest.mark.parametrize("dtype", ["float64", "float32", "Int64", "Float64", "object"])
def test_any_numeric_dtype_is_read(dtype):
    frame = log(blow_min=pd.Series([15, 16, 17]).astype(dtype))
    np.testing.assert_array_equal(heats_from_frame(frame).values["blow_min"], [15.0, 16.0, 17.0])


def test_table_of_no_heats():
    table = heats_from_frame(log(0))
    assert table.n == 0
    assert table.take(slice(0, 0)).n == 0
    assert all(array.shape == (0,) for array in table.values.values())


@pytest.mark.parametrize(
    ("columns", "lines"),
    [
        (
            {"hot_metal_temp_C": [1340.0, 900.0, 1350.0]},
            ["hot_metal_temp_C: must be 1100 to 1550 C, given 900 (row 1, heat H1)"],
        ),
        (
            {"hm_C_pct": [4.5, np.nan, 4.5]},
            [("hm_C_pct: not given; the hot metal needs its analysis, carbon at least [mass %] "
             "(row 1, heat H1)")],
        ),
        (
            {"burnt_lime_kg": [1.0, 2.0, -3.0]},
            ["burnt_lime_kg: must not be negative (0 to 1e+06 kg), given -3 (row 2, heat H2)"],
        ),
        (
            {"oxygen_Nm3": [1.0, "much", 2.0]},
            ["oxygen_Nm3: must be a number, given 'much' (row 1, heat H1)"],
        ),
        ({"oxygen_Nm3": [1.0, np.inf, 2.0]},
         ["oxygen_Nm3: must be finite, given inf (row 1, heat H1)"]),
        ({"oxygen_Nm3": [True, True, False]},
         ["oxygen_Nm3: must hold numbers, holds true and false"]),
        ({"oxigen_Nm3": 1.0}, ["oxigen_Nm3: unknown column; nearest: oxygen_Nm3"]),
        ({"blowing": "top"},
         ["blowing: is no column; give it in the shop file as practice.blowing"]),
        (
            {"pin_L_P": [50.0, np.nan, 60.0], "pin_end_P_pct": [np.nan, 0.01, 0.01]},
            ["pin_L_P: given beside pin_end_P_pct; leave one of the two out (row 2, heat H2)"],
        ),
        ({"scrap_kg": 2e4},
         ["scrap_kg: given, but no choice.scrap_mix or choice.scrap_order says of which scrap "
          f"(row {i}, heat H{i})" for i in range(3)]),
    ],
)  # fmt: skip
def test_fault_names_column_and_row(columns, lines):
    with pytest.raises(InputError) as caught:
        heats_from_frame(log(**columns))
    assert str(caught.value).splitlines() == lines


def test_many_faulty_rows_are_cut_short():
    with pytest.raises(InputError) as caught:
        heats_from_frame(log(50, hot_metal_temp_C=99.0))
    lines = str(caught.value).splitlines()
    assert len(lines) == 4
    assert lines[-1] == "hot_metal_temp_C: the same in 47 more rows"


def test_column_that_stands_twice():
    frame = log()
    frame = pd.concat([frame, frame[["blow_min"]]], axis=1)
    with pytest.raises(InputError, match="blow_min: is a column twice"):
        heats_from_frame(frame)


def test_rows_keep_the_names_of_the_index():
    frame = log(5).drop(columns="heat_id").iloc[3:]
    frame.loc[4, "hm_Si_pct"] = 50.0
    with pytest.raises(InputError, match=r"hm_Si_pct: .* given 50 \(row 4\)"):
        heats_from_frame(frame)


def test_several_grades_set_no_aim():
    table = heats_from_frame(log(grade=["S235JR", "DC04", None]))
    assert table.grade is None
    assert "grade: 2 grades in one table" in table.warnings[0]


def test_rows_that_give_scrap_in_different_ways_solve_as_they_do_alone() -> None:
    """Identity: a share in one row and a mass in the next leave blanks in each other's column."""
    import converter_calc

    heat = {"hot_metal_kg": 160e3, "hot_metal_temp_C": 1340.0, "hm_C_pct": 4.4, "hm_Si_pct": 0.5}
    heat |= {"hm_Mn_pct": 0.4, "hm_P_pct": 0.1, "hm_S_pct": 0.01}
    heat |= {"aim_temp_C": 1660.0, "aim_C_pct": 0.05, "aim_P_pct": 0.015}
    rows = [heat, heat | {"scrap_share_pct": 15.0}, heat | {"scrap_kg": 30e3}, heat]
    shop = {"choice": {"scrap_mix": {"heavy_scrap": 1.0}}}
    together = converter_calc.plan(pd.DataFrame(rows), shop=shop)
    assert together["status"].tolist() == ["solved"] * 4
    for k, row in enumerate(rows):
        alone = converter_calc.plan(pd.DataFrame([row]), shop=shop)
        for name in ("scrap_total_kg", "burnt_lime_kg", "oxygen_Nm3", "end_P_pct"):
            np.testing.assert_allclose(together[name][k], alone[name][0], rtol=1e-10)


def test_a_blank_analysis_is_told() -> None:
    """Contract: what is missing is missing; where it counts as zero, the result says so."""
    import converter_calc

    heat = {"hot_metal_kg": 160e3, "hot_metal_temp_C": 1340.0, "hm_C_pct": 4.4}
    heat |= {"aim_temp_C": 1660.0, "aim_C_pct": 0.05}
    shop = {"choice": {"scrap_mix": {"heavy_scrap": 1.0}}}
    told = converter_calc.plan(pd.DataFrame([heat, heat | {"hm_Si_pct": 0.4}]), shop=shop)
    assert "analysis-blank" in told["warnings"][0]
    single = {"hot_metal": {"mass_kg": 160e3, "temp_C": 1340.0, "C_pct": 4.4}, **shop}
    single["aim"] = {"temp_C": 1660.0, "C_pct": 0.05}
    texts = [w["message"] for w in converter_calc.plan(single).document()["warnings"]]
    assert any("no Si is given" in text for text in texts)
