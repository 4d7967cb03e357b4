"""Heat and shop files that come through the browser, and heats as a table.

A file from the browser never makes the server read a file of its own: the shop that a heat
names is the one in the fields.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from converter_calc.balance.documents import LARGEST_FILE_BYTES, check_depth, lay_over
from converter_calc.balance.heats import heats_from_frame
from converter_calc.basis.errors import Fault, InputError
from converter_calc.page.form import Form, document_of, form_of, heat_part, shop_part
from converter_calc.planning import plan as planning

if TYPE_CHECKING:
    import pandas as pd

#: Heats solved between two steps of the progress bar.
ROWS_A_STEP = 250


def parse_document(content: bytes, name: str) -> dict[str, Any]:
    """Content of an uploaded TOML file.

    Raises InputError where it is empty, too large, no UTF-8, no TOML or nested too deeply.
    """
    place = name[:80]
    if len(content) > LARGEST_FILE_BYTES:
        most = f"{LARGEST_FILE_BYTES / 1e6:g} MB are allowed"
        raise InputError([Fault(place, f"has {len(content) / 1e6:.1f} MB; {most}")])
    try:
        document = tomllib.loads(content.decode("utf-8-sig"))
    except UnicodeDecodeError as error:
        raise InputError([Fault(place, f"is not UTF-8 text (byte {error.start + 1})")]) from error
    except RecursionError as error:
        raise InputError([Fault(place, "is nested too deeply")]) from error
    except ValueError as error:
        raise InputError([Fault(place, f"is not TOML: {str(error)[:200]}")]) from error
    if not document:
        raise InputError([Fault(place, "holds no field")])
    check_depth(document)
    return document


def form_with_heat(
    document: Mapping[str, Any], now: Form, shop: Mapping[str, Any] | None = None
) -> tuple[Form, str]:
    """The form of a loaded heat, and a sentence on the shop it was laid over.

    shop : the shop file loaded last, whole, with the aims it may hold; None: that of the fields.
    Raises InputError with every fault of the document.
    """
    if "shop" not in document:
        return form_of(document), "The heat is complete on its own."
    own = {key: x for key, x in document.items() if key != "shop"}
    text = "The heat names a shop file; the one loaded last is laid under it."
    if shop is None:
        shop = shop_part(document_of(now))
        text = (
            "The heat names a shop file, and none was loaded; the shop in the fields is laid "
            "under it. If that is not the one meant, load the shop, then the heat again."
        )
    return form_of(lay_over(shop, own)), text


def form_with_shop(document: Mapping[str, Any], now: Form) -> Form:
    """The form with another shop under the heat that is in it.

    Raises InputError with every fault of the document, or where it names a shop of its own.
    """
    if "shop" in document:
        raise InputError([Fault("shop", "a shop file cannot name another shop")])
    return form_of(lay_over(document, heat_part(document_of(now))))


def table_defaults(form: Form) -> dict[str, Any]:
    """What a table of heats takes from the fields: the shop, and the aims but the steel weight."""
    document = document_of(form)
    defaults = shop_part(document)
    aim = {key: x for key, x in document.get("aim", {}).items() if key != "steel_kg"}
    return defaults | ({"aim": aim} if aim else {})


def solve_frame(
    frame: pd.DataFrame,
    defaults: Mapping[str, Any],
    progress: Callable[[float], None],
    *,
    predict: bool,
) -> pd.DataFrame:
    """All heats of a table, in steps; `progress` is told the share done (0..1).

    Raises InputError with every fault of the table.
    """
    import pandas as pd

    heats_from_frame(frame, defaults)  # all faults of the table at once
    solve = planning.predict if predict else planning.plan
    parts = []
    for first in range(0, len(frame), ROWS_A_STEP):
        progress(first / len(frame))
        parts.append(solve(frame.iloc[first : first + ROWS_A_STEP], defaults))
    progress(1.0)
    found: pd.DataFrame = pd.concat(parts)
    return found
