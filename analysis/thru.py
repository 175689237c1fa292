"""The path itself: what two channels make of one and the same voltage, as a smooth function of frequency.

Both probes on one node read a ratio that is 1 only on an ideal bench: the channels' gains differ, one is later than the
other, and a 10:1 probe that is not compensated goes over from one division to another round its corner. The model is
ln ratio = g - j 2π f τ + D s(f / f_m) with s(x) = jx / (1 + jx): a zero and a pole D apart (in ln f) round f_m, right
to D³/24. It is linear but for f_m, which is looked for on a grid and then taken along as one more unknown.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from bandproof.analysis.types import ComplexArray, FloatArray
from bandproof.analysis.uncertainty import propagated

__all__ = ["ThruFit", "fit_thru"]

FEWEST = 4  # frequencies: four unknowns beside f_m, two data each
_CORNERS = 25  # tried over the span and a factor 3 beyond; arbitrary


@dataclass(frozen=True, slots=True, eq=False)
class ThruFit:
    """A fitted path.

    Attributes
    ----------
    theta : (4,)
        g, τ in s, D, ln f_m (f_m in Hz).
    covariance : (4, 4)
        Of g, τ, D and ln f_m.
    span : (low, high)
        Hz, of the frequencies it was fitted to.
    chi_square, dof : float
        Sum of the weighted squares and its degrees of freedom.
    """

    theta: FloatArray
    covariance: FloatArray
    span: tuple[float, float]
    chi_square: float
    dof: int

    def at(self, frequency: FloatArray) -> ComplexArray:
        """Return the path's ratio (N,) at (N,) Hz."""
        ratio: ComplexArray = np.exp(_columns(frequency, self.theta)[:3].T @ self.theta[:3])
        return ratio

    def basis(self, frequency: FloatArray) -> ComplexArray:
        """Return the (4, N) derivatives of ln ratio by the fitted unknowns."""
        return _columns(frequency, self.theta)


def fit_thru(frequency: FloatArray, ratio: ComplexArray, covariance: FloatArray) -> ThruFit:
    """Fit the smooth path to ratios measured with both probes on one node.

    Parameters
    ----------
    frequency : (N,) float array
        Hz, positive.
    ratio : (N,) complex array
        Second channel over first.
    covariance : (N, 2, 2) float array
        Of real and imaginary part.

    Raises
    ------
    ValueError
        Fewer than four frequencies, or a ratio of 0.

    Examples
    --------
    >>> f = np.geomspace(100, 1e4, 9)
    >>> fit = fit_thru(f, 1.01 * np.exp(-2e-7j * np.pi * f), np.broadcast_to(1e-8 * np.eye(2), (9, 2, 2)))
    >>> print(f"{abs(fit.at(f)[4]):.6f} {fit.theta[1]:.2e}")
    1.010000 1.00e-07
    """
    if len(np.unique(frequency)) < FEWEST:
        raise ValueError(f"a thru needs at least {FEWEST} frequencies, found {len(np.unique(frequency))}")
    if not np.abs(ratio).all():
        raise ValueError("a thru has a ratio of 0: nothing was measured")
    white = np.linalg.inv(np.linalg.cholesky(_of_logarithm(ratio, covariance)))
    data = _whitened(white, np.log(ratio)[None])[0]
    squares, theta = _best(frequency, white, data)
    design = _whitened(white, _columns(frequency, theta)).T
    information = design.T @ design
    scale = 1 / np.sqrt(np.maximum(np.diag(information), 1e-300))
    covariance_of_theta = scale[:, None] * np.linalg.pinv(information * np.outer(scale, scale), rcond=1e-10) * scale
    return ThruFit(
        theta=theta,
        covariance=covariance_of_theta,
        span=(float(frequency.min()), float(frequency.max())),
        chi_square=float(squares),
        dof=max(0, 2 * len(frequency) - 4),
    )


def _columns(frequency: FloatArray, theta: FloatArray) -> ComplexArray:
    x = 1j * frequency / np.exp(theta[3])
    step = x / (1 + x)
    return np.stack([np.ones_like(step), -2j * np.pi * frequency, step, -theta[2] * step / (1 + x)])


def _best(frequency: FloatArray, white: FloatArray, data: FloatArray) -> tuple[float, FloatArray]:
    """Return the least sum of squares over all corners, first on a grid, then between the neighbours of its best."""
    from scipy.optimize import minimize_scalar

    grid = np.linspace(np.log(frequency.min() / 3), np.log(frequency.max() * 3), _CORNERS)
    left = [_squares(frequency, log_corner, white, data)[0] for log_corner in grid]
    near = int(np.argmin(left))
    ends = grid[max(0, near - 1)], grid[min(len(grid) - 1, near + 1)]
    found = minimize_scalar(
        lambda log_corner: _squares(frequency, log_corner, white, data)[0], bounds=ends, method="bounded"
    )
    return _squares(frequency, float(found.x), white, data)


def _squares(frequency: FloatArray, log_corner: float, white: FloatArray, data: FloatArray) -> tuple[float, FloatArray]:
    """Return the sum of squares left by the best path with one corner, and its unknowns."""
    theta = np.array([0.0, 0.0, 0.0, log_corner])
    design = _whitened(white, _columns(frequency, theta)[:3]).T
    scale = np.linalg.norm(design, axis=0)
    theta[:3] = np.linalg.lstsq(design / scale, data, rcond=None)[0] / scale
    left = data - design @ theta[:3]
    return float(left @ left), theta


def _of_logarithm(ratio: ComplexArray, covariance: FloatArray) -> FloatArray:
    """Return the covariance (N, 2, 2) of ln ratio from that of the ratio."""
    inverse = 1 / ratio
    turn = np.array([[inverse.real, -inverse.imag], [inverse.imag, inverse.real]]).transpose(2, 0, 1)
    return propagated(turn, covariance)


def _whitened(white: FloatArray, values: ComplexArray) -> FloatArray:
    """Return (K, N) complex values as (K, 2N) whitened real ones."""
    pairs = np.stack([values.real, values.imag], axis=-1)
    whitened: FloatArray = np.einsum("nij,knj->kni", white, pairs).reshape(len(values), -1)
    return whitened
