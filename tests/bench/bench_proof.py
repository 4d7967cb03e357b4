"""The whole demo log: planted steps dated, and errors out of sample beside plain statistics.

Takes some minutes; prints the report that README.md quotes.
"""

from __future__ import annotations

import pandas as pd
import pytest

from converter_calc.heatlog.reading import read_log
from converter_calc.learning.proof import REGRESSION, walk_forward
from converter_calc.learning.rivals import BOOSTING, rivals
from converter_calc.learning.today import learn
from converter_calc.reporting.proof_report import proof_text
from tests.conftest import DEMO

SHOP = str(DEMO / "shop.toml")


def log() -> pd.DataFrame:
    return read_log(DEMO / "heat_log.csv", SHOP).frame


@pytest.mark.parametrize(
    ("offset", "planted"),
    [
        ("heat_loss_MJ_per_t", "2026-01-19 06:00"),  # hot-metal thermometer set right
        ("oxygen_meter_error_pct", "2026-03-14 00:00"),  # lances of a new design
    ],
)
def test_planted_steps_are_dated(offset: str, planted: str) -> None:
    """Source: dates in the generator of the demo log."""
    jumps = learn(log(), SHOP)[0].jumps
    print(jumps)
    late = [
        (pd.Timestamp(time) - pd.Timestamp(planted)).total_seconds() / 86400.0
        for time, _, name, *_ in jumps
        if name == offset
    ]
    assert any(-1.0 <= days <= 2.0 for days in late)


def test_out_of_sample() -> None:
    """Temperature, carbon and manganese beat both plain methods; phosphorus is level with one."""
    proof = walk_forward(log(), SHOP, competitors=rivals())
    print(proof_text(proof))
    error = proof.scores().pivot_table(index="quantity", columns="method", values="mae")
    for name in ("end_temp_C", "end_C_pct", "end_Mn_pct"):
        ours = error.loc[name, "with residual"]
        assert ours < error.loc[name, REGRESSION]
        assert ours < error.loc[name, BOOSTING]
    P = error.loc["end_P_pct"]
    assert P["with residual"] < P[BOOSTING]
    assert P["with residual"] < 1.05 * P[REGRESSION]
