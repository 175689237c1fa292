"""Uncertainty budgets.

Source: JCGM 100:2008, 4.2 (repeated observations), 5.1 and 5.2 (independent and correlated inputs) and annex G.4
(effective degrees of freedom, Welch-Satterthwaite); the interval by propagation of distributions (JCGM 101:2008), here
by folding them on a grid instead of by drawing.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import inf, isfinite, sqrt
from typing import Literal, TypeAlias

import numpy as np

from bandproof.analysis.types import FloatArray

__all__ = [
    "COVERAGE",
    "Combined",
    "Distribution",
    "Row",
    "combine",
    "coverage_factor",
    "half_width",
    "mean_and_covariance",
    "probability_below",
    "propagated",
    "share",
]

Distribution: TypeAlias = Literal["normal", "uniform", "triangular", "arcsine", "t"]
COVERAGE = 0.9545  # of every U: that of two standard uncertainties of a normal distribution
_WIDEST = 12.0  # standard uncertainties the grid reaches to, or twice the widest row's coverage factor
_CELLS = 4096


@dataclass(frozen=True, slots=True)
class Row:
    """One source of uncertainty.

    Attributes
    ----------
    name : str
    type : "A" or "B"
        Evaluated from observations, or otherwise.
    distribution : Distribution
    standard_uncertainty : float
        In the source's own unit.
    sensitivity : float
        Change of the result per unit of the source.
    dof : float
        Degrees of freedom, inf where the uncertainty is taken as known.
    reason : str
        Where the number comes from; for a row of 0, why it does not apply.
    """

    name: str
    type: Literal["A", "B"]
    distribution: Distribution
    standard_uncertainty: float
    sensitivity: float
    dof: float
    reason: str

    def __post_init__(self) -> None:
        if not (self.standard_uncertainty >= 0 and isfinite(self.standard_uncertainty)):
            raise ValueError(
                f"row {self.name!r}: standard_uncertainty must not be negative, found {self.standard_uncertainty!r}"
            )
        if not isfinite(self.sensitivity):
            raise ValueError(f"row {self.name!r}: sensitivity must be finite, found {self.sensitivity!r}")
        if not self.dof > 0:
            raise ValueError(f"row {self.name!r}: dof must be positive, found {self.dof!r}")
        if not self.reason:
            raise ValueError(f"row {self.name!r}: reason is empty: say where the number comes from")

    @property
    def contribution(self) -> float:
        """Standard uncertainty of the result from this row alone."""
        return abs(self.sensitivity) * self.standard_uncertainty


@dataclass(frozen=True, slots=True)
class Combined:
    """A combined budget.

    Rows; standard uncertainty and its type A part; effective degrees of freedom; U, the half-width of the interval that
    holds the value with `COVERAGE`; coverage factor U / u.
    """

    rows: tuple[Row, ...]
    u: float
    u_type_a: float
    dof: float
    coverage_factor: float
    expanded: float


def combine(rows: Sequence[Row], *, coverage: float = COVERAGE) -> Combined:
    """Return the combined budget of independent rows; no row is left out.

    Examples
    --------
    >>> fit = Row("fit", "A", "normal", 3.0, 1.0, inf, "covariance of the fit")
    >>> budget = combine([fit, Row("thru", "B", "normal", 2.0, 2.0, inf, "certificate")])
    >>> print(f"{budget.u:.3f} {budget.coverage_factor:.3f} {budget.expanded:.3f}")
    5.000 2.000 10.000
    """
    if not rows:
        raise ValueError("a budget needs at least one row")
    u = sqrt(sum(row.contribution**2 for row in rows))
    u_type_a = sqrt(sum(row.contribution**2 for row in rows if row.type == "A"))
    spread = sum((row.contribution / u) ** 4 / row.dof for row in rows) if u else 0.0
    dof = 1 / spread if spread else inf
    k = coverage_factor(dof, coverage=coverage)
    expanded = half_width(rows, coverage=coverage) if u else 0.0
    return Combined(tuple(rows), u, u_type_a, dof, expanded / u if u else k, expanded)


def share(row: Row, budget: Combined) -> float:
    """Return a row's part of the budget's variance, 0 to 1."""
    return (row.contribution / budget.u) ** 2 if budget.u else 0.0


def coverage_factor(dof: float, *, coverage: float = COVERAGE) -> float:
    """Return the two-sided coverage factor from Student's t, dof truncated to a whole number (JCGM 100, G.4.1).

    Examples
    --------
    >>> round(coverage_factor(10.9), 2)
    2.28
    """
    from scipy.special import ndtri, stdtrit

    upper = 0.5 * (1 + coverage)
    return float(ndtri(upper)) if dof > 1e9 else float(stdtrit(max(1, int(dof)), upper))


def mean_and_covariance(observations: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the means (N,) of repeated observations (n, N) made together, and the covariance (N, N) of these means.

    Source: JCGM 100:2008, 4.2 and 5.2.3, type A evaluation with n - 1 degrees of freedom.

    Raises
    ------
    ValueError
        Fewer than two observations, or not an (n, N) array.

    Examples
    --------
    >>> mean, covariance = mean_and_covariance(np.array([[1.0, 5.0], [2.0, 7.0], [3.0, 9.0]]))
    >>> mean.tolist(), (3 * covariance).tolist()
    ([2.0, 7.0], [[1.0, 2.0], [2.0, 4.0]])
    """
    if observations.ndim != 2 or len(observations) < 2:
        raise ValueError(f"observations must be (n, N) with n of 2 or more, found {observations.shape}")
    mean = observations.mean(axis=0)
    away = observations - mean
    return mean, away.T @ away / (len(away) * (len(away) - 1))


