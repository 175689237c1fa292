"""The path's model against dividers of resistors and capacitors, and its covariance against its own scatter."""

from __future__ import annotations

import numpy as np
import pytest

from bandproof.analysis.thru import FEWEST, fit_thru

F = np.geomspace(30.0, 20e3, 15)
TEN_TO_ONE = (9e6, 1e6)  # ohm, series and shunt of a 10:1 probe (common practice)
POLE = 1.5e3  # Hz, near the corner of such a probe (common practice)


def _white(noise, count=15):
    return np.broadcast_to(noise**2 * np.eye(2), (count, 2, 2))


def _divider(f, excess):
    """Return R1 || C1 over R2 || C2 and its zero and pole in Hz; R1 C1 is (1 + excess) of what it should be.

    Source: impedances in series, by hand: H = R2 / (R1 + R2) (1 + s R1 C1) / (1 + s (R1 || R2) (C1 + C2)).
    """
    r1, r2 = TEN_TO_ONE
    pole = 1 / (2 * np.pi * POLE)
    c1 = (1 + excess) * pole / r1
    c2 = pole * (r1 + r2) / (r1 * r2) - c1
    z1, z2 = 1 / (1 / r1 + 2j * np.pi * f * c1), 1 / (1 / r2 + 2j * np.pi * f * c2)
    return (r1 + r2) / r2 * z2 / (z1 + z2), 1 / (2 * np.pi * r1 * c1), POLE


@pytest.mark.parametrize("excess", [0.05, 0.01, -0.02])
@pytest.mark.parametrize(("gain", "skew"), [(1.03, 250e-9), (0.985, -40e-9)])
def test_gain_skew_zero_and_pole_of_a_probe_are_found(gain, skew, excess):
    divider, zero, pole = _divider(F, excess)
    fit = fit_thru(F, gain * divider * np.exp(-2j * np.pi * F * skew), _white(1e-6))
    g, delay, apart, log_corner = fit.theta
    # the model leaves out D**3 / 24 and what it takes with it: shares of that size
    d = np.log(pole / zero)
    assert g == pytest.approx(np.log(gain), abs=abs(d) ** 3 / 10)
    assert delay == pytest.approx(skew, abs=abs(d) ** 3 / (2 * np.pi * POLE))
    assert apart == pytest.approx(d, rel=d**2 + 1e-6)
    assert np.exp(log_corner) == pytest.approx(np.sqrt(zero * pole), rel=d**2 + 1e-5)
    expected = gain * divider * np.exp(-2j * np.pi * F * skew)
    np.testing.assert_allclose(fit.at(F) / expected, 1.0, atol=abs(d) ** 3 / 24)
    between = np.sqrt(F[1:] * F[:-1])
    there = gain * _divider(between, excess)[0] * np.exp(-2j * np.pi * between * skew)
    np.testing.assert_allclose(fit.at(between) / there, 1.0, atol=abs(d) ** 3 / 12)


def test_two_probes_of_other_compensation_are_one_smooth_path():
    first, second = _divider(F, 0.02)[0], _divider(F, -0.02)[0]
    fit = fit_thru(F, second / first, _white(1e-6))
    apart = np.log(0.98 / 1.02)
    assert fit.theta[2] == pytest.approx(apart, rel=abs(apart))
    np.testing.assert_allclose(fit.at(F), second / first, atol=abs(apart) ** 3 / 12)


def test_a_path_without_corner_is_gain_and_skew():
    fit = fit_thru(F, 1.02 * np.exp(-2j * np.pi * F * 1e-7), _white(1e-5))
    np.testing.assert_allclose(fit.at(F), 1.02 * np.exp(-2j * np.pi * F * 1e-7), rtol=1e-9)
    assert np.isfinite(fit.covariance).all()


def test_the_derivatives_are_those_of_the_model():
    fit = fit_thru(F, _divider(F, 0.03)[0], _white(1e-5))
    for i, step in enumerate([1e-6, 1e-12, 1e-6, 1e-5]):
        moved = []
        for sign in (1, -1):
            theta = fit.theta + sign * step * np.eye(4)[i]
            x = 1j * F / np.exp(theta[3])
            moved.append(theta[0] - 2j * np.pi * F * theta[1] + theta[2] * x / (1 + x))
        slope = (moved[0] - moved[1]) / (2 * step)
        np.testing.assert_allclose(fit.basis(F)[i], slope, atol=1e-6 * np.abs(slope).max())


