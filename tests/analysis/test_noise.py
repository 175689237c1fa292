"""Noise without a model against what was drawn, measured data with published figures, and the F-test."""

from __future__ import annotations

import numpy as np
import pytest

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.noise import f_test, response_noise


def _white(shape, deviation, seed):
    parts = deviation * np.random.default_rng(seed).normal(size=(2, *shape))
    return parts[0] + 1j * parts[1]


def _covariance(shape, deviation):
    return np.broadcast_to(deviation**2 * np.eye(2), (*shape, 2, 2))


def _uneven(sweeps, points):
    steps = np.random.default_rng(1).uniform(0.2, 1.0, (sweeps, points))
    return 1000.0 + steps.cumsum(axis=1)


@pytest.mark.parametrize("points", [12, 60, 200])
def test_white_noise_at_unequal_steps_is_read_as_it_was_drawn(points):
    sweeps = 60_000 // points
    f = _uneven(sweeps, points)
    noise = response_noise(f, _white(f.shape, 3e-3, points))
    variance, dof = (noise.deviation / 3e-3) ** 2, noise.dof.mean()
    # 1 % for the few sweeps in which chance makes a higher order or an outlier look real
    assert variance.mean() == pytest.approx(1.0, abs=4 * np.sqrt(2 / (dof * sweeps)) + 0.01)
    assert variance.var() == pytest.approx(2 / dof, rel=4 * np.sqrt(2 / sweeps) + 0.05)


@pytest.mark.parametrize(("points", "relative"), [(30, 1e-2), (30, 1e-3), (30, 1e-4), (100, 1e-3)])
def test_a_band_of_thirty_points_over_its_bandwidth_leaves_no_bias(points, relative):
    # five bandwidths of a band of Q 5 and gain 1; the mean of 200 estimates against the uncertainty of one
    f = np.tile(np.linspace(500.0, 1500.0, 5 * points), (200, 1))
    noise = response_noise(f, 1 / (1 + 5j * (f / 1e3 - 1e3 / f)) + _white(f.shape, relative, points))
    assert noise.settled.all()
    assert noise.deviation.mean() == pytest.approx(relative, rel=1 / np.sqrt(2 * noise.dof.mean()) / 2)


def test_too_few_points_over_the_bandwidth_are_an_upper_limit_and_the_fit_s_residual_tells():
    f = np.tile(np.linspace(500.0, 1500.0, 51), (200, 1))  # ten over the bandwidth, almost no noise
    h = 1 / (1 + 5j * (f / 1e3 - 1e3 / f)) + _white(f.shape, 1e-5, 2)
    assert (response_noise(f, h).deviation > 1e-5).mean() > 0.9
    residual = fit_bands(f, h, _covariance(f.shape, 1e-5)).residual
    noise = response_noise(f, residual)
    assert noise.settled.all()
    assert noise.deviation.mean() == pytest.approx(1e-5, rel=1 / np.sqrt(2 * noise.dof.mean()) / 2)


def test_a_curve_that_bends_in_every_order_is_told():
    f = np.linspace(500.0, 1500.0, 101)[None]  # no noise at all
    assert not response_noise(f, 1 / (1 + 5j * (f / 1e3 - 1e3 / f))).settled[0]


def test_single_bad_points_are_left_out():
    f = _uneven(100, 80)
    h = _white(f.shape, 1e-3, 4)
    h[:, [20, 50]] += 0.3
    noise = response_noise(f, h)
    assert (noise.left_out >= 6).all()  # each touches three second differences
    assert noise.deviation.mean() == pytest.approx(1e-3, rel=1 / np.sqrt(2 * noise.dof.mean()) / 2)


def test_simulated_band_has_the_noise_it_was_given(outside):
    # Source: bandpass_noisy.csv, made apart from this project with 0.002 per component; 20 points over the bandwidth
    f, re, im = np.loadtxt(outside / "bandpass_noisy.csv", delimiter=",", skiprows=1).T
    noise = response_noise(f[None], (re + 1j * im)[None])
    assert noise.settled[0]
    assert noise.deviation[0] == pytest.approx(0.002, rel=2 / np.sqrt(2 * noise.dof[0]))


@pytest.fixture
def resonance(outside):
    """The measured resonance: frequency and response, (1, 201) each."""
    f, re, im = np.loadtxt(outside / "npl_mat58" / "Figure6b.txt", comments="%").T
    return 1e9 * f[None], (re + 1j * im)[None]


def test_measured_resonance_has_the_published_noise(resonance):
    # Source: NPL Report MAT 58, figure 6(b): residual rms 1.216e-5 of the complex ratio, 6 variables of 402 data
    noise = response_noise(*resonance)
    published = 1.216e-5 / np.sqrt(2) * np.sqrt(402 / 396)
    assert noise.settled[0]
    assert noise.deviation[0] == pytest.approx(published, rel=2 / np.sqrt(2 * noise.dof[0]))


def test_measured_resonance_shows_that_its_leakage_is_missing(resonance):
    # Source: NPL Report MAT 58 fits a leakage to these data; without it, delay or not, the fit cannot be right
    f, h = resonance
    covariance = _covariance(f.shape, response_noise(f, h).deviation[0])
    right = fit_bands(f, h, covariance, delay=False, leakage=True)
    assert right.chi_square[0] == pytest.approx(1.0, abs=2 * np.sqrt(2 / right.dof[0] + 2 / 205))
    for delay in (False, True):
        small = fit_bands(f, h, covariance, delay=delay)
        large = fit_bands(f, h, covariance, delay=delay, leakage=True)
        assert large.status == small.status == ("converged",)
        assert small.chi_square[0] > 1 + 10 * np.sqrt(2 / small.dof[0])
        assert f_test(small, large)[0] < 1e-6


def test_noise_alone_passes_for_leakage_as_often_as_the_f_test_says():
    sweeps = 2000
    f = np.tile(np.linspace(700.0, 1400.0, 15), (sweeps, 1))
    h = 1 / (1 + 3j * (f / 1e3 - 1e3 / f)) + _white(f.shape, 1e-3, 8)
    covariance = _covariance(f.shape, 1e-2)  # stated ten times too large: the test does not need to know
    probability = f_test(fit_bands(f, h, covariance), fit_bands(f, h, covariance, leakage=True))
    for level in (0.01, 0.05, 0.5):
        seen = (probability < level).mean()
        assert seen == pytest.approx(level, abs=4 * np.sqrt(level * (1 - level) / sweeps))


def test_models_that_are_not_nested_are_refused():
    f = np.linspace(700.0, 1400.0, 15)[None]
    fit = fit_bands(f, 1 / (1 + 3j * (f / 1e3 - 1e3 / f)), _covariance(f.shape, 1e-3))
    with pytest.raises(ValueError, match="more variables"):
        f_test(fit, fit)


@pytest.mark.parametrize(
    ("f", "h", "words"),
    [
        (np.ones(5), np.ones(5), "must be .S, N."),
        (np.arange(3.0)[None], np.ones((1, 3)), "needs 4 points"),
        (np.arange(5.0)[None], np.full((1, 5), np.nan), "finite"),
        (np.array([[1.0, 2.0, 2.0, 3.0]]), np.ones((1, 4)), "strictly increasing"),
    ],
)
def test_what_has_no_differences_is_refused(f, h, words):
    with pytest.raises(ValueError, match=words):
        response_noise(f, h + 0j)
