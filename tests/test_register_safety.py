"""The register survives a kill, two writers, broken files, older and newer tables.

Kinds of check: "contract" = no committed record is lost and nothing is half recorded, tested
with real processes that get SIGKILL (kill -9, POSIX) in the middle of their work; "other reader"
= Python's sqlite3 and SQLite's own integrity_check judge the file.
"""

from __future__ import annotations

import os
import shutil
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import converter_calc
from converter_calc.basis.errors import InputError
from converter_calc.heatlog.reading import read_log
from converter_calc.heatlog.writing import write_log
from converter_calc.register import opening
from converter_calc.register.register import Register
from converter_calc.register.schema import APPLICATION_ID, SCHEMA_VERSION, STEPS
from tests.conftest import DEMO

pytestmark = pytest.mark.skipif(
    not hasattr(signal, "SIGKILL"), reason="kill -9 needs a POSIX system"
)

ROOT = Path(converter_calc.__file__).resolve().parents[1]
#: Writes one actual after the other and tells each once it is recorded.
WRITE = """
import itertools, sys
from converter_calc.register.register import Register
path, name, count = sys.argv[1], sys.argv[2], int(sys.argv[3])
with Register.open(path) as book:
    print("ready", flush=True)
    for k in itertools.count() if count < 0 else range(count):
        book.record_actual(f"{name}-{k}", {"end_temp_C": 1600 + k % 100, "steel_kg": 2e5})
        print(f"{name}-{k}", flush=True)
"""
#: Imports the same log again and again under other names.
IMPORT = """
import itertools, sys
from converter_calc.register.register import Register
with Register.open(sys.argv[1]) as book:
    import pandas, pyarrow.parquet
    print("ready", flush=True)
    for log in sys.argv[2:]:
        book.import_log(log)
        print(log, flush=True)
"""
#: Only opens the register, which creates it.
CREATE = """
import sys
from converter_calc.register.register import Register
print("ready", flush=True)
Register.open(sys.argv[1]).close()
print("made", flush=True)
"""


def start(script: str, *args: object) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-c", script, *map(str, args)],
        stdout=subprocess.PIPE,
        text=True,
        cwd=ROOT,
    )


def killed(child: subprocess.Popen[str], lines: int, after_s: float) -> list[str]:
    """What the child had told when it was killed, `after_s` after it was ready and told `lines`."""
    assert child.stdout is not None
    assert child.stdout.readline() == "ready\n"
    told = [child.stdout.readline().strip() for _ in range(lines)]
    time.sleep(after_s)
    os.kill(child.pid, signal.SIGKILL)
    told += child.stdout.read().splitlines()
    child.stdout.close()
    child.wait()
    return told


def assert_sound(path: Path) -> None:
    with sqlite3.connect(path) as other:
        assert other.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
    other.close()


def test_no_committed_record_is_lost_by_a_kill(tmp_path):
    """contract: whatever was told is there, in full, after each of several kills."""
    path = tmp_path / "r.sqlite"
    told = []
    for run, after_s in enumerate((0.0, 0.002, 0.005, 0.03)):
        told += killed(start(WRITE, path, f"run{run}", -1), 2 + 5 * run, after_s)
        with Register.open(path, create=False) as book:
            frame = book.actuals()
            assert book.check() == ""
        heats = frame["heat_id"].tolist()
        assert set(told) <= set(heats)
        # one more record at most than was told of each run: killed between commit and telling
        assert len(heats) <= len(told) + run + 1
        assert frame["steel_kg"].tolist() == [2e5] * len(heats)
    assert len(told) >= 2 + 7 + 12 + 17
    assert_sound(path)


