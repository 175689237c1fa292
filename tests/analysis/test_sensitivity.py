"""The linear road from points to figures against fits of perturbed points, and the statistics it promises."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.models import VARIABLES, band_response
from bandproof.analysis.planning import band_frequencies
from bandproof.analysis.sensitivity import explained_chi_square, figure_response, fitted_sizes

THETA = np.array([np.log(1e3), np.log(1.7), -2.9, 0.8, 3e-7, 0.0, 0.0])
F = band_frequencies([1e3], [1.7])[0]
N = len(F)
ONE = band_response(THETA[None], F[None])[0]
NOISE = 1e-3
# points of unequal, correlated noise, so that weights count
ROOTS = NOISE * np.random.default_rng(5).uniform(0.5, 2.0, (N, 1, 1)) * np.array([[1.0, 0.0], [0.6, 0.8]])
COVARIANCE = ROOTS @ ROOTS.transpose(0, 2, 1)
# a gain that falls along the sweep, a corner, and one point alone
SHAPES = np.array([np.linspace(-1, 1, N) + 0j, 1j * F / 3e3 / (1 + 1j * F / 3e3), np.eye(N)[2] + 0j])


def _fit(response, *, delay=True, leakage=False):
    count = len(response)
    start = np.where(np.arange(7) == 4, delay * THETA, THETA)
    fit = fit_bands(
        np.broadcast_to(F, response.shape),
        response,
        np.broadcast_to(COVARIANCE, (count, N, 2, 2)),
        delay=delay,
        leakage=leakage,
        start=np.repeat(start[None], count, axis=0),
    )
    assert set(fit.status) <= {"converged", "no progress"}
    return fit


def _figures(fit):
    return np.stack([np.log(fit.f0), np.log(fit.q), np.log(np.abs(fit.gain)), fit.delay])


@pytest.mark.parametrize(("delay", "leakage"), [(True, False), (False, False), (True, True)])
def test_every_figure_moves_with_every_point_as_when_it_is_fitted_again(delay, leakage):
    one = ONE if delay else band_response(np.where(np.arange(7) == 4, 0.0, THETA)[None], F[None])[0]
    step = 1e-5 * np.concatenate([np.eye(N), 1j * np.eye(N)])
    up, down = (_figures(_fit(one * (1 + sign * step), delay=delay, leakage=leakage)) for sign in (1, -1))
    again = ((up - down) / 2e-5).reshape(4, 2, N).transpose(0, 2, 1)
    fit = _fit(one[None], delay=delay, leakage=leakage)
    moved = figure_response(fit.theta[0], fit.free, F, COVARIANCE)
    size = np.abs(again).max(axis=(1, 2), keepdims=True)
    assert (size[:3] > 0.05).all()
    np.testing.assert_allclose(moved / np.maximum(size, 1e-12), again / np.maximum(size, 1e-12), atol=1e-5)
    assert moved[3].any() == delay


def test_what_the_linear_road_leaves_out_is_of_second_order():
    rng = np.random.default_rng(8)
    course = rng.normal(size=N) + 1j * rng.normal(size=N)
    moved = figure_response(THETA, VARIABLES[:5], F, COVARIANCE)
    linear = moved[:, :, 0] @ course.real + moved[:, :, 1] @ course.imag
    sizes = np.array([1e-2, 1e-3])
    again = (_figures(_fit(ONE * (1 + sizes[:, None] * course))) - _figures(_fit(ONE[None]))) / sizes
    left = np.abs(again - linear[:, None]) / np.abs(linear[:, None])
    # a tenth of the size leaves a tenth of the share
    assert left[:, 1] / left[:, 0] == pytest.approx(np.full(4, 0.1), rel=0.1)


def test_without_known_errors_it_is_the_plain_chi_square():
    noise = np.einsum("nij,nj->ni", ROOTS, np.random.default_rng(9).normal(size=(N, 2)))
    fit = _fit((ONE + noise[:, 0] + 1j * noise[:, 1])[None])
    nothing = np.zeros((0, N), dtype=complex)
    squares = explained_chi_square(fit.theta[0], fit.free, F, COVARIANCE, fit.residual[0], nothing)
    pairs = np.stack([fit.residual[0].real, fit.residual[0].imag], axis=-1)
    by_hand = np.einsum("ni,nij,nj->", pairs, np.linalg.inv(COVARIANCE), pairs)
    assert squares == pytest.approx(by_hand, rel=1e-6)
    assert squares == pytest.approx(fit.chi_square[0] * fit.dof[0], rel=1e-6)


@pytest.fixture(scope="module")
def drawn():
    """Fits of a thousand sweeps, noise and known errors drawn with their sizes; and the sizes (1000, K)."""
    rng, count = np.random.default_rng(10), 1000
    sizes = rng.normal(size=(count, len(SHAPES)))
    noise = np.einsum("nij,cnj->cni", ROOTS, rng.normal(size=(count, N, 2)))
    return _fit(ONE * (1 + sizes @ (0.004 * SHAPES)) + noise[..., 0] + 1j * noise[..., 1]), 0.004 * sizes


def _each(fit, function, shapes):
    return [function(t, fit.free, F, COVARIANCE, r, shapes) for t, r in zip(fit.theta, fit.residual, strict=True)]


def test_known_errors_of_their_size_leave_a_chi_square_of_the_fits_own_dof(drawn):
    fit, _ = drawn
    dof = fit.dof[0]
    assert dof == 2 * N - 5
    explained = _each(fit, explained_chi_square, 0.004 * SHAPES)
    assert stats.kstest(explained, stats.chi2(dof).cdf).pvalue > 1e-3
    # without being explained they are no noise, nor when they are taken for a tenth of their size
    assert stats.kstest(fit.chi_square * dof, stats.chi2(dof).cdf).pvalue < 1e-9
    assert stats.kstest(_each(fit, explained_chi_square, 0.0004 * SHAPES), stats.chi2(dof).cdf).pvalue < 1e-9


def test_sizes_of_known_courses_are_found_with_their_covariance(drawn):
    fit, sizes = drawn
    found, covariance = zip(*_each(fit, fitted_sizes, SHAPES), strict=True)
    errors = np.array(found) - sizes
    distance = np.einsum("ck,ckl,cl->c", errors, np.linalg.inv(covariance), errors)
    assert stats.kstest(distance, stats.chi2(len(SHAPES)).cdf).pvalue > 1e-3
    assert np.abs(errors / np.sqrt(np.diagonal(covariance, axis1=1, axis2=2))).max() > 2  # not for wide covariances


def test_without_noise_sizes_are_found_as_they_are():
    sizes = np.array([2e-5, -3e-5, 1e-5])
    fit = _fit((ONE * (1 + sizes @ SHAPES))[None])
    found, _ = fitted_sizes(fit.theta[0], fit.free, F, COVARIANCE, fit.residual[0], SHAPES)
    assert found == pytest.approx(sizes, rel=1e-3)