def propagated(sensitivity: FloatArray, covariance: FloatArray) -> FloatArray:
    """Return the covariance (..., M, M) of results from that of their correlated inputs (..., N, N).

    ``sensitivity`` (..., M, N) has the derivatives of each result by each input. Source: JCGM 100:2008, 5.2.2.

    Examples
    --------
    >>> propagated(np.array([[1.0, 1.0]]), np.array([[1.0, -0.5], [-0.5, 1.0]])).tolist()
    [[1.0]]
    """
    covariance_of_results: FloatArray = sensitivity @ covariance @ np.swapaxes(sensitivity, -1, -2)
    return covariance_of_results


def half_width(rows: Sequence[Row], *, coverage: float = COVERAGE) -> float:
    """Return the half-width of the interval round 0 that holds the sum of independent rows with a probability.

    A row of finite degrees of freedom counts as a scaled t distribution (JCGM 101, 6.4.9). Where the rows are normal,
    they are taken together and nothing is folded: the half-width is then k u.

    Examples
    --------
    >>> flat = Row("a", "B", "uniform", 1.0, 1.0, inf, "half-width 3**0.5")
    >>> round(half_width([flat], coverage=0.95) / 3**0.5, 3)
    0.95
    """
    plain = _unfolded(rows)
    if plain is not None:
        return coverage_factor(plain.dof, coverage=coverage) * plain.contribution
    edge, cells = _folded_rows(rows)
    return _quantile(cells, edge[1] - edge[0], coverage)


def probability_below(rows: Sequence[Row], x: FloatArray | float) -> FloatArray:
    """Return the probability (...) that the sum of independent rows, distributed as for `half_width`, is below x (...).

    Examples
    --------
    >>> flat = Row("a", "B", "uniform", 1.0, 1.0, inf, "half-width 3**0.5")
    >>> probability_below([flat], np.array([-2.0, 0.0, 0.5 * 3**0.5, 2.0])).round(4).tolist()
    [0.0, 0.5, 0.75, 1.0]
    """
    plain, x = _unfolded(rows), np.asarray(x, dtype=np.float64)
    if plain is not None:
        return _distribution("t", plain.dof, x / plain.contribution)
    edge, cells = _folded_rows(rows)
    lost = 0.5 * (1.0 - cells.sum())  # beyond the grid, half on each side
    below: FloatArray = np.interp(x, edge, lost + np.concatenate([[0.0], np.cumsum(cells)]), left=0.0, right=1.0)
    return below


