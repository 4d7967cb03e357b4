"""Tables of the register and the steps from each version of them to the next.

A step is never changed once written; a new version is a new step. What is recorded is only
added to: triggers refuse to change or delete it.
"""

from __future__ import annotations

#: "Cnvt", marks the file as ours in the header of the database.
APPLICATION_ID = 0x436E7674

_STEP_1 = (
    """CREATE TABLE plans (
        plan_id INTEGER PRIMARY KEY AUTOINCREMENT,
        heat_id TEXT NOT NULL,
        created_at TEXT NOT NULL,
        status TEXT NOT NULL,
        package_version TEXT NOT NULL,
        inputs TEXT NOT NULL,   -- heat file, complete on its own, as JSON
        planned TEXT NOT NULL,  -- planned values by the names of the heat log, as JSON
        result TEXT NOT NULL    -- result document, as JSON
    )""",
    "CREATE INDEX plans_of_heat ON plans (heat_id, plan_id)",
    """CREATE TABLE actuals (
        actual_id INTEGER PRIMARY KEY AUTOINCREMENT,
        heat_id TEXT NOT NULL,
        recorded_at TEXT NOT NULL,
        superseded_at TEXT,
        origin TEXT NOT NULL,
        content TEXT NOT NULL   -- values by the names of the heat log, as JSON
    )""",
    "CREATE UNIQUE INDEX current_actuals ON actuals (heat_id) WHERE superseded_at IS NULL",
    "CREATE INDEX actuals_of_heat ON actuals (heat_id, actual_id)",
    "CREATE TABLE materials (name TEXT PRIMARY KEY)",
    """CREATE TRIGGER plans_stay BEFORE UPDATE ON plans
        BEGIN SELECT RAISE(ABORT, 'a recorded plan does not change'); END""",
    """CREATE TRIGGER plans_are_kept BEFORE DELETE ON plans
        BEGIN SELECT RAISE(ABORT, 'a recorded plan is not deleted'); END""",
    """CREATE TRIGGER actuals_stay BEFORE UPDATE ON actuals
        WHEN OLD.superseded_at IS NOT NULL OR NEW.superseded_at IS NULL
            OR NEW.actual_id <> OLD.actual_id OR NEW.heat_id <> OLD.heat_id
            OR NEW.recorded_at <> OLD.recorded_at OR NEW.origin <> OLD.origin
            OR NEW.content <> OLD.content
        BEGIN SELECT RAISE(ABORT, 'a recorded actual does not change'); END""",
    """CREATE TRIGGER actuals_are_kept BEFORE DELETE ON actuals
        BEGIN SELECT RAISE(ABORT, 'a recorded actual is not deleted'); END""",
)

_STEP_2 = (
    """CREATE TABLE parameter_sets (
        set_id INTEGER PRIMARY KEY AUTOINCREMENT,
        shop TEXT NOT NULL,
        version INTEGER NOT NULL,
        created_at TEXT NOT NULL,
        package_version TEXT NOT NULL,
        note TEXT NOT NULL,
        parameter_values TEXT NOT NULL,  -- name = value, as JSON
        covariance TEXT,                 -- rows in the order of the names, as JSON
        UNIQUE (shop, version)
    )""",
    """CREATE TRIGGER parameter_sets_stay BEFORE UPDATE ON parameter_sets
        BEGIN SELECT RAISE(ABORT, 'a recorded parameter set does not change'); END""",
    """CREATE TRIGGER parameter_sets_are_kept BEFORE DELETE ON parameter_sets
        BEGIN SELECT RAISE(ABORT, 'a recorded parameter set is not deleted'); END""",
    "ALTER TABLE plans ADD COLUMN model_version TEXT NOT NULL DEFAULT ''",
    "ALTER TABLE plans ADD COLUMN set_id INTEGER REFERENCES parameter_sets (set_id)",
)

#: STEPS[k] leads from version k to version k + 1.
STEPS = (_STEP_1, _STEP_2)
SCHEMA_VERSION = len(STEPS)
TABLES = {
    1: frozenset({"plans", "actuals", "materials"}),
    2: frozenset({"plans", "actuals", "materials", "parameter_sets"}),
}
