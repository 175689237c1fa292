"""What the level says: a linear stage on straight converters has the same gain at every level."""

from collections.abc import Mapping, Sequence
from itertools import product
from math import inf, sqrt

import numpy as np

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.models import band_response
from bandproof.analysis.sensitivity import fitted_sizes
from bandproof.analysis.types import FloatArray
from bandproof.bench.misfit import StageFit, arrays
from bandproof.bench.sources import departures
from bandproof.bench.thru import Path, Ranges, corrected
from bandproof.bench.types import Bench, Point

__all__ = ["level_alarms"]

_IMPOSSIBLE = 12.1  # chi-square of one degree of freedom that noise exceeds once in two thousand stages
_FEWEST = 3


def level_alarms(
    bench: Bench, points: Sequence[Point], found: StageFit, known: Mapping[Ranges, Path], expanded_gain: float
) -> list[str]:
    """Return alarms about a stage whose gain at its level is not that of other levels tried."""
    if found.fit is None:
        return []
    return [*_between_batches(points, found, known, expanded_gain), *_converters(bench, points, found, known)]


def _between_batches(
    points: Sequence[Point], found: StageFit, known: Mapping[Ranges, Path], expanded_gain: float
) -> list[str]:
    """Return an alarm when the gain at the level first tried is not the gain at the lower one that was used."""
    used = max(point.amplitude for point in found.points)
    higher = [p for p in points if p.purpose == "curve" and p.amplitude > 1.01 * used and "overload" not in p.flags]
    if found.fit is None or len(higher) < _FEWEST:
        return []
    frequency, response, covariance = arrays(higher)
    response, covariance, _ = corrected(higher, response, covariance, known)
    before = fit_bands(frequency[None], response[None], covariance[None])
    gains = [float(abs(fit.gain[0])) for fit in (before, found.fit)]
    if abs(gains[0] - gains[1]) <= sqrt(expanded_gain**2 + (2.0 * float(before.u_gain[0])) ** 2):
        return []
    change = 100.0 * (gains[0] / gains[1] - 1.0)
    return [f"nonlinear: its gain differs by {change:+.2f} % between {higher[0].amplitude:.3g} V and {used:.3g} V"]


def _converters(bench: Bench, points: Sequence[Point], found: StageFit, known: Mapping[Ranges, Path]) -> list[str]:
    """Return an alarm when curve and low-level point ask for converters less straight than they are declared.

    The sizes of both departures are fitted beside the band, within what is declared and without bounds: a chi-square
    that falls further than noise makes it fall once in two thousand stages says that the bounds do not hold.
    """
    low = [p for p in points if p.purpose == "low-level" and "overload" not in p.flags]
    used = [*found.points, *(point for point in low if point.ranges == found.points[0].ranges)]
    if found.fit is None or len({point.ranges for point in used}) > 1:
        return []  # another range has another gain
    frequency, response, covariance = arrays(used)
    response, covariance, along = corrected(used, response, covariance, known)
    theta, free = found.fit.theta[0], found.fit.free
    residual = response - band_response(theta[None], frequency[None])[0]
    shapes = np.array([departures(used, along, channel) for channel in (0, 1)])
    sizes, spread = fitted_sizes(theta, free, frequency, covariance, residual, shapes)
    bound = bench.accuracy.linearity
    if _distance_to_box(sizes, spread, bound) <= _IMPOSSIBLE:
        return []
    text = (
        f"curve and low-level point ask for converters that depart by {sizes[0]:+.2f} LSB (tap in) and {sizes[1]:+.2f} "
        f"LSB (tap out) from a straight line, declared is {bound:.3g} LSB: the bench file says too little, or the "
        "stage is not linear"
    )
    return [text]


def _distance_to_box(sizes: FloatArray, covariance: FloatArray, bound: float) -> float:
    """Return the least squared distance, in standard uncertainties, from sizes (K,) to a point within the bounds."""
    u, least = np.sqrt(np.diag(covariance)), inf
    correlation, at, ends = covariance / np.outer(u, u), sizes / u, bound / u
    for face in product((0, -1, 1), repeat=len(sizes)):  # the nearest point lies on one of them, at its foot
        held = np.flatnonzero(face)
        away = np.array(face)[held] * ends[held] - at[held]
        pull = np.linalg.pinv(correlation[np.ix_(held, held)], rcond=1e-12, hermitian=True) @ away
        foot = at + correlation[:, held] @ pull
        if (np.abs(foot) <= ends + 1e-9 * (ends + np.abs(at))).all():
            least = min(least, float(away @ pull))
    return least
