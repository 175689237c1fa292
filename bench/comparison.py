"""A fitted figure beside its design: what it is, how sure, within its limits or not."""

from functools import partial
from math import inf, log10, nan

from bandproof.analysis.decision import decide
from bandproof.analysis.fit import BandFit
from bandproof.analysis.uncertainty import Combined, probability_below
from bandproof.bench.circuit import Prediction
from bandproof.bench.quantities import engineering
from bandproof.bench.types import UNITS, Comparison, Quantity, Stage

__all__ = ["compared", "figure", "judged", "outside_by_design", "read_figure"]


def figure(fit: BandFit | None, quantity: Quantity) -> tuple[float, float]:
    """Return a fitted figure and its standard uncertainty from the noise of the points; NaN without a fit."""
    if fit is None:
        return nan, nan
    match quantity:
        case "centre":
            return float(fit.f0[0]), float(fit.u_f0[0])
        case "q":
            return float(fit.q[0]), float(fit.u_q[0])
        case "gain":
            return float(abs(fit.gain[0])), float(fit.u_gain[0])


def compared(
    stage: Stage,
    quantity: Quantity,
    prediction: Prediction,
    fit: BandFit | None,
    budget: Combined | None,
    doubt: str,
    reach: float = inf,
) -> Comparison:
    """Return a figure of a stage compared with its limits.

    ``doubt`` says why no verdict can be given, or nothing; ``reach`` how far that can move the figure.
    """
    value, repeatability = figure(fit, quantity)
    return judged(stage, quantity, prediction[quantity], value, repeatability, budget, doubt, reach)


def judged(
    stage: Stage,
    quantity: Quantity,
    predicted: float,
    value: float,
    repeatability: float,
    budget: Combined | None,
    doubt: str,
    reach: float = inf,
) -> Comparison:
    """Return a measured value of a figure compared with the limits of its stage, as `compared` does."""
    limit = stage.limits[quantity]
    decision = decide(
        value,
        budget.u if budget else 0.0,
        low=limit.lower,
        high=limit.upper,
        rule=limit.decides,
        expanded=budget.expanded if budget else 0.0,
        prior=limit.prior,
        below=partial(probability_below, budget.rows) if budget and budget.u else None,
        doubt=doubt,
        reach=reach + (budget.expanded if budget else 0.0),
    )
    return Comparison(
        quantity=quantity,
        unit=UNITS[quantity],
        designed=limit.designed,
        predicted=predicted,
        measured=value,
        repeatability=repeatability,
        standard_uncertainty=budget.u if budget else nan,
        expanded_uncertainty=budget.expanded if budget else nan,
        coverage_factor=budget.coverage_factor if budget else nan,
        rule=limit.rule,
        lower_limit=limit.lower,
        upper_limit=limit.upper,
        verdict=decision.verdict,
        conformance_probability=decision.probability,
        prior=limit.prior,
    )


def outside_by_design(stage: Stage, prediction: Prediction) -> list[str]:
    """Return what the stage's own parts cannot keep, so that the board is not blamed for its drawing."""
    return [
        f"its parts as drawn should give {quantity} {read_figure(quantity, prediction[quantity])}, outside its own "
        f"limits {read_figure(quantity, limit.lower)} to {read_figure(quantity, limit.upper)}: look at the design first"
        for quantity, limit in stage.limits.items()
        if not limit.lower <= prediction[quantity] <= limit.upper
    ]


def read_figure(quantity: Quantity, value: float) -> str:
    """Return a figure as people read it, with digits enough to see a limit missed by little."""
    return f"{20.0 * log10(value):.5g} dB" if quantity == "gain" else engineering(value, UNITS[quantity], 6)
