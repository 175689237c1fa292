"""Simulated function generator, SCPI-99 SOURce and OUTPut: a sine or a table, with offset, behind an output resistance.

Levels are those of the EMF, thus of the open output: the instrument has no load assumption. Each accepted setting
begins the wave anew at the instant it takes effect. FUNCtion:SHAPe USER plays the trace that FUNCtion:USER names, one
period of it at the frequency set, its +-1 at the amplitude set (SCPI-99 headers from memory).
"""

from collections.abc import Mapping

from bandproof.simulated_instruments import faults
from bandproof.simulated_instruments.board import Board, Drive
from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.parameters import Boolean, Choice, Decimal, Word
from bandproof.simulated_instruments.syntax import ScpiError
from bandproof.simulated_instruments.traces import Traces, harmonics

__all__ = ["Generator"]

CEILING = 10.0  # V, |offset| + amplitude
ASTRAY = 1.02  # frequency of a generator at fault over the one it answers
ASSUMED = 2.0  # open-circuit volts over those an instrument shows that assumes its own resistance as load
_LEVEL = "[SOURce]:VOLTage[:LEVel][:IMMediate]"


class Generator(Device):
    """A generator that drives a board.

    Parameters
    ----------
    board : Board
    imperfections : Imperfections
    timing : Timing
    conditions : mapping
        Faults that hold (see `FaultPlan`); looked up whenever the board is driven.
    """

    def __init__(
        self,
        board: Board,
        *,
        imperfections: Imperfections,
        timing: Timing,
        conditions: Mapping[str, float] = faults.NO_CONDITIONS,
    ) -> None:
        self._board, self._imperfections, self._conditions = board, imperfections, conditions

        def frequency(value: float) -> float:
            return _step(value, imperfections.frequency_resolution)

        def level(value: float) -> float:
            return _step(value, imperfections.amplitude_resolution)

        self._traces = Traces(
            setting=timing.setting,
            wait_for_upload=self._wait_for_upload,
            is_swapped=lambda: bool(self.value("order") == "SWAP"),
            in_use=self._played,
            changed=self._drive,
        )
        super().__init__(
            "BANDPROOF,SIMULATED GENERATOR,0,0",
            timing=timing,
            settings=[
                Setting("[SOURce]:FUNCtion[:SHAPe]", "shape", Choice(("SINusoid", "USER"), "SIN")),
                Setting("[SOURce]:FUNCtion:USER", "trace", Word()),
                Setting("FORMat:BORDer", "order", Choice(("NORMal", "SWAPped"), "NORM")),
                Setting("[SOURce]:FREQuency[:CW]", "frequency", Decimal(1e-3, 50e6, 1000.0, "HZ"), frequency),
                Setting(_LEVEL + "[:AMPLitude]", "amplitude", Decimal(0.0, CEILING, 0.1, "V"), level),
                Setting(_LEVEL + ":OFFSet", "offset", Decimal(-CEILING, CEILING, 0.0, "V"), level),
                Setting("OUTPut[:STATe]", "output", Boolean()),
            ],
            commands=self._traces.commands(),
        )

    def changed(self, name: str, suffixes: tuple[int, ...]) -> None:
        """Drive the board with what is set."""
        if abs(self.value("offset")) + self.value("amplitude") > CEILING * (1 + 1e-9):
            raise ScpiError(-221, "offset and amplitude exceed the output")
        if name == "trace":
            self._traces.table(self.value("trace"))
        if self.value("shape") == "USER" and self.value("trace") not in self._traces:
            raise ScpiError(-221, "FUNCtion:USER names no trace")
        if name != "order":
            self._drive()

    def disturbed(self, at: float) -> None:
        """Take note that faults began to hold."""
        given = self._given()
        if given != self._board.drive:
            self._board.set_drive(at, given)

    def reset(self) -> None:
        """Take the defaults, thus output off."""
        super().reset()
        self._traces.forget()
        self._drive()

    def _drive(self) -> None:
        self._board.set_drive(self.at, self._given())

    def _played(self) -> str:
        return str(self.value("trace")) if self.value("shape") == "USER" else ""

    def _wait_for_upload(self) -> None:
        self.at += self.timing.upload_delay + self.message_length / self.timing.upload

    def _given(self) -> Drive:
        """Return what the board gets of what is set."""
        frequency = self.value("frequency")
        actual = frequency * (1 + self._imperfections.frequency_error)
        if faults.OFF_FREQUENCY in self._conditions:
            actual *= ASTRAY
        if not self.value("output") or faults.OPEN_OUTPUT in self._conditions:
            return Drive(actual)
        factor = ASSUMED if faults.WRONG_LOAD in self._conditions else 1.0
        amplitude, offset = factor * self.value("amplitude"), factor * self.value("offset")
        if self.value("shape") == "SIN":
            return Drive(actual, amplitude * self._imperfections.level(frequency), offset)
        mean, lines = harmonics(self._traces.table(self.value("trace")))
        offset += amplitude * mean
        if not lines:
            return Drive(actual, 0.0, offset)
        level = self._imperfections.level
        return Drive(actual, amplitude, offset, tuple((n, weight * level(n * frequency)) for n, weight in lines))


def _step(value: float, step: float) -> float:
    """Return the nearest multiple of a step; exact decimals where the step is a power of ten."""
    return round(value / step) / round(1 / step) if 0 < step < 1 else value
