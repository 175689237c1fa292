"""Many sweeps fitted at once against a loop over scipy's solver: same data, start, Jacobian, and the same answers."""

import statistics
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from bandproof.analysis.fit import BandFit, fit_bands
from bandproof.analysis.models import band_response, band_start
from bandproof.analysis.types import ComplexArray, FloatArray

RATIO_BOUND, DIFFERENCE_BOUND = 25.0, 1e-8
SWEEPS, POINTS, ROUNDS = 1000, 12, 5
NAMES = ("ln f0", "ln Q", "gain", "tau")
_TOLERANCE = 1e-15
_REPEATED = 20  # so that both are watched for about as long
_NOISE = 1e-4  # per component; what a dozen records of 8-bit converters leave


@dataclass(frozen=True)
class Sweeps:
    """Frequencies (S, N) in Hz, noisy responses (S, N), their covariances (S, N, 2, 2), starting values (S, 7)."""

    frequency: FloatArray
    response: ComplexArray
    covariance: FloatArray
    start: FloatArray


def draw(count: int, seed: int = 20) -> Sweeps:
    """Return sweeps of bands between 30 Hz and 16 kHz, Q 0.7 to 5, with the delay of an op-amp and noise."""
    rng = np.random.default_rng(seed)
    f0, q = np.exp(rng.uniform(np.log(30.0), np.log(16e3), count)), rng.uniform(0.7, 5.0, count)
    detuning = np.linspace(-2.5, 2.5, POINTS) / q[:, None]
    frequency = f0[:, None] * (0.5 * detuning + np.sqrt(1.0 + 0.25 * detuning**2))
    delay = rng.uniform(2e-3, 2e-2, count) / f0
    theta = np.stack([np.log(f0), np.log(q), *np.broadcast_to([[-2.0], [0.5]], (2, count)), delay], axis=1)
    theta = np.pad(theta, ((0, 0), (0, 2)))
    noise = _NOISE * rng.normal(size=(2, *frequency.shape))
    response = band_response(theta, frequency) + noise[0] + 1j * noise[1]
    covariance = np.broadcast_to(_NOISE**2 * np.eye(2), (*frequency.shape, 2, 2)).copy()
    return Sweeps(frequency, response, covariance, band_start(frequency, response))


class _OneBand:
    """Residual and Jacobian of one sweep, written for one: each is worked out once for a theta."""

    def __init__(self, frequency: FloatArray, response: ComplexArray) -> None:
        self.frequency, self.response, self.turning = frequency, response, -2j * np.pi * frequency

    def residual(self, theta: FloatArray) -> FloatArray:
        x = self.frequency * np.exp(-theta[0])
        self.low, self.high, self.bend = x - 1.0 / x, x + 1.0 / x, -1j * np.exp(theta[1])
        self.gain = theta[2] + 1j * theta[3]
        self.resonance = 1.0 / (1.0 - self.bend * self.low)
        self.shape = self.resonance * np.exp(self.turning * theta[4])
        self.value = self.gain * self.shape
        return (self.value - self.response).view(np.float64) / _NOISE

    def jacobian(self, theta: FloatArray) -> FloatArray:
        bend = self.bend * self.value * self.resonance
        columns = np.array([-bend * self.high, bend * self.low, self.shape, 1j * self.shape, self.turning * self.value])
        return np.ascontiguousarray(columns).view(np.float64).T / _NOISE


def one_by_one(sweeps: Sweeps) -> FloatArray:
    """Return the variables (S, 5) by scipy, sweep by sweep; its method "lm", three times as fast here as "trf"."""
    found = []
    for frequency, response, start in zip(sweeps.frequency, sweeps.response, sweeps.start, strict=True):
        band = _OneBand(frequency, response)
        solution = least_squares(
            band.residual,
            start[:5],
            jac=band.jacobian,
            method="lm",
            x_scale="jac",
            ftol=_TOLERANCE,
            xtol=_TOLERANCE,
            gtol=_TOLERANCE,
        )
        found.append(solution.x)
    return np.array(found)


def at_once(sweeps: Sweeps) -> BandFit:
    """Return the same fits by the project, from the same starting values."""
    return fit_bands(sweeps.frequency, sweeps.response, sweeps.covariance, start=sweeps.start)


def differences(theirs: FloatArray, ours: BandFit) -> dict[str, float]:
    """Return the largest relative differences; the difference of two logarithms is one already."""
    logs = np.abs(theirs[:, :2] - ours.theta[:, :2]).max(axis=0)
    gain = np.abs((theirs[:, 2] + 1j * theirs[:, 3]) / ours.gain - 1.0).max()
    tau = np.abs(theirs[:, 4] / ours.delay - 1.0).max()
    return dict(zip(NAMES, map(float, (*logs, gain, tau)), strict=True))


def _processor_time(call: Callable[[], object], repetitions: int) -> float:
    """Return the processor time in s of one call: on one thread that of an idle machine, whatever else runs."""
    start = time.process_time()
    for _ in range(repetitions):
        call()
    return (time.process_time() - start) / repetitions


def main(count: int = SWEEPS, rounds: int = ROUNDS) -> bool:
    """Print ratio and differences; return whether all are within their bounds."""
    sweeps = draw(count)
    apart = differences(one_by_one(sweeps), at_once(sweeps))
    pairs = [
        (_processor_time(lambda: one_by_one(sweeps), 1), _processor_time(lambda: at_once(sweeps), _REPEATED))
        for _ in range(rounds)
    ]
    loop, batch = (statistics.median(times) for times in zip(*pairs, strict=True))
    ratio = statistics.median(one / all_at_once for one, all_at_once in pairs)
    print(f"{count} sweeps of {POINTS} points: scipy one by one {loop * 1e3:.0f} ms, at once {batch * 1e3:.1f} ms")
    print(f"ratio {ratio:.1f} (bound {RATIO_BOUND:g})")
    shown = ", ".join(f"{name} {value:.1e}" for name, value in apart.items())
    print(f"largest relative difference: {shown} (bound {DIFFERENCE_BOUND:g})")
    return ratio >= RATIO_BOUND and max(apart.values()) <= DIFFERENCE_BOUND
