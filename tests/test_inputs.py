"""Reading and checking of heat and shop files. Kind of check: contract (text of each message)."""

import math

import numpy as np
import pandas as pd
import pytest

from converter_calc.balance.heats import heats_from_dict, heats_from_frame, read_heat_file
from converter_calc.balance.schema import number_names
from converter_calc.basis.errors import InputError


def heat(**sections):
    """A heat that is right, with some sections changed key by key."""
    document = {
        "hot_metal": {"mass_kg": 180000.0, "temp_C": 1340, "C_pct": 4.5, "Si_pct": 0.45},
        "aim": {"temp_C": 1665, "C_pct": 0.04, "P_pct": 0.012},
        "choice": {"scrap_mix": {"heavy_scrap": 60, "shop_scrap": 40}},
    }
    for section, fields in sections.items():
        if isinstance(fields, dict):
            document[section] = {**document.get(section, {}), **fields}
        else:
            document[section] = fields
    return document


def faults_of(document):
    with pytest.raises(InputError) as caught:
        heats_from_dict(document)
    return str(caught.value).splitlines()


# ---- what is read -----------------------------------------------------------------------


def test_values_defaults_and_blanks():
    table = heats_from_dict(heat(hot_metal={"Cu_pct": 0.02}, charge={"heavy_scrap_kg": 0}))
    assert table.n == 1
    assert set(table.values) == set(number_names())
    assert table.values["hot_metal_temp_C"][0] == 1340.0
    assert table.values["aim_basicity"][0] == 3.0
    assert math.isnan(table.values["oxygen_Nm3"][0])
    assert table.hm_pct["Cu"][0] == 0.02
    assert table.hm_pct["Fe"][0] == pytest.approx(100.0 - 4.5 - 0.45 - 0.02)
    assert table.choices.scrap_mix == {"heavy_scrap": 0.6, "shop_scrap": 0.4}
    assert math.fsum(table.choices.dust_species.values()) == pytest.approx(1.0, abs=1e-12)
    assert table.masses_kg["heavy_scrap"][0] == 0.0  # given as zero is given
    assert table.choices.ask is None


def test_take_picks_rows_by_index_slice_and_mask():
    frame = pd.DataFrame({"heat_id": ["a", "b", "c"], "hot_metal_kg": [1e5, 2e5, 3e5],
                          "hot_metal_temp_C": 1340.0, "hm_C_pct": 4.5})  # fmt: skip
    table = heats_from_frame(frame)
    for index in (np.array([2, 0]), slice(1, 3), np.array([True, False, True])):
        part = table.take(index)
        assert part.ids == list(np.array(["a", "b", "c"])[index])
        np.testing.assert_array_equal(part.values["hot_metal_kg"], frame["hot_metal_kg"][index])
        assert all(array.shape == (part.n,) for array in part.values.values())
        assert all(array.shape == (part.n,) for array in part.hm_pct.values())


def test_heat_overrides_shop_key_by_key(tmp_path):
    (tmp_path / "shop.toml").write_text(
        'name = "s"\n[practice]\nwait_min = 20\ndust_kg_per_t = 12\n'
        "[choice]\nscrap_mix = {heavy_scrap = 1}\n[pin]\nheat_loss_MJ_per_t = 50\n"
        "[materials.burnt_lime]\nprice_per_t = 99\n"
        '[materials.own]\nkind = "scrap"\npct = {C = 0.1}\nmoisture_pct = 3\n'
    )
    (tmp_path / "sub").mkdir()
    path = tmp_path / "sub" / "h7.toml"
    path.write_text(
        'shop = "../shop.toml"\n[hot_metal]\nmass_kg=1000\ntemp_C=1300\nC_pct=4\n'
        "[practice]\nwait_min = 33\n[choice]\nscrap_order = ['own', 'light_scrap']\n"
        "[pin]\nheat_loss_MJ = 5000\n"
        "[materials.own]\npct = {C = 0.5}\n"
    )
    table = read_heat_file(path)
    assert table.ids == ["h7"]
    assert table.values["wait_min"][0] == 33.0
    assert table.values["dust_kg_per_t"][0] == 12.0
    assert table.choices.scrap_mix == {}  # an order in the heat takes back the mix of the shop
    assert table.choices.scrap_order == ["own", "light_scrap"]
    assert math.isnan(table.values["pin_heat_loss_MJ_per_t"][0])
    assert table.values["pin_heat_loss_MJ"][0] == 5000.0
    assert table.materials["burnt_lime"].price_per_t == 99.0
    assert table.materials["burnt_lime"].species_kg["CaO"] > 0.8
    assert table.materials["own"].species_kg == {"C": 0.005, "Fe": 0.995}  # moisture went too


# ---- faults of one heat: field and text --------------------------------------------------

