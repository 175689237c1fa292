"""Simulated two-channel scope (SCPI-99 digitizer): INPut, SENSe, TRIGger, INITiate, FORMat, TRACe.

Ranges are peak volts at the BNC, full scale from -range to +range around the offset; they round up to 1-2-5 steps, the
sample interval rounds to whole ns. Codes clip at their ends. INTeger,16 are codes in the upper bits: volts = code *
range / 32768 + offset. A trigger other than immediate is not modelled and refused. INPut:FILTer switches a low-pass of
first order, if the bench has one (`Imperfections.bandwidth_limit`); without it the input's bandwidth has no end.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from bandproof.simulated_instruments import faults
from bandproof.simulated_instruments.commands import Command
from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.dynamics import FloatArray
from bandproof.simulated_instruments.imperfections import RANGES, Imperfections
from bandproof.simulated_instruments.parameters import Boolean, Choice, Decimal, Integer, definite_block, show_number
from bandproof.simulated_instruments.syntax import ScpiError
from bandproof.simulated_instruments.wiring import Wiring

__all__ = ["Scope"]

SAMPLE_STEP = 1e-9  # s
MOST_POINTS = 100_000
_ROUNDED = 101  # a positive number, the instrument's own (SCPI 1999.0, 21.8.1: device-specific); harmless
DRIFT = 0.05 / 60  # 1/s, of channel 2 when it drifts
_FORMATS = Choice(("REAL", "INTeger", "ASCii"), "REAL")
_LENGTHS = {"REAL": 32, "INT": 16, "ASC": 0}  # bits a sample; 0: as many characters as it takes


@dataclass(frozen=True, slots=True)
class _Acquisition:
    """What was armed: instant of the first sample, its settings, what seeds its noise."""

    start: float
    interval: float
    points: int
    ranges: tuple[float, float]
    offsets: tuple[float, float]
    gains: tuple[float, float]
    hum: tuple[float, float]
    seed: tuple[int, int, int, int]


class Scope(Device):
    """A scope that looks at a board.

    Parameters
    ----------
    wiring : Wiring
    imperfections : Imperfections
    timing : Timing
    seed, run : int
        With step and attempt they seed the noise.
    mark : callable
        Returns the controller's step and attempt, or None where nobody names them: then records are counted.
    never_completes : callable
        Asked at each arming, and told its instant, whether this acquisition shall never complete.
    conditions : mapping
        Faults that hold (see `FaultPlan`).
    """

    def __init__(
        self,
        wiring: Wiring,
        *,
        imperfections: Imperfections,
        timing: Timing,
        seed: int,
        run: int,
        mark: Callable[[], tuple[int, int] | None],
        never_completes: Callable[[float], bool] = lambda at: False,
        conditions: Mapping[str, float] = faults.NO_CONDITIONS,
    ) -> None:
        self._conditions = conditions
        self._wiring, self._imperfections, self._seed = wiring, imperfections, (seed, run)
        self._mark, self._never_completes, self._count = mark, never_completes, 0
        self._armed: _Acquisition | None = None
        self._records: dict[int, FloatArray] = {}
        self._format = "REAL"
        super().__init__(
            "BANDPROOF,SIMULATED SCOPE,0,0",
            timing=timing,
            settings=_settings(imperfections.decimation),
            commands=self._own(timing),
        )

    @property
    def sample_interval(self) -> float:
        """The sample interval in s that time and points lead to."""
        steps = max(1, round(self.value("time") / self.value("points") / SAMPLE_STEP))
        return float(steps / round(1 / SAMPLE_STEP))

    def record(self, channel: int) -> FloatArray | None:
        """Return the last complete record of a channel (from 0) in V at the input, None while it is not complete.

        Raises
        ------
        ScpiError
            Nothing was armed.
        """
        if self._armed is None:
            raise ScpiError(-230)
        self.wait()
        return self._record(channel) if self.at < float("inf") else None

    def changed(self, name: str, suffixes: tuple[int, ...]) -> None:
        """Switch a channel's coupling or filter; say that a range was rounded, where that is the instrument's habit."""
        if name == "range" and self._imperfections.rounded_entries:
            self.status.errors.push(_ROUNDED, "value rounded")
        if name == "coupling":
            self._wiring.couple(self.at, suffixes[0] - 1, self.value(name, *suffixes))
        if name == "filter":
            self._wiring.filter(self.at, suffixes[0] - 1, self.value(name, *suffixes))

    def reset(self) -> None:
        """Take the defaults; a record is lost."""
        super().reset()
        self._armed, self._format = None, "REAL"
        self._records.clear()
        for channel in range(2):
            self._wiring.couple(self.at, channel, "DC")
            self._wiring.filter(self.at, channel, False)

    def _own(self, timing: Timing) -> list[Command]:
        return [
            Command("INITiate[:IMMediate]", self._arm, duration=timing.arming),
            Command("ABORt", lambda _: self._abort()),
            Command("[SENSe]:SWEep:TINTerval?", lambda _: show_number(self.sample_interval)),
            Command("FORMat[:DATA]", self._set_format, (_FORMATS, Integer(0, 64)), 1, timing.setting),
            Command("FORMat[:DATA]?", lambda _: f"{self._format},{_LENGTHS[self._format]}".encode("ascii")),
            Command("TRACe[:DATA]?", self._trace, (Choice(("CH1", "CH2"), "CH1"),), 1),
        ]

    def _arm(self, suffixes: tuple[int, ...]) -> None:
        if self.at < self.status.pending_until:
            raise ScpiError(-213)
        endless = self._never_completes(self.at)
        self._count += 1
        step, attempt = self._mark() or (self._count, 0)
        self._records.clear()
        self._armed = _Acquisition(
            start=self.at,
            interval=self.sample_interval,
            points=self.value("points"),
            ranges=(self.value("range", 1), self.value("range", 2)),
            offsets=(self.value("offset", 1), self.value("offset", 2)),
            gains=(self._gain(0), self._gain(1)),
            hum=(self._wiring.hum(0), self._wiring.hum(1)),
            seed=(*self._seed, step, attempt),
        )
        duration = float("inf") if endless else self._armed.interval * self._armed.points
        self.status.begin(self.at, self.at + duration)

    def _gain(self, channel: int) -> float:
        """Return the gain factor of a channel (from 0) now, but for that of its range."""
        world, since = self._imperfections, self._conditions.get(faults.DRIFT)
        drifted = 1 + world.drift[channel] * self.at
        if channel == 1 and since is not None:
            drifted *= 1 + DRIFT * (self.at - since)
        return (1 + world.channel_gain[channel]) * drifted * self._wiring.gain(channel)

    def _abort(self) -> None:
        if self.at < self.status.pending_until:
            self._armed = None
        self.status.abort()

    def _set_format(self, suffixes: tuple[int, ...], kind: str, length: int | None = None) -> None:
        if length is not None and length != _LENGTHS[kind]:
            raise ScpiError(-224, f"{kind} has length {_LENGTHS[kind]}")
        self._format = kind

    def _trace(self, suffixes: tuple[int, ...], name: str) -> bytes | None:
        volts = self.record(int(name[2:]) - 1)
        if volts is None:
            return None
        reply = self._encode(volts, int(name[2:]) - 1)
        self.at += len(reply) / self.timing.transfer
        return reply

    def _record(self, channel: int) -> FloatArray:
        """Return the armed record of a channel (from 0) in V, kept for a second look."""
        if channel not in self._records:
            armed = self._armed
            assert armed is not None
            self._records[channel] = self._convert(self._input(armed, channel), armed, channel)
        return self._records[channel]

    def _input(self, armed: _Acquisition, channel: int) -> FloatArray:
        """Return volts at the converter of a channel, all but noise."""
        world = self._imperfections
        interval = armed.interval * (1 + world.timebase_error)
        volts = self._wiring.board.volts(channel, armed.start, interval, armed.points, delay=world.skew[channel])
        if armed.hum[channel]:  # mains is not locked to the bench: its phase is drawn for each record
            phase = 2 * np.pi * np.random.default_rng([*armed.seed, 2]).uniform()
            angle = 2 * np.pi * world.hum_frequency * interval * np.arange(armed.points)
            volts = volts + armed.hum[channel] * np.sin(angle + phase)
        return volts * armed.gains[channel] * (1 + world.range_gain[channel][RANGES.index(armed.ranges[channel])])

    def _convert(self, volts: FloatArray, armed: _Acquisition, channel: int) -> FloatArray:
        """Return what the converter makes of volts: non-linearity, noise, rounding, end codes."""
        full, offset, world = armed.ranges[channel], armed.offsets[channel], self._imperfections
        if not world.adc_bits:
            return np.clip(volts, offset - full, offset + full)
        ends = 2 ** (world.adc_bits - 1)
        code = (volts - offset) * (ends / full)
        if world.nonlinearity[channel]:
            code = code + world.nonlinearity[channel] * np.sin(np.pi * code / ends)  # smooth, largest at half scale
        if world.noise:
            code = code + world.noise * np.random.default_rng([*armed.seed, channel]).standard_normal(len(code))
        return np.asarray(np.clip(np.rint(code), -ends, ends - 1) * (full / ends) + offset)

    def _encode(self, volts: FloatArray, channel: int) -> bytes:
        assert self._armed is not None
        if self._format == "ASC":
            return b",".join(b"%.8E" % volt for volt in volts.tolist())
        order = "<" if self.value("order") == "SWAP" else ">"
        if self._format == "REAL":
            return definite_block(volts.astype(order + "f4").tobytes())
        codes = np.rint((volts - self._armed.offsets[channel]) * (32768 / self._armed.ranges[channel]))
        return definite_block(np.clip(codes, -32768, 32767).astype(order + "i2").tobytes())


def _settings(decimation: int) -> list[Setting]:
    voltage = "[SENSe<1:2>]:VOLTage[:DC]:RANGe"
    return [
        Setting("INPut<1:2>:COUPling", "coupling", Choice(("DC", "AC", "GROund"), "DC")),
        Setting("INPut<1:2>:FILTer[:LPASs][:STATe]", "filter", Boolean()),
        Setting(voltage + "[:UPPer]", "range", Decimal(RANGES[0], RANGES[-1], 10.0, "V"), _range),
        Setting(voltage + ":OFFSet", "offset", Decimal(-50.0, 50.0, 0.0, "V")),
        Setting("[SENSe]:SWEep:TIME", "time", Decimal(1e-6, 1000.0, 0.01, "S")),
        Setting("[SENSe]:SWEep:POINts", "points", Integer(1, MOST_POINTS, 1000), lambda n: max(1, n // decimation)),
        Setting("TRIGger[:SEQuence]:SOURce", "trigger", Choice(("IMMediate",), "IMM")),
        Setting("FORMat:BORDer", "order", Choice(("NORMal", "SWAPped"), "NORM")),
    ]


def _range(value: float) -> float:
    """Return the smallest range that holds a value; one unit in 1e9 over a range still fits it."""
    return next((step for step in RANGES if value <= step * (1 + 1e-9)), RANGES[-1])