def test_a_killed_import_is_all_or_nothing(tmp_path):
    """contract: heats of a log are there together or not at all."""
    n = 1500
    logs = []
    for k in range(12):
        ids = [f"log{k}-{i}" for i in range(n)]
        table = pd.DataFrame({"heat_id": ids, "end_temp_C": 1650.0, "end_C_pct": 0.04})
        logs.append(tmp_path / f"log{k}.parquet")
        write_log(read_log(table).frame, logs[-1])
    path = tmp_path / "r.sqlite"
    for lines, after_s in ((0, 0.05), (2, 0.02)):
        told = killed(start(IMPORT, path, *logs), lines, after_s)
        with Register.open(path, create=False) as book:
            heats = book.actuals()["heat_id"] if len(book.actuals()) else pd.Series([], dtype=str)
            assert book.check() == ""
        counts = heats.str.split("-").str[0].value_counts()
        assert set(counts.tolist()) <= {n}
        assert {Path(log).stem for log in told} <= set(counts.index)


def test_a_kill_while_the_register_is_made(tmp_path):
    """contract: the next open finds nothing or a whole register, never a part."""
    for run, after_s in enumerate((0.001, 0.004, 0.02)):
        path = tmp_path / f"{run}.sqlite"
        killed(start(CREATE, path), 0, after_s)
        with Register.open(path) as book:
            book.record_actual("h", {"end_temp_C": 1650})
            assert book.check() == ""


def test_writers_at_once_lose_nothing(tmp_path):
    """contract: two processes create and fill one register; every record of all is there."""
    path = tmp_path / "r.sqlite"
    children = [start(WRITE, path, name, 60) for name in ("a", "b")]
    for child in children:
        told = child.communicate(timeout=120)[0].splitlines()
        assert child.returncode == 0
        assert len(told) == 61
    with Register.open(path, create=False) as book:
        heats = book.actuals()["heat_id"].tolist()
        assert book.check() == ""
    assert sorted(heats) == sorted(f"{name}-{k}" for name in "ab" for k in range(60))
    assert_sound(path)


def test_writers_of_one_heat_keep_every_correction(tmp_path):
    """contract: threads with a register each; one present record, all others superseded."""
    path = tmp_path / "r.sqlite"
    Register.open(path).close()

    def write(column: str, low: float) -> None:
        with Register.open(path) as book:
            for k in range(25):
                book.record_actual("h", {column: low + k})

    writers = [
        threading.Thread(target=write, args=("end_temp_C", 1600.0)),
        threading.Thread(target=write, args=("steel_kg", 2e5)),
    ]
    for writer in writers:
        writer.start()
    for writer in writers:
        writer.join()
    with Register.open(path) as book:
        history = book.actuals("h", history=True)
        assert book.current_actual("h") == {"end_temp_C": 1624.0, "steel_kg": 2e5 + 24}
    assert len(history) == 50
    assert history["superseded_at"].isna().sum() == 1


def test_a_register_that_stays_busy_says_so(tmp_path, monkeypatch):
    """contract: one sentence after the wait, nothing recorded."""
    path = tmp_path / "r.sqlite"
    Register.open(path).close()
    monkeypatch.setattr(opening, "BUSY_SECONDS", 0.1)
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with Register.open(path) as book:
        with pytest.raises(InputError, match="is busy"):
            book.record_actual("h", {"end_temp_C": 1650})
        other.execute("ROLLBACK")
        book.record_actual("h", {"end_temp_C": 1650})
        assert len(book.actuals("h", history=True)) == 1
    other.close()


def test_settings_of_the_database(tmp_path):
    """contract: write-ahead log, full synchronisation, foreign keys, own mark."""
    path = tmp_path / "r.sqlite"
    with Register.open(path) as book:
        for pragma, value in (
            ("journal_mode", "wal"), ("synchronous", 2), ("foreign_keys", 1),
            ("application_id", APPLICATION_ID), ("user_version", SCHEMA_VERSION),
        ):  # fmt: skip
            assert book.rows(f"PRAGMA {pragma}") == [(value,)]
        with pytest.raises(InputError, match="FOREIGN KEY"), book.writing():
            book.db.execute(
                "INSERT INTO plans (heat_id, created_at, status, package_version, inputs, "
                "planned, result, set_id) VALUES ('h', '', '', '', '', '', '', 99)"
            )
        assert not len(book.plans())


