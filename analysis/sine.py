"""Least-squares sine fits of records, with covariances.

Convention: x(t) = Re(X exp(j 2π f t)), t = 0 at the first sample, X in volts peak.
Source: IEEE Std 1057, sine fits with three parameters (frequency known) and four (frequency estimated).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike

from bandproof.analysis.types import ComplexArray, FloatArray

__all__ = ["Ratio", "Settling", "SineFit", "channel_ratio", "distortion", "fit_clock_and_sines", "fit_sines", "halves"]

_SETTLING_FACTOR = 3.0  # |difference| over its own rms; exceeded by noise alone once in 8000: exp(-9)
_CLOCK_REACH = 0.5  # cycles over the record; arbitrary, Gauss-Newton is sure within 0.3 and lost at 1
_CLOCK_STEPS = 30  # arbitrary; Gauss-Newton needs about five


@dataclass(frozen=True, slots=True, eq=False)
class SineFit:
    """Tones in C channels of one record.

    Attributes
    ----------
    frequency : (K,) Hz
    phasor : (C, K) complex, V peak
    covariance : (C, K, 2, 2) V²
        Of the real and imaginary part of each phasor, from the residual, the part by an estimated clock included.
    nuisance : (C, M) complex, V peak
        Fitted jointly to keep hum out of the tones.
    offset, drift : (C,)
        V in the middle of the record; V over the whole record (0 where none was fitted).
    residual_rms : (C,) V
        sqrt(sum of squares / samples), the rms residual of IEEE Std 1057.
    noise : (C,) V
        sqrt(sum of squares / dof), the estimate of the noise's standard deviation.
    dof : int
        Degrees of freedom of a channel's residual.
    clock, clock_variance : float
        Estimated true frequency over stated frequency, and its variance (1 and 0 where not estimated).
    clock_slope : (C, K) complex, V
        Derivative of each phasor by the clock ratio; common to all channels, so it cancels in their ratio.
    """

    frequency: FloatArray
    phasor: ComplexArray
    covariance: FloatArray
    nuisance: ComplexArray
    offset: FloatArray
    drift: FloatArray
    residual_rms: FloatArray
    noise: FloatArray
    dof: int
    clock: float
    clock_variance: float
    clock_slope: ComplexArray


@dataclass(frozen=True, slots=True, eq=False)
class Ratio:
    """Complex ratio of two channels per tone: value (K,), covariance (K, 2, 2) of its real and imaginary part."""

    value: ComplexArray
    covariance: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Settling:
    """First half of a record against its second, (C, K): phasor, difference and threshold in V peak."""

    phasor: ComplexArray
    difference: ComplexArray
    threshold: FloatArray

    def of_ratio(self, *, numerator: int = 1, denominator: int = 0) -> Settling:
        """Return the same comparison for the ratio of two channels, relative to it, (1, K).

        What both channels share leaves no trace in it: a clock a few ppm off turns the phasors of a long record.
        """
        relative = self.difference / self.phasor
        threshold = np.hypot(*(self.threshold[c] / np.abs(self.phasor[c]) for c in (numerator, denominator)))
        moved = relative[numerator] - relative[denominator]
        return Settling(np.ones_like(moved)[None], moved[None], threshold[None])

    @property
    def is_settled(self) -> bool:
        """Whether no tone of any channel changed by more than its threshold."""
        return bool((np.abs(self.difference) <= self.threshold).all())


def fit_sines(
    volts: ArrayLike,
    sample_interval: float,
    frequency: ArrayLike,
    *,
    nuisance: ArrayLike = (),
    drift: bool = False,
) -> SineFit:
    """Fit tones of known frequency to every channel of a record.

    Parameters
    ----------
    volts : (C, n) floats
        V, channels sampled at the same instants.
    sample_interval : float
        s.
    frequency : (K,) floats
        Hz, the tones wanted.
    nuisance : (M,) floats
        Hz, tones fitted jointly and reported apart: mains and its harmonics.
    drift : bool
        Fit a straight line instead of a constant offset.

    Raises
    ------
    ValueError
        The record is too short for the parameters, or two tones cannot be told apart within it.

    Examples
    --------
    >>> t = np.arange(100) * 1e-4
    >>> fit_sines([3 * np.cos(2 * np.pi * 317.0 * t) + 1], 1e-4, [317.0]).phasor.round(9)
    array([[3.+0.j]])
    """
    y = np.atleast_2d(np.asarray(volts, dtype=np.float64))
    tones = np.atleast_1d(np.asarray(frequency, dtype=np.float64))
    others = np.atleast_1d(np.asarray(nuisance, dtype=np.float64))
    design = _design(y.shape[1], sample_interval, np.concatenate([tones, others]), drift=drift)
    return _solve(y, design, tones, others)


def fit_clock_and_sines(
    volts: ArrayLike,
    sample_interval: float,
    frequency: ArrayLike,
    *,
    nuisance: ArrayLike = (),
    drift: bool = False,
) -> SineFit:
    """Fit tones and one clock ratio common to all tones and channels (four parameters for a single tone).

    The start must lie within about 0.3 cycles over the record of the truth. Nuisance tones keep their frequency.

    Raises
    ------
    ValueError
        As for `fit_sines`, or the clock ratio does not settle: the stated frequency is too far off.
    """
    y = np.atleast_2d(np.asarray(volts, dtype=np.float64))
    tones = np.atleast_1d(np.asarray(frequency, dtype=np.float64))
    others = np.atleast_1d(np.asarray(nuisance, dtype=np.float64))
    clock = 1.0
    for _ in range(_CLOCK_STEPS):
        design = _design(y.shape[1], sample_interval, np.concatenate([clock * tones, others]), drift=drift)
        fit = _solve(y, design, tones, others)
        step, variance, slope = _clock_step(y, design, fit, sample_interval, clock)
        clock += step
        leading = tones[np.abs(fit.phasor).max(axis=0).argmax()]
        if not abs(clock - 1) * leading * y.shape[1] * sample_interval < _CLOCK_REACH:
            break
        if abs(step) <= 1e-14 * clock + 1e-9 * variance**0.5:
            return _with_clock(fit, clock, variance, slope)
    raise ValueError(f"no clock ratio settles near the stated {tones[0]:g} Hz: start nearer to the true frequency")


def channel_ratio(fit: SineFit, *, numerator: int = 1, denominator: int = 0) -> Ratio:
    """Return the ratio of two channels per tone with its covariance; the channels' noise is independent.

    Source: law of propagation (JCGM 100, 5.2) on H = X2 / X1.
    """
    x1, x2 = fit.phasor[denominator], fit.phasor[numerator]
    value: ComplexArray = x2 / x1
    by_x2, by_x1 = _as_matrix(1 / x1), _as_matrix(-value / x1)
    clock = fit.clock_slope[numerator] / x1 - value / x1 * fit.clock_slope[denominator]
    own = [_own_covariance(fit, channel) for channel in (numerator, denominator)]
    covariance = _sandwich(by_x2, own[0]) + _sandwich(by_x1, own[1]) + fit.clock_variance * _outer(clock)
    return Ratio(value, covariance)


def halves(
    volts: ArrayLike,
    sample_interval: float,
    frequency: ArrayLike,
    *,
    nuisance: ArrayLike = (),
    drift: bool = False,
) -> Settling:
    """Compare the phasors of the first and the second half of a record.

    One fit of the whole record in which each tone may step in the middle; offset and nuisance tones may not, so that
    hum which half a record could not tell from a tone does no harm. The threshold comes from the record's own noise,
    which alone exceeds it about once in 8000 tones.
    """
    y = np.atleast_2d(np.asarray(volts, dtype=np.float64))
    tones, others = (np.atleast_1d(np.asarray(f, dtype=np.float64)) for f in (frequency, nuisance))
    samples, k = y.shape[1], len(tones)
    rows = _rows(samples, sample_interval, np.concatenate([tones, others]), drift=drift)
    steps = rows[: 2 * k] * np.where(np.arange(samples) < samples // 2, -0.5, 0.5)
    design = _orthogonalized(np.concatenate([steps, rows]), drift=drift)
    projected = y @ design.q
    stepped = projected @ design.inverse[: 2 * k].T
    residual = y - projected @ design.q.T
    unit = (design.inverse[: 2 * k] ** 2).sum(axis=1).reshape(k, 2).sum(axis=1)
    variance = np.einsum("cn,cn->c", residual, residual)[:, None] / (samples - len(design.inverse)) * unit
    phasor = projected @ design.inverse[2 * k : 4 * k].T
    return Settling(
        phasor[:, 0::2] + 1j * phasor[:, 1::2],
        stepped[:, 0::2] + 1j * stepped[:, 1::2],
        _SETTLING_FACTOR * np.sqrt(variance),
    )


def distortion(
    volts: ArrayLike,
    sample_interval: float,
    frequency: float,
    *,
    nuisance: ArrayLike = (),
    drift: bool = False,
    orders: tuple[int, ...] = (2, 3, 4, 5),
) -> FloatArray:
    """Return, per channel, the rms of the fitted harmonics over the fundamental, (C,).

    Harmonics at or above half the sampling rate are left out, and those that the record cannot tell from a nuisance
    tone: they could be something else.
    """
    others = np.atleast_1d(np.asarray(nuisance, dtype=np.float64))
    resolution = 1.0 / (sample_interval * np.shape(np.atleast_2d(volts))[1])
    kept = [
        order
        for order in orders
        if order * frequency < 0.5 / sample_interval
        and not (np.abs(others - order * frequency) < 0.999 * resolution).any()
    ]
    tones = [frequency * order for order in (1, *kept)]
    fit = fit_sines(volts, sample_interval, tones, nuisance=others, drift=drift)
    size = np.abs(fit.phasor)
    ratio: FloatArray = np.sqrt((size[:, 1:] ** 2).sum(axis=1)) / size[:, 0]
    return ratio


@dataclass(frozen=True, slots=True, eq=False)
class _Design:
    """Orthonormal columns, the triangle that makes them the tones' columns, and whether a drift is among them."""

    q: FloatArray
    inverse: FloatArray
    drift: bool


