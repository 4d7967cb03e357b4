"""A long job of learning, run in a process of its own: `python -m ... FOLDER`.

The folder holds the task; progress and result are written into it. The process ends with the
page that started it, and when it is told to.
"""

from __future__ import annotations

import json
import os
import pickle
import shutil
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import ConverterError
from converter_calc.learning.tuned import Tuned

if TYPE_CHECKING:
    import pandas as pd

TASK, PROGRESS, RESULT = "task.pickle", "progress.json", "result.pickle"
#: Passes over a log that a tuning usually needs; beyond, the bar stands still and counts on.
USUAL_PASSES = 30
#: Share of the work that is done once the parameters are tuned and offsets are followed next.
TUNED_SHARE = 0.6
Told = Callable[[float, str], None]


def tune_and_follow(frame: pd.DataFrame, shop: dict[str, Any], tell: Told) -> dict[str, Any]:
    """Tuned parameters of a log, and how their offsets wandered through it.

    Returns tuned (Tuned), today (Today), followed (Followed), drift (Drift beside what is left),
    and heats: heat_id and tapped_at in time order. tell : is told the share done (0..1) and what
    is done now.
    """
    from converter_calc.learning.today import in_time_order, learn
    from converter_calc.learning.tuning import tune

    def count(passes: int) -> None:
        share = TUNED_SHARE * min(passes / USUAL_PASSES, 0.97)
        tell(share, f"parameters are tuned, pass {passes} over {len(frame):,} heats")

    frame = in_time_order(frame)
    tell(0.0, f"the log of {len(frame):,} heats is made ready")
    tuned: Tuned = tune(frame, shop, progress=count)
    tell(TUNED_SHARE, "offsets are followed through the log")
    today, followed, topped = learn(frame, shop, tuned=tuned)
    return {
        "tuned": tuned, "today": today, "followed": followed, "drift": topped.drift,
        "heats": frame[["heat_id", "tapped_at"]],
    }  # fmt: skip


def prove(frame: pd.DataFrame, shop: dict[str, Any], tell: Told) -> dict[str, Any]:
    """Proof out of sample of a log; returns proof (Proof)."""
    from converter_calc.learning.proof import walk_forward
    from converter_calc.learning.rivals import rivals

    def count(done: int, of: int) -> None:
        tell(done / of, f"stage {done} of {of} is done")

    tell(0.0, "the first stage is tuned; later ones are quicker")
    return {"proof": walk_forward(frame, shop, competitors=rivals(), progress=count)}


KINDS: dict[str, Callable[[Any, dict[str, Any], Told], dict[str, Any]]] = {
    "tune": tune_and_follow,
    "prove": prove,
}


def run(folder: Path) -> None:
    """Do the task of a folder and write what came of it, an error as well."""

    def tell(share: float, text: str) -> None:
        part = folder / (PROGRESS + ".part")
        part.write_text(json.dumps([share, text]), encoding="utf-8")
        part.replace(folder / PROGRESS)

    # our own files in a folder that nobody else can read
    kind, frame, shop = pickle.loads((folder / TASK).read_bytes())  # noqa: S301
    outcome: tuple[str, Any]
    try:
        outcome = ("done", KINDS[kind](frame, shop, tell))
    except ConverterError as error:
        outcome = ("refused", error)
    part = folder / (RESULT + ".part")
    part.write_bytes(pickle.dumps(outcome))
    part.replace(folder / RESULT)


def _end_with_the_page(folder: Path) -> None:
    """Wait for the pipe from the page to close; then nobody wants the result any more."""
    sys.stdin.buffer.read()
    shutil.rmtree(folder, ignore_errors=True)
    os._exit(1)


def main() -> None:
    """Entry of the process."""
    folder = Path(sys.argv[1])
    threading.Thread(target=_end_with_the_page, args=(folder,), daemon=True).start()
    if hasattr(os, "nice"):
        os.nice(5)  # the page goes first
    run(folder)


if __name__ == "__main__":
    main()
