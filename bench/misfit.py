"""What speaks against a stage's fit: lack of fit, distortion, overload, a delay no op-amp and no bench explains."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import inf, log10, nan, pi, sqrt

import numpy as np
from scipy.special import chdtrc

from bandproof.analysis.fit import BandFit, fit_bands
from bandproof.analysis.models import band_response
from bandproof.analysis.sensitivity import explained_chi_square, figure_response
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.bench.thru import Path
from bandproof.bench.types import Bench, Board, Point, Quantity

__all__ = ["Misfit", "StageFit", "arrays", "look_for_misfit"]

_SIGNIFICANT = 1e-4  # noise alone makes a chi-square this unlikely once in ten thousand stages
_MATERIAL = 1.0 / 3.0  # of U: a shift below it is not worth a doubt
_FARTHEST = 3.0  # times what a leakage moves a figure: as far as a misfit may; arbitrary
_NOISE = 5.0  # standard uncertainties a closing point may differ by
_DRIFTED = 0.01  # and this part of it; arbitrary, far above what a bench drifts in a minute
_CERTAIN = 3.0  # times U of the delay


@dataclass(frozen=True, slots=True, eq=False)
class StageFit:
    """A stage's fit and what it was made of; without a fit the reason in words.

    ``response`` (N,) and ``covariance`` (N, 2, 2) are those of the points with their ``paths`` divided out.
    """

    points: tuple[Point, ...]
    fit: BandFit | None
    reason: str
    response: ComplexArray
    covariance: FloatArray
    paths: tuple[Path | None, ...]

    @property
    def residual(self) -> ComplexArray:
        """Response less fit, (N,)."""
        assert self.fit is not None
        residual: ComplexArray = self.response - band_response(self.fit.theta, self.frequency[None])[0]
        return residual

    @property
    def frequency(self) -> FloatArray:
        """Hz, (N,)."""
        return np.array([point.frequency for point in self.points])


@dataclass(frozen=True, slots=True)
class Misfit:
    """What was found against a fit.

    ``shifts`` says how far a model with leakage moves each figure (empty where the misfit is not significant);
    ``distorted`` is the worst distortion of a used point above -40 dB, as a ratio, else 0; ``changed`` says that
    the first point, measured again at the end, was not what it had been.
    """

    reduced_chi_square: float
    significant: bool
    shifts: Mapping[Quantity, float]
    distorted: float
    changed: str
    alarms: tuple[str, ...]

    def doubt(self, expanded: Mapping[Quantity, float]) -> str:
        """Return why the figures cannot be trusted, or nothing; ``expanded`` are their U."""
        if self.changed:
            return self.changed
        if self.distorted:
            return (
                f"the signal is distorted ({20.0 * log10(self.distorted):.0f} dB): the stage clips below the planned "
                "level, or its supply is low"
            )
        moved = [name for name, shift in self.shifts.items() if not abs(shift) <= _MATERIAL * expanded.get(name, 0.0)]
        if moved:
            return (
                f"the points do not follow a second-order band (chi-square {self.reduced_chi_square:.3g} times what "
                f"noise and declared errors give); a leakage would move {' and '.join(moved)} by more than a third of U"
            )
        return ""

    def reach(self, quantity: Quantity) -> float:
        """Return how far what is doubted can move a figure: no bound is known of a change, clipping, or no model."""
        if self.changed or self.distorted or not self.shifts:
            return inf
        return _FARTHEST * abs(self.shifts[quantity])


def arrays(points: Sequence[Point]) -> tuple[FloatArray, ComplexArray, FloatArray]:
    """Return frequency (N,), response (N,) and covariance (N, 2, 2) of points."""
    covariance = np.array([[[a, b], [b, c]] for a, b, c in (point.covariance for point in points)])
    return np.array([p.frequency for p in points]), np.array([p.response for p in points]), covariance


def look_for_misfit(
    board: Board, bench: Bench, points: Sequence[Point], found: StageFit, systematic: ComplexArray
) -> Misfit:
    """Return what speaks against a stage's fit; ``systematic`` (K, N) are known errors of the points, of unit size."""
    distorted = max((p.distortion for p in found.points if "distorted" in p.flags), default=0.0)
    alarms = _overloads(points)
    if found.fit is None or not found.fit.dof[0]:
        return Misfit(nan, False, {}, distorted, "", tuple(alarms))
    fit, dof = found.fit, float(found.fit.dof[0])
    data = (fit.theta[0], fit.free, found.frequency, found.covariance)
    squares = explained_chi_square(*data, found.residual, systematic)
    significant = float(chdtrc(dof, squares)) < _SIGNIFICANT
    moved = figure_response(*data)[3]  # the delay's
    effects = moved[:, 0] @ systematic.real.T + moved[:, 1] @ systematic.imag.T
    alarms += _delay(board, bench, found, float(np.hypot(fit.u_delay[0], np.linalg.norm(effects))))
    shifts = _with_leakage(found) if significant else {}
    return Misfit(squares / dof, significant, shifts, distorted, _changed(points), tuple(alarms))


def _changed(points: Sequence[Point]) -> str:
    """Return in words that a closing point is not its batch's first point again, or nothing."""
    first = None
    for point in points:
        if point.purpose == "curve" and first is None:
            first = point
        elif point.purpose == "closing" and first is not None:
            noise = sqrt(sum(p.covariance[0] + p.covariance[2] for p in (first, point)))
            if not abs(point.response - first.response) <= _NOISE * noise + _DRIFTED * abs(first.response):
                return (
                    f"the first point ({first.frequency:.6g} Hz) read {abs(first.response):.4g} V/V and at the end "
                    f"{abs(point.response):.4g}: something changed during the sweep (supply, probe, range, heat)"
                )
            first = None
    return ""


def _with_leakage(found: StageFit) -> dict[Quantity, float]:
    """Return how far the admissible larger model moves each figure; everything, when it cannot be fitted."""
    frequency, small = found.frequency, found.fit
    if small is None or 2 * len(frequency) < 7:
        return {"centre": np.inf, "q": np.inf, "gain": np.inf}
    large = fit_bands(frequency[None], found.response[None], found.covariance[None], leakage=True, start=small.theta)
    return {
        "centre": float(large.f0[0] - small.f0[0]),
        "q": float(large.q[0] - small.q[0]),
        "gain": float(abs(large.gain[0]) - abs(small.gain[0])),
    }


def _overloads(points: Sequence[Point]) -> list[str]:
    lost = [point for point in points if "overload" in point.flags and point.purpose != "low-level"]
    if not lost:
        return []
    reach = max(point.ranges[1] for point in lost)
    count = "1 record was" if len(lost) == 1 else f"{len(lost)} records were"
    return [f"{count} overloaded (range of the output tap up to {reach:.3g} V) and left out"]


def _delay(board: Board, bench: Bench, found: StageFit, u: float) -> list[str]:
    """Return an alarm about the bench when the fitted delay is beyond what op-amp and channel skew explain."""
    if found.fit is None:
        return []
    delay = float(found.fit.delay[0])
    skew = 0.0 if all(found.paths) else 2.0 * bench.accuracy.channel_skew  # a thru holds it
    allowed = 1.0 / (2.0 * pi * board.op_amp.gbw) + skew + _CERTAIN * u
    if abs(delay) <= allowed:
        return []
    text = (
        f"the fit needs a delay of {delay * 1e9:.0f} ns, op-amp and channels explain {allowed * 1e9:.0f} ns: "
        "check the channels' skew, probes and cables; Q may be wrong"
    )
    return [text]
