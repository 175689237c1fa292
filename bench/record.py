"""From one record to one point: the sine fit of both channels, their ratio, and the record's own checks."""

from dataclasses import dataclass

import numpy as np

from bandproof.analysis.planning import folds_near
from bandproof.analysis.sine import SineFit, channel_ratio, distortion, fit_clock_and_sines, fit_sines, halves
from bandproof.analysis.types import FloatArray
from bandproof.bench.types import Point, Step

__all__ = ["Taken", "hum_frequencies", "point_of"]

HUM_BELOW = 1e3  # Hz; above, mains harmonics 2-5 and the slopes of coupling corners are too far away to matter
_SLOWEST_SAMPLING = 20.0  # samples a period, at least
_HUM_HARMONICS = 5
_LEFT_OVER, _LEFT_STEPS = 0.05, 3.0  # of the level, and steps of the converter; arbitrary, ten times what noise leaves
_CLOCK_OFF = 1e-3  # relative; no crystal is that wrong
_FROM_CODE_TO_CODE = 0.2  # of a converter's departure from a straight line; arbitrary
_DISTORTED = 10.0 ** (-40.0 / 20.0)


@dataclass(frozen=True, slots=True)
class Taken:
    """A record as it was taken, tap in first.

    ``volts`` (2, N) at the probe tips, ``sample_interval`` s, ``overload`` and ``lsb`` per tap, read-back
    ``frequency`` and ``amplitude``, bench ``time`` at its start, ``attempt`` from 0, ``ranges`` read back.
    """

    volts: FloatArray
    sample_interval: float
    overload: tuple[bool, bool]
    lsb: tuple[float, float]
    ranges: tuple[float, float]
    frequency: float
    amplitude: float
    time: float
    attempt: int


def hum_frequencies(frequency: float, duration: float, mains: float) -> FloatArray:
    """Return the mains harmonics to fit beside a tone: 1 to 5 below 1 kHz, those the record can tell from it.

    A harmonic nearer than 1/T is indistinguishable and is left out; the plan avoids such frequencies.
    """
    if frequency >= HUM_BELOW:
        return np.zeros(0)
    harmonics = mains * np.arange(1, _HUM_HARMONICS + 1)
    apart = np.abs(harmonics - frequency) * duration >= 0.999
    # A record must also hold one period of the difference between harmonics, or they are one and the same to it.
    return harmonics[apart] if duration * mains >= 1.0 else np.zeros(0)


def point_of(step: Step, taken: Taken, mains: float, linearity: float = 0.0) -> Point:
    """Return the point a record gives.

    A record without signal gives levels and response 0; offsets and residuals are its content. ``linearity`` is the
    half-width of the converter's departure from a straight line in steps: no point is surer than that, whatever its
    noise says.
    """
    return _signal(step, taken, mains, linearity) if step.tones else _quiet(step, taken)


def _quiet(step: Step, taken: Taken) -> Point:
    means, residuals = taken.volts.mean(axis=1), taken.volts.std(axis=1)
    return _point(step, taken, 0j, (0.0, 0.0, 0.0), (0.0, 0.0), _pair(means), _pair(residuals), 0.0, 0.0, ())


def _signal(step: Step, taken: Taken, mains: float, linearity: float) -> Point:
    samples, tone = taken.volts.shape[1], taken.frequency
    hum, drift = hum_frequencies(tone, taken.sample_interval * samples, mains), tone < HUM_BELOW
    fit = fit_sines(taken.volts, taken.sample_interval, [tone], nuisance=hum, drift=drift)
    ratio = channel_ratio(fit)
    covariance = _not_below(ratio.covariance[0], _floor(ratio.value[0], fit, taken, linearity))
    settling = halves(taken.volts, taken.sample_interval, [tone], nuisance=hum, drift=drift).of_ratio()
    moved = float((np.abs(settling.difference) / settling.threshold).max())
    harmonics = float(distortion(taken.volts, taken.sample_interval, tone, nuisance=hum, drift=drift)[1])
    seen = {
        "overload": any(taken.overload),
        "unsettled": not settling.is_settled,
        "undersampled": tone * taken.sample_interval * _SLOWEST_SAMPLING > 1.001,
        "folded": folds_near(tone, taken.sample_interval, samples),
    }
    flags = [name for name, is_seen in seen.items() if is_seen]
    if _is_off_frequency(taken, fit):
        flags.append("off-frequency")
    elif harmonics > _DISTORTED and step.purpose != "low-level":
        flags.append("distorted")
    return _point(
        step,
        taken,
        complex(ratio.value[0]),
        (float(covariance[0, 0]), float(covariance[0, 1]), float(covariance[1, 1])),
        _pair(np.abs(fit.phasor[:, 0])),
        _pair(fit.offset),
        _pair(fit.residual_rms),
        harmonics,
        moved,
        tuple(flags),
    )


def _floor(ratio: complex, fit: SineFit, taken: Taken, linearity: float) -> FloatArray:
    """Return the covariance (2, 2) below which no point's is taken, whatever its noise says.

    The part of a converter's departure that changes from code to code, uniform, is averaged over the two amplitudes of
    codes that a sine passes. The smooth part is a row of the budget.
    """
    steps = np.abs(fit.phasor[:, 0]) / taken.lsb
    relative = _FROM_CODE_TO_CODE * linearity / (np.sqrt(3.0 * 2.0 * steps) * steps)
    floor: FloatArray = abs(ratio) ** 2 * float((relative**2).sum()) * np.eye(2)
    return floor


def _not_below(covariance: FloatArray, floor: FloatArray) -> FloatArray:
    """Return a covariance raised to a floor where its mean variance is below it."""
    raised: FloatArray = covariance * max(1.0, float(np.trace(floor) / np.trace(covariance)))
    return raised


def _is_off_frequency(taken: Taken, fit: SineFit) -> bool:
    """Whether what a sine at the stated frequency leaves over goes away with a sine at another one."""
    channel = int(np.argmax(np.abs(fit.phasor[:, 0]) / taken.lsb))
    left, level = fit.residual_rms[channel], abs(fit.phasor[channel, 0])
    if left < max(_LEFT_OVER * level, _LEFT_STEPS * taken.lsb[channel]):
        return False
    try:
        free = fit_clock_and_sines(taken.volts[[channel]], taken.sample_interval, [taken.frequency])
    except ValueError:
        return True  # no frequency near the stated one explains the record
    return bool(abs(free.clock - 1.0) > _CLOCK_OFF and free.residual_rms[0] < 0.5 * left)


def _pair(values: FloatArray) -> tuple[float, float]:
    return float(values[0]), float(values[1])


def _point(
    step: Step,
    taken: Taken,
    response: complex,
    covariance: tuple[float, float, float],
    levels: tuple[float, float],
    offsets: tuple[float, float],
    residuals: tuple[float, float],
    harmonics: float,
    settling: float,
    flags: tuple[str, ...],
) -> Point:
    return Point(
        step=step.index,
        stage=step.stage,
        purpose=step.purpose,
        attempt=taken.attempt,
        time=taken.time,
        frequency=taken.frequency,
        amplitude=taken.amplitude,
        response=response,
        covariance=covariance,
        levels=levels,
        offsets=offsets,
        residuals=residuals,
        lsb=taken.lsb,
        ranges=taken.ranges,
        sample_interval=taken.sample_interval,
        samples=taken.volts.shape[1],
        distortion=harmonics,
        settling=settling,
        flags=flags,
    )
