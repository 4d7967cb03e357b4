"""Spread, register and learning on the page: wiring and logic, without a browser.

Kinds of check: contract (what the page shows against the functions that the command line calls
too), property (moved aims leave the windows where they are) and safety (no path of a visitor,
jobs of one session only, nothing left behind).
"""

from __future__ import annotations

import time
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from tests.conftest import DEMO
from tests.demo import whole

testing = pytest.importorskip("streamlit.testing.v1", reason="the page needs streamlit")

from converter_calc.balance.documents import read_shop  # noqa: E402
from converter_calc.basis.errors import InputError  # noqa: E402
from converter_calc.learning.drift import Jump  # noqa: E402
from converter_calc.learning.proof import Proof  # noqa: E402
from converter_calc.learning.spread import spread  # noqa: E402
from converter_calc.learning.spread_margin import margin  # noqa: E402
from converter_calc.learning.today import drift_table  # noqa: E402
from converter_calc.learning.tuned import load_tuned  # noqa: E402
from converter_calc.learning.tuning import tune  # noqa: E402
from converter_calc.page import jobs, learning_view, registers, sureness  # noqa: E402
from converter_calc.page.form import document_of, form_of  # noqa: E402
from converter_calc.page.jobs import Job  # noqa: E402
from converter_calc.page.learning_results import json_of  # noqa: E402
from converter_calc.page.learnt import restored, taken  # noqa: E402
from converter_calc.page.session import solve, start_form  # noqa: E402
from converter_calc.register.register import Register  # noqa: E402
from converter_calc.reporting import learning_charts, learning_tables, spread_bands  # noqa: E402

HEATS = 80
ROOT = Path(__file__).resolve().parents[1]


def opened(**state: Any) -> Any:
    app = testing.AppTest.from_file(str(ROOT / "app.py"), default_timeout=60)
    for name, value in state.items():
        app.session_state[name] = value
    return app.run()


def texts(app: Any) -> str:
    return "\n".join(part.proto.body for part in app.get("html"))


def press(app: Any, key: str) -> Any:
    (button,) = [x for x in app.button if x.key == key]
    return button.click().run()


# --- spread beside the recipe ---------------------------------------------------------------


def test_spread_beside_the_recipe_is_that_of_the_command_line() -> None:
    app = opened()
    assert "All together" not in texts(app)  # shut: nothing is drawn
    app = opened(sureness=True, spread_scatter=True)
    assert not app.exception
    outcome = solve(document_of(start_form()), predict=False).outcome
    found = spread(outcome, sureness.DRAWS, needs=False)
    shown = texts(app)
    for chance in (*found.chances, found.all_windows):
        assert spread_bands.percent(chance.probability) in shown
    assert "What a better measurement is worth" in shown


def test_margin_taken_moves_the_aims_and_leaves_the_windows() -> None:
    form = start_form()
    before = solve(document_of(form), predict=False)
    found = spread(before.outcome, 2048, needs=False)
    changes = sureness.aim_fields(form, margin(found, 0.95, 2048))
    assert float(changes["aim_C_pct"]) < float(form.fields["aim_C_pct"])
    form.fields |= changes
    after = spread(solve(document_of(form), predict=False).outcome, 2048, needs=False)
    for old, new in zip(found.windows, after.windows, strict=True):
        assert (new.low, new.high) == pytest.approx((old.low, old.high), abs=1e-9)
    assert after.chances[1].probability > found.chances[1].probability


def test_margin_on_the_page_and_back() -> None:
    app = opened(sureness=True)
    aim = float(app.session_state["cc_form"].fields["aim_C_pct"])
    app = press(press(app, "find_margin"), "take_margin")
    moved = app.session_state["cc_form"].fields
    assert float(moved["aim_C_pct"]) != aim
    low = float(moved["aim_C_pct"]) - float(moved["window_below_C_pct"])
    assert low == pytest.approx(aim - 0.02, abs=1e-9)
    app = press(app, "undo_margin")
    assert float(app.session_state["cc_form"].fields["aim_C_pct"]) == aim
    assert app.session_state["cc_form"].fields["window_below_C_pct"] == ""
    assert not app.exception


