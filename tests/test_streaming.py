"""A long log read a part at a time against the same log held whole; the files that come of it.

References: the one-go replay and tuning of the package, which their own tests check; pandas and
pyarrow for the files.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from pyarrow import parquet

from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.heatlog.reading import read_log
from converter_calc.heatlog.writing import write_log
from converter_calc.learning import streamed_tuning
from converter_calc.learning.log_parts import Refused, cut_log, pieces, read_part
from converter_calc.learning.parameters import parameter_set
from converter_calc.learning.replay import read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.streamed_tuning import PartSums, tune_file
from converter_calc.learning.streaming import (
    Replayed,
    replay_file,
    replay_frame,
    shop_document,
)
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import summed, tune
from converter_calc.learning.tuning_equations import Point
from tests.conftest import DEMO

SHOP = DEMO / "shop.toml"
HEATS = 120
ONLY = ("P_approach",)


@pytest.fixture(scope="module")
def frame() -> pd.DataFrame:
    return read_log(DEMO / "heat_log.csv", SHOP).frame.iloc[:HEATS].reset_index(drop=True)


@pytest.fixture(scope="module")
def log(frame: pd.DataFrame, tmp_path_factory: Any) -> Path:
    path: Path = tmp_path_factory.mktemp("log") / "log.csv"
    write_log(frame, path)
    return path


@pytest.fixture(scope="module")
def held(frame: pd.DataFrame) -> Tuned:
    """The tuning of the log held whole."""
    return tune(frame, SHOP, only=ONLY)


def test_a_part_at_a_time_is_the_whole_at_once(
    frame: pd.DataFrame, log: Path, tmp_path: Path
) -> None:
    """Predictions to 1e-8 relative (the solver's tolerance), all else exactly."""
    told: list[int] = []
    out = tmp_path / "out.parquet"
    came = replay_file(log, SHOP, out, rows=50, progress=told.append)
    found = pd.read_parquet(out)
    whole = replay(frame, SHOP)
    assert told == [50, 100, 120]
    assert parquet.ParquetFile(out).metadata.num_row_groups == 3
    assert found.heat_id.tolist() == frame.heat_id.tolist()
    assert (found.tapped_at.to_numpy() == frame.tapped_at.to_numpy()).all()
    assert ((found.status != "charge incomplete") == whole.usable).all()
    assert ((found.status == "solved") == whole.converged).all()
    for name in whole.names:
        np.testing.assert_array_equal(found[name], frame[name])
        _, predicted = whole.plain(name)
        np.testing.assert_allclose(found[f"predicted_{name}"], predicted, rtol=1e-8)
        gap = (found[name] - found[f"predicted_{name}"]).dropna()
        assert came.fits[name].used == len(gap)
        np.testing.assert_allclose(came.fits[name].bias, gap.mean(), rtol=1e-9)
        np.testing.assert_allclose(came.fits[name].mean_absolute, gap.abs().mean(), rtol=1e-9)
    incomplete = found.status == "charge incomplete"
    assert came.incomplete == incomplete.sum() > 0
    assert found.reason[incomplete].str.contains("not given").all()
    assert found.reason[~incomplete].isna().all()


def test_a_part_without_an_outcome_has_the_columns_of_the_others(frame: pd.DataFrame) -> None:
    whole, _ = replay_frame(frame, SHOP)
    blank = frame.iloc[:20].assign(end_O_ppm=np.nan).drop(columns=["end_S_pct"])
    table, came = replay_frame(blank, SHOP)
    assert list(table.columns) == list(whole.columns)
    assert came.fits["end_O_ppm"].used == came.fits["end_S_pct"].used == 0
    assert np.isnan(came.fits["end_O_ppm"].bias)
    both = whole.iloc[:20]
    for name in ("end_O_ppm", "end_S_pct"):  # predicted all the same
        np.testing.assert_allclose(table[f"predicted_{name}"], both[f"predicted_{name}"], rtol=1e-8)


def test_parameters_take_the_place_of_the_shops(frame: pd.DataFrame) -> None:
    cold, _ = replay_frame(frame.iloc[:20], SHOP, {"heat_loss_MJ_per_t": 60.0})
    warm, _ = replay_frame(frame.iloc[:20], SHOP, {"heat_loss_MJ_per_t": 30.0})
    gap = (warm.predicted_end_temp_C - cold.predicted_end_temp_C).dropna()
    # 30 MJ/t over about 0.95 MJ/t K, steel and slag together: common practice, no source
    assert gap.between(20.0, 45.0).all()


def test_refused_rows_are_counted_named_and_written(log: Path, tmp_path: Path) -> None:
    hostile = tmp_path / "hostile.csv"
    lines = log.read_text(encoding="utf-8").splitlines()
    cells = lines[3].split(",")
    twice = lines[2]
    cells[0], cells[4] = "=1+1", "-5"
    hostile.write_text("\n".join([*lines[:8], twice, ",".join(cells)]) + "\n", encoding="utf-8")
    refused, to = Refused(), tmp_path / "refused.csv"
    good = list(pieces(hostile, SHOP, refused, rows=4, refused_to=to))
    assert [len(part) for part in good] == [4, 3]
    assert refused.rows == 2
    assert [fault["field"] for fault in refused.named] == ["heat_id", "hot_metal_kg"]
    written = pd.read_csv(to)
    assert written.field.tolist() == ["heat_id", "hot_metal_kg"]
    assert written.heat_id.tolist()[1] == "'=1+1"  # no formula for a spreadsheet
    came = replay_file(hostile, SHOP, tmp_path / "out.parquet", rows=4)
    assert (came.heats, came.refused.rows) == (7, 2)


def test_parts_on_disk_read_back_exactly(frame: pd.DataFrame, log: Path, tmp_path: Path) -> None:
    parts, refused = cut_log(log, tmp_path, SHOP, rows=50)
    assert [path.name for path in parts] == [f"part-0000{k}.parquet" for k in range(3)]
    assert refused.rows == 0
    back = pd.concat([read_part(path) for path in parts], ignore_index=True)
    for name in frame.columns.drop("tapped_at"):
        pd.testing.assert_series_equal(back[name], frame[name], check_dtype=False, check_exact=True)


@pytest.mark.parametrize("held", [0, 1, 9])
def test_sums_of_parts_are_those_of_the_whole(
    frame: pd.DataFrame, log: Path, tmp_path: Path, held: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """To 1e-8 relative, whether parts are kept or read anew."""
    monkeypatch.setattr(streamed_tuning, "HELD", held)
    document = shop_document(SHOP)
    parts, _ = cut_log(log, tmp_path, SHOP, rows=50)
    entries = parameter_set(document, map(str, frame.columns), ("P_approach", "heat_loss_MJ_per_t"))
    z = np.zeros(len(entries.coordinates))
    first = Point(entries, z, {name: q.first_sd for name, q in quantities().items()})
    moved = Point(entries, z + 0.3, first.sd)
    streamed, whole = PartSums(parts, document), summed([read_heats(frame, document)])
    for point in (first, moved, first):
        a, b = streamed(point), whole(point)
        scale = np.sqrt(np.outer(np.diag(b.information), np.diag(b.information)) + 1e-12)
        np.testing.assert_allclose(a.information / scale, b.information / scale, atol=1e-8)
        np.testing.assert_allclose(a.cost, b.cost, rtol=1e-8)
        assert (a.heats, a.unusable, a.used) == (b.heats, b.unusable, b.used)


def test_tuning_by_parts_is_tuning_at_once(held: Tuned, log: Path) -> None:
    """Parameters within a thousandth of their standard errors."""
    told: list[int] = []
    streamed, refused = tune_file(log, SHOP, only=ONLY, rows=60, progress=told.append)
    assert refused.rows == 0
    assert streamed.names == held.names == ONLY
    for a, b in zip(streamed.parameters, held.parameters, strict=True):
        assert abs(a.value - b.value) <= 1e-3 * b.standard_error, a.name
        assert a.standard_error == pytest.approx(b.standard_error, rel=1e-3)
    assert (streamed.rows, streamed.heats, streamed.unusable) == (HEATS, held.heats, held.unusable)
    assert [f["row"] for f in streamed.faults] == [f["row"] for f in held.faults]
    assert told[-1] > 2 * HEATS


def test_a_sample_only_tells_where_to_start(
    log: Path, held: Tuned, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Within a fifth of the standard error: the scatter settles a little elsewhere."""
    monkeypatch.setattr(streamed_tuning, "SAMPLE", 25)
    starts: list[Any] = []
    search = streamed_tuning.search
    monkeypatch.setattr(
        streamed_tuning, "search", lambda *a, **kw: starts.append(a[2:]) or search(*a, **kw)
    )
    streamed, _ = tune_file(log, SHOP, only=ONLY, rows=60)
    assert [bool(start and start[0]) for start in starts] == [False, True]
    a, b = streamed.parameters[0], held.parameters[0]
    assert abs(a.value - b.value) <= 0.2 * b.standard_error


def test_an_output_appears_only_when_complete(log: Path, tmp_path: Path) -> None:
    out = tmp_path / "out.parquet"

    def stop(done: int) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        replay_file(log, SHOP, out, rows=40, progress=stop)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(InputError, match="cannot be written"):
        replay_file(log, SHOP, tmp_path / "nowhere" / "out.parquet", rows=200)
    empty = tmp_path / "empty.csv"
    empty.write_text("heat_id,oxygen_Nm3\n", encoding="utf-8")
    with pytest.raises(InputError, match="holds no heat"):
        replay_file(empty, SHOP, out)
    with pytest.raises(InputError, match="holds no heat"):
        tune_file(empty, SHOP)
    assert not out.exists()


def test_sums_of_replays_add_up() -> None:
    a, b = Replayed(heats=3, incomplete=1), Replayed(heats=2, unsolved=1)
    total = a + b
    assert (total.heats, total.incomplete, total.unsolved) == (5, 1, 1)


def test_the_command(log: Path, tmp_path: Path) -> None:
    out, told = tmp_path / "out.parquet", tmp_path / "told.json"
    args = ["replay", str(log), "--shop", str(SHOP), "--out", str(out)]
    done = CliRunner().invoke(main, [*args, "--json", str(told)])
    assert done.exit_code == 0, done.output
    assert f"REPLAY   {HEATS} heats" in done.stdout
    document = json.loads(told.read_text(encoding="utf-8"))
    assert document["heats"] == HEATS == len(pd.read_parquet(out))
    assert document["observed_less_predicted"]["end_temp_C"]["heats"] > 90
    missing = CliRunner().invoke(main, ["replay", "no.csv", *args[2:]])
    assert missing.exit_code == 2
    assert missing.stderr.strip().count("\n") == 0
    wrong = CliRunner().invoke(main, [*args, "--workers", "0"])
    assert wrong.exit_code == 2
    assert wrong.stderr.startswith("workers: must be 1 to 64, given 0")


def test_the_command_with_tuned_parameters(log: Path, held: Tuned, tmp_path: Path) -> None:
    kept, out = tmp_path / "tuned.json", tmp_path / "out.parquet"
    held.save(kept)
    args = ["replay", str(log), "--shop", str(SHOP), "--out", str(out), "--tuned", str(kept)]
    done = CliRunner().invoke(main, args)
    assert done.exit_code == 0, done.output
    table, _ = replay_frame(read_log(log, SHOP).frame.reset_index(drop=True), SHOP,
                            held.practice_values())  # fmt: skip
    np.testing.assert_array_equal(
        pd.read_parquet(out).predicted_end_P_pct, table.predicted_end_P_pct
    )
