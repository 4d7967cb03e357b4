"""Learning from the heat log: check, tune, follow the drift, prove it, take it into the plan."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.basis.errors import ConverterError, Fault, InputError
from converter_calc.heatlog.reading import LogRead, read_log
from converter_calc.page import learning_results as results
from converter_calc.page import registers
from converter_calc.page.address import keep_in_address
from converter_calc.page.fields import WIDE_PX
from converter_calc.page.form import document_of, shop_part
from converter_calc.page.jobs import Job
from converter_calc.page.log_parts import reading_choices, refused_shown
from converter_calc.page.markup import fault_texts, heading, note, put, table_html
from converter_calc.page.parts import part_of
from converter_calc.page.session import form, guarded, view_choice, write_address
from converter_calc.reporting.learning_tables import words_of

if TYPE_CHECKING:
    import pandas as pd

PARTS = {
    "log": "The log",
    "tuning": "Tuned parameters",
    "drift": "Drift",
    "proof": "Proof out of sample",
}
SOURCES = {"file": "A file", "register": "The register"}
#: Time between two looks at a running job [s].
LOOK_S = 1.0
#: What a running job does, by kind.
DOING = {"tune": "Tuning", "prove": "Proof out of sample"}
keep_in_address("learning", ("part", "source", "register"))


@dataclass(frozen=True)
class Log:
    """A heat log of the session: where it is from, and what was read."""

    source: str
    read: LogRead


def learning_view() -> None:
    """The whole view; what is done in it redraws only it."""
    _fragment()


@st.fragment
def _fragment() -> None:
    guarded(_shown)
    write_address()


def _shown() -> None:
    part = part_of("learning", PARTS)
    _told()
    job: Job | None = st.session_state.get("cc_job")
    if job is not None:
        # looked at in a fragment of its own, so that the rest of the page can be used meanwhile
        st.fragment(_job_shown, run_every=LOOK_S)()
    draw: dict[str, Callable[[], None]] = {
        "log": _log,
        "tuning": partial(_found, "tune", results.tuning),
        "drift": partial(_found, "tune", results.drift),
        "proof": partial(_found, "prove", results.proof),
    }
    guarded(draw[part])


def _told() -> None:
    message = st.session_state.pop("cc_learning_told", None)
    if message:
        put(note(*message))


def _tell(kind: str, text: str, lines: list[str] | None = None) -> None:
    st.session_state["cc_learning_told"] = (kind, text, lines or [])


# --- the log ----------------------------------------------------------------------------------


def _log() -> None:
    put(heading("The heat log"))
    put(
        "A row a heat: what was charged, and where the blow ended. The shop is that in the fields "
        "of Plan a heat; it says which materials there are and what is believed so far."
    )
    source = view_choice("learning", "source", "From", list(SOURCES),
                         partial(st.radio, horizontal=True),
                         format_func=SOURCES.__getitem__)  # fmt: skip
    (_from_file if source == "file" else _from_register)()
    log: Log | None = st.session_state.get("cc_log")
    if log is None:
        return
    frame = log.read.frame
    put(heading("What was read"), table_html("log", ("", ""), _log_rows(log), numeric=()))
    if not len(frame):
        put(note("fault", "No row of the log can be used."))
    refused_shown(log.read.refused, "learning")


def _from_file() -> None:
    file = st.file_uploader("Heat log", ["csv", "parquet", "xlsx"], key="learning_log",
                            max_upload_size=5)  # fmt: skip
    mark, skip = reading_choices("learning")
    if file is None:
        put("Up to 5 MB here; converter-calc tune takes longer logs.")
        return
    key = (file.file_id, mark, skip)
    if st.session_state.get("cc_log_key") != key:
        _forget()
        with st.spinner("The log is read"):
            read = registers.read_upload(file.getvalue(), file.name, _shop(), decimal_mark=mark,
                                         skip_unknown=skip)  # fmt: skip
        st.session_state["cc_log"] = Log(file.name, read)
        st.session_state["cc_log_key"] = key


def _from_register() -> None:
    names = [name for name in registers.register_names() if registers.exists(name)]
    if not names:
        put("There is no register yet; see Register.")
        return
    name = view_choice("learning", "register", "Register", names, width=WIDE_PX)
    if st.button(f"Read the heats of {name}", key="read_register"):
        _forget()
        with st.spinner("The register is read"), registers.opened(name) as book:
            frame = book.log_frame()
            read = read_log(frame, _shop())
        st.session_state["cc_log"] = Log(name, read)


def _forget() -> None:
    """Another log: what was learnt from the one before is no longer shown, nor learnt on."""
    job: Job | None = st.session_state.pop("cc_job", None)
    if job is not None:
        job.cancel()
    for key in ("cc_log", "cc_log_key", "cc_tune", "cc_prove"):
        st.session_state.pop(key, None)


def _log_rows(log: Log) -> list[tuple[str, str]]:
    frame = log.read.frame
    times = frame["tapped_at"].dropna()
    rows = [
        ("from", log.source),
        ("heats", f"{len(frame):,}"),
        ("rows refused", f"{log.read.rows_refused:,}"),
    ]
    if len(times):
        rows.append(("tapped", f"{times.min():%Y-%m-%d} to {times.max():%Y-%m-%d}"))
    outcomes = [name for name in map(str, frame.columns) if name.startswith("end_")]
    if outcomes and len(frame):
        shares = 100.0 * frame[outcomes].notna().mean()
        given = ", ".join(f"{words_of(name)} {shares[name]:.0f} %" for name in outcomes)
        rows.append(("outcomes given", given))
    if log.read.skipped:
        rows.append(("columns left out", ", ".join(log.read.skipped)))
    return rows


def _shop() -> dict[str, Any]:
    return shop_part(document_of(form()))


# --- jobs -------------------------------------------------------------------------------------


def _found(kind: str, show: Callable[[Any, Any], None]) -> None:
    """The button that starts a job, and what the last one found."""
    log: Log | None = st.session_state.get("cc_log")
    if log is None or not len(log.read.frame):
        put("Choose a heat log first, under The log.")
        return
    job: Job | None = st.session_state.get("cc_job")
    label = {"tune": "Tune the parameters to the log", "prove": "Prove it out of sample"}[kind]
    text = {
        "tune": "Tuning takes about as long as the log is: some 10 s a thousand heats.",
        "prove": "The log is walked through in time: everything is fitted to the heats before, "
        "and the next hundred are predicted. It takes several times as long as the tuning.",
    }[kind]
    found = st.session_state.get("cc_" + kind)
    if job is None:
        if found is None:
            put(text)
        again = label if found is None else label + " again"
        st.button(again, key="start_" + kind, on_click=_start, args=(kind, log.read.frame))
    if found is not None:
        show(found, log.source)


def _start(kind: str, frame: pd.DataFrame) -> None:
    try:
        st.session_state["cc_job"] = Job(kind, frame, _shop(), _alive())
    except InputError as error:
        _tell("fault", f"{DOING[kind]} was not started:", fault_texts(error.faults))


def _alive() -> Callable[[], bool] | None:
    """Whether this session is still there; None outside a server."""
    from streamlit import runtime
    from streamlit.runtime.scriptrunner import get_script_run_ctx

    context = get_script_run_ctx()
    if context is None or not runtime.exists():
        return None
    return partial(_is_active, context.session_id)


def _is_active(session_id: str) -> bool:
    from streamlit import runtime

    return runtime.exists() and bool(runtime.get_instance().is_active_session(session_id))


def _job_shown() -> None:
    """The bar and the button that cancels; once it is over, the page is drawn anew."""
    job: Job | None = st.session_state.get("cc_job")
    if job is None:
        st.rerun()
    assert job is not None  # noqa: S101
    if job.running:
        share, text = job.progress()
        st.progress(share, f"{DOING[job.kind]}: {text} ({job.seconds:.0f} s)")
        st.button(f"Cancel: {DOING[job.kind].lower()}", key="cancel_job", on_click=_cancel)
        return
    _take(job)
    st.rerun()


def _cancel() -> None:
    job: Job | None = st.session_state.pop("cc_job", None)
    if job is not None:
        job.cancel()
        _tell("note", f"{DOING[job.kind]} was cancelled; nothing of it is kept.")


def _take(job: Job) -> None:
    st.session_state.pop("cc_job", None)
    try:
        st.session_state["cc_" + job.kind] = job.result()
    except InputError as error:
        _tell("fault", f"{DOING[job.kind]} gave nothing:", fault_texts(error.faults))
    except ConverterError as error:
        _tell("fault", f"{DOING[job.kind]} gave nothing:", fault_texts([Fault("log", str(error))]))
    else:
        _tell("good", f"{DOING[job.kind]} is done, in {job.seconds:.0f} s.")