def _design(samples: int, sample_interval: float, frequency: FloatArray, *, drift: bool) -> _Design:
    return _orthogonalized(_rows(samples, sample_interval, frequency, drift=drift), drift=drift)


def _rows(samples: int, sample_interval: float, frequency: FloatArray, *, drift: bool) -> FloatArray:
    """Return the rows cos, -sin per tone, a constant, and a line from -1/2 to 1/2."""
    columns = 2 * len(frequency) + 1 + drift
    if samples <= columns:
        raise ValueError(f"a record of {samples} samples is too short for {columns} parameters")
    matrix = np.empty((columns, samples))
    angle = 2 * np.pi * sample_interval * frequency[:, None] * np.arange(samples)
    matrix[0 : 2 * len(frequency) : 2] = np.cos(angle)
    matrix[1 : 2 * len(frequency) : 2] = -np.sin(angle)
    matrix[2 * len(frequency)] = 1.0
    if drift:
        matrix[-1] = np.linspace(-0.5, 0.5, samples)
    return matrix


def _orthogonalized(matrix: FloatArray, *, drift: bool) -> _Design:
    inverse = _orthonormal(matrix)
    q = inverse.T @ matrix
    # Cholesky QR twice is as good as Householder's, much faster (Y. Yamamoto et al., ETNA 44, 2015; from memory)
    again = _orthonormal(q)
    return _Design(np.ascontiguousarray((again.T @ q).T), inverse @ again, drift)


