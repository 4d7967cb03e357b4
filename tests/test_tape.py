"""Identity: a recorded formula gives what the formula gives, in any block size."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from converter_calc.basis import dual as ad
from converter_calc.basis.tape import Program, Tape, Trace
from converter_calc.thermo.enthalpy import EnthalpySet

RNG = np.random.default_rng(3)
N = 37
X, Y = RNG.uniform(0.5, 3.0, N), RNG.uniform(0.5, 3.0, N)


def formula(x: Any, y: Any) -> list[Any]:
    """Every kind of operation that the package uses."""
    a = ad.exp(x * 0.2) + ad.log(y) - 2.0 / x
    b = ad.where(ad.value(x) > ad.value(y), a, ad.sqrt(y))
    c = ad.smooth_min(a, b, 0.01) * (-x) / y
    d = 3.0 - np.minimum(ad.value(y), 2.0) + np.maximum(ad.value(x), 1.0)
    return [a, b, c, ad.square(c) + ad.pow10(y * 0.1), d]


def recorded(outputs_of: Any, block: int) -> list[Any]:
    tape = Tape()
    outputs = outputs_of(tape.input("x"), tape.input("y"))
    return Program(tape, outputs, block).run({"x": X, "y": Y}, N)


@pytest.mark.parametrize("block", [1, 8, 37, 64])
def test_replay_is_the_formula(block: int) -> None:
    for got, wanted in zip(recorded(formula, block), formula(X, Y), strict=True):
        np.testing.assert_array_equal(got, wanted)


def test_numbers_fold_and_pass_through() -> None:
    def outputs_of(x: Any, y: Any) -> list[Any]:
        assert (x * 0.0) == 0.0
        assert isinstance(x * 1.0, Trace)
        return [x * 0.0, x + 0.0, 0.0 / y, ad.where(True, x, y), y - 0.0]

    zero, x, none, chosen, y = recorded(outputs_of, 16)
    assert zero == 0.0
    assert none == 0.0
    np.testing.assert_array_equal(x, X)
    np.testing.assert_array_equal(chosen, X)
    np.testing.assert_array_equal(y, Y)


def test_what_is_steady_is_set_apart() -> None:
    tape = Tape()
    x, y = tape.input("x"), tape.input("y")
    steady = ad.exp(y) * 2.0
    outputs = [x * steady + ad.sqrt(y), steady]
    rest, apart = tape.split(["x"], outputs)
    values = Program(tape, apart, 8).run({"y": Y}, N)
    program = Program(rest, outputs, 8)
    names = [name for name in program.inputs if name != "x"]
    assert all(name.startswith("steady:") for name in names)
    given = {f"steady:{t.index}": v for t, v in zip(apart, values, strict=True)}
    got = program.run({"x": X, **given}, N)
    np.testing.assert_array_equal(got[0], X * (np.exp(Y) * 2.0) + np.sqrt(Y))
    np.testing.assert_array_equal(got[1], np.exp(Y) * 2.0)


def test_enthalpies_are_recorded_too() -> None:
    T = RNG.uniform(1750.0, 2000.0, N)
    species = EnthalpySet([("CO", "stable"), ("CO2", "stable")])
    tape = Tape()
    rows = species.evaluate_dual(tape.input("T"))
    got = Program(tape, [rows[0] + rows[1], rows[1]], 16).run({"T": T}, N)
    h, _ = species.evaluate(T)
    np.testing.assert_allclose(got[0], h[0] + h[1], rtol=1e-14)
    np.testing.assert_allclose(got[1], h[1], rtol=1e-14)


def test_a_formula_may_not_decide_by_its_values() -> None:
    tape = Tape()
    with pytest.raises(TypeError, match="must not decide"):
        bool(tape.input("x") > 1.0)
    with pytest.raises(TypeError, match="make it an input"):
        tape.input("x") * np.ones(3)