@pytest.fixture
def filled(tmp_path):
    """A register with a plan and 300 actuals, closed."""
    path = tmp_path / "filled.sqlite"
    ids = [f"h{k}" for k in range(300)]
    table = pd.DataFrame({"heat_id": ids, "end_temp_C": 1600.0 + np.arange(300) / 3.0})
    write_log(read_log(table).frame, tmp_path / "log.parquet")
    with Register.open(path) as book:
        book.record_plan(DEMO / "ordinary_low_carbon.toml")
        book.import_log(tmp_path / "log.parquet")
    return path


def assert_refused_untouched(path: Path, message: str) -> None:
    """Refused in one line; no byte of the file and no other file has changed."""
    before = path.read_bytes()
    beside = sorted(file.name for file in path.parent.iterdir())
    for create in (True, False):
        with pytest.raises(InputError, match=message) as caught:
            Register.open(path, create=create)
        assert len(caught.value.faults) == 1
        assert "\n" not in str(caught.value)
    assert path.read_bytes() == before
    assert sorted(file.name for file in path.parent.iterdir()) == beside


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"heat_id,end_temp_C\n", "not a database"),
        (b"x" * 5000, "not a database"),
        (b"SQLite format 3\x00", "not a database"),
        (b"SQLite format 3\x00" + bytes(200), "another program"),
    ],
)
def test_a_file_that_is_no_database_is_refused(tmp_path, content, message):
    """contract."""
    path = tmp_path / "r.sqlite"
    path.write_bytes(content)
    assert_refused_untouched(path, message)


def test_databases_of_others_are_refused(tmp_path):
    """contract: one with another mark and one without any."""
    for mark in (0, 42):
        path = tmp_path / f"{mark}.sqlite"
        other = sqlite3.connect(path)
        other.execute("CREATE TABLE plans (a)")
        other.execute(f"PRAGMA application_id = {mark}")
        other.commit()
        other.close()
        assert_refused_untouched(path, "another program")


def test_a_newer_register_is_refused(filled):
    """contract: says which version, and what to do."""
    other = sqlite3.connect(filled)
    other.execute(f"PRAGMA user_version = {SCHEMA_VERSION + 1}")
    other.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    other.close()
    assert_refused_untouched(filled, f"version {SCHEMA_VERSION + 1}.*update converter-calc")


@pytest.mark.parametrize("share", [0.02, 0.3, 0.7, 0.99])
def test_a_register_that_was_cut_short_is_refused(filled, share):
    """contract: at any length, in the middle of a page too."""
    content = filled.read_bytes()
    filled.write_bytes(content[: int(len(content) * share)])
    assert_refused_untouched(filled, "cut short|not a database")


def test_damage_inside_is_told(filled, tmp_path):
    """contract: overwritten pages give a sentence, not a wrong number, and no backup."""
    content = bytearray(filled.read_bytes())
    content[8192:] = bytes(b ^ 0x5A for b in content[8192:])
    filled.write_bytes(content)
    with Register.open(filled) as book:
        with pytest.raises(InputError, match="damaged"):
            book.actuals()
        assert book.check() != ""
        with pytest.raises(InputError, match="damaged"):
            book.backup(tmp_path / "copy.sqlite")
    assert not list(tmp_path.glob("*copy*"))


def test_a_register_without_its_tables_is_refused(filled):
    """contract: another program dropped one."""
    other = sqlite3.connect(filled)
    other.execute("DROP TABLE actuals")
    other.commit()
    other.close()
    with pytest.raises(InputError, match="lacks the tables actuals"):
        Register.open(filled)


