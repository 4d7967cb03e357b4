"""Slag practices compared on the same hot metal, each a chain of closed balances.

one_slag : the heat as planned. two_slags : part of a first, rich slag is poured off at high
carbon and low temperature. kept_slag : part of the end slag stays for the next heat, in the
steady state of such heats. pretreated : hot metal treated for Si, P and S before, little slag.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.streams import Stream
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.tolerances import CLOSURE
from converter_calc.basis.units import MJ
from converter_calc.metallurgy.practices_chain import (
    Chain,
    burnt_CO2_kg,
    handover_of,
    named,
    part_of,
)
from converter_calc.metallurgy.practices_comparison import Comparison
from converter_calc.metallurgy.practices_stages import (
    LIME_KEPT,
    METAL_KEPT,
    SLAG_KEPT,
    after_slag_off,
    pretreat,
    to_slag_off,
)
from converter_calc.metallurgy.practices_steady import steady_heats
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.outcome import Caution, Outcome, spread
from converter_calc.planning.plan import as_heats, plan_heats
from converter_calc.planning.solving import with_values

if TYPE_CHECKING:
    pass

TO_SLAG_OFF, AFTER_SLAG_OFF = "to slag-off", "after slag-off"


def compare_practices(heat: Any, practices: Iterable[str] | None = None) -> Comparison:
    """Plan heats by several slag practices.

    Parameters
    ----------
    heat : a heat file (path), its content as a dict, or a HeatTable of n heats. practices :
        names of PRACTICES; all where None. Their inputs stand in the sections slag_off,
        kept_slag and pretreated.

    Returns
    -------
    Comparison. Each practice starts from the hot metal of the plan with one slag, so that a
    heat that asks for tapped steel is compared at equal hot metal.

    Raises
    ------
    InputError : wrong input, an unknown practice, a slag-off carbon not between hot metal and
    aim. A practice that no charge can make is told in its status, nothing is raised.
    """
    names = list(dict.fromkeys(PRACTICES if practices is None else practices))
    for name in names:
        if name not in PRACTICES:
            allowed = ", ".join(PRACTICES)
            raise InputError([Fault("practices", f"{name!r} is unknown (allowed: {allowed})")])
    heats = with_grade_aims(as_heats(heat))
    chains: dict[str, list[tuple[Array, Chain]]] = {name: [] for name in names}
    for rows, block in _blocks(heats):
        for part, base in plan_heats(block):
            same = _at_hot_metal_of(base, block.take(part))
            for name in names:
                with np.errstate(all="ignore"):
                    chain = PRACTICES[name](same, base)
                chains[name].append((rows[part], chain))
    return Comparison(heats, chains)


def _blocks(heats: HeatTable) -> Iterable[tuple[Array, HeatTable]]:
    """Heats that give the same inputs of the practices.

    With scrap by preference each heat alone: what one stage leaves of a stock is the heat's own.
    """
    if heats.choices.scrap_order:
        for row in range(heats.n):
            yield np.array([row]), heats.take([row])
        return
    given = [heats.values[name] for name in ("slag_off_scrap_kg", "kept_slag_mass_kg")]
    key = np.isfinite(given[0]) + 2 * np.isfinite(given[1]).astype(int)
    for kind in np.unique(key):
        rows = np.flatnonzero(key == kind)
        yield rows, heats.take(rows)


def _at_hot_metal_of(base: Outcome, heats: HeatTable) -> HeatTable:
    if not base.ask.hot_metal:
        return heats
    mass = spread(base.hot_metal_kg, base.n)
    mass = np.where(np.isfinite(mass) & (mass > 0.0), mass, heats.values["aim_steel_kg"])
    ask = "scrap" if heats.choices.ask == "steel" else heats.choices.ask
    heats = replace(heats, choices=replace(heats.choices, ask=ask))
    return with_values(heats, hot_metal_kg=mass, aim_steel_kg=np.nan)


def _planned(heats: HeatTable) -> Outcome:
    """The plan of heats that pose one question."""
    ((_, outcome),) = plan_heats(heats)
    return outcome


def one_slag(heats: HeatTable, base: Outcome) -> Chain:
    """The heat as planned."""
    outcome = base if not base.ask.hot_metal else _planned(heats)
    return Chain(
        "one_slag",
        [("the heat", outcome)],
        outcome.streams,
        outcome.state.heat_loss_J,
        [],
        spread(outcome.state.hot_metal_kg, outcome.n),
    )


def two_slags(heats: HeatTable, base: Outcome) -> Chain:
    """A first slag at high carbon, part of it poured off, and a second one on what is left."""
    n, free = heats.n, base.ask.heat == "scrap_kg"
    first = _planned(to_slag_off(heats, free_scrap=free))
    second = _planned(after_slag_off(heats, first, free_scrap=free))
    off = heats.values["slag_off_share_pct"] * 0.01
    poured, stays, through = [], named(first.streams, "steel"), []
    new_names = {
        "slag": "slag_poured_off",
        "iron_droplets": "droplets_poured_off",
        "undissolved_lime": "lime_poured_off",
    }
    for stream in first.streams:
        if stream.name in new_names:
            poured.append(part_of(stream, off, new_names[stream.name]))
            stays.append(part_of(stream, 1.0 - off))
        elif stream.name != "steel":
            through.append(stream)
    taken = named(second.streams, "hot_metal", SLAG_KEPT, LIME_KEPT)
    rest = [stream for stream in second.streams if stream not in taken]
    chain = Chain(
        "two_slags",
        [(TO_SLAG_OFF, first), (AFTER_SLAG_OFF, second)],
        [*through, *poured, *rest],
        first.state.heat_loss_J + second.state.heat_loss_J,
        [handover_of("slag-off", stays, taken, n)],
        spread(first.state.hot_metal_kg, n),
        cautions=_slag_off_cautions(first),
    )
    _short_of_flux(chain, second)
    _over_the_whole(chain)
    for row, frees in enumerate(chain.frees):
        if chain.status[row] != "solved" and free:
            frees.insert(
                0, "slag-off at another temperature or carbon (slag_off.temp_C, slag_off.C_pct)"
            )
    return chain


def _over_the_whole(chain: Chain) -> None:
    """Heats whose stages keep a limit each, but not together."""
    checks = [
        (
            spread(chain.kind_kg("scrap"), chain.n),
            chain.first.heats.values["limit_scrap_box_kg"],
            "limit.scrap_box_kg: both stages take {have:.0f} kg of scrap, {most:.0f} are allowed",
            "another scrap share, or a higher limit",
        )
    ]
    for name, material in chain.first.heats.materials.items():
        stock = material.stock_kg
        if stock is not None and name in chain.first.charged_kg:
            text = f"stock: both stages take {{have:.0f}} kg of {name}, {{most:.0f}} are at hand"
            more = f"more {name} (materials.{name}.stock_kg)"
            checks.append(
                (spread(chain.charged_kg(name), chain.n), spread(stock, chain.n), text, more)
            )
    for have, most, text, frees in checks:
        for row in np.flatnonzero(have > most * (1.0 + CLOSURE)).tolist():
            if chain.status[row] == "solved":
                chain.status[row] = "infeasible"
                chain.binding[row] = text.format(have=have[row], most=most[row])
                chain.frees[row] = [frees]


def _short_of_flux(chain: Chain, second: Outcome) -> None:
    """Heats whose given lime or flux does not even make the first slag."""
    choices = second.heats.choices
    for name in (choices.lime, choices.magnesia_flux):
        left = second.heats.masses_kg.get(name)
        if left is None:
            continue
        for row in np.flatnonzero(left < 0.0).tolist():
            chain.status[row] = "infeasible"
            chain.binding[row] = (
                f"charge.{name}_kg: the first slag alone takes {-left[row]:.0f} kg more than given"
            )
            chain.frees[row] = [f"more {name}, or a first slag of lower basicity or MgO"]


def _slag_off_cautions(first: Outcome) -> list[Caution]:
    always = np.ones(1, dtype=bool)
    return [
        Caution(
            "slag-off-assumed",
            "slag_off.T_Fe_pct",
            always,
            "total iron of the first slag is given ({iron:.1f} %) and all of its lime dissolves: "
            "no published rule for either at slag-off is held here",
            {"iron": first.state.laws["T_Fe_pct"]},
        ),
        Caution(
            "slag-off-safety",
            "slag_off",
            always,
            "slag-off of a foaming slag: carbon monoxide at the mouth, slag and metal may run "
            "over, a wet slag pot explodes; follow the shop's own practice and local codes",
        ),
    ]


def kept_slag_practice(heats: HeatTable, __: Outcome) -> Chain:
    """Part of the end slag stays for the next heat; the steady state, or a given slag."""
    n, mass = heats.n, heats.values["kept_slag_mass_kg"]
    handovers = []
    wait_J: Num = 0.0
    gap, share = np.zeros(n), heats.values["kept_slag_share_pct"] * 0.01
    if np.isfinite(mass).all():
        outcome = _planned(with_values(heats, retained_slag_kg=mass))
    else:
        steady, gap, _ = steady_heats(heats, share, heats.values["kept_slag_temp_C"])
        outcome = _planned(steady)
        gives = [part_of(s, share) for s in named(outcome.streams, *STAYS)]
        takes = named(outcome.streams, SLAG_KEPT, LIME_KEPT, METAL_KEPT)
        wait_J = sum((s.enthalpy_J for s in gives), 0.0) - sum((s.enthalpy_J for s in takes), 0.0)
        handover = handover_of("slag kept", gives, takes, n)
        energy = handover.closures["energy"]
        energy.outflow = energy.outflow + wait_J / MJ
        handovers.append(handover)
    chain = Chain(
        "kept_slag",
        [("the heat", outcome)],
        outcome.streams,
        outcome.state.heat_loss_J,
        handovers,
        spread(outcome.state.hot_metal_kg, n),
        cautions=_kept_cautions(wait_J),
    )
    for row in np.flatnonzero(~(gap <= CLOSURE)).tolist():
        if chain.status[row] == "solved":
            chain.status[row] = "not converged"
            chain.binding[row] = "no steady state of the kept slag was found"
            chain.frees[row] = ["a smaller kept_slag.share_pct"]
    return chain


#: Streams of which a share stays with kept slag.
STAYS = ("slag", "undissolved_lime", "iron_droplets")


def _kept_cautions(wait_J: Any) -> list[Caution]:
    always = np.ones(1, dtype=bool)
    return [
        Caution(
            "kept-slag-cools",
            "kept_slag.temp_C",
            np.abs(np.asarray(wait_J)) > 0.0,
            "the kept slag loses {MJ:.0f} MJ between the heats, beside the heat loss of the heat",
            {"MJ": np.asarray(wait_J) / MJ},
        ),
        Caution(
            "kept-slag-safety",
            "kept_slag",
            always,
            "hot metal poured on liquid slag rich in iron oxide erupts: the slag has to be frozen "
            "(splashed, or stiffened with lime or dolomite) first; follow the shop's own practice "
            "and local codes",
        ),
    ]


def pretreated(heats: HeatTable, _: Outcome) -> Chain:
    """Hot metal treated for silicon, phosphorus and sulphur before; little slag."""
    n = heats.n
    table, done = pretreat(heats)
    outcome = _planned(table)
    truth = spread(outcome.state.hot_metal_kg, n) / table.values["hot_metal_kg"]
    before = Stream(
        "hot_metal_before",
        "in",
        "metal",
        done.hot_metal_temp_C,
        done.hot_metal_J * truth,
        {el: done.hot_metal_kg * truth * 0.01 * pct for el, pct in done.hot_metal_pct.items()},
    )
    removed = Stream(
        "removed_by_treatment",
        "out",
        "metal",
        done.hot_metal_temp_C,
        done.heat_J * truth,
        {el: kg * truth for el, kg in done.removed_kg.items()},
    )
    taken = named(outcome.streams, "hot_metal")
    rest = [stream for stream in outcome.streams if stream not in taken]
    gives = [before, part_of(removed, -1.0)]
    carbon = done.removed_kg["C"] * truth
    by_t = np.nan_to_num(heats.values["pretreated_CO2_kg_per_t"]) * 1e-3
    cautions = [
        Caution(
            "treatment-not-needed",
            f"pretreated.{element}_pct",
            mask,
            f"the hot metal holds less {element} than the treatment leaves: it stays as it is",
        )
        for element, mask in done.not_lowered.items()
    ]
    return Chain(
        "pretreated",
        [("the heat", outcome)],
        [before, removed, *rest],
        outcome.state.heat_loss_J,
        [handover_of("treatment", gives, taken, n)],
        done.hot_metal_kg * truth,
        CO2_kg=burnt_CO2_kg(carbon) + done.hot_metal_kg * truth * by_t,
        cautions=cautions,
    )


PRACTICES: dict[str, Callable[[HeatTable, Outcome], Chain]] = {
    "one_slag": one_slag,
    "two_slags": two_slags,
    "kept_slag": kept_slag_practice,
    "pretreated": pretreated,
}
