"""The budget's witness: every source drawn at random, each draw fitted again and read by definition (JCGM 101:2008).

Nothing of the budget's linear road is used: the same description of the sources is all that both have in common.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.models import band_response
from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.analysis.uncertainty import COVERAGE
from bandproof.bench.errors import BadInput
from bandproof.bench.sources import Measured, Source
from bandproof.bench.types import QUANTITIES, Quantity

__all__ = ["Drawn", "drawn"]

_CHUNK = 2000  # draws held at once; arbitrary, some MB


@dataclass(frozen=True, slots=True)
class Drawn:
    """What the draws of a figure show.

    Mean; standard uncertainty; half-width of the probabilistically symmetric interval that holds `COVERAGE` of the
    draws (JCGM 101, 7.7.2), which is half the distance of its ends; how many draws there were.
    """

    mean: float
    u: float
    half_width: float
    draws: int


def drawn(
    measured: Measured, listed: Sequence[Source], *, draws: int, seed: int | Sequence[int]
) -> Mapping[Quantity, Drawn]:
    """Return what the figures of a stage are when every source and the points' noise is drawn anew, ``draws`` times.

    The fitted response is changed by each source's shapes times independent draws of its distribution, noise of the
    points' covariance is added, the sweep is fitted again, and the direct effects are put on the figures.

    Raises
    ------
    BadInput
        A draw could not be fitted: the figures are then no function of the points.
    """
    rng = np.random.default_rng(seed)
    sizes = [min(_CHUNK, draws - begin) for begin in range(0, draws, _CHUNK)]
    figures = np.concatenate([_figures(measured, listed, count, rng) for count in sizes], axis=1)
    return {quantity: _summary(figures[i]) for i, quantity in enumerate(QUANTITIES)}


def _figures(measured: Measured, listed: Sequence[Source], count: int, rng: np.random.Generator) -> FloatArray:
    """Return f0, Q and |gain| (3, count) of so many draws."""
    fit = measured.fit
    frequency = np.array([point.frequency for point in measured.points])
    changes = np.ones((count, len(frequency)), dtype=np.complex128)
    direct = np.ones((len(QUANTITIES), count))
    for source in listed:
        if source.shapes is not None and source.u:
            changes += (source.u * _standard(source, (count, len(source.shapes)), rng)) @ source.shapes
        if source.direct is not None and source.u:
            one = source.u * _standard(source, (count,), rng)
            direct *= 1.0 + np.outer([source.direct.get(quantity, 0.0) for quantity in QUANTITIES], one)
    response = band_response(fit.theta, frequency[None]) * changes + _noise(measured.covariance, count, rng)
    again = fit_bands(
        np.broadcast_to(frequency, response.shape),
        response,
        np.broadcast_to(measured.covariance, (count, *measured.covariance.shape)),
        delay="delay" in fit.free,
        leakage="re_leakage" in fit.free,
        start=np.repeat(fit.theta, count, axis=0),
    )
    if not set(again.status) <= {"converged", "no progress"}:
        lost = sum(word not in ("converged", "no progress") for word in again.status)
        raise BadInput(
            f"{measured.stage.name}: {lost} of {count} draws could not be fitted, the points are too uncertain for "
            "figures by draws; measure the stage again with more signal or more records"
        )
    figures: FloatArray = direct * np.stack([again.f0, again.q, np.abs(again.gain)])
    return figures


def _noise(covariance: FloatArray, count: int, rng: np.random.Generator) -> ComplexArray:
    """Return complex noise (count, N) of the points' covariances (N, 2, 2)."""
    pairs = np.einsum("nij,cnj->cni", np.linalg.cholesky(covariance), rng.standard_normal((count, len(covariance), 2)))
    noise: ComplexArray = pairs[..., 0] + 1j * pairs[..., 1]
    return noise


def _standard(source: Source, shape: tuple[int, ...], rng: np.random.Generator) -> FloatArray:
    """Return draws of a source's distribution of standard deviation 1 (a t: of scale 1; JCGM 101, 6.4)."""
    result: FloatArray
    match source.distribution:
        case "normal" | "t" if np.isfinite(source.dof):
            result = rng.standard_t(source.dof, shape)
        case "normal" | "t":
            result = rng.standard_normal(shape)
        case "uniform":
            result = rng.uniform(-sqrt(3.0), sqrt(3.0), shape)
        case "triangular":
            result = rng.triangular(-sqrt(6.0), 0.0, sqrt(6.0), shape)
        case "arcsine":
            result = sqrt(2.0) * np.sin(rng.uniform(-np.pi, np.pi, shape))
    return result


def _summary(values: FloatArray) -> Drawn:
    low, high = np.quantile(values, [0.5 * (1.0 - COVERAGE), 0.5 * (1.0 + COVERAGE)])
    return Drawn(float(values.mean()), float(values.std(ddof=1)), float(0.5 * (high - low)), len(values))
