"""What the level says: a linear stage on straight converters has the same gain at every level."""

from collections.abc import Mapping, Sequence
from math import sqrt

import numpy as np

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.models import band_response
from bandproof.bench.misfit import StageFit, arrays
from bandproof.bench.sources import departure
from bandproof.bench.thru import Path, Ranges, corrected
from bandproof.bench.types import Bench, Point

__all__ = ["level_alarms"]

_NOISE = 4.0  # standard uncertainties of a low-level point that noise may move it by
_FEWEST = 3


def level_alarms(
    bench: Bench, points: Sequence[Point], found: StageFit, known: Mapping[Ranges, Path], expanded_gain: float
) -> list[str]:
    """Return alarms about a stage whose gain at its level is not that of other levels tried."""
    if found.fit is None:
        return []
    return [*_between_batches(points, found, known, expanded_gain), *_at_low_level(bench, points, found, known)]


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


def _at_low_level(bench: Bench, points: Sequence[Point], found: StageFit, known: Mapping[Ranges, Path]) -> list[str]:
    """Return an alarm when the low-level point lies off the curve by more than converters and noise explain."""
    low = next((point for point in points if point.purpose == "low-level"), None)
    if low is None or found.fit is None or "overload" in low.flags:
        return []
    near = min(found.points, key=lambda point: abs(point.frequency - low.frequency))
    if low.ranges != near.ranges:
        return []  # another range has another gain
    frequency, response, covariance = arrays([low])
    response, covariance, _ = corrected([low], response, covariance, known)
    on_curve = band_response(found.fit.theta, frequency[None])[0, 0]
    moved = abs(response[0] / on_curve) - 1.0
    noise = sqrt(0.5 * float(np.trace(covariance[0]))) / abs(on_curve)
    declared = bench.accuracy.linearity * sum(
        abs(departure(low.levels, low, channel) - departure(near.levels, near, channel)) for channel in (0, 1)
    )
    allowed = declared + _NOISE * noise
    if abs(moved) <= allowed:
        return []
    text = (
        f"at a tenth of the level its gain reads {100.0 * moved:+.2f} % of that at full level, noise and the declared "
        f"linearity of the converters explain {100.0 * allowed:.2f} %: a converter is less straight than declared, or "
        "the stage is not linear"
    )
    return [text]
