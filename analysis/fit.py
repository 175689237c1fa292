"""The weighted complex fit of bands, many stages at once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bandproof.analysis.least_squares import LeastSquares, Status, least_squares
from bandproof.analysis.models import (
    VARIABLES,
    band_response,
    band_start,
    refer_delay,
    refer_delay_jacobian,
)
from bandproof.analysis.types import BoolArray, ComplexArray, FloatArray
from bandproof.analysis.uncertainty import propagated
from bandproof.analysis.weighting import WeightedBands

__all__ = ["BandFit", "fit_bands"]


# Of the variables' own uncertainty, before the last step; arbitrary, far below anything that is reported.
_OFFSET = 2e-5


@dataclass(frozen=True, slots=True, eq=False)
class BandFit:
    """Fitted bands of S stages.

    Attributes
    ----------
    theta : (S, 7)
        All variables of `models.VARIABLES`, fixed ones at 0.
    free : tuple of str
        Names of the P variables that were fitted, the axes of the covariance.
    covariance : (S, P, P)
        From the stated covariances of the points alone, not multiplied by chi-square.
    f0, q, gain, delay, leakage : (S,)
        Hz, f0 over the -3 dB bandwidth, complex ratio at f0 without delay and leakage, s, complex ratio.
    u_f0, u_q, u_gain, u_delay : (S,)
        Standard uncertainties; u_gain is that of |gain|. May be nan where the status is not "converged".
    chi_square : (S,)
        Reduced: divided by the degrees of freedom (nan where there are none).
    dof : (S,)
        Two per used point less P.
    residual : (S, N) complex
        Response less fit, in units of the ratio, unused points included.
    status : S words
        "converged" or what kept a fit from it.
    """

    theta: FloatArray
    free: tuple[str, ...]
    covariance: FloatArray
    f0: FloatArray
    q: FloatArray
    gain: ComplexArray
    delay: FloatArray
    leakage: ComplexArray
    u_f0: FloatArray
    u_q: FloatArray
    u_gain: FloatArray
    u_delay: FloatArray
    chi_square: FloatArray
    dof: FloatArray
    residual: ComplexArray
    status: tuple[Status, ...]


def fit_bands(
    frequency: FloatArray,
    response: ComplexArray,
    covariance: FloatArray,
    *,
    used: BoolArray | None = None,
    delay: bool = True,
    leakage: bool = False,
    start: FloatArray | None = None,
    step_limit: int = 100,
) -> BandFit:
    """Fit the band model to S sweeps, each point weighted by the covariance of its real and imaginary part.

    Parameters
    ----------
    frequency : (S, N) float array
        Hz, positive.
    response : (S, N) complex array
        Ratio out/in.
    covariance : (S, N, 2, 2) float array
        Of real and imaginary part.
    used : (S, N) bool array, optional
        Points to fit; all by default. Sweeps of different length are padded and masked with it.
    delay, leakage : bool
        Whether these belong to the model.
    start : (S, 7) float array, optional
        Starting values; found from the data by default.
    step_limit : int
        Most steps for any stage.

    Raises
    ------
    ValueError
        A shape is wrong, a used covariance is not positive definite, or a sweep has fewer data than variables.

    Examples
    --------
    >>> f = np.array([[700.0, 850.0, 1000.0, 1200.0, 1400.0]])
    >>> h = -3 / (1 + 2j * (f / 1e3 - 1e3 / f)) * np.exp(-2e-6j * np.pi * f)
    >>> fit = fit_bands(f, h, np.broadcast_to(1e-6 * np.eye(2), (1, 5, 2, 2)))
    >>> print(f"{fit.f0[0]:.6f} {fit.q[0]:.6f} {fit.gain[0].real:.6f} {fit.delay[0]:.3e}")
    1000.000000 2.000000 -3.000000 1.000e-06
    """
    mask = np.ones(np.shape(frequency), dtype=np.bool_) if used is None else used
    _check(frequency, response, covariance, mask)
    free = [i for i, on in enumerate((True, True, True, True, delay, leakage, leakage)) if on]
    dof = 2.0 * mask.sum(axis=1) - len(free)
    if (dof < 0).any():
        raise ValueError(f"sweep {int(dof.argmin())} has fewer data than the {len(free)} variables of the model")
    f, h = frequency, response
    if not mask.all():
        f, h = np.where(mask, f, np.exp(np.log(f).mean())), np.where(mask, h, 0.0)
    theta = band_start(f, h, mask) if start is None else np.array(start, dtype=np.float64)
    centre = np.exp(theta[:, 0])
    theta = refer_delay(theta, centre)
    weighted = WeightedBands(f, h, covariance, mask, centre, theta, free)
    found = least_squares(weighted, theta[:, free], step_limit=step_limit, offset=_OFFSET)
    theta[:, free] = found.theta
    back = refer_delay_jacobian(theta, -centre)[:, free][:, :, free]
    theta = refer_delay(theta, -centre)
    residual = response - band_response(theta, frequency)
    return _summary(theta, free, propagated(back, found.covariance), found, dof, residual)


def _summary(
    theta: FloatArray,
    free: list[int],
    covariance: FloatArray,
    found: LeastSquares,
    dof: FloatArray,
    residual: ComplexArray,
) -> BandFit:
    f0, q = np.exp(theta[:, 0]), np.exp(theta[:, 1])
    gain = theta[:, 2] + 1j * theta[:, 3]
    along = np.stack([gain.real, gain.imag], axis=-1) / np.abs(gain)[:, None]
    with np.errstate(invalid="ignore", divide="ignore"):
        # Where a fit got lost, rounding leaves a variance below 0: such an uncertainty is nan.
        u = np.sqrt(np.einsum("spp->sp", covariance))
        u_gain = np.sqrt(propagated(along[:, None], covariance[:, 2:4, 2:4]))
        chi_square = np.where(dof > 0, found.squares / dof, np.nan)
    return BandFit(
        theta=theta,
        free=tuple(VARIABLES[i] for i in free),
        covariance=covariance,
        f0=f0,
        q=q,
        gain=gain,
        delay=theta[:, 4],
        leakage=theta[:, 5] + 1j * theta[:, 6],
        u_f0=f0 * u[:, 0],
        u_q=q * u[:, 1],
        u_gain=u_gain[:, 0, 0],
        u_delay=u[:, free.index(4)] if 4 in free else np.zeros_like(f0),
        chi_square=chi_square,
        dof=dof,
        residual=residual,
        status=found.status,
    )


def _check(frequency: FloatArray, response: ComplexArray, covariance: FloatArray, mask: BoolArray) -> None:
    shape = np.shape(frequency)
    if len(shape) != 2 or np.shape(response) != shape or np.shape(mask) != shape or covariance.shape != (*shape, 2, 2):
        raise ValueError(
            "frequency, response and used must be (S, N) and covariance (S, N, 2, 2), found "
            f"{shape}, {np.shape(response)}, {np.shape(mask)} and {covariance.shape}"
        )
    if not (frequency > 0).all():
        raise ValueError(f"frequency must be positive, found {frequency.min()!r}")
