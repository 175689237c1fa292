"""The thru: the path itself, measured with both probes on one node, and what it says of every point of a sweep.

A run whose bench has a wire named ``thru`` measures it last, on every pair of ranges its curves used; where hands must
move the probe it is measured before, by ``bandproof thru``, kept in a file, and used as long as its conditions hold.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import chdtrc

from bandproof.analysis.thru import FEWEST, ThruFit, fit_thru
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.analysis.uncertainty import propagated
from bandproof.bench.types import Bench, Board, Point, Stage

__all__ = ["THRU", "Asked", "Path", "Ranges", "corrected", "paths", "thru_stage"]

THRU = "thru"
Ranges = tuple[float, float]
_SIGNIFICANT = 1e-4  # noise alone makes a chi-square this unlikely once in ten thousand thrus
_SPAN = 1.6  # times beyond its ends that a thru may be used; the model is smooth, and it was asked to reach further


@dataclass(frozen=True, slots=True)
class Asked:
    """What a curve asks of the path: ranges in V as asked for, its level in V, its span in Hz."""

    ranges: Ranges
    level: float
    span: tuple[float, float]


@dataclass(frozen=True, slots=True, eq=False)
class Path:
    """The path on one pair of ranges: its fit, the bench time in s and the levels in V it was measured at."""

    fit: ThruFit
    time: float
    levels: tuple[float, float]

    @property
    def probability(self) -> float:
        """How likely noise alone leaves a chi-square as large as the fit's."""
        return float(chdtrc(self.fit.dof, self.fit.chi_square)) if self.fit.dof else 1.0

    @property
    def is_smooth(self) -> bool:
        """Whether noise explains what the smooth model leaves."""
        return self.probability >= _SIGNIFICANT

    def reaches(self, frequency: float) -> bool:
        """Whether a frequency lies in its span."""
        low, high = self.fit.span
        return low / _SPAN <= frequency <= high * _SPAN


def thru_stage(board: Board, bench: Bench) -> Stage | None:
    """Return the path as a stage of its own: the tap that is wired for good, and the thru; None where none is wired."""
    wire = bench.wires.get(THRU)
    if wire is None:
        return None
    inputs = [stage.tap_in for stage in board.stages if bench.wires[stage.tap_in].channel != wire.channel]
    if not inputs:
        return None
    return Stage(THRU, "thru", inputs[0], THRU, {}, "", ())


def paths(points: Sequence[Point], *, before: float = 0.0) -> dict[Ranges, Path]:
    """Return the path on each pair of ranges that thru points were measured on.

    ``before`` is how many seconds before the run they were measured; pairs with too few sound points are left out.
    """
    found: dict[Ranges, Path] = {}
    by_ranges: dict[Ranges, list[Point]] = {}
    for point in points:
        if point.purpose == "thru" and "overload" not in point.flags:
            by_ranges.setdefault(point.ranges, []).append(point)
    for ranges, group in by_ranges.items():
        if len({point.frequency for point in group}) >= FEWEST:
            covariance = np.array([[[a, b], [b, c]] for a, b, c in (point.covariance for point in group)])
            fit = fit_thru(
                np.array([point.frequency for point in group]),
                np.array([point.response for point in group]),
                covariance,
            )
            levels = np.mean([point.levels for point in group], axis=0)
            time = float(np.mean([point.time for point in group])) - before
            found[ranges] = Path(fit, time, (float(levels[0]), float(levels[1])))
    return found


def corrected(
    points: Sequence[Point], response: ComplexArray, covariance: FloatArray, known: Mapping[Ranges, Path]
) -> tuple[ComplexArray, FloatArray, list[Path | None]]:
    """Return points' responses (N,) and covariances (N, 2, 2) with the path divided out, and the path of each point."""
    used = [_path_of(point, known) for point in points]
    frequency = np.array([point.frequency for point in points])
    ratio = np.array(
        [1.0 if path is None else path.fit.at(frequency[[i]])[0] for i, path in enumerate(used)], dtype=np.complex128
    )
    turn = np.array([[(1 / ratio).real, -(1 / ratio).imag], [(1 / ratio).imag, (1 / ratio).real]]).transpose(2, 0, 1)
    return response / ratio, propagated(turn, covariance), used


def _path_of(point: Point, known: Mapping[Ranges, Path]) -> Path | None:
    path = known.get(point.ranges)
    return path if path is not None and path.reaches(point.frequency) else None
