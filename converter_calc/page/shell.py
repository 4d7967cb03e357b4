"""The frame of the page: title, views, and what the address could not give."""

from __future__ import annotations

import gc
import math
import time
from functools import cache

import streamlit as st

from converter_calc.page import session
from converter_calc.page.address import VIEW
from converter_calc.page.balance_view import balance_view
from converter_calc.page.files_view import files_view
from converter_calc.page.learning_view import learning_view
from converter_calc.page.lime_view import lime_view
from converter_calc.page.markup import fault_texts, note, put, put_style
from converter_calc.page.plan_view import plan_view
from converter_calc.page.practice_view import practice_view
from converter_calc.page.register_view import register_view
from converter_calc.page.scrap_view import scrap_view
from converter_calc.page.tap_view import tap_view
from converter_calc.reporting.html_sheet import element

#: Name in the address -> name on the tab, and what draws it.
VIEWS = {
    "plan": ("Plan a heat", plan_view),
    "balance": ("Heat balance", balance_view),
    "scrap": ("Scrap ratio", scrap_view),
    "lime": ("Lime and phosphorus", lime_view),
    "practice": ("Slag practice", practice_view),
    "tap": ("Tap and ladle", tap_view),
    "register": ("Register", register_view),
    "learning": ("Learning", learning_view),
    "files": ("Files", files_view),
}

#: Time between two searches of everything for garbage, and when the last was [s].
SEARCH_EVERY_S = 600.0
_LAST_SEARCH = [-math.inf]


def show_page() -> None:
    """The whole page, once a run of the session."""
    st.set_page_config(page_title="Converter charge", page_icon="🔥", layout="wide",
                       initial_sidebar_state="collapsed")  # fmt: skip
    put_style()
    session.guarded(_page)
    _settle()


def _settle() -> None:
    """After each run of the whole page: what many sessions at once would wait for.

    The server collects garbage after every run. What a session has loaded by now stays, so it
    is left out of the search, which would take up to 70 ms each time; every ten minutes all of
    it is looked through, for sessions that have gone.
    """
    _one_thread()
    now = time.monotonic()
    if now - _LAST_SEARCH[0] > SEARCH_EVERY_S:
        _LAST_SEARCH[0] = now
        gc.unfreeze()
        gc.collect()
    gc.freeze()


@cache
def _one_thread() -> None:
    """The products are small: threads of BLAS that wait for each other cost more than they save."""
    from threadpoolctl import threadpool_limits

    threadpool_limits(limits=1, user_api="blas")


def _page() -> None:
    session.form()
    _title()
    names = {label: key for key, (label, _) in VIEWS.items()}
    key = "cc_view"
    if key not in st.session_state:
        asked = st.query_params.get(VIEW, "plan")
        st.session_state[key] = VIEWS.get(asked, VIEWS["plan"])[0]
    tabs = st.tabs(list(names), key=key, on_change=_remember_view)
    for tab, (_, view) in zip(tabs, VIEWS.values(), strict=True):
        if tab.open:
            with tab:
                session.guarded(view)


def _remember_view() -> None:
    label = st.session_state["cc_view"]
    st.query_params[VIEW] = next(key for key, (name, _) in VIEWS.items() if name == label)


def _title() -> None:
    put(element("h1", "Converter charge"))
    asked = st.query_params.get(VIEW)
    lines = fault_texts(session.link_faults())
    if asked is not None and asked not in VIEWS:
        lines.append(f"{VIEW}: must be one of {', '.join(VIEWS)}")
    if lines:
        put(note("fault", "Not taken from the address; the starting values stand instead:", lines))
