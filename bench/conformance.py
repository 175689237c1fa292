"""The probability that a whole board conforms: all its figures in one Monte-Carlo, with their correlations.

Source: JCGM 101:2008 (propagation of distributions) and JCGM 106:2012, 7 (conformance given what is known). What
correlates figures: within a stage the covariance of its fit, and every source that moves its figures together; between
stages the sources of `COMMON`, one instrument or room for all of them. Sources with several draws of their own (thru,
ranges, hum, settling) count as independent in each figure: of a band they mostly move one.
"""

from collections.abc import Sequence
from math import isfinite, sqrt
from typing import TypeAlias

import numpy as np

from bandproof.analysis.decision import Prior
from bandproof.analysis.types import FloatArray
from bandproof.analysis.uncertainty import Row, propagated
from bandproof.bench.types import QUANTITIES, StageResult

__all__ = ["COMMON", "board_errors", "board_probability"]

# One size for the whole board: what is drawn once moves every stage.
_EVERYWHERE = "drift, compensation, tap loading, linearity in, linearity out, generator, temperature, channel gain"
COMMON = frozenset(_EVERYWHERE.split(", "))
_TOGETHER = frozenset({"reseating", "misfit"})  # one size for the figures of a stage
DRAWS, SEED = 100_000, 106  # arbitrary: a probability of 0.997 to 0.0002; the same results give the same probability

Generator: TypeAlias = np.random.Generator


def board_probability(stages: Sequence[StageResult]) -> float | None:
    """Return the probability that every figure of every stage lies within its limits; None where one is not known."""
    figures = [stage.figures[quantity] for stage in stages for quantity in QUANTITIES if stage.figures]
    if not figures or not all(isfinite(figure.conformance_probability) for figure in figures):
        return None
    measured = np.array([figure.measured for figure in figures])
    rng = np.random.default_rng(SEED)
    errors = board_errors(stages, rng, DRAWS)
    believed = _updated(measured, errors, [figure.prior for figure in figures], rng)
    low = np.array([figure.lower_limit for figure in figures])
    high = np.array([figure.upper_limit for figure in figures])
    joint = float(((low <= believed) & (believed <= high)).all(axis=1).mean())
    return min(joint, *(figure.conformance_probability for figure in figures))  # never above one of its own


def board_errors(stages: Sequence[StageResult], rng: Generator, count: int) -> FloatArray:
    """Return so many draws (D, F) of the errors of all figures of the board: f0, Q, gain of each stage in turn."""
    common: dict[str, FloatArray] = {}
    found = []
    for stage in stages:
        rows = [list(stage.budgets[quantity].rows) for quantity in QUANTITIES]
        errors = np.zeros((count, len(QUANTITIES)))
        apart = np.zeros(len(QUANTITIES))
        for together in zip(*rows, strict=True):
            first, sizes = together[0], np.array([row.sensitivity * row.standard_uncertainty for row in together])
            if not sizes.any():
                continue
            if first.name == "repeatability":
                errors += _noise(stage, first, sizes, rng, count)
            elif first.name in COMMON:
                shape = next(row for row in together if row.contribution)
                if first.name not in common:
                    common[first.name] = _draws(shape, rng, count)
                errors += common[first.name][:, None] * sizes
            elif first.name in _TOGETHER:
                errors += _draws(next(row for row in together if row.contribution), rng, count)[:, None] * sizes
            else:
                apart += sizes**2
        found.append(errors + rng.normal(size=errors.shape) * np.sqrt(apart))
    return np.concatenate(found, axis=1)


def _noise(stage: StageResult, row: Row, sizes: FloatArray, rng: Generator, count: int) -> FloatArray:
    """Return draws (D, 3) of what the records' noise does to f0, Q and gain: sizes of the budget, correlated as fitted.

    A covariance that was estimated from few points makes them Student's t.
    """
    covariance = np.array(stage.theta_covariance)[:4, :4]  # ln f0, ln Q, real and imaginary part of the gain
    gain = np.array(stage.theta[2:4])
    along = np.zeros((3, 4))
    along[0, 0] = along[1, 1] = 1.0
    along[2, 2:] = gain / (gain @ gain)
    spread = propagated(along, covariance)
    u = np.sqrt(np.diag(spread))
    values, vectors = np.linalg.eigh(spread / np.outer(u, u))
    draws = rng.normal(size=(count, 3)) @ (vectors * np.sqrt(np.maximum(values, 0.0))).T * sizes
    tails = np.sqrt(rng.chisquare(row.dof, count) / row.dof) if isfinite(row.dof) else np.ones(count)
    noise: FloatArray = draws / tails[:, None]
    return noise


def _draws(row: Row, rng: Generator, count: int) -> FloatArray:
    """Return draws (D,) of a source of standard uncertainty 1, distributed as its row says."""
    match row.distribution:
        case "uniform":
            return rng.uniform(-sqrt(3.0), sqrt(3.0), count)
        case "triangular":
            return rng.triangular(-sqrt(6.0), 0.0, sqrt(6.0), count)
        case "arcsine":
            return sqrt(2.0) * np.sin(np.pi * rng.uniform(-0.5, 0.5, count))
        case "t" if isfinite(row.dof):
            return rng.standard_t(row.dof, count)
        case "normal" | "t":
            return rng.normal(size=count)


def _updated(measured: FloatArray, errors: FloatArray, priors: Sequence[Prior | None], rng: Generator) -> FloatArray:
    """Return draws (D, F) of the true values: measured less error, drawn towards the process where it is known.

    A draw of the process, measured with a drawn error, differs from what was measured; the regression on that
    difference takes it away. Exact for normal errors; of others it keeps mean and covariance.
    """
    believed: FloatArray = measured - errors
    known = [(i, prior) for i, prior in enumerate(priors) if prior is not None]
    if not known:
        return believed
    here = [i for i, _ in known]
    sd, mean = np.array([prior.sd for _, prior in known]), np.array([prior.mean for _, prior in known])
    process = mean + sd * rng.normal(size=(len(errors), len(known)))
    covariance = errors.T @ errors / len(errors)
    gain = np.linalg.solve(covariance[np.ix_(here, here)] + np.diag(sd**2), covariance[here])
    updated: FloatArray = believed - (believed[:, here] - process) @ gain
    return updated