def test_places_that_hold_no_register(tmp_path):
    """contract."""
    for path, message in (
        (tmp_path, "is a directory"),
        (tmp_path / "no" / "r.sqlite", "folder does not exist"),
        (Path("a\0b"), "cannot be opened"),
    ):
        with pytest.raises(InputError, match=message):
            Register.open(path)
    with pytest.raises(InputError, match="no register here"):
        Register.open(tmp_path / "r.sqlite", create=False)
    assert not list(tmp_path.iterdir())


def test_backup_while_others_write(filled, tmp_path):
    """contract: the copy is whole, one file, sound, and holds what was committed before."""
    copy = tmp_path / "copy.sqlite"
    with Register.open(filled) as book, Register.open(filled) as other:
        other.record_actual("new", {"end_temp_C": 1650})
        book.backup(copy)
        other.record_actual("newer", {"end_temp_C": 1650})
        with pytest.raises(InputError, match="exists already"):
            book.backup(copy)
        with pytest.raises(InputError, match=r"cannot be written|cannot be opened"):
            book.backup(tmp_path / "no" / "copy.sqlite")
    assert_sound(copy)
    with Register.open(copy) as book:
        heats = book.actuals()["heat_id"].tolist()
        assert len(book.plans()) == 1
    assert "new" in heats
    assert "newer" not in heats
    assert len(heats) == 301
    assert not list(tmp_path.glob(".*part*"))


#: Version 1 as it was written once, kept here apart from the package.
VERSION_1 = """
CREATE TABLE plans (plan_id INTEGER PRIMARY KEY AUTOINCREMENT, heat_id TEXT NOT NULL,
    created_at TEXT NOT NULL, status TEXT NOT NULL, package_version TEXT NOT NULL,
    inputs TEXT NOT NULL, planned TEXT NOT NULL, result TEXT NOT NULL);
CREATE INDEX plans_of_heat ON plans (heat_id, plan_id);
CREATE TABLE actuals (actual_id INTEGER PRIMARY KEY AUTOINCREMENT, heat_id TEXT NOT NULL,
    recorded_at TEXT NOT NULL, superseded_at TEXT, origin TEXT NOT NULL, content TEXT NOT NULL);
CREATE UNIQUE INDEX current_actuals ON actuals (heat_id) WHERE superseded_at IS NULL;
CREATE INDEX actuals_of_heat ON actuals (heat_id, actual_id);
CREATE TABLE materials (name TEXT PRIMARY KEY);
INSERT INTO plans (heat_id, created_at, status, package_version, inputs, planned, result) VALUES
    ('h1', '2026-03-01T05:12:00.000000Z', 'solved', '0.1.0', '{}', '{"aim_temp_C":1660.0}', '{}');
INSERT INTO actuals (heat_id, recorded_at, superseded_at, origin, content) VALUES
    ('h1', '2026-03-01T06:12:00.000000Z', '2026-03-01T07:12:00.000000Z', 'typed',
     '{"end_temp_C":1640.0}'),
    ('h1', '2026-03-01T07:12:00.000000Z', NULL, 'typed', '{"end_temp_C":1650.5}');
PRAGMA application_id = 1131312756;
PRAGMA user_version = 1;
"""


def version_1(path: Path) -> None:
    old = sqlite3.connect(path, isolation_level=None)
    old.executescript(VERSION_1)
    old.execute("PRAGMA journal_mode = WAL")
    old.close()


