"""What makes the scatter of a heat, and what a better measurement is worth."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.learning.errors_of_inputs import ErrorModel
from converter_calc.learning.spread_draws import Draws
from converter_calc.learning.spread_numbers import Window, all_hits, interval
from converter_calc.learning.spread_shares import Chaos, fit_chaos

#: Draws that the polynomials of the shares are fitted to.
SHARES_DRAWS = 4096
#: Degree of the polynomials of the shares, and the share of every variance below which a random
#: number is given no products of two, and of three, with others.
DEGREE, MINOR = 3, (0.003, 0.05)


@dataclass(frozen=True)
class Share:
    """Part of the scatter that one group of errors makes, by result.

    errors : names of the errors; more than one where they go together. first : share of the
    variance by these alone; total : with all they have a part in, 0 to 1.
    """

    errors: tuple[str, ...]
    label: str
    first: dict[str, float]
    total: dict[str, float]


@dataclass(frozen=True)
class Worth:
    """What a better measurement would bring: probability of all windows gained, 0 to 1.

    halved, removed : gained with this error half as large, or gone; each with half its interval.
    """

    error: str
    label: str
    unit: str
    kind: str
    sd: float
    halved: tuple[float, float]
    removed: tuple[float, float]


@dataclass(frozen=True)
class Parts:
    """Polynomials fitted to some draws, and what is read off them.

    chaos : of the results named. straightened : of the same made straight, quadratic.
    """

    model: ErrorModel
    windows: tuple[Window, ...]
    names: tuple[str, ...]
    chaos: Chaos
    straightened: Chaos
    z: Array
    replicates: int

    @classmethod
    def of(
        cls, model: ErrorModel, drawn: Draws, windows: tuple[Window, ...], replicates: int
    ) -> Parts:
        """Fit to some of the draws; what is worth what is then asked of all."""
        rows = _leading(drawn.solved.size, replicates, SHARES_DRAWS)
        rows = rows[drawn.solved[rows]]
        names = tuple(dict.fromkeys([*(w.name for w in windows), "end_P_pct"]))
        values = [drawn.values[name][rows] for name in names]
        bent = [straight(name, x) for name, x in zip(names, values, strict=True)]
        z = drawn.z[:, rows].T
        chaos = fit_chaos(z, np.stack(values, axis=1), DEGREE, minor=MINOR)
        quadratic = fit_chaos(z, np.stack(bent, axis=1), 2, minor=MINOR)
        return cls(model, windows, names, chaos, quadratic, drawn.z, replicates)

    def explained(self) -> dict[str, float]:
        """Share of the variance of each result that the polynomials confirm."""
        return dict(zip(self.names, self.chaos.explained.tolist(), strict=True))

    def shares(self) -> tuple[Share, ...]:
        """Shares of the variance by group of errors, the largest first."""
        first, total = self.chaos.shares(self.model.groups)
        found = [
            Share(
                self.model.names_of(group),
                self.model.label_of(group),
                dict(zip(self.names, first[k].tolist(), strict=True)),
                dict(zip(self.names, total[k].tolist(), strict=True)),
            )
            for k, group in enumerate(self.model.groups)
        ]
        return tuple(sorted(found, key=lambda share: -max(share.total.values())))

    def worth(self) -> tuple[Worth, ...]:
        """Probability gained by each better measurement, the largest first."""
        moved = self.straightened.moved(self.z)
        before = self._hits(moved.plain)
        found = []
        for error in self.model.errors:
            gains = []
            for factor in (0.5, 0.0):
                hits = self._hits(moved.scaled(self.model.scaled(error.name, factor)))
                gain = hits.astype(float) - before
                gains.append(interval(gain.reshape(self.replicates, -1).mean(axis=1)))
            found.append(Worth(error.name, error.label, error.unit, error.kind, error.sd, *gains))
        return tuple(sorted(found, key=lambda worth: -worth.removed[0]))

    def _hits(self, table: list[Array]) -> Array:
        values = dict(zip(self.names, table, strict=True))
        return all_hits([straight_window(window) for window in self.windows], values)


def _leading(n: int, replicates: int, most: int) -> Array:
    """Places of the first draws of each scrambling, which are a fair sample again."""
    each = n // replicates
    taken = min(each, 1 << max((most // replicates).bit_length() - 1, 0))
    return (np.arange(replicates)[:, None] * each + np.arange(taken)).ravel()


def straight(name: str, values: Array) -> Array:
    """A result made nearly straight in the errors: carbon as C^-1/2, small contents as logs."""
    if name == "end_temp_C":
        return values
    return values**-0.5 if name == "end_C_pct" else np.log(np.maximum(values, 1e-12))


def straight_window(window: Window) -> Window:
    """The same window on the result made straight."""
    if window.name == "end_temp_C":
        return window
    with np.errstate(divide="ignore"):
        ends = straight(window.name, np.maximum([window.low, window.high], 0.0))
    low, high = sorted(float(end) for end in ends)
    low = low if np.isfinite(window.low) else -np.inf
    return replace(window, low=low, high=high)
