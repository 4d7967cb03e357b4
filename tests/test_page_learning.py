"""Spread, register and learning on the page: wiring and logic, without a browser.

Kinds of check: contract (what the page shows against the functions that the command line calls
too), property (moved aims leave the windows where they are) and safety (no path of a visitor,
jobs of one session only, nothing left behind).
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

testing = pytest.importorskip("streamlit.testing.v1", reason="the page needs streamlit")

from converter_calc.learning.spread import spread  # noqa: E402
from converter_calc.learning.spread_margin import margin  # noqa: E402
from converter_calc.page import sureness  # noqa: E402
from converter_calc.page.form import document_of, form_of  # noqa: E402
from converter_calc.page.session import solve, start_form  # noqa: E402
from converter_calc.reporting import spread_bands  # noqa: E402

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
    app = opened(sureness=True)
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
