"""What one session keeps: the form, the solved heat, notes.

Sessions share nothing but answers: the same fields, to the last digit, have the same answer.
"""

from __future__ import annotations

import copy
import json
import logging
from collections.abc import Callable, Hashable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from typing import Any

import streamlit as st

from converter_calc.balance.heats import HeatTable, heats_from_dict
from converter_calc.basis.errors import (
    ConvergenceError,
    ConverterError,
    Fault,
    InfeasibleError,
    InputError,
)
from converter_calc.data.tables import read_toml
from converter_calc.page.address import VIEW, address_of, form_from, too_long, view_texts
from converter_calc.page.form import Form, document_of, form_of
from converter_calc.page.markup import fault_texts, note, put
from converter_calc.page.store import Store
from converter_calc.planning.outcome import Outcome

LOG = logging.getLogger(__name__)


@dataclass
class Answer:
    """What the fields give: a document and an outcome, or why there is none.

    infeasible : the error of a valid heat that has no answer. heats : the heat as a table of
    one, where the input is right. asked : the question and the document as text. shown : its
    HTML, once made. Not to be changed otherwise: sessions with the same fields share it.
    """

    document: dict[str, Any] | None = None
    heats: HeatTable | None = None
    outcome: Outcome | None = None
    faults: list[Fault] = field(default_factory=list)
    infeasible: InfeasibleError | None = None
    asked: str = ""
    shown: str = ""


ANSWERS: Store[Answer] = Store(most=64)
#: Curves, maps and figures of the views.
PICTURES: Store[Any] = Store(most=128)


@cache
def _start_document() -> dict[str, Any]:
    return dict(read_toml("start_heat.toml"))


def start_form() -> Form:
    """The form that the page starts with; a fresh copy."""
    return form_of(copy.deepcopy(_start_document()))


def form() -> Form:
    """The form of this session; read from the address at first."""
    if "cc_form" not in st.session_state:
        st.session_state["cc_start"] = start_form()
        taken, faults = form_from(_params(), start_form())
        st.session_state["cc_form"] = taken
        st.session_state["cc_link_faults"] = faults
        st.session_state["cc_views"] = view_texts(_params())
        st.session_state["cc_generation"] = 0
    found: Form = st.session_state["cc_form"]
    return found


def replace_form(new: Form) -> None:
    """Put another heat into the fields; they are built anew."""
    st.session_state["cc_form"] = new
    st.session_state["cc_generation"] += 1


def key_of(name: str) -> str:
    """Key of the widget of a field; another one after a heat was loaded."""
    return f"field_{st.session_state['cc_generation']}_{name}"


def link_faults() -> list[Fault]:
    """Parameters of the address that were not taken."""
    found: list[Fault] = st.session_state.get("cc_link_faults", [])
    return found


def _params() -> dict[str, str]:
    return {key: st.query_params[key] for key in st.query_params}


def write_address() -> None:
    """Bring the address in line with the form; ask for a file where it would be too long."""
    found = address_of(form(), st.session_state["cc_start"])
    st.session_state["cc_address_too_long"] = too_long(found)
    if too_long(found):
        found = {}
    found |= st.session_state["cc_views"]
    view = st.query_params.get(VIEW)
    if view is not None:
        found[VIEW] = view
    if found != _params():
        st.query_params.from_dict(found)


def view_field(view: str, name: str, label: str, **options: Any) -> str:
    """A text field of a view; what is typed is kept for the session and in the address.

    view, name : as given to `keep_in_address`. options : of `st.text_input`.
    """
    key = f"{view}.{name}"
    st.session_state.setdefault(key, st.session_state["cc_views"].get(key, ""))
    text = st.text_input(label, key=key, **options) or ""
    _keep(key, text.strip())
    return text


def view_choice(
    view: str,
    name: str,
    label: str,
    options: Sequence[str],
    draw: Callable[..., Any] | None = None,
    **more: Any,
) -> str:
    """A choice of a view by name, kept like `view_field`; the first where none was made.

    A text of the address that is not among the options is told. draw : the widget; None: a box.
    """
    key = f"{view}.{name}"
    kept = st.session_state["cc_views"].get(key, "")
    if kept and kept not in options:
        put(note("fault", f"{label}: {kept[:40]!r} of before is not there; {options[0]} is shown."))
    if st.session_state.get(key) not in options:
        st.session_state[key] = kept if kept in options else options[0]
    found: str = (draw or st.selectbox)(label, options, key=key, **more)
    _keep(key, "" if found == options[0] else found)
    return found


def _keep(key: str, text: str) -> None:
    kept = st.session_state["cc_views"]
    if text != kept.get(key, ""):
        kept.pop(key, None)
        if text:
            kept[key] = text
        write_address()


def answer() -> Answer:
    """The answer for the form as it stands; solved once for each state of the fields."""
    try:
        document = document_of(form())
    except InputError as error:
        return Answer(faults=error.faults)
    question = form().question
    asked = question + json.dumps(document, sort_keys=True, default=str)

    def make() -> Answer:
        made = solve(document, predict=question == "predict")
        made.asked = asked
        return made

    return ANSWERS.find(asked, make)


def kept(view: str, found: Answer, settings: Hashable, make: Callable[[], Any]) -> Any:
    """What a view has worked out for an answer: made once for each heat and its settings.

    view : a name of its own for each thing. settings : all else that it depends on, as the
    theme of a figure. Shared with sessions that ask the same; not to be changed.
    """
    return PICTURES.find((view, found.asked, settings), make)


def solve(document: Mapping[str, Any], *, predict: bool) -> Answer:
    """Plan or predict one document; errors of ours become part of the answer."""
    from converter_calc.planning import plan as planning

    found = Answer(document=dict(document))
    try:
        found.heats = heats_from_dict(document)
        found.outcome = (planning.predict if predict else planning.plan)(found.heats)
    except InputError as error:
        found.faults = error.faults
    except InfeasibleError as error:
        found.infeasible = error
    except ConvergenceError as error:
        found.infeasible = InfeasibleError(str(error))
    except ConverterError as error:
        found.faults = [Fault("heat", str(error))]
    return found


def theme() -> str:
    """The theme that the browser shows, "light" or "dark"."""
    kind = st.context.theme.type
    return "dark" if kind == "dark" else "light"


def guarded(view: Callable[[], None]) -> None:
    """Show a view; an error of ours names its fields, any other is logged and owned up to."""
    try:
        view()
    except InputError as error:
        put(note("fault", "This cannot be shown:", fault_texts(error.faults)))
    except ConverterError as error:
        put(note("fault", str(error)))
    except Exception:
        LOG.exception("a view failed")
        put(
            note(
                "fault",
                "This part of the page failed. Your entries are kept; change one, or save the "
                "heat under Files and report it.",
            )
        )
