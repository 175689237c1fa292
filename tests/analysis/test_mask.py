"""The mask of a band: no band within the limits leaves it, and at every frequency some band reaches each bound.

The bands are transfer functions in s as any handbook has them, H = g (w0/Q) s / (s² + (w0/Q) s + w0²), not our model.
"""

import numpy as np
import pytest

from bandproof.analysis.mask import magnitude_mask, phase_mask

LIMITS = {"centre": (940.0, 1060.0), "q": (1.4, 30.0), "gain": (2.8, 3.5)}
FREQUENCY = np.geomspace(300.0, 3e3, 201)


def band(f0, q, gain, frequency=FREQUENCY):
    s, w0 = 2j * np.pi * frequency, 2 * np.pi * f0
    return gain * (w0 / q) * s / (s**2 + (w0 / q) * s + w0**2)


@pytest.fixture(scope="module")
def inside():
    """Bands drawn within the limits, (K, N)."""
    rng = np.random.default_rng(5)
    return np.array([band(*(rng.uniform(*limits) for limits in LIMITS.values())) for _ in range(2000)])


@pytest.fixture(scope="module")
def dense():
    """Bands on a grid of the limits that has all corners, (K, N)."""
    centre, q, gain = (np.linspace(*limits, 2) for limits in LIMITS.values())
    centre = np.unique([*np.linspace(*LIMITS["centre"], 241), *FREQUENCY[(FREQUENCY > 940.0) & (FREQUENCY < 1060.0)]])
    return np.array([band(f0, one_q, g) for f0 in centre for one_q in q for g in gain])


def test_no_band_within_limits_leaves_the_mask_of_magnitude(inside):
    least, greatest = magnitude_mask(FREQUENCY, **LIMITS)
    # 1e-12: rounding of either side
    assert (np.abs(inside) >= least * (1 - 1e-12)).all()
    assert (np.abs(inside) <= greatest * (1 + 1e-12)).all()


def test_no_band_within_limits_leaves_the_mask_of_phase(inside):
    least, greatest = phase_mask(FREQUENCY, centre=LIMITS["centre"], q=LIMITS["q"])
    assert (np.angle(inside) >= least - 1e-12).all()
    assert (np.angle(inside) <= greatest + 1e-12).all()


def test_some_band_within_limits_reaches_every_bound(dense):
    least, greatest = magnitude_mask(FREQUENCY, **LIMITS)
    np.testing.assert_allclose(np.abs(dense).min(axis=0), least, rtol=1e-12)
    np.testing.assert_allclose(np.abs(dense).max(axis=0), greatest, rtol=1e-12)
    low, high = phase_mask(FREQUENCY, centre=LIMITS["centre"], q=LIMITS["q"])
    np.testing.assert_allclose(np.angle(dense).min(axis=0), low, atol=1e-12)
    np.testing.assert_allclose(np.angle(dense).max(axis=0), high, atol=1e-12)