def test_the_covariance_is_that_of_a_weighted_fit_by_differences():
    # Source: JCGM 100, 5.2.2 for a weighted least-squares fit: inverse of J' W J; J of the ratio, not of its logarithm
    roots = 1e-4 * np.array([[1.0, 0.0], [-0.6, 0.8]])
    fit = fit_thru(F, 0.4 * _divider(F, 0.03)[0], np.broadcast_to(roots @ roots.T, (len(F), 2, 2)))

    def whitened(theta):
        x = 1j * F / np.exp(theta[3])
        ratio = np.exp(theta[0] - 2j * np.pi * F * theta[1] + theta[2] * x / (1 + x))
        return np.linalg.solve(roots, np.stack([ratio.real, ratio.imag])).T.ravel()

    steps = np.diag([1e-6, 1e-12, 1e-6, 1e-5])
    j = np.stack([(whitened(fit.theta + s) - whitened(fit.theta - s)) / (2 * s.sum()) for s in steps], axis=1)
    size = np.linalg.norm(j, axis=0)
    expected = np.linalg.inv((j / size).T @ (j / size)) / np.outer(size, size)
    u = np.sqrt(np.diag(expected))
    np.testing.assert_allclose(fit.covariance / np.outer(u, u), expected / np.outer(u, u), atol=1e-3)


@pytest.fixture(scope="module")
def repeated():
    """Fits of 400 noisy thrus of one probe, with unequal and correlated noise; and the true ratio."""
    rng, count = np.random.default_rng(12), 400
    roots = 0.8e-5 * rng.uniform(0.5, 2.0, (len(F), 1, 1)) * np.array([[1.0, 0.0], [-0.6, 0.8]])
    true = 0.4 * _divider(F, 0.03)[0]
    noise = np.einsum("nij,cnj->cni", roots, rng.normal(size=(count, len(F), 2)))
    covariance = roots @ roots.transpose(0, 2, 1)
    return [fit_thru(F, true + one[:, 0] + 1j * one[:, 1], covariance) for one in noise], true


def test_the_path_scatters_as_its_covariance_says(repeated):
    fits, true = repeated
    # noise 2e-5 of the ratio and D**3 / 24 = 1e-6, so that what the model leaves out is below a tenth of it
    errors = np.array([np.log(fit.at(F) / true) for fit in fits])
    u = np.array([[_u(fit.covariance, fit.basis(F)[:, i]) for i in range(len(F))] for fit in fits])
    scores = np.stack([errors.real, errors.imag]) / u.transpose(2, 0, 1)
    four = 4 / np.sqrt(2 * len(fits))
    assert np.sqrt((scores**2).mean(axis=1)) == pytest.approx(np.ones((2, len(F))), abs=four + 0.01)


def _u(covariance, column):
    return np.sqrt([column.real @ covariance @ column.real, column.imag @ covariance @ column.imag])


def test_each_unknown_scatters_as_its_covariance_says(repeated):
    fits, _ = repeated
    theta = np.array([fit.theta for fit in fits])
    away = theta - theta.mean(axis=0)
    stated = np.mean([fit.covariance for fit in fits], axis=0)
    u = np.sqrt(np.diag(stated))
    four = 4 / np.sqrt(len(fits))  # of a correlation at most; of a variance sqrt(2) of it
    np.testing.assert_allclose(np.cov(away.T) / np.outer(u, u), stated / np.outer(u, u), atol=1.5 * four)


def test_chi_square_is_its_dof(repeated):
    fits, _ = repeated
    assert {fit.dof for fit in fits} == {2 * len(F) - 4}
    mean = np.mean([fit.chi_square for fit in fits])
    assert mean == pytest.approx(2 * len(F) - 4, abs=4 * np.sqrt(2 * (2 * len(F) - 4) / len(fits)))


def test_points_repeated_at_a_frequency_count_and_the_span_is_theirs():
    f = np.concatenate([F, F])
    once = fit_thru(F, _divider(F, 0.03)[0], _white(1e-4))
    twice = fit_thru(f, _divider(f, 0.03)[0], _white(1e-4, 2 * len(F)))
    u = np.sqrt(np.diag(once.covariance))
    np.testing.assert_allclose(twice.covariance / np.outer(u, u), 0.5 * once.covariance / np.outer(u, u), atol=1e-5)
    assert twice.span == pytest.approx((30.0, 20e3))
    assert twice.dof == 4 * len(F) - 4


def test_too_few_frequencies_and_a_ratio_of_nothing_are_refused():
    few = np.repeat([100.0, 1e3, 10e3], 4)
    with pytest.raises(ValueError, match=f"at least {FEWEST} frequencies, found 3"):
        fit_thru(few, np.ones(12) + 0j, _white(1e-4, 12))
    with pytest.raises(ValueError, match="a ratio of 0"):
        fit_thru(F, np.where(F > 1e4, 0.0, 1.0) + 0j, _white(1e-4))