MESSAGES = [
    ({"hot_metal": {"tmp_C": 1300}}, "hot_metal.tmp_C: unknown field; nearest: temp_C"),
    ({"hotmetal": {}}, "hotmetal: unknown section; nearest: hot_metal"),
    ({"aim": {"basicty": 3}}, "aim.basicty: unknown field; nearest: basicity"),
    (
        {"charge": {"havy_scrap_kg": 3}},
        "charge.havy_scrap_kg: unknown material or field; nearest: heavy_scrap_kg",
    ),
    ({"hot_metal": {"temp_C": "1340"}}, "hot_metal.temp_C: must be a number, given '1340'"),
    ({"hot_metal": {"temp_C": True}}, "hot_metal.temp_C: must be a number, given True"),
    ({"hot_metal": {"temp_C": math.nan}}, "hot_metal.temp_C: must be a finite number, given nan"),
    ({"hot_metal": {"mass_kg": math.inf}}, "hot_metal.mass_kg: must be a finite number, given inf"),
    (
        {"hot_metal": {"temp_C": 1613}},
        "hot_metal.temp_C: must be 1100 to 1550 C, given 1613 (is it in K?)",
    ),
    (
        {"hot_metal": {"temp_C": 2450}},
        "hot_metal.temp_C: must be 1100 to 1550 C, given 2450 (is it in °F?)",
    ),
    (
        {"hot_metal": {"mass_kg": -5}},
        "hot_metal.mass_kg: must not be negative (1 to 600000 kg), given -5",
    ),
    (
        {"charge": {"heavy_scrap_kg": -1.0}},
        "charge.heavy_scrap_kg: must not be negative (0 to 1e+06 kg), given -1",
    ),
    ({"hot_metal": {"C_pct": 45}}, "hot_metal.C_pct: must be 0 to 6 mass %, given 45"),
    (
        {"hot_metal": {"Fe_pct": 98.0}},
        "hot_metal.C_pct: the analysis adds up to 102.95 %, above 100",
    ),
    (
        {"hot_metal": {"Fe_pct": 90.0}},
        "hot_metal.Fe_pct: given, but the analysis adds up to 94.95 % only",
    ),
    (
        {"pin": {"end_temp_C": 1640}},
        "pin.end_temp_C: 1640 contradicts aim.temp_C 1665",
    ),
    (
        {"pin": {"L_P": 90, "end_P_pct": 0.01}},
        "pin.L_P: given beside pin.end_P_pct; leave one of the two out",
    ),
    (
        {"pin": {"basicity": 3.0, "slag_CaO_pct": 45}},
        "pin.basicity: given beside pin.slag_CaO_pct; leave one of the two out",
    ),
    (
        {"pin": {"heat_loss_MJ": 9, "heat_loss_share_pct": 4}},
        "pin.heat_loss_MJ: given beside pin.heat_loss_share_pct; leave one of the two out",
    ),
    (
        {"pin": {"slag_FeO_pct": 15, "slag_Fe2O3_pct": 5, "slag_T_Fe_pct": 20}},
        ("pin.slag_T_Fe_pct: given beside both pin.slag_FeO_pct and pin.slag_Fe2O3_pct; "
        "leave one of the three out"),
    ),
    (
        {"pin": {"slag_T_Fe_pct": 15, "iron_to_slag_pct": 2}},
        "pin.slag_T_Fe_pct: given beside pin.iron_to_slag_pct; leave one of the two out",
    ),
    (
        {"charge": {"scrap_kg": 9, "scrap_share_pct": 12}},
        "charge.scrap_kg: given beside charge.scrap_share_pct; leave one of the two out",
    ),
    (
        {"choice": {"scrap_mix": {"heavy_scrap": 0, "shop_scrap": 1}}},
        "choice.scrap_mix.heavy_scrap: must be a share above zero, given 0",
    ),
    (
        {"choice": {"scrap_mix": {"hevy_scrap": 1}}},
        "choice.scrap_mix.hevy_scrap: no material 'hevy_scrap'; nearest: heavy_scrap",
    ),
    (
        {"choice": {"scrap_mix": {"burnt_lime": 1}}},
        'choice.scrap_mix.burnt_lime: burnt_lime is of kind "flux", not "scrap"',
    ),
    ({"choice": {"scrap_mix": {}}}, "choice.scrap_mix: holds no share above zero"),
    (
        {"choice": {"scrap_order": ["light_scrap"]}},
        "choice.scrap_order: given beside choice.scrap_mix; leave one of the two out",
    ),
    ({"choice": {"lime": "lime"}}, "choice.lime: no material 'lime'; nearest: limestone"),
    (
        {"choice": {"lime": "silicon"}, "materials": {"silicon": {"pct": {"Si": 99.8}}}},
        "choice.lime: silicon holds no Ca, so it cannot serve as lime",
    ),
    (
        {"choice": {"magnesia_flux": "heavy_scrap"}},
        "choice.magnesia_flux: heavy_scrap holds no Mg, so it cannot serve as magnesia_flux",
    ),
    (
        {"choice": {"ask": "scraps"}},
        "choice.ask: 'scraps' is not known (allowed: scrap, steel, trim); nearest: scrap",
    ),
    (
        {"practice": {"blowing": "side"}},
        "practice.blowing: 'side' is not known (allowed: top, combined, bottom)",
    ),
    ({"law": {"vanadium": 3}}, "law.vanadium: must be text, given 3"),
    ({"aim": 5}, "aim: must be a table, given 5"),
    ({"practice": {"dust_pct": {"FeO": 90, "Unobtainium": 10}}},
     "practice.dust_pct: 'Unobtainium' is not a species known here"),
    ({"materials": {"a b": {"pct": {"CaO": 100}}}},
     "materials.a b: a name is made of letters, digits and _"),
    ({"materials": {"scrap": {"pct": {"Fe": 100}}}},
     "materials.scrap: scrap_kg is a field of its own; choose another name"),
]  # fmt: skip