def _orthonormal(rows: FloatArray) -> FloatArray:
    """Return the upper triangle whose transpose makes the rows orthonormal.

    Raises
    ------
    ValueError
        The rows are linearly dependent to about eight digits.
    """
    try:
        lower = np.linalg.cholesky(rows @ rows.T)
    except np.linalg.LinAlgError as dependent:
        raise ValueError(
            "two of the tones cannot be told apart in this record: lengthen it or move one of them"
        ) from dependent
    triangle: FloatArray = np.linalg.inv(lower).T
    return triangle


def _solve(y: FloatArray, design: _Design, tones: FloatArray, others: FloatArray) -> SineFit:
    channels, samples = y.shape
    projected = y @ design.q
    solution = projected @ design.inverse.T
    residual = y - projected @ design.q.T
    squares = np.einsum("cn,cn->c", residual, residual)
    dof = samples - solution.shape[1]
    k, every = len(tones), len(tones) + len(others)
    phasors = solution[:, 0 : 2 * every : 2] + 1j * solution[:, 1 : 2 * every : 2]
    unit = (design.inverse @ design.inverse.T)[: 2 * k, : 2 * k].reshape(k, 2, k, 2)
    blocks = unit[np.arange(k), :, np.arange(k), :]
    return SineFit(
        frequency=tones,
        phasor=phasors[:, :k],
        covariance=(squares / dof)[:, None, None, None] * blocks,
        nuisance=phasors[:, k:],
        offset=solution[:, 2 * every],
        drift=solution[:, -1] if design.drift else np.zeros(channels),
        residual_rms=np.sqrt(squares / samples),
        noise=np.sqrt(squares / dof),
        dof=dof,
        clock=1.0,
        clock_variance=0.0,
        clock_slope=np.zeros((channels, k), dtype=np.complex128),
    )