def test_a_register_of_version_1_is_brought_forward(tmp_path):
    """contract: everything is still there, the new things work, a backup of before is kept."""
    path = tmp_path / "r.sqlite"
    version_1(path)
    with Register.open(path) as book:
        assert book.actuals()["end_temp_C"].tolist() == [1650.5]
        assert book.actuals(history=True)["end_temp_C"].tolist() == [1640.0, 1650.5]
        assert book.plan(1).model_version == ""
        assert book.plan(1).set_id is None
        assert book.log_frame()["aim_temp_C"].tolist() == [1660.0]
        assert book.save_parameters("shop", {"P_approach": 0.5}) == 1
        assert book.check() == ""
    (backup,) = tmp_path.glob("r.version1-*.sqlite")
    kept = sqlite3.connect(backup)
    assert kept.execute("PRAGMA user_version").fetchone() == (1,)
    assert kept.execute("SELECT count(*) FROM actuals").fetchone() == (2,)
    kept.close()
    Register.open(path).close()
    assert len(list(tmp_path.glob("r.version1-*.sqlite"))) == 1  # not again


@pytest.mark.parametrize("version", range(1, SCHEMA_VERSION))
def test_every_older_version_becomes_the_present_one(tmp_path, version):
    """contract: tables, columns, indexes and triggers equal those of a new register."""
    path, new = tmp_path / "old.sqlite", tmp_path / "new.sqlite"
    old = sqlite3.connect(path, isolation_level=None)
    opening.migrate(old, path, to=version)
    assert opening.version_of(old) == version
    old.close()
    Register.open(path).close()
    Register.open(new).close()
    query = "SELECT type, name, tbl_name, sql FROM sqlite_master ORDER BY type, name"
    found = []
    for file in (path, new):
        database = sqlite3.connect(file)
        found.append(database.execute(query).fetchall())
        database.close()
    assert found[0] == found[1]


def test_a_migration_that_fails_changes_nothing(tmp_path, monkeypatch):
    """contract: one transaction; the register opens with the old program as before."""
    path = tmp_path / "r.sqlite"
    version_1(path)
    broken = (STEPS[0], (*STEPS[1][:3], "CREATE TABLE plans (a)"))
    monkeypatch.setattr(opening, "STEPS", broken)
    with pytest.raises(InputError, match="already exists"):
        Register.open(path)
    old = sqlite3.connect(path)
    assert old.execute("PRAGMA user_version").fetchone() == (1,)
    names = {name for (name,) in old.execute("SELECT name FROM sqlite_master")}
    old.close()
    assert "parameter_sets" not in names
    monkeypatch.undo()
    with Register.open(path) as book:
        assert book.actuals()["end_temp_C"].tolist() == [1650.5]


def test_two_programs_bring_a_register_forward_at_once(tmp_path):
    """contract: one does it, the other finds it done."""
    path = tmp_path / "r.sqlite"
    version_1(path)
    children = [start(CREATE, path) for _ in range(2)]
    for child in children:
        assert child.communicate(timeout=60)[0] == "ready\nmade\n"
        assert child.returncode == 0
    with Register.open(path) as book:
        assert book.actuals()["end_temp_C"].tolist() == [1650.5]
        assert book.check() == ""


def test_a_kill_during_a_migration(tmp_path):
    """contract: old or new, never between; the next open finishes."""
    for run, after_s in enumerate((0.002, 0.008)):
        path = tmp_path / f"{run}.sqlite"
        version_1(path)
        killed(start(CREATE, path), 0, after_s)
        with Register.open(path) as book:
            assert book.actuals()["end_temp_C"].tolist() == [1650.5]
            assert book.save_parameters("shop", {"a": 1.0}) == 1


def test_a_crash_leaves_its_log_to_the_next(tmp_path):
    """contract: file and write-ahead log as a crash leaves them, copied: all records are there."""
    path, crashed = tmp_path / "r.sqlite", tmp_path / "crashed.sqlite"
    with Register.open(path) as book:
        for k in range(20):
            book.record_actual(f"h{k}", {"end_temp_C": 1650 + k})
        for ending in ("", "-wal"):
            shutil.copy(f"{path}{ending}", f"{crashed}{ending}")
    assert Path(f"{crashed}-wal").stat().st_size > 0
    with Register.open(crashed, create=False) as book:
        assert book.actuals()["end_temp_C"].tolist() == [1650.0 + k for k in range(20)]
