"""Sine fits against published bounds and against fits made by other programs."""

from __future__ import annotations

import numpy as np
import pytest

from bandproof.analysis.sine import channel_ratio, distortion, fit_clock_and_sines, fit_sines, halves

# The case the exact Fisher information was computed for, apart from this project (formulas: D. C. Rife,
# R. R. Boorstyn, IEEE Trans. Inf. Theory 20, 591-598, 1974): N, A, noise, rad/sample, phase, offset
N, AMPLITUDE, NOISE, OMEGA, PHASE, OFFSET = 1000, 1.0, 0.01, 2 * np.pi * 0.0317, 0.7, 0.1
RUNS = 4000
SCATTER = 4 / np.sqrt(2 * RUNS)  # four standard errors of a standard deviation from that many runs


def _records(runs: int, amplitude: float = AMPLITUDE, seed: int = 1) -> np.ndarray:
    wave = amplitude * np.cos(OMEGA * np.arange(N) + PHASE) + OFFSET
    return wave + NOISE * np.random.default_rng(seed).normal(size=(runs, N))


def test_three_parameter_fit_scatters_by_the_cramer_rao_bounds():
    fit = fit_sines(_records(RUNS), 1.0, OMEGA / (2 * np.pi))
    assert np.abs(fit.phasor[:, 0]).std() == pytest.approx(4.48078e-4, rel=SCATTER)
    assert np.angle(fit.phasor[:, 0]).std() == pytest.approx(4.46392e-4, rel=SCATTER)
    assert fit.offset.std() == pytest.approx(3.1625e-4, rel=SCATTER)


def test_four_parameter_fit_scatters_by_the_cramer_rao_bounds():
    fits = [fit_clock_and_sines(record, 1.0, OMEGA / (2 * np.pi)) for record in _records(1000)]
    scatter = 4 / np.sqrt(2 * 1000)
    assert np.std([fit.clock * OMEGA for fit in fits]) == pytest.approx(1.540733e-6, rel=scatter)
    assert np.std([np.angle(fit.phasor[0, 0]) for fit in fits]) == pytest.approx(8.89059e-4, rel=scatter)
    stated = np.sqrt(np.mean([fit.clock_variance for fit in fits])) * OMEGA
    assert stated == pytest.approx(1.540733e-6, rel=scatter)


def test_stated_covariance_is_the_cramer_rao_bound():
    fit = fit_sines(_records(200), 1.0, OMEGA / (2 * np.pi))
    along = np.array([np.cos(PHASE), np.sin(PHASE)])
    stated = np.sqrt(along @ fit.covariance[:, 0].mean(axis=0) @ along)
    assert stated == pytest.approx(4.48078e-4, rel=4 / np.sqrt(2 * 200 * fit.dof))


def test_ratio_of_two_channels_scatters_by_its_bound_and_says_so():
    # var(|H|)/|H|^2 = var(phase) = (2/N)(s1^2/A1^2 + s2^2/A2^2): 1.0000e-3 for amplitudes 1 and 0.5
    first, second = _records(RUNS, seed=2), _records(RUNS, 0.5, seed=3)
    ratios = [channel_ratio(fit_sines(pair, 1.0, OMEGA / (2 * np.pi))) for pair in zip(first, second, strict=True)]
    value = np.array([ratio.value[0] for ratio in ratios])
    assert np.abs(value).std() / 0.5 == pytest.approx(1e-3, rel=SCATTER)
    assert np.angle(value).std() == pytest.approx(1e-3, rel=SCATTER)
    stated = np.mean([np.diag(ratio.covariance[0]) for ratio in ratios], axis=0)
    assert np.sqrt(stated) / 0.5 == pytest.approx([1e-3, 1e-3], rel=SCATTER)


def test_recorded_8_bit_sine(outside):
    # Source: numpy lstsq and lmfit on the same record, which agree to 1e-12; printed digits
    volts = np.loadtxt(outside / "sine_record.csv", delimiter=",", skiprows=1)[:, 1] * 2 / 256
    three = fit_sines(volts, 1e-4, 317.4)
    assert np.abs(three.phasor[0, 0]) == pytest.approx(0.7993977064, abs=1e-9)
    assert np.angle(three.phasor[0, 0]) == pytest.approx(-0.6005308967, abs=1e-9)
    assert three.offset[0] == pytest.approx(0.0493070605, abs=1e-9)
    four = fit_clock_and_sines(volts, 1e-4, 317.4)
    assert four.clock * 317.4 == pytest.approx(317.3973246, abs=1e-5)
    assert np.abs(four.phasor[0, 0]) == pytest.approx(0.7993994350, abs=1e-6)
    assert np.angle(four.phasor[0, 0]) == pytest.approx(-0.6003150251, abs=1e-6)
    assert four.offset[0] == pytest.approx(0.0493128763, abs=1e-6)
    assert four.residual_rms[0] == pytest.approx(0.0044564119, abs=1e-9)


def test_noiseless_record_returns_its_clock():
    t = np.arange(1000) * 1e-5
    wave = np.cos(2 * np.pi * 1030.0 * t + 0.3) + 0.2 * np.cos(2 * np.pi * 3090.0 * t)
    fit = fit_clock_and_sines(wave, 1e-5, [1000.0, 3000.0])  # 0.3 cycles off over the record
    assert fit.clock == pytest.approx(1.03, rel=1e-12)


def test_clock_too_far_off_is_refused():
    t = np.arange(1000) * 1e-5
    with pytest.raises(ValueError, match="start nearer"):
        fit_clock_and_sines(np.cos(2 * np.pi * 1095.0 * t), 1e-5, 1000.0)  # 0.95 cycles over the record


def test_hum_and_drift_fitted_jointly_leave_the_tone_alone():
    t = np.arange(2000) * 1e-4
    hum = sum(0.3 / k * np.cos(2 * np.pi * 50.0 * k * t + k) for k in range(1, 6))
    wave = np.cos(2 * np.pi * 57.0 * t + 0.4) + hum + 0.5 * t / t[-1]
    fit = fit_sines(wave, 1e-4, 57.0, nuisance=50.0 * np.arange(1, 6), drift=True)
    assert fit.phasor[0, 0] == pytest.approx(np.exp(0.4j), abs=1e-10)
    assert fit.drift[0] == pytest.approx(0.5, abs=1e-10)
    assert abs(fit_sines(wave, 1e-4, 57.0).phasor[0, 0] - np.exp(0.4j)) > 1e-2  # what leaving them out would do


@pytest.mark.parametrize(("decay", "settled"), [(0.0, True), (0.02, False)])
def test_halves_tell_a_decaying_tone_from_a_settled_one(decay, settled):
    t = np.arange(2000) * 1e-5
    wave = (1 + decay * np.exp(-t / 5e-3)) * np.cos(2 * np.pi * 1e3 * t)
    records = np.stack([wave, 0.5 * wave]) + 1e-3 * np.random.default_rng(4).normal(size=(2, 2000))
    assert halves(records, 1e-5, 1e3).is_settled is settled


def test_distortion_is_the_harmonics_over_the_fundamental():
    t = np.arange(1000) * 1e-5
    wave = 2 * np.cos(2 * np.pi * 1e3 * t) + 0.03 * np.cos(2 * np.pi * 2e3 * t) + 0.04 * np.sin(2 * np.pi * 5e3 * t)
    assert distortion(wave, 1e-5, 1e3) == pytest.approx([0.025], rel=1e-9)


def test_tones_that_cannot_be_told_apart_are_refused():
    with pytest.raises(ValueError, match="cannot be told apart"):
        fit_sines(np.zeros(100), 1e-4, [100.0, 100.0])
