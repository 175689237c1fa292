"""What is not ideal about a bench: sizes that are declared, and the values one bench drew from them.

Every value is drawn uniformly within plus or minus its size (corners and hum within zero and their size), each from its
own stream, so that switching one off leaves the others as they were. A size of 0 switches an imperfection off.
"""

from collections.abc import Mapping
from dataclasses import asdict, dataclass, fields
from typing import Any

import numpy as np

__all__ = ["RANGES", "Imperfections", "Sizes"]

RANGES = (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0)  # V peak, the scope's 1-2-5 steps
MAINS = 50.0  # Hz
PROBE_CORNER = 1500.0  # Hz, where a 10:1 probe goes over from resistive to capacitive division; common practice


@dataclass(frozen=True, slots=True)
class Sizes:
    """Greatest size of each imperfection; the defaults are those of the reference bench.

    Ratios except: output_resistance in ohm, skew in s, probe_corner and ac_corner in Hz, hum in V, drift in 1/s,
    adc_bits in bit (0: no converter, thus no rounding and no noise), noise and nonlinearity in LSB (noise rms),
    frequency_resolution in Hz, amplitude_resolution in V. `decimation` keeps one sample of so many, told only by what
    is read back; `rounded_entries` of 1 puts a harmless entry into the scope's error queue with each range.

    `probe_resistance` in ohm (0: none) and `probe_capacitance` in F load what each channel is connected to. `slew` in
    V/s limits op-amp outputs (0: only as the network says). `bandwidth_limit` in Hz is the corner of the channels'
    filters while they are on (0: they have no effect), `bandwidth_mismatch` how far each is off it, relative.
    """

    output_resistance: float = 50.0
    flatness: float = 0.01
    frequency_error: float = 20e-6
    frequency_resolution: float = 1e-6
    amplitude_resolution: float = 1e-3
    channel_gain: float = 0.015
    range_gain: float = 0.005
    skew: float = 20e-9
    probe_compensation: float = 0.01
    probe_corner: float = PROBE_CORNER
    ac_corner: float = 0.1
    adc_bits: int = 8
    noise: float = 0.5
    nonlinearity: float = 0.5
    timebase_error: float = 0.0
    hum: float = 1e-3
    drift: float = 0.0002 / 60
    reseating: float = 0.0005
    decimation: int = 1
    rounded_entries: int = 0
    probe_resistance: float = 0.0
    probe_capacitance: float = 0.0
    slew: float = 0.0
    bandwidth_limit: float = 0.0
    bandwidth_mismatch: float = 0.0

    def __post_init__(self) -> None:
        for entry in fields(self):
            if not getattr(self, entry.name) >= 0:
                raise ValueError(f"{entry.name} must not be negative, found {getattr(self, entry.name)!r}")
        if self.bandwidth_mismatch >= 1:
            raise ValueError(f"bandwidth_mismatch must be less than 1, found {self.bandwidth_mismatch!r}")
        if self.decimation < 1 or self.decimation != int(self.decimation):
            raise ValueError(f"decimation must be a whole number from 1, found {self.decimation!r}")
        if self.adc_bits > 16 or self.adc_bits != int(self.adc_bits):
            raise ValueError(f"adc_bits must be a whole number up to 16, found {self.adc_bits!r}")


