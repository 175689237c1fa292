"""The budget of each figure: every source as a row that is a number or says why it is 0.

The fit's linear response carries what a source does to the points to f0, Q and gain.
"""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from math import inf

import numpy as np

from bandproof.analysis.sensitivity import figure_response
from bandproof.analysis.types import FloatArray
from bandproof.analysis.uncertainty import Combined, Row, combine
from bandproof.bench.sources import Measured, Source
from bandproof.bench.types import QUANTITIES, Quantity

__all__ = ["MEANINGS", "ROWS", "budget_plain", "budgets", "dominating"]

ROWS = (
    "repeatability",
    "reseating",
    "reproducibility",
    "thru",
    "drift",
    "range to range",
    "compensation",
    "tap loading",
    "coupling corners",
    "channel skew",
    "linearity in",
    "linearity out",
    "hum",
    "settling",
    "generator",
    "temperature",
    "controls",
    "misfit",
    "channel gain",
    "source level",
    "definition",
)
MEANINGS = {
    "repeatability": "noise of the records, seen through the fit",
    "reseating": "contacts made anew",
    "reproducibility": "the check standard from day to day",
    "thru": "how well the path itself was measured",
    "drift": "the channels' gain since the thru",
    "range to range": "gain of another range of the scope",
    "compensation": "probes above their corner",
    "tap loading": "the probe's load on the test point",
    "linearity in": "the scope's converter at the stage's input is not straight",
    "linearity out": "the scope's converter at the stage's output is not straight",
    "hum": "mains above 1 kHz, where it is not fitted",
    "settling": "what every dwell leaves",
    "generator": "accuracy of its frequency",
    "temperature": "the room against the board's own",
    "misfit": "what a leakage would move",
    "channel gain": "the scope's channels, without a thru",
}
_NOTHING = 1e-9  # relative change of a figure per unit that is only rounding
_ZERO = "0, because "
_ELSEWHERE = {
    False: f"{_ZERO}what is common to all points lands wholly in gain",
    True: f"{_ZERO}it moves f0 alone",
}


def budgets(measured: Measured, listed: Sequence[Source]) -> dict[Quantity, Combined]:
    """Return the combined budget of each figure from the sources but noise, all rows in it."""
    fit = measured.fit
    frequency = np.array([point.frequency for point in measured.points])
    moved = figure_response(fit.theta[0], fit.free, frequency, measured.covariance)
    values = {"centre": float(fit.f0[0]), "q": float(fit.q[0]), "gain": float(abs(fit.gain[0]))}
    noise = {"centre": float(fit.u_f0[0]), "q": float(fit.u_q[0]), "gain": float(fit.u_gain[0])}
    return {
        quantity: combine(
            [
                Row(ROWS[0], "A", "normal", noise[quantity], 1.0, inf, "noise of the records, through the fit"),
                *(_row(source, quantity, moved[i], values[quantity]) for source in listed),
            ]
        )
        for i, quantity in enumerate(QUANTITIES)
    }


def _row(source: Source, quantity: Quantity, moved: FloatArray, value: float) -> Row:
    """Return a source as a row of one figure's budget; ``moved`` (N, 2) is the figure's response to the points."""
    effects = np.zeros(1)
    if source.shapes is not None:
        effects = moved[:, 0] @ source.shapes.real.T + moved[:, 1] @ source.shapes.imag.T
    if source.direct is not None:
        effects = np.append(effects, source.direct.get(quantity, 0.0))
    effect = float(effects.sum()) if np.count_nonzero(effects) <= 1 else float(np.linalg.norm(effects))
    distribution = source.distribution if np.count_nonzero(effects) <= 1 else "normal"
    row = Row(source.name, source.type, distribution, source.u, value * effect, source.dof, source.reason)
    if source.u and abs(effect) < _NOTHING:
        return replace(row, sensitivity=0.0, reason=_ELSEWHERE[source.direct is not None])
    if not source.u and not source.reason.startswith(_ZERO):
        return replace(row, reason=f"{_ZERO}its size is 0, {source.reason}")
    return row


def budget_plain(found: Mapping[Quantity, Combined]) -> dict[str, list[dict[str, object]]]:
    """Return budgets as plain values for the run file."""
    return {
        quantity: [
            {
                "source": row.name,
                "type": row.type,
                "distribution": row.distribution,
                "standard_uncertainty": row.standard_uncertainty,
                "sensitivity": row.sensitivity,
                "contribution": row.contribution,
                "degrees_of_freedom": row.dof if row.dof < inf else None,
                "reason": row.reason,
            }
            for row in budget.rows
        ]
        for quantity, budget in found.items()
    }


def dominating(budget: Combined) -> Row:
    """Return the row with the largest contribution."""
    return max(budget.rows, key=lambda row: row.contribution)
