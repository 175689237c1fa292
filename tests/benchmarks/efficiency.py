"""How much of what the samples say the estimator uses: rms error of f0, Q and gain over the Cramér-Rao bound.

White Gaussian noise on the samples of both channels of a whole sweep, through the sine fits, ratios and the fit of the
band. The bound is that of the same samples with everything unknown that is fitted: f0, Q, complex gain and delay of the
band; and for each record the input's phasor, both offsets, drifts and mains tones. It is derived here from the records
themselves (Fisher information by differences, nuisances taken out by the Schur complement), without the fit's code.
"""

import sys

import numpy as np

from bandproof.analysis.fit import fit_bands
from bandproof.analysis.planning import band_frequencies, plan_record, shift_from_mains
from bandproof.analysis.sine import channel_ratio, fit_sines
from bandproof.bench.record import HUM_BELOW, hum_frequencies

SWEEPS = 10_000
LOW, HIGH = 0.97, 1.05
MAINS, INPUT = 50.0, 1.0
NOISE = (0.006, 0.02)  # V rms: half a step and rounding of 8 bits on ranges of 1.28 V and 4.5 V
BANDS = {"160 Hz": (160.0, 1.5, -3.16, 50e-9), "2.5 kHz": (2.5e3, 1.5, -3.16, 50e-9)}
_CHUNK = 100


def _response(f, theta):
    f0, q, real, imag, delay = theta
    return (real + 1j * imag) / (1 + 1j * q * (f / f0 - f0 / f)) * np.exp(-2j * np.pi * f * delay)


def _plan(f0, q):
    frequency = shift_from_mains(band_frequencies([f0], [q])[0], mains=MAINS, longest=0.1)
    return [(f, plan_record(f, mains=MAINS)) for f in [*frequency.tolist(), float(frequency[0])]]


def _nuisances(f, record):
    """Return the columns (n, m) of one channel that are fitted beside the tone."""
    t = np.arange(record.points) * record.duration / record.points
    columns = [np.ones_like(t)]
    if f < HUM_BELOW:
        columns.append(t - t.mean())
        for hum in hum_frequencies(f, record.duration, MAINS):
            columns += [np.cos(2 * np.pi * hum * t), np.sin(2 * np.pi * hum * t)]
    return np.stack(columns, axis=1)


def bound(theta):
    """Return the Cramér-Rao bound of f0, Q and |gain| as standard deviations, (3,)."""
    information = np.zeros((5, 5))
    for f, record in _plan(theta[0], theta[1]):
        t = np.arange(record.points) * record.duration / record.points
        turn = np.exp(2j * np.pi * f * t)
        ratio = _response(f, theta)
        steps = np.array([1e-6 * theta[0], 1e-6, 1e-6, 1e-6, 1e-12])
        slopes = [(_response(f, theta + s) - _response(f, theta - s)) / (2 * s.sum()) for s in np.diag(steps)]
        other = _nuisances(f, record)
        nothing = np.zeros_like(other)
        # Rows: samples of both channels over their noise. Columns: 5 of the band, 2 of the input's phasor, nuisances.
        first = [np.zeros((len(t), 5)), np.stack([turn.real, (1j * turn).real], 1) * INPUT, other, nothing]
        second = [
            np.stack([(slope * INPUT * turn).real for slope in slopes], 1),
            np.stack([(ratio * turn).real, (1j * ratio * turn).real], 1) * INPUT,
            nothing,
            other,
        ]
        j = np.concatenate([np.concatenate(first, 1) / NOISE[0], np.concatenate(second, 1) / NOISE[1]])
        whole = j.T @ j
        scale = 1 / np.sqrt(np.maximum(np.diag(whole), 1e-30))  # at f0 itself, Q moves nothing
        scaled = whole * np.outer(scale, scale)
        kept = scaled[:5, :5] - scaled[:5, 5:] @ np.linalg.solve(scaled[5:, 5:], scaled[5:, :5])
        information += kept / np.outer(scale[:5], scale[:5])
    scale = 1 / np.sqrt(np.diag(information))
    covariance = np.linalg.inv(information * np.outer(scale, scale)) * np.outer(scale, scale)
    along = np.array([theta[2], theta[3]]) / np.hypot(theta[2], theta[3])
    return np.sqrt([covariance[0, 0], covariance[1, 1], along @ covariance[2:4, 2:4] @ along])


def errors(theta, sweeps, seed):
    """Return the errors of f0, Q and |gain| of so many sweeps, (sweeps, 3)."""
    rng, plan, found = np.random.default_rng(seed), _plan(theta[0], theta[1]), []
    frequency = np.array([f for f, _ in plan])
    for begin in range(0, sweeps, _CHUNK):
        count = min(_CHUNK, sweeps - begin)
        response = np.empty((count, len(plan)), dtype=np.complex128)
        covariance = np.empty((count, len(plan), 2, 2))
        for i, (f, record) in enumerate(plan):
            interval = record.duration / record.points
            turn = np.exp(2j * np.pi * (f * interval * np.arange(record.points) + rng.uniform(size=(count, 1))))
            volts = np.stack([(INPUT * turn).real, (INPUT * _response(f, theta) * turn).real], axis=1)
            volts += np.array(NOISE)[:, None] * rng.standard_normal(volts.shape)
            hum, drift = hum_frequencies(f, record.duration, MAINS), f < HUM_BELOW
            fit = fit_sines(volts.reshape(2 * count, -1), interval, [f], nuisance=hum, drift=drift)
            for k in range(count):
                ratio = channel_ratio(fit, numerator=2 * k + 1, denominator=2 * k)
                response[k, i], covariance[k, i] = ratio.value[0], ratio.covariance[0]
        bands = fit_bands(np.broadcast_to(frequency, response.shape), response, covariance)
        assert set(bands.status) == {"converged"}, set(bands.status)
        found.append(np.stack([bands.f0 - theta[0], bands.q - theta[1], np.abs(bands.gain) - abs(theta[2])], axis=1))
    return np.concatenate(found)


def main(sweeps: int = SWEEPS, low: float = LOW, high: float = HIGH) -> bool:
    """Print rms error over bound for each band and figure; return whether all lie within the limits."""
    good = True
    for number, (name, (f0, q, gain, delay)) in enumerate(BANDS.items()):
        theta = np.array([f0, q, gain, 0.0, delay])
        ratio = np.sqrt((errors(theta, sweeps, [sweeps, number]) ** 2).mean(axis=0)) / bound(theta)
        own = 1 / np.sqrt(2 * sweeps)
        shown = ", ".join(f"{what} {value:.4f}" for what, value in zip(("f0", "Q", "gain"), ratio, strict=True))
        print(f"{name}: rms error / bound of {sweeps} sweeps: {shown} (± {own:.4f}; limits {low} to {high})")
        good = good and bool(((ratio > low) & (ratio < high)).all())
    return good


if __name__ == "__main__":
    sys.exit(not main())
