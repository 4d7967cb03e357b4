"""Parts of the page that read heat logs: how they are read, and the rows that were refused."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.heatlog.reading import fault_text
from converter_calc.page.form import Form
from converter_calc.page.markup import heading, put, table_html
from converter_calc.reporting.exports import csv_text

if TYPE_CHECKING:
    import pandas as pd

#: Refused rows that are listed; all of them stand in the file.
REFUSED_LISTED = 20
MARKS = {".": "decimal point", ",": "decimal comma"}


def log_shop(form: Form) -> dict[str, Any]:
    """What a heat log needs to know of the shop in the fields: its materials."""
    return {"materials": dict(form.rest.get("materials", {}))}


def reading_choices(view: str) -> tuple[str, bool]:
    """Decimal mark, and whether columns that are not of a heat log are left out."""
    with st.container(horizontal=True):
        mark = st.radio("Numbers have a", list(MARKS), horizontal=True, key=f"{view}_mark",
                        format_func=MARKS.__getitem__)  # fmt: skip
        skip = st.checkbox("Leave out columns that a heat log does not have", key=f"{view}_skip")
    return mark, skip


def refused_shown(refused: pd.DataFrame, view: str) -> None:
    """The first refused rows with the reason, and all of them as a file; nothing for none."""
    if not len(refused):
        return
    rows = [
        (row, heat or "–", field, fault_text(reason, given if given != heat else ""))
        for row, heat, field, given, reason in refused.head(REFUSED_LISTED).itertuples(index=False)
    ]
    put(
        heading("Refused rows"),
        table_html("refused rows", ("row", "heat", "column", "why"), rows, numeric=()),
    )
    more = len(refused) - len(rows)
    if more > 0:
        put(f"and {more:,} more; the file has them all.")
    st.download_button("Refused rows (CSV)", csv_text(refused), "refused_rows.csv", "text/csv",
                       key=f"{view}_refused", on_click="ignore")  # fmt: skip