@dataclass(frozen=True, slots=True)
class Imperfections:
    """What one bench drew; fields as in `Sizes`, those with two values per scope channel. The defaults are ideal.

    `flatness` and `flatness_angle` give the generator's amplitude factor 1 + flatness sin(log2(f / 1 kHz) / 2 + angle).
    """

    output_resistance: float = 0.0
    flatness: float = 0.0
    flatness_angle: float = 0.0
    frequency_error: float = 0.0
    frequency_resolution: float = 0.0
    amplitude_resolution: float = 0.0
    channel_gain: tuple[float, float] = (0.0, 0.0)
    range_gain: tuple[tuple[float, ...], tuple[float, ...]] = ((0.0,) * len(RANGES),) * 2
    skew: tuple[float, float] = (0.0, 0.0)
    probe_compensation: tuple[float, float] = (0.0, 0.0)
    probe_corner: float = PROBE_CORNER
    ac_corner: tuple[float, float] = (0.0, 0.0)
    adc_bits: int = 0
    noise: float = 0.0
    nonlinearity: tuple[float, float] = (0.0, 0.0)
    timebase_error: float = 0.0
    hum: tuple[float, float] = (0.0, 0.0)
    hum_frequency: float = MAINS
    drift: tuple[float, float] = (0.0, 0.0)
    reseating: float = 0.0
    decimation: int = 1
    rounded_entries: int = 0
    probe_resistance: float = 0.0
    probe_capacitance: float = 0.0
    slew: float = 0.0
    bandwidth_limit: tuple[float, float] = (0.0, 0.0)

    @classmethod
    def reference(cls, seed: int) -> "Imperfections":
        """Return the reference bench a seed stands for."""
        return cls.draw(seed, Sizes())

    @classmethod
    def draw(cls, seed: int, sizes: Sizes) -> "Imperfections":
        """Return the bench a seed stands for, within sizes."""

        def pair(stream: int, size: float, low: float = -1.0) -> tuple[float, float]:
            first, second = (size * np.random.default_rng([seed, 1000 + stream]).uniform(low, 1.0, 2)).tolist()
            return first, second

        def ranges(stream: int) -> tuple[float, ...]:
            drawn = np.random.default_rng([seed, 1000 + stream]).uniform(-1.0, 1.0, len(RANGES))
            return tuple((sizes.range_gain * drawn).tolist())

        mismatch = pair(13, sizes.bandwidth_mismatch)
        return cls(
            output_resistance=sizes.output_resistance,
            flatness=pair(0, sizes.flatness)[0],
            flatness_angle=pair(1, np.pi)[0],
            frequency_error=pair(2, sizes.frequency_error)[0],
            frequency_resolution=sizes.frequency_resolution,
            amplitude_resolution=sizes.amplitude_resolution,
            channel_gain=pair(3, sizes.channel_gain),
            range_gain=(ranges(4), ranges(5)),
            skew=pair(6, sizes.skew),
            probe_compensation=pair(7, sizes.probe_compensation),
            probe_corner=sizes.probe_corner,
            ac_corner=pair(8, sizes.ac_corner, 0.0),
            adc_bits=sizes.adc_bits,
            noise=sizes.noise,
            nonlinearity=pair(9, sizes.nonlinearity),
            timebase_error=pair(10, sizes.timebase_error)[0],
            hum=pair(11, sizes.hum, 0.0),
            drift=pair(12, sizes.drift),
            reseating=sizes.reseating,
            decimation=sizes.decimation,
            rounded_entries=sizes.rounded_entries,
            probe_resistance=sizes.probe_resistance,
            probe_capacitance=sizes.probe_capacitance,
            slew=sizes.slew,
            bandwidth_limit=(sizes.bandwidth_limit * (1 + mismatch[0]), sizes.bandwidth_limit * (1 + mismatch[1])),
        )

    def as_plain(self) -> dict[str, Any]:
        """Return the drawn values as a dictionary for JSON."""
        return asdict(self)

    @classmethod
    def from_plain(cls, plain: Mapping[str, Any]) -> "Imperfections":
        """Return what `as_plain` gave, before or after JSON."""
        return cls(**{name: _frozen(value) for name, value in plain.items()})

    def level(self, frequency: float) -> float:
        """Return the generator's amplitude factor at a frequency in Hz."""
        return float(1 + self.flatness * np.sin(np.log2(max(frequency, 1e-6) / 1e3) / 2 + self.flatness_angle))


def _frozen(value: Any) -> Any:
    return tuple(_frozen(item) for item in value) if isinstance(value, list | tuple) else value
