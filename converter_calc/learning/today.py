"""What the log says of the heat to come: parameters of today, and what is left on top.

A plan takes today's parameters and shows, beside the balance, where heats like it have ended; if
asked, it aims the balance past that.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.features import PLAIN, features_of
from converter_calc.learning.following import (
    FOLLOWED,
    Followed,
    Topped,
    balance_feature,
    follow_log,
    offsets,
    top_up,
)
from converter_calc.learning.kept_files import load_document, save_document
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.residual import ResidualModel
from converter_calc.learning.tuned import Tuned, tuned_from
from converter_calc.learning.tuning import tune
from converter_calc.planning.outcome import Caution, Outcome
from converter_calc.planning.plan import (
    plan_heats,
    predict_heats,
    raise_unless_closed,
    raise_unless_solved,
)
from converter_calc.planning.solving import with_values

if TYPE_CHECKING:
    import pandas as pd

FORMAT = "converter-calc offsets of the day"
VERSION = 1
#: Aims moved by what is left: aim -> quantity.
AIMS = {"aim_temp_C": "end_temp_C", "aim_C_pct": "end_C_pct", "aim_P_pct": "end_P_pct"}
#: Plans made until what is left, which depends on the plan itself, stands still.
PLANS = 6
#: Features named in a caution, at most.
NAMED = 3


@dataclass(frozen=True)
class Today:
    """What a log says of the heat after its last.

    tuned : parameters with today's offsets and their covariance. models : quantity -> what is
    left, used only where it won out of sample. scatter : quantity -> standard deviation of a
    heat about its prediction, transformed. as_of : time of the last heat of the log. jumps :
    (time, heat_id, parameter, size, standard error, sure) of the step changes found.
    """

    tuned: Tuned
    models: Mapping[str, ResidualModel]
    scatter: Mapping[str, float]
    as_of: str
    jumps: tuple[tuple[str, str, str, float, float, bool], ...]

    def left(self, outcome: Outcome) -> dict[str, Array]:
        """What heats like these have shown above the balance, (n,) each, transformed.

        Within the range that the log has shown; only for quantities whose model won.
        """
        names, X = _features(outcome)
        return {
            quantity: model.predict(_columns(model, names, X))
            for quantity, model in self.models.items()
            if model.used
        }

    def strange(self, outcome: Outcome) -> list[list[str]]:
        """Features of each heat that lie outside the usual range of the log."""
        names, X = _features(outcome)
        found: list[dict[str, None]] = [{} for _ in range(outcome.n)]
        for model in self.models.values():
            if model.used:
                columns = _columns(model, names, X)
                far = (columns < model.low) | (columns > model.high)
                for row, j in np.argwhere(far).tolist():
                    found[row][model.features[j]] = None
        return [list(row) for row in found]

    def document(self) -> dict[str, Any]:
        """Everything as plain values, ready for JSON."""
        return {
            "format": FORMAT,
            "version": VERSION,
            "as_of": self.as_of,
            "tuned": self.tuned.document(),
            "scatter": dict(self.scatter),
            "jumps": [list(jump) for jump in self.jumps],
            "left": {name: model.document() for name, model in self.models.items()},
        }

    def save(self, path: str | Path) -> None:
        """Write a JSON file; raises InputError where it cannot be written."""
        save_document(self.document(), path)


def learn(
    frame: pd.DataFrame, shop: str | Mapping[str, Any], *, tuned: Tuned | None = None
) -> tuple[Today, Followed, Topped]:
    """Tune on a log, follow its offsets to the end, and fit what is left.

    Parameters
    ----------
    frame : heat log; taken in the order of tapped_at. shop : shop file or its content. tuned :
        parameters to follow from, tuned on the log where not given.

    Raises InputError where no heat of the log can be used, or the shop is wrong.
    """
    frame = in_time_order(frame)
    tuned = tune(frame, shop) if tuned is None else tuned
    followed = follow_log(frame, shop, tuned)
    names, X = features_of(frame, list(followed.materials))
    topped = top_up(followed, names, X)
    ids, times = frame["heat_id"].tolist(), frame["tapped_at"].astype(str).tolist()
    jumps = tuple(
        (
            times[jump.row],
            str(ids[jump.row]),
            jump.offset,
            jump.size,
            jump.standard_error,
            jump.sure,
        )
        for jump in topped.drift.jumps
    )
    offset, cov = topped.drift.today
    scatter = dict(zip(followed.names, topped.drift.walk.noise.tolist(), strict=True))
    today = Today(followed.at(offset, cov), topped.models, scatter, times[-1], jumps)
    return today, followed, topped


def in_time_order(frame: pd.DataFrame) -> pd.DataFrame:
    """The log by tapped_at; heats without a time keep their place at the end.

    Raises InputError for an empty log or one without tapped_at.
    """
    if not len(frame):
        raise InputError([Fault("log", "holds no heat")])
    if "tapped_at" not in frame or frame["tapped_at"].isna().all():
        raise InputError([Fault("tapped_at", "not given; to follow a drift, heats need a time")])
    return frame.sort_values("tapped_at", kind="stable").reset_index(drop=True)


def plan_today(
    heats: HeatTable, today: Today, *, move_aims: bool = False
) -> list[tuple[Array, Outcome]]:
    """Plan heats with today's parameters, and say where heats like them have ended.

    move_aims : aim the balance past what is left, so that the expected end is the aim. What is
    left was learnt from heats as they were run; moving aims by it supposes that they go on so.

    Returns (row numbers, outcome) of each group, as `plan_heats`; `Outcome.expected` and, where
    aims were moved, `Outcome.wanted` are filled.
    """
    tuned = today.tuned.apply(heats)
    groups = plan_heats(tuned)
    if move_aims and any(model.used for model in today.models.values()):
        for _ in range(PLANS):
            left = {name: np.zeros(heats.n) for name in AIMS}
            for rows, outcome in groups:
                found = today.left(outcome)
                good = np.array([status == "solved" for status in outcome.status])
                for aim, quantity in AIMS.items():
                    if quantity in found:
                        left[aim][rows] = np.where(good, found[quantity], 0.0)
            groups = plan_heats(with_values(tuned, **_moved_aims(tuned, left)))
        for rows, outcome in groups:
            _tell_moved(outcome, tuned, rows)
    for _, outcome in groups:
        outcome.expected = expected_end(outcome, today)
        _tell_strange(outcome, today)
    return groups


def plan_one(heats: HeatTable, today: Today, *, move_aims: bool = False) -> Outcome:
    """One heat planned with today's parameters; see `plan_today`.

    Raises InputError for more heats than one, InfeasibleError and ConvergenceError as `plan`.
    """
    if heats.n != 1:
        raise InputError([Fault("heat", f"one heat is asked for, given {heats.n}")])
    ((_, outcome),) = plan_today(heats, today, move_aims=move_aims)
    raise_unless_solved(outcome)
    raise_unless_closed(outcome)
    return outcome


def expected_end(outcome: Outcome, today: Today) -> dict[str, tuple[Array, Array]]:
    """(expected, standard deviation) of each quantity that is followed, own units, (n,) each.

    The deviation is that of a heat about its prediction, scatter of the log; for quantities
    compared by logarithm it is value x share.
    """
    left = today.left(outcome)
    columns = outcome.columns()
    found = {}
    for name, sd in today.scatter.items():
        if name not in columns:
            continue
        quantity = quantities()[name]
        value = np.asarray(columns[name], dtype=float)
        with np.errstate(all="ignore"):  # an unsolved heat has no logarithm
            at = quantity.plain(quantity.transformed(value) + left.get(name, 0.0))
        found[name] = (at, at * sd if quantity.log else np.full(outcome.n, sd))
    return found


def predict_today(heats: HeatTable, today: Today) -> list[tuple[Array, Outcome]]:
    """Predict heats with today's parameters; `expected_end` adds what is left."""
    return predict_heats(today.tuned.apply(heats))


