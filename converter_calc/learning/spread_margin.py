"""The margin to plan with: aims moved so that each window is hit with a wanted probability.

The draws of a spread say how far an aim has to move; the heat is then planned again with the
aims moved, and what it comes to is drawn anew and held against the windows it had.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InfeasibleError, InputError
from converter_calc.learning.errors_of_inputs import Extra
from converter_calc.learning.spread import Spread, spread
from converter_calc.learning.spread_numbers import Window
from converter_calc.learning.spread_worth import straight, straight_window
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.plan import plan_heats, raise_unless_solved
from converter_calc.planning.solving import with_values

#: Aim that moves the result of a window; manganese and sulphur have none that a plan follows.
LEVERS = {"end_temp_C": "aim_temp_C", "end_C_pct": "aim_C_pct", "end_P_pct": "aim_P_pct"}
#: Probabilities that can be wanted.
LEAST, MOST = 0.5, 0.999
#: Plans tried; each starts from what the last one came to.
ROUNDS = 4
#: A window counts as reached within this of the wanted probability: the scatter of a run.
NEAR = 0.004
#: A window that no move brings to the wanted probability is moved only for as much as this.
WORTH_A_MOVE = 0.01
#: The least phosphorus that a plan reaches, times this, can be planned.
JUST_REACHED = 1.001
#: Moves looked at, in standard deviations of the result to either side, and how many.
WIDEST, MOVES = 4.0, 801


@dataclass(frozen=True)
class Shift:
    """Margin of one window alone.

    now : probability with the aim as it is. shift : move of the aim that reaches the wanted
    probability, 0 where none is needed, None where no move does. best_shift, best : move with
    the largest probability, and that probability. largest : errors that make most of the
    scatter, with their share of the variance.
    """

    window: Window
    aim_name: str
    now: float
    shift: float | None
    best_shift: float
    best: float
    largest: tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class Margin:
    """Margins for a wanted probability, and the plan that uses them.

    aims : aims planned with, by flat name. reached : every window, as drawn anew, has the
    wanted probability. checked, planned : that spread and plan; None where it cannot be made,
    and `binding`, `frees` then say why and what would help.
    """

    wanted: float
    shifts: tuple[Shift, ...]
    aims: dict[str, float]
    reached: bool
    checked: Spread | None = field(repr=False)
    planned: Outcome | None = field(repr=False)
    binding: str = ""
    frees: tuple[str, ...] = ()

    def document(self) -> dict[str, Any]:
        """All of it but the draws as plain numbers, ready for JSON."""
        checked = self.checked
        return {
            "wanted_probability": self.wanted,
            "reached": self.reached,
            "aims": {name: aim if np.isfinite(aim) else None for name, aim in self.aims.items()},
            "windows": {
                s.window.name: {
                    "probability_now": s.now,
                    "shift": s.shift,
                    "best_shift": s.best_shift,
                    "best_probability": s.best,
                    "largest_errors": [{"label": a, "total_share": b} for a, b in s.largest],
                }
                for s in self.shifts
            },
            "probability_then": {}
            if checked is None
            else {c.name: c.probability for c in (*checked.chances, checked.all_windows)},
            "binding": self.binding,
            "freed_by": list(self.frees),
        }


def check_probability(probability: float) -> None:
    """Raise InputError for a probability outside 0.5 to 0.999."""
    if not LEAST <= probability <= MOST:
        message = f"must be {100 * LEAST:g} to {100 * MOST:g} %, given {100 * probability:g}"
        raise InputError([Fault("probability", message)])


def margin(
    found: Spread, probability: float = 0.9, draws: int = 8192, extra: Extra | None = None
) -> Margin:
    """Aims to plan with so that each window is hit with at least `probability`.

    Parameters
    ----------
    found : spread of the planned heat. probability : wanted of each window, 0.5 to 0.999.
    draws : of each check. extra : as given to `spread`.

    Where no move of an aim reaches it, the best move is taken and `Shift.largest` says which
    errors make the scatter.

    Raises InputError for a probability out of range, or a heat whose charge was given.
    """
    check_probability(probability)
    planned = found.planned
    if planned.ask.heat == "T_K":
        raise InputError([Fault("margin", "needs a heat that is planned; this charge is given")])
    shifts = tuple(_shift_of(found, window, probability) for window in found.windows)
    aims = {name: float(planned.heats.values[name][0]) for name in LEVERS.values()}
    moves = {s.window.name: _first_move(s) for s in shifts}
    if not any(moves.values()):
        return Margin(probability, shifts, aims, _reached(found, probability), found, planned)
    checked, last = found, planned
    stop: InfeasibleError | None = None
    touched: set[str] = set()
    for _ in range(ROUNDS):
        wanted = aims | {
            LEVERS[name]: checked.results[name].as_read + move
            for name, move in moves.items()
            if move
        }
        try:
            last, aims, stop = _planned(planned, wanted)
        except InfeasibleError as error:
            why, frees = error.binding or str(error), tuple(error.frees)
            return Margin(
                probability, shifts, wanted, reached=False, checked=None, planned=None,
                binding=why, frees=frees,
            )  # fmt: skip
        checked = spread(last, draws, found.seed, extra=extra, needs=False, windows=found.windows)
        touched |= {name for name, move in moves.items() if move}
        moves = {
            s.window.name: _next_move(s, checked, probability, moved=s.window.name in touched)
            for s in shifts
        }
        if stop is not None or not any(moves.values()):
            break
    binding, frees = (stop.binding, tuple(stop.frees)) if stop else ("", ())
    reached = _reached(checked, probability)
    return Margin(probability, shifts, aims, reached, checked, last, binding, frees)


def _planned(
    planned: Outcome, aims: dict[str, float]
) -> tuple[Outcome, dict[str, float], InfeasibleError | None]:
    """The heat planned with other aims: as far as phosphorus goes, where it stops short.

    Returns plan, the aims it has, and the error of the plan wanted where that cannot be made.
    Raises InfeasibleError where no plan near it can.
    """

    def attempt(wanted: dict[str, float]) -> Outcome:
        outcome = plan_heats(with_values(planned.heats, **wanted))[0][1]
        raise_unless_solved(outcome)
        return outcome

    try:
        return attempt(aims), aims, None
    except InfeasibleError as error:
        near = error.nearest.get("end_P_pct", 0.0)
        if not near > aims["aim_P_pct"]:
            raise
        nearer = aims | {"aim_P_pct": near * JUST_REACHED}
        return attempt(nearer), nearer, error


def _reached(found: Spread, probability: float) -> bool:
    return all(c.probability >= probability - NEAR for c in found.chances)


def _first_move(shift: Shift) -> float:
    """The move that reaches the probability, else the best one where it is worth a move."""
    if shift.shift is not None:
        return shift.shift
    return shift.best_shift if shift.best > shift.now + WORTH_A_MOVE else 0.0


def _next_move(shift: Shift, checked: Spread, probability: float, *, moved: bool) -> float:
    """Move that is still missing after a new plan; one aim moved may spoil another window.

    moved : the aim was moved before, so it may have gone too far.
    """
    name = shift.window.name
    chance = next(c.probability for c in checked.chances if c.name == name)
    if abs(chance - probability) <= NEAR or (chance > probability and not moved):
        return 0.0
    return _first_move(_shift_of(checked, shift.window, probability, from_either_side=moved))


def _shift_of(
    found: Spread, window: Window, probability: float, *, from_either_side: bool = False
) -> Shift:
    """Margin of one window from the draws.

    from_either_side : find the move at which the probability is just the wanted one, also where
    it is already more.
    """
    name = window.name
    largest = tuple(found.largest(name))
    values = found.draws.values[name]
    values = values[np.isfinite(values)]
    now = float(window.holds(values).sum() / found.draws.solved.size)
    lever = LEVERS.get(name, "")
    enough = now >= probability and not from_either_side
    if not lever or enough or values.std() == 0.0:
        reached = now >= probability
        return Shift(window, lever, now, 0.0 if reached else None, 0.0, now, largest)
    ordered = np.sort(straight(name, values))
    inside = straight_window(window)
    grid = np.linspace(-WIDEST, WIDEST, MOVES) * ordered.std()
    chances = _chances(ordered, inside, grid) * (values.size / found.draws.solved.size)
    middle = found.results[name].as_read
    moves = _bent(name, straight(name, np.array([middle]))[0] + grid) - middle
    best = int(np.argmax(chances - 1e-9 * np.abs(grid)))
    good = np.flatnonzero(chances >= probability)
    if not np.isfinite(window.low):  # the more the better: the move that just reaches it
        best = int(np.flatnonzero(chances >= chances.max() - NEAR)[np.argmin(
            np.abs(grid[chances >= chances.max() - NEAR]))])  # fmt: skip
    shift = float(moves[good[np.argmin(np.abs(grid[good]))]]) if good.size else None
    if from_either_side and good.size and not np.isfinite(window.low):
        shift = float(moves[good[np.argmin(chances[good])]])
    return Shift(window, lever, now, shift, float(moves[best]), float(chances[best]), largest)


def _chances(ordered: Array, window: Window, moves: Array) -> Array:
    """Probability of the window with all values moved by each of `moves`."""
    below = np.searchsorted(ordered, window.low - moves, side="left")
    up_to = np.searchsorted(ordered, window.high - moves, side="right")
    return np.asarray((up_to - below) / ordered.size)


def _bent(name: str, values: Array) -> Array:
    """The way back from `straight`."""
    if name == "end_temp_C":
        return values
    if name == "end_C_pct":
        return np.asarray(np.maximum(values, 1e-3) ** -2.0)
    return np.asarray(np.exp(values))
