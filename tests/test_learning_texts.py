"""Texts of what was learnt. Kind of check: what a reader is told, by eye."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from converter_calc.learning.proof import Proof
from converter_calc.learning.tuning import tune
from converter_calc.reporting.proof_report import proof_text
from converter_calc.reporting.tuning_text import tuning_text
from tests.conftest import DEMO

METHODS = ("untuned", "tuned", "with drift", "with residual")


def proof_of(n: int) -> Proof:
    """A proof of n heats with one quantity, every method 0.01 % Mn off."""
    observed = np.full((n, 1), 0.15)
    return Proof(
        rows=np.arange(n),
        heat_id=[str(i) for i in range(n)],
        tapped_at=list(pd.date_range("2026-01-01", periods=n, freq="40min", tz="UTC")),
        names=("end_Mn_pct",),
        observed=observed,
        predicted=dict.fromkeys(METHODS, observed + 0.01),
        deviation=dict.fromkeys(METHODS, np.full((n, 1), 0.1)),
        stages=(0,),
        residual_used={"end_Mn_pct": 1.0},
    )


def test_columns_of_the_proof_stay_apart() -> None:
    """All heats hit: the widest number of the last column stands clear of the bias."""
    row = next(line for line in proof_text(proof_of(40)).splitlines() if "with residual" in line)
    assert row.split()[-6:] == ["0.0000", "+0.0100", "100.0", "±", "0.0", "%"]


def test_a_proof_says_which_heats_have_no_time() -> None:
    proof = proof_of(40)
    assert "no time of tapping" not in proof_text(proof)
    untimed = replace(proof, tapped_at=[*proof.tapped_at[:37], pd.NaT, None, pd.NaT])
    assert "3 of these heats have no time of tapping" in proof_text(untimed)


def test_a_gross_error_is_shown_as_it_was_given() -> None:
    """0.219 % P stands in the log of the invented shop; no digits of the machine beside it."""
    log = pd.read_csv(DEMO / "heat_log.csv", nrows=120)
    text = tuning_text(tune(log, DEMO / "shop.toml"))
    line = next(line for line in text.splitlines() if "standard deviations off" in line)
    assert "end_P_pct = 0.219, expected 0.01" in line