@pytest.mark.parametrize(("change", "line"), MESSAGES)
def test_message_names_field_given_and_allowed(change, line):
    assert faults_of(heat(**change)) == [line]


def test_unknown_law_names_the_nearest_and_the_allowed():
    (line,) = faults_of(heat(law={"phosphorus": "healy_1970"}))
    assert line.startswith("law.phosphorus: 'healy_1970' is not known (allowed: ")
    assert "; nearest: healy_1970_l" in line


def test_missing_hot_metal_is_told_once_per_field():
    assert faults_of({"aim": {"temp_C": 1650}}) == [
        "hot_metal.temp_C: not given; the hot metal needs its temperature [C]",
        "hot_metal.C_pct: not given; the hot metal needs its analysis, carbon at least [mass %]",
    ]


def test_scrap_without_a_mix_is_refused():
    document = heat(charge={"scrap_kg": 30000})
    del document["choice"]
    assert faults_of(document) == [
        "charge.scrap_kg: given, but no choice.scrap_mix or choice.scrap_order says of which scrap"
    ]


def test_every_fault_is_told_in_one_go():
    lines = faults_of(
        heat(
            hot_metal={"temp_C": 2450, "mass": 3},
            aim={"C_pct": -1},
            practice={"blowing": 7},
            choice={"fuel": "petrol"},
            pin={"L_S": 5, "end_S_pct": 0.01},
        )
    )
    fields = {line.split(":")[0] for line in lines}
    assert fields == {"hot_metal.temp_C", "hot_metal.mass", "aim.C_pct", "practice.blowing",
                      "choice.fuel", "pin.L_S"}  # fmt: skip


# ---- faults of files ---------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "text"),
    [
        (b"", "is empty"),
        (b" \n\t\n", "is empty"),
        (b"# only a remark\n", "holds no field"),
        (b"[hot_metal\nmass_kg = 1\n", "is not TOML: Expected ']'"),
        (b"a = 1\nb = = 2\n", "(at line 2, column 5)"),
        (b"why = '\xff\xfe'\n", "is not UTF-8 text (byte 8)"),
        (b"a = " + b"[" * 5000 + b"]" * 5000, "is nested too deeply"),
        (b"a = " + b"9" * 9000, "is not TOML: Exceeds the limit"),
        (
            b"[aim]\ntemp_C = 0x" + b"f" * 9000,
            "aim.temp_C: must be a finite number, given a very long",
        ),
        (b"#" * 2_100_000, "has 2.1 MB; a heat file has at most 2 MB"),
        (b"[practice.dust_pct.a.b.c.d.e.f.g.h]\ni = 1\n", "is nested deeper than 8 levels"),
        (b'shop = "none.toml"\n', "none.toml: no such file"),
        (b"shop = 3\n", "shop: must be the path of a shop file, given 3"),
    ],
)
def test_file_that_cannot_be_read(tmp_path, content, text):
    path = tmp_path / "heat.toml"
    path.write_bytes(content)
    with pytest.raises(InputError) as caught:
        read_heat_file(path)
    assert text in str(caught.value).splitlines()[0]


def test_missing_file_directory_and_odd_name(tmp_path):
    for path, text in (
        (tmp_path / "no.toml", "no such file"),
        (tmp_path, "is a directory, not a heat file"),
        ("a\0b", "cannot be read: embedded null byte"),
    ):
        with pytest.raises(InputError, match=text):
            read_heat_file(path)


def test_a_shop_cannot_name_a_shop(tmp_path):
    (tmp_path / "a.toml").write_text('shop = "a.toml"\n')
    with pytest.raises(InputError, match="is a shop file and cannot name another shop"):
        read_heat_file(tmp_path / "a.toml")


def test_byte_order_mark_is_read_over(tmp_path):
    path = tmp_path / "h.toml"
    path.write_bytes(b"\xef\xbb\xbf[hot_metal]\ntemp_C = 1300\nC_pct = 4\n")
    assert read_heat_file(path).values["hot_metal_temp_C"][0] == 1300.0
