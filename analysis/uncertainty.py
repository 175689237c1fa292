"""Uncertainty budgets.

Source: JCGM 100:2008, 5.1 (independent inputs) and annex G.4 (effective degrees of freedom, Welch-Satterthwaite).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import inf, isfinite, sqrt
from typing import Literal, TypeAlias

__all__ = ["Combined", "Distribution", "Row", "combine", "coverage_factor"]

Distribution: TypeAlias = Literal["normal", "uniform", "triangular", "arcsine", "t"]


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
    """A combined budget: rows, standard uncertainty, its type A part, effective dof, coverage factor k, U = k u."""

    rows: tuple[Row, ...]
    u: float
    u_type_a: float
    dof: float
    coverage_factor: float
    expanded: float


def combine(rows: Sequence[Row], *, coverage: float = 0.9545) -> Combined:
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
    return Combined(tuple(rows), u, u_type_a, dof, k, k * u)


def coverage_factor(dof: float, *, coverage: float = 0.9545) -> float:
    """Return the two-sided coverage factor from Student's t, dof truncated to a whole number (JCGM 100, G.4.1).

    Examples
    --------
    >>> round(coverage_factor(10.9), 2)
    2.28
    """
    from scipy.special import ndtri, stdtrit

    upper = 0.5 * (1 + coverage)
    return float(ndtri(upper)) if dof > 1e9 else float(stdtrit(max(1, int(dof)), upper))
