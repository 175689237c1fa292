"""What parts within their tolerances make of a stage's figures: their spread, and whether figures lie outside it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np

from bandproof.analysis.spread import uniform_variance
from bandproof.analysis.types import FloatArray

__all__ = ["LEVEL", "Circuit", "Scan", "Seen", "covariance", "least_distance", "outside"]

LEVEL = 0.99  # probability that a healthy board is not accused, at least
_FINEST = 1e-6  # relative; no figure is known better, and covariances stay regular
_LOG_FACTORS = np.log(10.0) * np.linspace(-3.0, 3.0, 25)  # where a wrong part is looked for


@dataclass(frozen=True, slots=True, eq=False)
class Scan:
    """What a stage gives with one part times K factors: (K,) ln factors, (K, 3) figures, (K, 3, P) their slopes.

    NaN where there is no band.
    """

    log_factors: FloatArray
    figures: FloatArray
    slopes: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Circuit:
    """What a stage is made of and what it gives.

    Attributes
    ----------
    parts, kinds : tuples of P str
        Names, and what sort of part each is.
    values, tolerances : (P,) float arrays
        As drawn; relative.
    nominal : (3,) float array
        Predicted ln f0, ln Q, ln gain.
    slopes : (3, P) float array
        Their derivatives by the ln of each part's value.
    figures : callable
        Takes (K, P) values, returns (K, 3), NaN where there is no band.
    sensitivities : callable
        Takes (K, P) values and the (K, 3) figures they give, returns (K, 3, P) slopes.
    """

    parts: tuple[str, ...]
    kinds: tuple[str, ...]
    values: FloatArray
    tolerances: FloatArray
    nominal: FloatArray
    slopes: FloatArray
    figures: Callable[[FloatArray], FloatArray]
    sensitivities: Callable[[FloatArray, FloatArray], FloatArray]
    _scans: dict[int, Scan] = field(default_factory=dict)
    _swaps: dict[tuple[int, int], Scan] = field(default_factory=dict)

    def scan(self, part: int) -> Scan:
        """Return what the stage gives with one part at factors from a thousandth to a thousand; kept."""
        if part not in self._scans:
            values = np.tile(self.values, (len(_LOG_FACTORS), 1))
            values[:, part] *= np.exp(_LOG_FACTORS)
            figures = self.figures(values)
            self._scans[part] = Scan(_LOG_FACTORS, figures, self.sensitivities(values, figures))
        return self._scans[part]

    def swapped(self, a: int, b: int) -> Scan:
        """Return what the stage gives with two parts exchanged, K = 1; kept."""
        if (a, b) not in self._swaps:
            values = self.values[None].copy()
            values[:, [a, b]] = values[:, [b, a]]
            figures = self.figures(values)
            self._swaps[a, b] = Scan(np.zeros(1), figures, self.sensitivities(values, figures))
        return self._swaps[a, b]


@dataclass(frozen=True, slots=True, eq=False)
class Seen:
    """A stage's measured ln f0, ln Q, ln gain (3,) and their covariance (3, 3)."""

    figures: FloatArray
    covariance: FloatArray


def covariance(circuit: Circuit, slopes: FloatArray, seen: Seen, but: int | None = None) -> FloatArray:
    """Return the covariance (..., 3, 3) of figures: measurement, and parts uniform within tolerance, all but one.

    Source: JCGM 100:2008, 5.1.2.
    """
    variance = uniform_variance(circuit.tolerances)
    if but is not None:
        variance[but] = 0.0
    total: FloatArray = np.einsum("...ip,p,...jp->...ij", slopes, variance, slopes) + _measured(seen)
    return total


def outside(circuits: Sequence[Circuit], seen: Sequence[Seen]) -> list[int]:
    """Return the stages whose figures no parts within tolerance give, at a level that holds for the whole board."""
    from scipy.special import chdtri

    bound = float(chdtri(3, 1.0 - LEVEL ** (1.0 / max(1, len(circuits)))))
    return [
        i
        for i, (circuit, one) in enumerate(zip(circuits, seen, strict=True))
        if not _plainly_inside(circuit, one, bound) and least_distance(circuit, one) > bound
    ]


def _plainly_inside(circuit: Circuit, seen: Seen, bound: float) -> bool:
    """Whether the likeliest normal parts are within tolerance and give the figures: then nothing need be solved."""
    away = seen.figures - circuit.nominal
    weighted = np.linalg.solve(covariance(circuit, circuit.slopes, seen), away)
    parts = uniform_variance(circuit.tolerances) * (circuit.slopes.T @ weighted)
    left = away - circuit.slopes @ parts
    close = float(left @ np.linalg.solve(_measured(seen), left)) < 0.5 * bound
    return close and bool(np.all(np.abs(parts) < np.log1p(circuit.tolerances)))


def least_distance(circuit: Circuit, seen: Seen, *, rounds: int = 3) -> float:
    """Return the least squared Mahalanobis distance from the figures to what parts within tolerance give.

    The bounded linear problem is solved anew at its own solution, because figures are not linear in 20 % capacitors.
    """
    from scipy.optimize import lsq_linear

    white = np.linalg.inv(np.linalg.cholesky(_measured(seen)))
    bounds = np.log1p(-circuit.tolerances), np.log1p(circuit.tolerances)
    at, figures, slopes = np.zeros(len(circuit.parts)), circuit.nominal, circuit.slopes
    least = np.inf
    for _ in range(rounds):
        target = seen.figures - figures + slopes @ at
        at = np.clip(lsq_linear(white @ slopes, white @ target, bounds, method="bvls").x, *bounds)
        values = (circuit.values * np.exp(at))[None]
        figures = circuit.figures(values)[0]
        if not np.isfinite(figures).all():
            break
        slopes = circuit.sensitivities(values, figures[None])[0]
        least = min(least, float(np.sum((white @ (seen.figures - figures)) ** 2)))
    return least


def _measured(seen: Seen) -> FloatArray:
    regular: FloatArray = seen.covariance + _FINEST**2 * np.eye(3)
    return regular
