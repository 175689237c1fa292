"""How an error of the points moves what is fitted to them: the linear response of the weighted fit.

A weighted least-squares fit moves by C Jᵀ W d when its data move by d (JCGM 100, 5.1.3, with the fit as the function of
its data). So a systematic error need not be fitted again for each of its sources.
"""

from __future__ import annotations

import numpy as np

from bandproof.analysis.models import VARIABLES, band_jacobian
from bandproof.analysis.types import ComplexArray, FloatArray

__all__ = ["figure_response"]


def figure_response(
    theta: FloatArray, free: tuple[str, ...], frequency: FloatArray, covariance: FloatArray
) -> FloatArray:
    """Return what relative errors of the points do to ln f0, ln Q and ln |gain| of a fitted band.

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
    (3, N, 2) float array
        Change of ln f0, ln Q, ln |gain| per relative error of each point's response, real and imaginary part.

    Examples
    --------
    >>> theta = np.array([np.log(1e3), np.log(2.0), -3.0, 0.0, 0.0, 0.0, 0.0])
    >>> f = np.array([700.0, 850.0, 1000.0, 1200.0, 1400.0])
    >>> moved = figure_response(theta, VARIABLES[:5], f, np.broadcast_to(np.eye(2), (5, 2, 2)))
    >>> (abs(moved[..., 0].sum(axis=1)).round(9) + 0.0).tolist()  # a gain common to all points lands wholly in gain
    [0.0, 0.0, 1.0]
    """
    value, derivative = band_jacobian(theta[None], frequency[None])
    columns = np.stack([derivative[VARIABLES.index(name)][0] for name in free], axis=-1)
    jacobian = np.stack([columns.real, columns.imag], axis=1)  # (N, 2, P)
    weight = np.linalg.inv(covariance)
    information = np.einsum("nip,nij,njq->pq", jacobian, weight, jacobian)
    scale = 1.0 / np.sqrt(np.diag(information))
    inverse = scale[:, None] * np.linalg.inv(information * np.outer(scale, scale)) * scale
    moved = np.einsum("pq,niq,nij->pnj", inverse, jacobian, weight)  # per error of the response itself
    gain = theta[2] + 1j * theta[3]
    along = np.zeros((3, len(free)))
    along[0, free.index("ln_f0")] = along[1, free.index("ln_q")] = 1.0
    along[2, free.index("re_gain")], along[2, free.index("im_gain")] = (gain.real, gain.imag) / np.abs(gain) ** 2
    figures = np.einsum("fp,pnj->fnj", along, moved)
    response: FloatArray = np.einsum("fnj,njk->fnk", figures, _turns(value[0]))
    return response


def _turns(value: ComplexArray) -> FloatArray:
    """Return (N, 2, 2): what a relative error, real and imaginary, is of the response itself."""
    turns: FloatArray = np.array([[value.real, -value.imag], [value.imag, value.real]]).transpose(2, 0, 1)
    return turns
