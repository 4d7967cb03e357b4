"""A real cluster of two worker processes against one process: the same numbers, also where a
worker is killed in the middle.
"""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from converter_calc.basis.errors import InputError
from converter_calc.heatlog.reading import read_log
from converter_calc.heatlog.writing import write_log
from converter_calc.learning import tuning
from converter_calc.learning.cluster import (
    local_cluster,
    replay_on_cluster,
    spread_frame,
    spread_on_cluster,
    tune_on_cluster,
)
from converter_calc.learning.streamed_tuning import tune_file
from converter_calc.learning.streaming import Replayed, replay_file
from tests.conftest import DEMO

SHOP = DEMO / "shop.toml"
HEATS, ROWS = 320, 40


@pytest.fixture(scope="module")
def log(tmp_path_factory: Any) -> Path:
    """The first heats of the demo log as Parquet."""
    path: Path = tmp_path_factory.mktemp("log") / "log.parquet"
    write_log(read_log(DEMO / "heat_log.csv", SHOP).frame.iloc[:HEATS], path)
    return path


@pytest.fixture(scope="module")
def alone(log: Path) -> tuple[pd.DataFrame, Replayed]:
    """The replay in one process."""
    out = log.with_name("alone.parquet")
    came = replay_file(log, SHOP, out, rows=ROWS)
    return pd.read_parquet(out), came


@pytest.fixture(scope="module")
def client() -> Iterator[Any]:
    pytest.importorskip("distributed", reason="the optional extra `cluster` is not installed")
    with local_cluster(2) as client:
        yield client


def test_two_processes_give_the_numbers_of_one(
    client: Any, log: Path, alone: tuple[pd.DataFrame, Replayed], tmp_path: Path
) -> None:
    assert len(set(client.run(os.getpid).values()) | {os.getpid()}) == 3
    told: list[int] = []
    out = tmp_path / "two.parquet"
    came = replay_on_cluster(client, log, SHOP, out, rows=ROWS, progress=told.append)
    pd.testing.assert_frame_equal(pd.read_parquet(out), alone[0], check_exact=True)
    assert came == alone[1]
    assert told[-1] == HEATS == came.heats
    assert len(told) == HEATS // ROWS


def test_a_killed_worker_loses_nothing(
    client: Any, log: Path, alone: tuple[pd.DataFrame, Replayed], tmp_path: Path
) -> None:
    before = client.run(os.getpid)
    victim = next(iter(before.values()))
    killed: list[int] = []

    def kill_once(done: int) -> None:
        if not killed:
            killed.append(done)
            os.kill(victim, signal.SIGKILL)

    out = tmp_path / "killed.parquet"
    came = replay_on_cluster(client, log, SHOP, out, rows=ROWS, progress=kill_once)
    assert 0 < killed[0] < HEATS  # in the middle
    pd.testing.assert_frame_equal(pd.read_parquet(out), alone[0], check_exact=True)
    assert came == alone[1]
    client.wait_for_workers(2, timeout=30)
    assert victim not in client.run(os.getpid).values()


def test_spread_of_many_heats_is_that_of_one_process(
    client: Any, log: Path, tmp_path: Path
) -> None:
    some = tmp_path / "some.parquet"
    frame = pd.read_parquet(log).iloc[:16]
    write_log(frame, some)
    out = tmp_path / "spread.parquet"
    heats, refused = spread_on_cluster(client, some, SHOP, out, draws=256, rows=8)
    found = pd.read_parquet(out)
    assert (heats, refused.rows) == (16, 0)
    whole = read_log(some, SHOP).frame
    parts = [spread_frame(whole.iloc[k : k + 8], SHOP, draws=256) for k in (0, 8)]
    expected = pd.concat(parts, ignore_index=True)
    pd.testing.assert_frame_equal(found, expected, check_exact=True, check_dtype=False)
    solved = found[found.status == "solved"]
    assert len(solved) >= 12
    assert solved.chance_all.between(0.0, 1.0).all()
    incomplete = whole.hot_metal_temp_C.isna() | whole.hm_C_pct.isna()
    assert (found.status == "charge incomplete").tolist() == incomplete.tolist()


def test_wrong_input_is_told_as_in_one_process(client: Any, tmp_path: Path) -> None:
    path = tmp_path / "empty.csv"
    path.write_text("heat_id,hot_metal_kg\n", encoding="utf-8")
    with pytest.raises(InputError, match="holds no heat"):
        replay_on_cluster(client, path, SHOP, tmp_path / "out.parquet")
    lacking = tmp_path / "lacking.csv"
    lacking.write_text("heat_id,hot_metal_kg\nA,185000\n", encoding="utf-8")
    with pytest.raises(InputError, match="oxygen_Nm3: the log has no such column"):
        replay_on_cluster(client, lacking, SHOP, tmp_path / "out.parquet")
    assert not (tmp_path / "out.parquet").exists()


def test_without_the_extra_one_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError) as caught, local_cluster(2):
        pass
    assert str(caught.value).count("\n") == 0
    assert "converter-calc[cluster]" in str(caught.value)


@pytest.mark.parametrize("workers", [0, -1, 1000])
def test_number_of_workers_is_checked(workers: int) -> None:
    pytest.importorskip("distributed")
    with pytest.raises(InputError, match="must be 1 to"), local_cluster(workers):
        pass


def test_tuning_by_two_processes_is_that_of_one(
    client: Any, log: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Within a thousandth of the standard error: solves start elsewhere. Twelve passes will do."""
    monkeypatch.setattr(tuning, "MOST_PASSES", 12)
    some = tmp_path / "some.parquet"
    write_log(pd.read_parquet(log).iloc[:60], some)
    two, _ = tune_on_cluster(client, some, SHOP, only=("P_approach",), rows=30)
    one, _ = tune_file(some, SHOP, only=("P_approach",), rows=30)
    a, b = two.parameters[0], one.parameters[0]
    assert abs(a.value - b.value) <= 1e-3 * b.standard_error
    assert (two.rows, two.heats) == (one.rows, one.heats)