def load_today(path: str | Path) -> Today:
    """Offsets of the day from a file that `Today.save` wrote.

    Raises InputError, one clear line, for a file that is missing, broken or of another kind.
    """
    return today_from(load_document(path, "offsets"), str(path))


def today_from(document: Any, place: str = "offsets") -> Today:
    """What `Today.document` gave, or tuned parameters alone (`Tuned.document`).

    Raises InputError where it is neither, or a value is impossible.
    """
    if isinstance(document, Mapping) and document.get("format") != FORMAT:
        return Today(tuned_from(document, place), {}, {}, "", ())
    if not isinstance(document, Mapping) or document.get("version") != VERSION:
        raise InputError([Fault(place, f"is no file of offsets this program reads ({VERSION})")])
    try:
        scatter = {str(name): float(x) for name, x in document["scatter"].items()}
        models = {
            str(name): ResidualModel.from_document(entry)
            for name, entry in document["left"].items()
        }
        jumps = tuple(
            (str(a), str(b), str(c), float(d), float(e), bool(sure))
            for a, b, c, d, e, sure in document["jumps"]
        )
        _ = [FOLLOWED.index(name) for name in (*models, *scatter)]
        as_of, tuned = str(document["as_of"]), document["tuned"]
    except (KeyError, TypeError, ValueError, AttributeError) as error:
        raise InputError([Fault(place, f"is incomplete or misshapen: {error}")]) from error
    return Today(tuned_from(tuned, place), models, scatter, as_of, jumps)