def test_wrong_wish_is_one_sentence() -> None:
    app = opened(sureness=True)
    (field,) = [x for x in app.text_input if x.key == "spread.probability"]
    app = field.set_value("120").run()
    assert "must be 50 to 99.9 %, given 120" in texts(app)
    assert not app.exception


@pytest.mark.parametrize(
    ("share", "text"),
    [(0.0, "0 %"), (0.001, "< 1 %"), (0.5, "50 %"), (0.999, "> 99 %"), (1, "100 %")],
)
def test_a_chance_is_never_rounded_to_certainty(share: float, text: str) -> None:
    assert spread_bands.percent(share) == text


def test_size_of_an_error_goes_into_the_heat() -> None:
    app = opened(sureness=True, spread_errors=True)
    (field,) = [x for x in app.text_input if x.label.startswith("Oxygen meter")]
    app = field.set_value("0,5").run()
    assert not app.exception
    form = app.session_state["cc_form"]
    assert form.rest["errors"] == {"oxygen_meter_pct": 0.5}
    assert form_of(document_of(form)).rest["errors"] == {"oxygen_meter_pct": 0.5}


# --- register -------------------------------------------------------------------------------


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder for registers; the page is started with one that is not there yet."""
    monkeypatch.setenv("CONVERTER_REGISTER", str(tmp_path / "shop.sqlite"))
    return tmp_path


def show(app: Any, view: str, **state: Any) -> Any:
    app.session_state["cc_view"] = view
    for name, value in state.items():
        app.session_state[name] = value
    return app.run()


def book(folder: Path) -> Register:
    return Register.open(folder / "shop.sqlite", create=False)


def test_plan_recorded_actual_recorded_and_compared(folder: Path) -> None:
    app = press(show(opened(), "Register"), "record_plan")
    assert "Kept as plan 1 of heat new heat." in texts(app)
    app = show(app, "Register", actual_open=True)
    for label, text in (("End temperature, °C", "1651,5"), ("C, %", "0.037")):
        (field,) = [x for x in app.text_input if x.label == label and "actual_" in x.key]
        field.set_value(text)
    app = press(app, "record_actual_new heat")
    assert not app.exception
    assert "Kept as record 1 of heat new heat." in texts(app)
    with book(folder) as register:
        assert register.current_actual("new heat") == {"end_temp_C": 1651.5, "end_C_pct": 0.037}
        rows = register.compare("new heat").rows.set_index("quantity")
    assert f"−{abs(rows.loc['end_temp_C', 'difference']):.1f}" in texts(app)
    assert "hot_metal_kg and oxygen_Nm3 not logged" in texts(app)


def test_recorded_plan_opens_again_as_it_was(folder: Path) -> None:
    app = opened()
    app.session_state["cc_form"].fields["hm_Si_pct"] = "0.61"
    app = press(show(app, "Register"), "record_plan")
    first = document_of(app.session_state["cc_form"])
    app.session_state["cc_form"].fields["hm_Si_pct"] = "0.30"
    app = press(show(app, "Register"), "open_plan")
    assert not app.exception
    assert document_of(app.session_state["cc_form"]) == first
    assert app.session_state["cc_view"] == "Plan a heat"
    with book(folder) as register:
        assert register.plan(1).inputs == first


def test_wrong_actual_is_told_and_nothing_recorded(folder: Path) -> None:
    app = press(show(opened(), "Register", actual_open=True), "record_plan")
    (field,) = [x for x in app.text_input if x.key == "actual_new heat_end_temp_C"]
    field.set_value("16510")
    app = press(app, "record_actual_new heat")
    assert "Nothing was recorded of heat new heat" in texts(app)
    assert "end_temp_C" in texts(app)
    with book(folder) as register:
        assert register.current_actual("new heat") is None


def test_only_registers_of_the_folder_by_name(folder: Path, tmp_path_factory: Any) -> None:
    outside = tmp_path_factory.mktemp("outside") / "other.sqlite"
    for path in (outside, folder / "second.sqlite"):
        Register.open(path).close()
    (folder / "notes.sqlite").write_text("no register")
    (folder / "link.sqlite").symlink_to(outside)
    assert registers.register_names() == ["shop.sqlite", "second.sqlite"]
    for name in ("../other.sqlite", str(outside), "link.sqlite", "notes.sqlite", "", "\x00"):
        with pytest.raises(InputError, match="is not at hand"), registers.opened(name):
            pass
    app = opened()
    app.query_params["register.file"] = str(outside)
    app = show(app, "Register")
    assert app.session_state["register.file"] == "shop.sqlite"


def test_damaged_register_is_one_sentence_without_a_path(folder: Path) -> None:
    (folder / "shop.sqlite").write_bytes(b"not a database at all" * 40)
    app = show(opened(), "Register")
    assert not app.exception
    assert "is not a register: not a database of SQLite" in texts(app)
    assert str(folder) not in texts(app)


LOG = b"heat_id,end_temp_C,end_C_pct\na1,1650,0.04\na2,9999,0.05\na3,1660,0.06\n"


def test_log_taken_in_refused_rows_listed_and_saved_again(folder: Path) -> None:
    report = registers.import_upload("shop.sqlite", LOG, "../../evil/log.csv", {})
    assert (report.new, report.rows_refused) == (2, 1)
    assert report.refused["heat_id"].tolist() == ["a2"]
    again = registers.exported("shop.sqlite", ".csv").decode()
    assert [line.split(",")[0] for line in again.splitlines()[1:]] == ['"a1"', '"a3"']
    copy = folder / "copy.sqlite"
    copy.write_bytes(registers.backed_up("shop.sqlite"))
    with Register.open(copy, create=False) as register:
        assert len(register.actuals()) == 2
    strict = registers.import_upload("shop.sqlite", LOG.replace(b"a3", b"a4"), "log.csv", {},
                                     strict=True)  # fmt: skip
    assert not strict.taken
    assert sorted(path.name for path in folder.glob("*.sqlite")) == ["copy.sqlite", "shop.sqlite"]


def test_log_import_on_the_page(folder: Path) -> None:
    app = show(opened(), "Register", **{"register.part": "files"})
    app.get("file_uploader")[0].set_value(("log.csv", LOG, "text/csv"))
    app = press(app.run(), "register_import")
    assert not app.exception
    assert "2 heats new, 0 updated, 0 said nothing new; 1 rows refused" in texts(app)
    assert "a2" in texts(app)


# --- learning -------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def shop() -> dict[str, Any]:
    return dict(read_shop(DEMO / "shop.toml"))


@pytest.fixture(scope="module")
def log() -> bytes:
    """The first heats of the demo log."""
    lines = (DEMO / "heat_log.csv").read_bytes().splitlines(keepends=True)
    return b"".join(lines[: HEATS + 1])


def finished(job: Job) -> dict[str, Any]:
    job.process.wait(120)
    return job.result()


@pytest.fixture(scope="module")
def learnt(log: bytes, shop: dict[str, Any]) -> dict[str, Any]:
    return finished(Job("tune", registers.read_upload(log, "log.csv", shop).frame, shop))


def test_job_finds_what_the_function_finds(
    learnt: dict[str, Any], log: bytes, shop: dict[str, Any]
) -> None:
    frame = registers.read_upload(log, "log.csv", shop).frame
    direct = tune(frame, shop).practice_values()
    assert learnt["tuned"].practice_values() == pytest.approx(direct, rel=1e-9)


def test_cancelled_job_is_dead_and_leaves_nothing(log: bytes, shop: dict[str, Any]) -> None:
    frame = registers.read_upload(log, "log.csv", shop).frame
    job = Job("prove", frame, shop)
    assert job.running
    folder, process = job.folder, job.process
    job.cancel()
    assert process.poll() is not None
    assert not folder.exists()
    with pytest.raises(InputError, match="without a result"):
        job.result()


def test_job_ends_with_its_session(log: bytes, shop: dict[str, Any]) -> None:
    """A session that is dropped, and one that is there but has gone for longer than a break."""
    frame = registers.read_upload(log, "log.csv", shop).frame
    job = Job("prove", frame, shop)
    folder, process = job.folder, job.process
    del job
    assert process.wait(10) is not None
    assert not folder.exists()


def test_job_of_a_session_that_went_away_is_ended(
    log: bytes, shop: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(jobs, "LOOK_EVERY_S", 0.05)
    monkeypatch.setattr(jobs, "AWAY_S", 0.1)
    frame = registers.read_upload(log, "log.csv", shop).frame
    job = Job("prove", frame, shop, alive=lambda: False)
    assert job.process.wait(10) != 0
    for _ in range(100):
        if not job.folder.exists():
            break
        time.sleep(0.05)
    assert not job.folder.exists()


def test_no_more_jobs_at_once_than_the_machine_bears(
    log: bytes, shop: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(jobs, "MOST_JOBS", 1)
    frame = registers.read_upload(log, "log.csv", shop).frame
    job = Job("prove", frame, shop)
    with pytest.raises(InputError, match="run on this machine already"):
        Job("tune", frame, shop)
    job.cancel()


def test_job_without_answer_says_why(shop: dict[str, Any]) -> None:
    frame = registers.read_upload(LOG, "log.csv", shop).frame
    with pytest.raises(InputError, match="tapped_at: not given"):
        finished(Job("tune", frame, shop))


def test_learnt_values_go_into_the_fields_and_back(learnt: dict[str, Any]) -> None:
    form = form_of(whole("ordinary_low_carbon"))
    today = learnt["followed"].today()
    new, known, before = taken(form, today, "the log")
    heats = solve(document_of(new), predict=False).heats
    for name, x in known.values.items():
        assert x == pytest.approx(today.practice_values()[name], rel=1e-5)
        if name in heats.values:
            assert float(heats.values[name][0]) == x
    names, covariance = known.unsure(new)
    assert names == tuple(known.values)
    assert np.sqrt(np.diag(covariance)).tolist() == pytest.approx(
        [today.standard_errors()[name] for name in names]
    )
    new.fields["P_approach"] = "0.9"  # changed by hand: no longer the learnt value
    assert "P_approach" not in known.unsure(new)[0]
    assert document_of(restored(new, before)) == document_of(form)


def test_learning_on_the_page(learnt: dict[str, Any], log: bytes, shop: dict[str, Any]) -> None:
    read = registers.read_upload(log, "log.csv", shop)
    state = {
        "cc_log": learning_view.Log("log.csv", read), "cc_tune": learnt,
        "cc_form": form_of(whole("ordinary_low_carbon")), "cc_start": start_form(),
        "cc_link_faults": [], "cc_views": {}, "cc_generation": 0, "cc_view": "Learning",
    }  # fmt: skip
    app = opened(**state, **{"learning.part": "tuning"})
    assert not app.exception
    assert f"{learnt['tuned'].heats:,} of {HEATS} heats used" in texts(app)
    (part,) = [x for x in app.radio if x.key == "learning.part"]
    app = part.set_value("drift").run()
    assert not app.exception
    app = press(app, "take_today")
    assert "are in the fields of Plan a heat" in texts(app)
    value = learnt["followed"].today().practice_values()["P_approach"]
    form = app.session_state["cc_form"]
    assert float(form.fields["P_approach"]) == pytest.approx(value, rel=1e-5)
    app = show(app, "Plan a heat", sureness=True)
    assert "uncertainty of the parameters from the end of log.csv" in texts(app)
    app = show(app, "Learning")
    app = press(app, "undo_take_tuned")
    assert document_of(app.session_state["cc_form"]) == document_of(
        form_of(whole("ordinary_low_carbon"))
    )


def test_tuned_file_of_the_page_serves_the_command_line(
    learnt: dict[str, Any], tmp_path: Path
) -> None:
    path = tmp_path / "tuned.json"
    path.write_text(json_of(learnt["tuned"]), encoding="utf-8")
    assert load_tuned(path).practice_values() == learnt["tuned"].practice_values()


def test_log_with_refused_rows_on_the_page() -> None:
    app = show(opened(), "Learning")
    app.get("file_uploader")[0].set_value(("log.csv", LOG, "text/csv"))
    app = app.run()
    assert not app.exception
    assert "rows refused" in texts(app)
    assert "a2" in texts(app)
    app = app.get("file_uploader")[0].set_value(("log.csv", b"nonsense,x\n1,2\n", "text/csv")).run()
    assert not app.exception
    assert "converter_calc_" not in texts(app)  # no folder of the server in a message


def test_jump_stands_in_picture_and_table_with_its_date(learnt: dict[str, Any]) -> None:
    followed, heats = learnt["followed"], learnt["heats"]
    jump = Jump(70, "heat_loss_MJ_per_t", -14.2, 2.5, -5.7)
    moved = replace(followed.drift, jumps=(jump,))
    jumps = learning_tables.jump_table(followed.tuned, moved, heats)
    row = heats.iloc[70]
    assert jumps.to_dict("records") == [
        {"tapped_at": row["tapped_at"], "heat_id": row["heat_id"], "offset": "heat_loss_MJ_per_t",
         "text": "−14.2 ± 2.5 MJ/t"}
    ]  # fmt: skip
    table = drift_table(heats, followed, moved)
    figure = learning_charts.drift_figure(table, jumps, "heat_loss_MJ_per_t", "heat loss")
    assert [mark.text for mark in figure.layout.annotations] == ["−14.2 ± 2.5 MJ/t"]
    text = learning_tables.drift_text(table, jumps, "heat_loss_MJ_per_t")
    assert f"jumps: {row['tapped_at']:%Y-%m-%d} −14.2" in text


@pytest.mark.parametrize(
    ("x", "text"),
    [(0.0, "0"), (7.4e-5, "0.000074"), (-0.00051, "−0.00051"), (12345.6, "12,346"),
     (58.0, "58"), (np.nan, "–")],
)  # fmt: skip
def test_small_numbers_keep_their_digits(x: float, text: str) -> None:
    assert learning_tables.plain(x) == text


def test_proof_on_the_page_says_what_the_report_says() -> None:
    """Scores of the view against those of the proof itself, for an invented proof."""
    rng = np.random.default_rng(7)
    n, names = 60, ("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct")
    middle = np.array([1660.0, 0.04, 0.01, 0.12])
    seen = middle * np.exp(0.01 * rng.standard_normal((n, 4)))
    methods = ("untuned", "tuned", "with drift", "with residual", "linear regression")
    predicted = {m: seen * np.exp(0.005 * rng.standard_normal((n, 4))) for m in methods}
    sd = np.tile([8.3, 0.005, 0.005, 0.005], (n, 1))
    times = [np.datetime64("2026-01-01T00:00") + np.timedelta64(k, "h") for k in range(n)]
    proof = Proof(
        np.arange(n), [f"h{k}" for k in range(n)], times, names, seen, predicted,
        {"with drift": sd, "with residual": sd}, (0,), dict.fromkeys(names, 1.0),
    )  # fmt: skip
    read = registers.read_upload(LOG, "log.csv", {})
    app = show(opened(cc_log=learning_view.Log("log.csv", read), cc_prove={"proof": proof}),
               "Learning", **{"learning.part": "proof"})  # fmt: skip
    assert not app.exception
    error = np.abs(predicted["with drift"][:, 0] - seen[:, 0]).mean()
    assert f"{error:.1f} ± " in texts(app)
    charts = app.get("plotly_chart")
    assert len(charts) == 4
    assert all(chart.proto.alt for chart in charts)


def test_no_line_spans_a_pause_of_the_log() -> None:
    times = np.datetime64("2026-01-01") + np.r_[0:40, 400:440].astype("timedelta64[h]")
    heats = pd.DataFrame(
        {"tapped_at": times, "quantity": "end_temp_C", "method": "tuned", "observed": 1650.0,
         "predicted": 1652.0}
    )  # fmt: skip
    (line,) = learning_charts.misses_figure(heats, "end_temp_C", ["tuned"]).data
    assert np.flatnonzero(np.isnan(line.y)).tolist() == [40]
    assert np.nanmax(line.y) == np.nanmin(line.y) == 2.0
