"""Make the demo log: half a year of an invented vessel, about 1,500 heats.

    python demo_heats/make_log.py            writes heat_log.csv beside this file
    python demo_heats/make_log.py --truth FILE   also the gross errors that were planted

The log is what the shop's instruments wrote, not what happened. What happened comes from
`blow_model.py`, which is built unlike the calculator; `melt_shop.py` adds the people and the
instruments. Nothing here imports the calculator, and nobody's heats are in it: every number is
invented within common practice.

The shop: `shop.toml`, vessel 2, three turns of three to four weeks in 2026 (5 January, 2 March,
8 June); between them its sister vessel works. About 20 heats a day. The first wait of a turn is
blank: the vessel was kept hot by a burner.

The operator has rules of thumb. The scrap box is made up before the hot metal is analysed, from
the last ladles, in whole lifts of the crane; when the analysis comes, ore in steps of 500 kg or
ferrosilicon in steps of 200 kg puts the difference right. Lime goes by silicon, in steps of
100 kg. Four crews have habits of their own. The blow is stopped on the flame, whose reading of
carbon scatters; a heat too cold or too high in phosphorus is blown again, one too hot is cooled
with ore. Errors of the last heats make the operator lean against them.

What drifts (see `Vessel`): shell loss and the bite of the lining grow with the age of the
lining, stirring plugs clog, a worn lance burns more CO and more iron; the oxygen meter reads
ever higher, 1.5 % by the end; hot-metal silicon wanders with the blast furnace.

What steps, with its day:
    2026-01-19 06:00  hot-metal thermometer recalibrated: it read 11 K too hot until then
    2026-03-02        relined: age 0, new plugs
    2026-03-14        lance of a new design: more post-combustion, less iron burnt
    a new lance after every 260 heats: 12 and 25 January, 8 and 26 March, 20 June
    2026-06-17        light scrap from another supplier: yield 6 points worse

One standard deviation of a reading: see `NOISE`. Missing: slag analysis on a third of heats,
dissolved oxygen on half, others now and then (`MISSING`). Gross errors on about 1.5 % of heats:
digits swapped, a unit or a decimal point wrong, the sample or the box of another heat.

The same seed gives the same log byte for byte, and the first heats of a longer log are those
of a shorter one: each heat draws from a stream of its own, and only uniform numbers are drawn
(their stream is the one numpy promises to keep).
"""

from __future__ import annotations

import argparse
import csv
import io
import sys
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from datetime import timedelta
from pathlib import Path
from typing import Any

HERE = Path(__file__).resolve().parent
sys.path.insert(0, str(HERE))
from blow_model import Vessel  # noqa: E402  these stand beside this file, in no package
from melt_shop import (  # noqa: E402
    COLUMNS,
    DECIMALS,
    ELEMENTS,
    MISSING,
    SCRAPS,
    SLAG,
    TURNS,
    Draw,
    Row,
    Shop,
    change_lance,
    next_wait,
    one_heat,
)

SEED = 2026
HEATS = 1500
#: Share of heats on which somebody slips.
GROSS = 0.018


@dataclass
class Slip:
    """A gross error that was planted: column, what kind, and both numbers as text."""

    heat_id: str
    column: str
    kind: str
    right: str
    written: str


def make_truth(heats: int = HEATS, seed: int = SEED) -> list[Row]:
    """Rows as the instruments would write them if nobody slipped and nothing went missing."""
    vessel = Vessel(age=1900, lance_age=120)
    shop = Shop(vessel, TURNS[0][1])
    rows = []
    for heat in range(heats):
        shop.heat = heat
        draw = Draw(seed, heat)
        wait = next_wait(shop, draw)
        change_lance(shop)
        log = one_heat(shop, draw, wait)
        minutes = float(log["blow_min"]) + 14.0
        if shop.turn_heat:
            shop.when += timedelta(minutes=round((wait or 0.0) + minutes + 7.0))
        log["heat_id"] = f"2-{26000 + heat + 1}"
        log["tapped_at"] = shop.when.strftime("%Y-%m-%dT%H:%M:%SZ")
        rows.append(log)
        shop.turn_heat += 1
        vessel.age += 1
        vessel.lance_age += 1
    return rows


def text_of(column: str, value: Any) -> str:
    """A cell as the shop writes it; blank where there is nothing."""
    if value is None:
        return ""
    if column not in DECIMALS:
        return str(value)
    decimals = DECIMALS[column]
    number = round(float(value), decimals)
    return f"{number:.{max(decimals, 0)}f}"


def lose(cells: dict[str, str], draw: Draw) -> None:
    """Blank what was not measured."""
    for name, share in MISSING.items():
        gone = draw.uniform() < share
        for column in [f"slag_{oxide}_pct" for oxide in SLAG] if name == "slag" else [name]:
            if gone:
                cells[column] = ""


