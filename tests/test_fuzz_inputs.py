"""Whatever is put in, only errors of this package come out. Kind of check: property (random bytes
and heats changed at random, by hypothesis)."""

import copy
import math
import tomllib

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from converter_calc.balance.heats import heats_from_dict, heats_from_frame, read_heat_file
from converter_calc.balance.materials import compile_material, known_species
from converter_calc.balance.schema import material_fields, number_names, sections
from converter_calc.basis.errors import ConverterError

RELAXED = settings(
    max_examples=120,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)

VALID = """
why = "fuzz"
[hot_metal]
mass_kg = 180000
temp_C = 1340
C_pct = 4.5
Si_pct = 0.45
[aim]
temp_C = 1665
C_pct = 0.04
[charge]
burnt_lime_kg = 8000
[choice]
scrap_mix = { heavy_scrap = 0.6, own = 0.4 }
[practice]
dust_pct = { FeO = 60, Fe = 40 }
[pin]
L_P = 90
[materials.own]
kind = "scrap"
pct = { C = 0.2, Zn = 1.0 }
moisture_pct = 0.5
yield_pct = 97
[grades.g]
limits = { C = [0.0, 0.2] }
"""

numbers = st.one_of(
    st.floats(), st.integers(), st.just(10**400), st.sampled_from([0, -1, 1e308, 5e-324, -0.0])
)
leaves = st.one_of(numbers, st.booleans(), st.text(max_size=20), st.none(), st.dates())
names = st.one_of(
    st.text(max_size=12),
    st.sampled_from(
        [key for keys in sections().values() for key in keys]
        + [*sections(), *number_names(), *material_fields(), *known_species(), "own", "shop"]
    ),
)
trees = st.recursive(
    leaves,
    lambda parts: st.one_of(st.lists(parts, max_size=3), st.dictionaries(names, parts, max_size=4)),
    max_leaves=8,
)


def attempt(call, *args):
    """The table, or None where the input was refused with a fault that says something."""
    try:
        return call(*args)
    except ConverterError as error:
        lines = str(error).splitlines()
        assert lines
        assert all(": " in line and len(line) < 2000 for line in lines)
        return None


def is_sound(table):
    """What a table promises, whatever it was made of."""
    assert table.n == len(table.ids)
    for name, array in {**table.values, **table.hm_pct, **table.masses_kg}.items():
        assert array.shape == (table.n,), name
        assert not np.isinf(array).any(), name
    assert all(((pct >= 0.0) & (pct <= 100.0)).all() for pct in table.hm_pct.values())
    if table.choices.scrap_mix:
        assert math.fsum(table.choices.scrap_mix.values()) == pytest.approx(1.0, abs=1e-12)
    for material in table.materials.values():
        assert abs(math.fsum(material.species_kg.values()) - 1.0) <= 1e-12
    return True


@RELAXED
@given(st.binary(max_size=300))
def test_random_bytes(tmp_path, raw):
    path = tmp_path / "heat.toml"
    path.write_bytes(raw)
    table = attempt(read_heat_file, path)
    assert table is None or is_sound(table)


@RELAXED
@given(st.data())
def test_valid_file_with_some_bytes_changed(tmp_path, data):
    raw = bytearray(VALID.encode())
    for _ in range(data.draw(st.integers(1, 4))):
        place = data.draw(st.integers(0, len(raw) - 1))
        raw[place : place + data.draw(st.integers(0, 3))] = data.draw(st.binary(max_size=4))
    path = tmp_path / "heat.toml"
    path.write_bytes(bytes(raw))
    table = attempt(read_heat_file, path)
    assert table is None or is_sound(table)


def places(tree, path=()):
    """Paths of all keys of a nested dict."""
    for key, part in tree.items():
        yield (*path, key)
        if isinstance(part, dict):
            yield from places(part, (*path, key))


@RELAXED
@given(st.data())
def test_valid_heat_with_values_and_keys_changed(data):
    document = copy.deepcopy(tomllib.loads(VALID))
    for _ in range(data.draw(st.integers(1, 3))):
        *way, last = data.draw(st.sampled_from(list(places(document))))
        spot = document
        for key in way:
            spot = spot[key]
        action = data.draw(st.sampled_from(["value", "key", "drop", "number"]))
        if action == "value":
            spot[last] = data.draw(trees)
        elif action == "number":
            spot[last] = data.draw(numbers)
        elif action == "key":
            spot[data.draw(names)] = data.draw(trees)
        elif len(document) > 1 or way:
            del spot[last]
    table = attempt(heats_from_dict, document)
    assert table is None or is_sound(table)


@RELAXED
@given(st.dictionaries(names, trees, max_size=5))
def test_random_document(document):
    table = attempt(heats_from_dict, document)
    assert table is None or is_sound(table)


@RELAXED
@given(
    st.dictionaries(st.sampled_from(list(material_fields())), trees, max_size=5),
    st.dictionaries(st.sampled_from(known_species()), st.floats(0.0, 110.0), max_size=5),
)
def test_random_material(fields, pct):
    """An accepted material always closes; its elements are those of the species stated."""
    material = attempt(compile_material, "m", {"pct": pct, **fields})
    if material is not None:
        assert abs(math.fsum(material.species_kg.values()) - 1.0) <= 1e-12
        assert min(material.species_kg.values()) > 0.0
        assert "CO2" not in material.species_kg


cells = st.one_of(st.floats(), st.none(), st.text(max_size=3), st.booleans(), st.integers())
columns = st.sampled_from(["hm_Si_pct", "oxygen_Nm3", "burnt_lime_kg", "pin_L_P", "pin_end_P_pct",
                           "scrap_kg", "heat_id", "grade", "end_temp_C", "odd", "hm_Xy_pct",
                           "blowing"])  # fmt: skip


@RELAXED
@given(st.integers(0, 3).flatmap(
    lambda n: st.dictionaries(columns, st.lists(cells, min_size=n, max_size=n), max_size=4)
    .map(lambda part: (n, part))
))  # fmt: skip
def test_random_table(drawn):
    n, part = drawn
    good = {"hot_metal_kg": [1e5] * n, "hot_metal_temp_C": [1300.0] * n, "hm_C_pct": [4.0] * n}
    table = attempt(heats_from_frame, pd.DataFrame({**good, **part}))
    assert table is None or is_sound(table)


def test_the_heat_that_is_changed_is_right_itself():
    assert is_sound(heats_from_dict(tomllib.loads(VALID)))