def drift_table(frame: pd.DataFrame, followed: Followed, drift: Any) -> pd.DataFrame:
    """Each wandering parameter through the log: tapped_at, offset, value, deviation.

    Given all heats (smoothed); values and deviations in the unit of the parameter. frame : the
    log in time order. drift : of `followed`, or of `top_up`.
    """
    import pandas as pd

    tuned = followed.tuned.practice_values()
    parts = []
    for j, name in enumerate(drift.offsets):
        at, sd = drift.back.smoothed[:, j], drift.back.smoothed_sd[:, j]
        value = tuned[name] * np.exp(at) if offsets()[name] else tuned[name] + at
        parts.append(
            pd.DataFrame(
                {
                    "tapped_at": frame["tapped_at"],
                    "offset": name,
                    "value": value,
                    "deviation": value * sd if offsets()[name] else sd,
                }
            )
        )
    return pd.concat(parts, ignore_index=True)


def _features(outcome: Outcome) -> tuple[list[str], Array]:
    """Features of planned heats, those that are the balance's own predictions among them."""
    names, X = features_of(_frame_of(outcome), list(outcome.heats.materials))
    ends = outcome.columns()
    for quantity in FOLLOWED:
        if quantity in ends:
            names.append(balance_feature(quantity))
            value = quantities()[quantity].transformed(np.asarray(ends[quantity], dtype=float))
            X = np.column_stack([X, value])
    return names, X


def _columns(model: ResidualModel, names: list[str], X: Array) -> Array:
    """The features of a model, (n, p): a material not charged is none of it, others are blank."""
    columns = np.full((len(X), len(model.features)), np.nan)
    for j, feature in enumerate(model.features):
        if feature in names:
            columns[:, j] = X[:, names.index(feature)]
        elif feature.endswith("_kg_per_t"):
            columns[:, j] = 0.0
    return columns


def _frame_of(outcome: Outcome) -> pd.DataFrame:
    """A planned heat as a row of a log: readings of its charge."""
    import pandas as pd

    n, heats = outcome.n, outcome.heats
    columns: dict[str, Any] = {}
    for name in PLAIN:
        element = name.removeprefix("hm_").removesuffix("_pct")
        x = heats.hm_pct.get(element) if name.startswith("hm_") else heats.values.get(name)
        columns[name] = np.full(n, np.nan) if x is None else x
    for name, x in outcome.recipe().items():
        if name.endswith("_kg") or name == "oxygen_Nm3":
            columns[name] = np.broadcast_to(np.asarray(x, dtype=float), (n,))
    return pd.DataFrame(columns)


def _moved_aims(heats: HeatTable, left: Mapping[str, Array]) -> dict[str, Array]:
    aims = {}
    for aim, quantity in AIMS.items():
        given = heats.values[aim]
        if quantities()[quantity].log:
            aims[aim] = given * np.exp(-left[aim])
        else:
            aims[aim] = given - left[aim]
    return aims


def _tell_moved(outcome: Outcome, tuned: HeatTable, rows: Array) -> None:
    """Keep the aims of the heats themselves, and say where the balance aims elsewhere."""
    texts = {
        "aim_temp_C": ("temperature", "C", ".0f"),
        "aim_C_pct": ("carbon", "%", ".4f"),
        "aim_P_pct": ("phosphorus", "%", ".4f"),
    }
    for aim, (name, unit, digits) in texts.items():
        now, given = outcome.heats.values[aim], tuned.values[aim][rows]
        mask = np.isfinite(given) & (np.abs(now - given) > 1e-6 * np.abs(given))
        if mask.any():
            outcome.wanted[aim] = given
            text = (
                f"the balance aims at {{now:{digits}}} {unit} {name} for an aim of "
                f"{{given:{digits}}} {unit}: heats like this have ended so far off it"
            )
            outcome.cautions.append(
                Caution("learnt-aim", f"aim.{aim.removeprefix('aim_')}", mask, text,
                        {"now": now, "given": given})
            )  # fmt: skip


def _tell_strange(outcome: Outcome, today: Today) -> None:
    """Say which features of a heat the log has hardly shown."""
    strange = today.strange(outcome)
    for text in dict.fromkeys(", ".join(row[:NAMED]) for row in strange if row):
        mask = np.array([", ".join(row[:NAMED]) == text for row in strange])
        outcome.cautions.append(
            Caution(
                "unlike-log", "tuned", mask,
                f"the log has hardly a heat with such {text}: what is expected by it is a guess",
            )
        )  # fmt: skip