def _clock_step(
    y: FloatArray, design: _Design, fit: SineFit, sample_interval: float, clock: float
) -> tuple[float, float, ComplexArray]:
    """Return the Gauss-Newton step of the clock ratio, its variance, and the phasors' derivative by it, (C, K).

    The derivative of the record by the ratio is freed from what the phasors can follow, then the residual is regressed
    on it, all channels together, each weighted by its own noise.
    """
    k, t = len(fit.frequency), sample_interval * np.arange(y.shape[1])
    turns = 2j * np.pi * fit.frequency[:, None] * t
    derivative = (fit.phasor @ (turns * np.exp(clock * turns))).real
    followed = derivative @ design.q
    free = derivative - followed @ design.q.T
    residual = y - (y @ design.q) @ design.q.T
    weight = 1 / np.maximum(fit.noise, 1e-14 * np.abs(y).max(axis=1)) ** 2  # a noiseless record keeps finite weights
    information = weight @ np.einsum("cn,cn->c", free, free)
    step = weight @ np.einsum("cn,cn->c", free, residual) / information
    moved = -followed @ design.inverse.T
    return float(step), float(1 / information), moved[:, 0 : 2 * k : 2] + 1j * moved[:, 1 : 2 * k : 2]


def _with_clock(fit: SineFit, clock: float, variance: float, slope: ComplexArray) -> SineFit:
    return replace(
        fit,
        covariance=fit.covariance + variance * _outer(slope),
        clock=clock,
        clock_variance=variance,
        clock_slope=slope,
    )


def _as_matrix(factor: ComplexArray) -> FloatArray:
    """Return multiplication by a complex factor (K,) as matrices on real and imaginary part, (K, 2, 2)."""
    return np.stack([np.stack([factor.real, -factor.imag], -1), np.stack([factor.imag, factor.real], -1)], -2)


def _outer(vector: ComplexArray) -> FloatArray:
    """Return the outer product of (..., ) complex numbers as (real, imaginary) vectors, (..., 2, 2)."""
    pair = np.stack([vector.real, vector.imag], axis=-1)
    product: FloatArray = pair[..., :, None] * pair[..., None, :]
    return product


def _sandwich(matrix: FloatArray, covariance: FloatArray) -> FloatArray:
    result: FloatArray = matrix @ covariance @ np.swapaxes(matrix, -1, -2)
    return result


def _own_covariance(fit: SineFit, channel: int) -> FloatArray:
    """Return the covariance of a channel's phasors without the part the clock ratio puts into all channels."""
    own: FloatArray = fit.covariance[channel] - fit.clock_variance * _outer(fit.clock_slope[channel])
    return own
