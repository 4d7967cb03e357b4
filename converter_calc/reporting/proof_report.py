"""The proof out of sample as text and as one HTML page with its pictures; needs no network."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from converter_calc.reporting.html_sheet import Markup, element, joined
from converter_calc.reporting.learning_charts import (
    TITLES,
    calibration_figure,
    measured_figure,
    misses_figure,
)

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

    from converter_calc.learning.proof import Proof

#: Digits of an error of each quantity.
DIGITS = {"end_temp_C": 1, "end_C_pct": 4, "end_P_pct": 4, "end_Mn_pct": 4}
#: Published results, for context: other shops, other heats, other splits.
ANCHORS = (
    (
        "13,528 heats: mean absolute error 8.0 °C, 0.0069 % C, 0.0023 % P (Xie et al., High Temp."
        " Mater. Process. 43 (2024), 10.1515/htmp-2024-0016)"
    ),
    (
        "a production set: hit rates T 88 %, C 92 %, P 89 % (Bae et al., Metall. Mater. Trans. B 51"
        " (2020) 1632)"
    ),
    (
        "static charging alone: C within 0.02 % and T within 12 K together in 40 to 60 % of heats"
        " (common practice, no source)"
    ),
)
STYLE = """
body { font: 15px/1.45 system-ui, "DejaVu Sans", sans-serif; max-width: 1100px; margin: 2em auto;
  padding: 0 1em; color: #1b1f24; background: #fff; }
table { border-collapse: collapse; } th, td { padding: 3px 10px; text-align: right; }
th:first-child, td:first-child, th:nth-child(2), td:nth-child(2) { text-align: left; }
th { border-bottom: 1.5px solid #1b1f24; } td { border-bottom: 1px solid #d4d8de; }
.pair { display: grid; grid-template-columns: repeat(auto-fit, minmax(430px, 1fr)); gap: 1em; }
"""


def proof_text(proof: Proof) -> str:
    """Scores of every method as text, then how far the stated probabilities hold."""
    lines = [
        (
            f"Out of sample: {len(proof.rows)} heats in {len(proof.stages)} stages, each predicted"
            " from heats before it"
        ),
        f"  {'':<14}{'method':<20}{'heats':>7}{'mean abs. error':>20}{'bias':>10}{'hits':>16}",
    ]
    scores = proof.scores(without_misread=True)
    for row in scores.to_dict("records"):
        digits = DIGITS[row["quantity"]]
        name = row["quantity"] if row["method"] == "untuned" else ""
        error = f"{row['mae']:.{digits}f} ± {row['mae_error']:.{digits}f}"
        hits = f"{row['hit_pct']:.1f} ± {row['hit_error_pct']:.1f} %"
        lines.append(
            f"  {name:<14}{row['method']:<20}{row['heats']:>7}{error:>20}"
            f"{row['bias']:>+10.{digits}f}{hits:>16}"
        )
    lines += ["", *_order_lines(proof), *_misread_lines(proof), ""]
    lines.append("Stated intervals of the last method, and how often they held [%]")
    table = proof.calibration(levels=(0.5, 0.8, 0.95))
    for quantity, rows in table.groupby("quantity", sort=False):
        held = ", ".join(
            f"{100 * r['stated']:.0f}: {100 * r['held']:.0f}" for r in rows.to_dict("records")
        )
        lines.append(f"  {quantity:<14}{held}")
    lines += ["", _residual_line(proof), "", "For context, not our result:"]
    lines += [f"  {text}" for text in ANCHORS]
    return "\n".join(lines) + "\n"


def _order_lines(proof: Proof) -> list[str]:
    """What to know where the log does not say when heats were tapped."""
    import pandas as pd

    missing = int(pd.isna(pd.Series(proof.tapped_at, dtype=object)).sum())
    if not missing:
        return []
    return [f"{missing} of these heats have no time of tapping: they stand last, as in the log"]


def proof_document(proof: Proof) -> dict[str, Any]:
    """Scores and calibration as plain values, ready for JSON."""

    def rows(table: pd.DataFrame) -> list[dict[str, Any]]:
        return [
            {str(key): None if isinstance(x, float) and not math.isfinite(x) else x
             for key, x in row.items()}
            for row in table.to_dict("records")
        ]  # fmt: skip

    return {
        "heats": len(proof.rows),
        "stages": len(proof.stages),
        "scores": rows(proof.scores()),
        "scores_without_misread": rows(proof.scores(without_misread=True)),
        "intervals": rows(proof.calibration()),
        "hit_chances": rows(proof.hit_chances()),
        "residual_used_share": dict(proof.residual_used),
    }


def _misread_lines(proof: Proof) -> list[str]:
    out = proof.misread().sum(axis=0)
    told = ", ".join(f"{name} {count}" for name, count in zip(proof.names, out, strict=True))
    return [
        "Readings left out because every method misses them by far (the log errs there): " + told
    ]


def _residual_line(proof: Proof) -> str:
    told = ", ".join(f"{name} {100 * share:.0f} %" for name, share in proof.residual_used.items())
    return f"The model of what is left won, and was used, in this share of the stages: {told}"


def proof_html(proof: Proof, title: str = "Proof out of sample") -> str:
    """The whole proof as one HTML document: scores, misses in time, measured, calibration."""
    heats = proof.heats()
    methods = list(proof.predicted)
    best = methods[methods.index("untuned") + 3]
    parts: list[Markup] = [
        element("h1", title),
        element("p", f"{len(proof.rows)} heats in {len(proof.stages)} stages, each predicted from "
                "the heats before it; nothing is fitted to what comes."),
        element("h2", "Scores"),
        _table(proof.scores(without_misread=True)),
        *(element("p", line)
          for line in (*_order_lines(proof), *_misread_lines(proof), _residual_line(proof))),
        element("h2", "Scores with every reading"),
        _table(proof.scores()),
    ]  # fmt: skip
    for name in proof.names:
        parts.append(element("h2", TITLES[name].split(",")[0]))
        figures = [misses_figure(heats, name, methods), measured_figure(heats, name, best)]
        parts.append(element("div", *(_figure(figure) for figure in figures), class_="pair"))
    parts.append(element("h2", "Do the stated probabilities hold?"))
    parts.append(
        element(
            "div",
            _figure(calibration_figure(proof.calibration())),
            _figure(calibration_figure(proof.hit_chances())),
            class_="pair",
        )
    )
    parts.append(element("p", "Left: intervals of the end point. Right: the chance of a hit, heats "
                         "in five groups."))  # fmt: skip
    parts.append(element("h2", "For context, not our result"))
    parts.append(element("ul", *(element("li", text) for text in ANCHORS)))
    return (
        '<!doctype html><html lang="en"><head><meta charset="utf-8">'
        + element("title", title)
        + f"<style>{STYLE}</style><script>{_plotly()}</script></head><body>"
        + joined(parts)
        + "</body></html>"
    )


def _plotly() -> str:
    from plotly.offline import get_plotlyjs

    return str(get_plotlyjs())


def _figure(figure: go.Figure) -> Markup:
    return Markup(figure.to_html(full_html=False, include_plotlyjs=False))


def _table(scores: pd.DataFrame) -> Markup:
    head = ("quantity", "method", "heats", "mean abs. error", "bias", "hits, %")
    rows = [element("tr", *(element("th", text, scope="col") for text in head))]
    for row in scores.to_dict("records"):
        digits = DIGITS[row["quantity"]]
        cells = (
            row["quantity"], row["method"], row["heats"],
            f"{row['mae']:.{digits}f} ± {row['mae_error']:.{digits}f}",
            f"{row['bias']:+.{digits}f}", f"{row['hit_pct']:.1f} ± {row['hit_error_pct']:.1f}",
        )  # fmt: skip
        rows.append(element("tr", *(element("td", cell) for cell in cells)))
    return element("table", *rows)