def swapped(text: str, *, last: bool = False) -> str:
    """Two neighbouring digits that differ changed over: the first such pair, or the last.

    The leading digit stays.
    """
    digits = [place for place, sign in enumerate(text) if sign.isdigit()]
    lead = next((n for n, place in enumerate(digits) if text[place] != "0"), 0)
    pairs = list(zip(digits[lead + 1 :], digits[lead + 2 :], strict=False))
    for a, b in reversed(pairs) if last else pairs:
        if text[a] != text[b]:
            return text[:a] + text[b] + text[a + 1 : b] + text[a] + text[b + 1 :]
    return text


def scaled(text: str, column: str, factor: float) -> str:
    """A unit or a decimal point wrong."""
    more = 0 if factor > 1.0 else 3
    return f"{float(text) * factor:.{max(DECIMALS[column], 0) + more}f}"


#: What people do wrong, and how often of a hundred slips.
SLIPS: dict[str, tuple[float, tuple[str, ...], float]] = {
    "digits swapped": (34, ("hot_metal_kg", "end_temp_C", "heavy_scrap_kg", "burnt_lime_kg",
                            "hm_Si_pct", "oxygen_Nm3"), 0.0),
    "tonnes for kilograms": (10, ("hot_metal_kg", "burnt_lime_kg"), 0.001),
    "thousands for ones": (6, ("oxygen_Nm3",), 0.001),
    "decimal point": (16, ("end_C_pct", "end_P_pct", "hm_Si_pct"), 10.0),
    "steel sample of another heat": (
        12, ("end_C_pct", "end_Mn_pct", "end_P_pct", "end_S_pct"), 0.0),
    "ladle sample of another heat": (16, tuple(f"hm_{el}_pct" for el in ELEMENTS[:5]), 0.0),
    "scrap box of another heat": (8, tuple(f"{kind}_kg" for kind in SCRAPS), 0.0),
}  # fmt: skip


#: The form of the shop takes no more than this.
MOST = {"hm_Si_pct": 5.0, "end_temp_C": 1800.0}


def slip(cells: dict[str, str], before: dict[str, str] | None, draw: Draw) -> list[Slip]:
    """Plant a gross error now and then; what was planted."""
    slips, kind = draw.uniform() < GROSS, draw.choice({k: row[0] for k, row in SLIPS.items()})
    _, columns, factor = SLIPS[kind]
    if "another heat" not in kind:
        columns = (columns[int(draw.uniform() * len(columns))],)
    if not slips or before is None or "" in [cells[c] for c in columns]:
        return []
    planted = []
    for column in columns:
        right = cells[column]
        if "another heat" in kind:
            cells[column] = before[column]
        elif factor:
            cells[column] = scaled(right, column, factor)
        else:
            cells[column] = swapped(right, last=column == "end_temp_C")
        if column in MOST and float(cells[column]) > MOST[column]:
            cells[column] = right  # the form on the screen would not have taken it
        if cells[column] != right:
            planted.append(Slip(cells["heat_id"], column, kind, right, cells[column]))
    return planted


def make_log(heats: int = HEATS, seed: int = SEED) -> tuple[list[dict[str, str]], list[Slip]]:
    """The lines of the log, as text by column, and the gross errors among them."""
    lines, planted, before = [], [], None
    for heat, row in enumerate(make_truth(heats, seed)):
        draw = Draw(seed, heat, 1)
        cells = {column: text_of(column, row[column]) for column in COLUMNS}
        as_read = dict(cells)
        lose(cells, draw)
        planted += slip(cells, before, draw)
        lines.append(cells)
        before = as_read
    return lines, planted


def as_csv(rows: Sequence[dict[str, str]], columns: Sequence[str]) -> str:
    """Rows as the text of a CSV file, lines ending in a line feed."""
    out = io.StringIO()
    writer = csv.DictWriter(out, columns, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return out.getvalue()


def main(arguments: Sequence[str] | None = None) -> None:
    """Write the log."""
    parser = argparse.ArgumentParser(description="Make the log of an invented vessel.")
    parser.add_argument("--heats", type=int, default=HEATS)
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--out", type=Path, default=HERE / "heat_log.csv")
    parser.add_argument("--truth", type=Path, help="also write the gross errors planted")
    given = parser.parse_args(arguments)
    lines, planted = make_log(given.heats, given.seed)
    given.out.write_bytes(as_csv(lines, COLUMNS).encode())
    if given.truth:
        slips = [asdict(one) for one in planted]
        given.truth.write_bytes(as_csv(slips, tuple(Slip.__annotations__)).encode())


if __name__ == "__main__":
    main()
