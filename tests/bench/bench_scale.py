"""A log of a million heats: replayed and tuned in bounded memory, and by two processes.

The heats are those of the demo log over and over, each a little moved (invented). Run with
`pytest tests/bench/bench_scale.py -s -n 0`; it takes about an hour, and less with
CONVERTER_BENCH_HEATS set to a smaller number.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from pyarrow import parquet

from converter_calc.heatlog.reading import read_log
from tests.conftest import DEMO

SHOP = DEMO / "shop.toml"
HEATS = int(os.environ.get("CONVERTER_BENCH_HEATS", "1000000"))
MOST_BYTES = 2e9
#: What a reading is moved by, one standard deviation, so that no two heats are alike (invented).
MOVED = {"hot_metal_temp_C": 4.0, "hm_Si_pct": 0.01, "oxygen_Nm3": 20.0, "end_temp_C": 3.0}

#: Runs in a process of its own and tells its time and the most memory it ever took.
WORKER = """
import json, resource, sys, time
from converter_calc.learning.streaming import replay_file
from converter_calc.learning.streamed_tuning import tune_file
what, log, shop, out, most = json.loads(sys.argv[1])
start = time.perf_counter()
if what == "replay":
    came = replay_file(log, shop, out)
    told = {"heats": came.heats, "error": came.fits["end_temp_C"].mean_absolute}
elif what == "tune":
    tuned, _ = tune_file(log, shop)
    told = {"heats": tuned.rows, "passes": tuned.passes}
else:
    class Enough(Exception):
        pass
    def stop(done):
        if done >= most:
            raise Enough
    try:
        tune_file(log, shop, progress=stop)
    except Enough:
        told = {"heats": most}
told["seconds"] = time.perf_counter() - start
told["bytes"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
print(json.dumps(told))
"""


def long_log(path: Path, heats: int) -> None:
    """The demo log over and over, written a part at a time."""
    frame = read_log(DEMO / "heat_log.csv", SHOP).frame.reset_index(drop=True)
    rng = np.random.default_rng(1)
    writer = None
    for first in range(0, heats, len(frame)):
        part = frame.iloc[: heats - first].copy()
        part["heat_id"] = [f"H{first + k}" for k in range(len(part))]
        for name, sd in MOVED.items():
            part[name] += rng.normal(0.0, sd, len(part))
        part["hm_Si_pct"] = part["hm_Si_pct"].clip(0.05, 5.0)
        part["oxygen_Nm3"] = part["oxygen_Nm3"].clip(1.0)  # a slip says thousands for ones
        table = pa.Table.from_pandas(part, preserve_index=False)
        writer = writer or parquet.ParquetWriter(path, table.schema)
        writer.write_table(table)
    assert writer is not None
    writer.close()


def run(what: str, log: Path, out: Path, most: int = 0) -> dict[str, Any]:
    job = json.dumps([what, str(log), str(SHOP), str(out), most])
    done = subprocess.run(
        [sys.executable, "-c", WORKER, job], check=True, capture_output=True, text=True
    )
    return dict(json.loads(done.stdout))


@pytest.fixture(scope="module")
def logs(tmp_path_factory: Any) -> tuple[Path, Path]:
    """A log of a tenth, and the whole."""
    folder = tmp_path_factory.mktemp("scale")
    small, large = folder / "small.parquet", folder / "large.parquet"
    long_log(small, HEATS // 10)
    long_log(large, HEATS)
    return small, large


def test_replay_of_a_million_heats(
    logs: tuple[Path, Path], tmp_path: Path, report: Callable[[str], None]
) -> None:
    """Floors: 2 GB; at most 12 times the time of a tenth of the heats."""
    small, large = (run("replay", log, tmp_path / "out.parquet") for log in logs)
    report(
        f"replay of {large['heats']:,} heats: {large['seconds']:.0f} s, "
        f"{large['heats'] / large['seconds']:,.0f} heats/s, {large['bytes'] / 1e9:.2f} GB; "
        f"{large['seconds'] / small['seconds']:.1f} times {small['heats']:,}"
    )
    assert large["heats"] == HEATS
    assert parquet.read_metadata(tmp_path / "out.parquet").num_rows == HEATS
    assert large["bytes"] < MOST_BYTES
    assert large["seconds"] / small["seconds"] <= 12.0


def test_tuning_of_a_million_heats(
    logs: tuple[Path, Path], tmp_path: Path, report: Callable[[str], None]
) -> None:
    """Floor: 2 GB over the first two passes; a pass keeps nothing that the one before did not.

    A tenth of the heats is tuned to the end.
    """
    most = 2 * HEATS
    found = run("passes", logs[1], tmp_path / "none", most)
    report(
        f"two passes of tuning over {HEATS:,} heats: {found['seconds']:.0f} s, "
        f"{most / found['seconds']:,.0f} heats/s, {found['bytes'] / 1e9:.2f} GB"
    )
    assert found["bytes"] < MOST_BYTES
    whole = run("tune", logs[0], tmp_path / "none")
    report(
        f"tuning of {whole['heats']:,} heats: {whole['seconds']:.0f} s in {whole['passes']} "
        f"passes, {whole['bytes'] / 1e9:.2f} GB"
    )
    assert whole["heats"] == HEATS // 10
    assert whole["bytes"] < found["bytes"] * 1.1


def test_two_processes_on_a_tenth(
    logs: tuple[Path, Path], tmp_path: Path, report: Callable[[str], None]
) -> None:
    """The same file to the last bit; how much quicker is told, not asked for."""
    from converter_calc.learning.cluster import local_cluster, replay_on_cluster

    alone = run("replay", logs[0], tmp_path / "alone.parquet")
    start = time.perf_counter()
    with local_cluster(2) as client:
        replay_on_cluster(client, logs[0], SHOP, tmp_path / "two.parquet")
    spent = time.perf_counter() - start
    report(
        f"two processes: {spent:.1f} s for {HEATS // 10:,} heats, start and end of the cluster "
        f"included; one {alone['seconds']:.1f} s"
    )
    both = [pd.read_parquet(tmp_path / f"{name}.parquet") for name in ("alone", "two")]
    pd.testing.assert_frame_equal(*both, check_exact=True)