def _unfolded(rows: Sequence[Row]) -> Row | None:
    """Return the one normal or t row that the sum of all rows is, where it is one."""
    normal, others = _parted(rows)
    together = sqrt(sum(row.contribution**2 for row in normal))
    if not others:
        return Row("normal rows", "B", "normal", together, 1.0, inf, "their root of the sum of squares")
    if len(others) == 1 and not together and others[0].distribution in ("normal", "t"):
        return others[0]
    return None


def _parted(rows: Sequence[Row]) -> tuple[list[Row], list[Row]]:
    """Return the rows that add up to a normal one, and the others that contribute."""
    normal = [row for row in rows if row.distribution in ("normal", "t") and not isfinite(row.dof)]
    return normal, [row for row in rows if row not in normal and row.contribution]


def _folded_rows(rows: Sequence[Row]) -> tuple[FloatArray, FloatArray]:
    """Return the edges (n + 1,) of a grid and the probability (n,) that the sum of the rows lies in each cell."""
    normal, others = _parted(rows)
    together = sqrt(sum(row.contribution**2 for row in normal))
    u = sqrt(together**2 + sum(row.contribution**2 for row in others))
    widest = max(_WIDEST, *(2.0 * coverage_factor(row.dof) for row in others))
    edge = np.linspace(-widest * u, widest * u, _CELLS + 1)
    parts = [np.diff(_distribution(row.distribution, row.dof, edge / row.contribution)) for row in others]
    if together:
        parts.append(np.diff(_distribution("normal", inf, edge / together)))
    folded = parts[0]
    for part in parts[1:]:
        folded = _folded(folded, part)
    return edge, folded


def _distribution(name: Distribution, dof: float, x: FloatArray) -> FloatArray:
    """Return the distribution function at x standard deviations (for a t: of its scale)."""
    from scipy.special import ndtr, stdtr

    result: FloatArray
    match name:
        case "normal" | "t" if isfinite(dof):
            result = np.asarray(stdtr(dof, x), dtype=np.float64)
        case "normal" | "t":
            result = np.asarray(ndtr(x), dtype=np.float64)
        case "uniform":
            result = np.clip(0.5 + 0.5 * x / sqrt(3.0), 0.0, 1.0)
        case "triangular":
            at = np.clip(x / sqrt(6.0), -1.0, 1.0)
            result = 0.5 + at - 0.5 * at * np.abs(at)
        case "arcsine":
            result = 0.5 + np.arcsin(np.clip(x / sqrt(2.0), -1.0, 1.0)) / np.pi
    return result


def _folded(first: FloatArray, second: FloatArray) -> FloatArray:
    """Return the cell probabilities of the sum of two independent variables on the same grid."""
    size = 2 * _CELLS
    whole = np.fft.irfft(np.fft.rfft(first, size) * np.fft.rfft(second, size), size)
    # Cell i stands for its middle: two middles sum to an edge, so neighbouring results share half each.
    start = _CELLS // 2 - 1
    folded: FloatArray = 0.5 * (whole[start : start + _CELLS] + whole[start + 1 : start + 1 + _CELLS])
    return folded


def _quantile(cells: FloatArray, width: float, coverage: float) -> float:
    """Return how far from the middle the cells hold the wanted probability."""
    half = _CELLS // 2
    both = cells[half:] + cells[:half][::-1]
    held = np.concatenate([[0.0], np.cumsum(both)])  # what lies beyond the grid is held by no interval
    return float(np.interp(coverage, held, width * np.arange(half + 1)))
