"""How errors of the points move what is fitted to them, and what of a misfit such errors explain.

A weighted least-squares fit moves by C Jᵀ W d when its data move by d (JCGM 100, 5.1.3, with the fit as the function of
its data). So a systematic error need not be fitted again for each of its sources. An error whose course over the points
is known, but not its size, is one more linear unknown.
"""

from __future__ import annotations

import numpy as np

from bandproof.analysis.models import VARIABLES, band_jacobian
from bandproof.analysis.types import ComplexArray, FloatArray

__all__ = ["explained_chi_square", "figure_response", "fitted_sizes"]


def figure_response(
    theta: FloatArray, free: tuple[str, ...], frequency: FloatArray, covariance: FloatArray
) -> FloatArray:
    """Return what relative errors of the points do to ln f0, ln Q, ln |gain| and the delay of a fitted band.

    Parameters
    ----------
    theta : (7,) float array
        Fitted variables, see `models.VARIABLES`.
    free : names
        Variables that were fitted.
    frequency : (N,) float array
        Hz, of the points.
    covariance : (N, 2, 2) float array
        The points' covariances, as weights of the fit.

    Returns
    -------
    (4, N, 2) float array
        Change of ln f0, ln Q, ln |gain| and delay in s (0 where it was not fitted) per relative error of each point's
        response, real and imaginary part.

    Examples
    --------
    >>> theta = np.array([np.log(1e3), np.log(2.0), -3.0, 0.0, 0.0, 0.0, 0.0])
    >>> f = np.array([700.0, 850.0, 1000.0, 1200.0, 1400.0])
    >>> moved = figure_response(theta, VARIABLES[:5], f, np.broadcast_to(np.eye(2), (5, 2, 2)))
    >>> (abs(moved[:3, :, 0].sum(axis=1)).round(9) + 0.0).tolist()  # a gain common to all points lands wholly in gain
    [0.0, 0.0, 1.0]
    """
    value, jacobian = _jacobian(theta, free, frequency)
    white = _whitening(covariance)
    design = np.einsum("nij,njp->nip", white, jacobian).reshape(-1, len(free))
    inverse = _pseudo_inverse(design).reshape(len(free), -1, 2)
    moved = np.einsum("pni,nij,njk->pnk", inverse, white, _turns(value))
    gain = theta[2] + 1j * theta[3]
    along = np.zeros((4, len(free)))
    along[0, free.index("ln_f0")] = along[1, free.index("ln_q")] = 1.0
    along[2, free.index("re_gain")], along[2, free.index("im_gain")] = (gain.real, gain.imag) / np.abs(gain) ** 2
    if "delay" in free:
        along[3, free.index("delay")] = 1.0
    response: FloatArray = np.einsum("fp,pnk->fnk", along, moved)
    return response


def explained_chi_square(
    theta: FloatArray,
    free: tuple[str, ...],
    frequency: FloatArray,
    covariance: FloatArray,
    residual: ComplexArray,
    shapes: ComplexArray,
) -> float:
    """Return the chi-square of a fit when known errors may take their part, each at the price of its own size.

    Parameters
    ----------
    theta, free, frequency, covariance
        As for `figure_response`.
    residual : (N,) complex array
        Response less fit.
    shapes : (K, N) complex array
        Relative change of the points by one standard uncertainty of each error.

    Returns
    -------
    float
        Sum of squares with as many degrees of freedom as the fit itself: each error brings an unknown and an
        observation (that it is 0 within its uncertainty).
    """
    design, data = _regression(theta, free, frequency, covariance, residual, shapes)
    prior = np.concatenate([np.zeros((len(shapes), len(free))), np.eye(len(shapes))], axis=1)
    whole, seen = np.concatenate([design, prior]), np.concatenate([data, np.zeros(len(shapes))])
    left = seen - whole @ (_pseudo_inverse(whole) @ seen)
    return float(left @ left)


def fitted_sizes(
    theta: FloatArray,
    free: tuple[str, ...],
    frequency: FloatArray,
    covariance: FloatArray,
    residual: ComplexArray,
    shapes: ComplexArray,
) -> tuple[FloatArray, FloatArray]:
    """Return the sizes (K,) that the points ask of errors of known course, and their covariance (K, K).

    Parameters as for `explained_chi_square`; `shapes` are per unit of each size, which nothing holds near 0.
    """
    design, data = _regression(theta, free, frequency, covariance, residual, shapes)
    inverse = _pseudo_inverse(design)[len(free) :]
    return inverse @ data, inverse @ inverse.T


def _regression(
    theta: FloatArray,
    free: tuple[str, ...],
    frequency: FloatArray,
    covariance: FloatArray,
    residual: ComplexArray,
    shapes: ComplexArray,
) -> tuple[FloatArray, FloatArray]:
    """Return the whitened design (2N, P + K) of the fit's variables and of the shapes, and the data (2N,)."""
    value, jacobian = _jacobian(theta, free, frequency)
    white = _whitening(covariance)
    errors = value * shapes
    columns = np.concatenate([jacobian, np.stack([errors.real, errors.imag]).transpose(2, 0, 1)], axis=2)
    design = np.einsum("nij,njp->nip", white, columns).reshape(-1, columns.shape[2])
    data = np.einsum("nij,nj->ni", white, np.stack([residual.real, residual.imag], axis=-1)).ravel()
    return design, data


def _jacobian(theta: FloatArray, free: tuple[str, ...], frequency: FloatArray) -> tuple[ComplexArray, FloatArray]:
    """Return the response (N,) and its real derivatives (N, 2, P)."""
    value, derivative = band_jacobian(theta[None], frequency[None])
    columns = np.stack([derivative[VARIABLES.index(name)][0] for name in free], axis=-1)
    return value[0], np.stack([columns.real, columns.imag], axis=1)


def _whitening(covariance: FloatArray) -> FloatArray:
    whitening: FloatArray = np.linalg.inv(np.linalg.cholesky(covariance))
    return whitening


def _pseudo_inverse(design: FloatArray) -> FloatArray:
    """Return the pseudo-inverse, columns brought to one size first."""
    scale = np.linalg.norm(design, axis=0)
    scale = np.where(scale > 0.0, scale, 1.0)
    inverse: FloatArray = np.linalg.pinv(design / scale, rcond=1e-10) / scale[:, None]
    return inverse


def _turns(value: ComplexArray) -> FloatArray:
    """Return (N, 2, 2): what a relative error, real and imaginary, is of the response itself."""
    turns: FloatArray = np.array([[value.real, -value.imag], [value.imag, value.real]]).transpose(2, 0, 1)
    return turns
