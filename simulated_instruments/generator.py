"""Simulated function generator, SCPI-99 SOURce and OUTPut: a sine with offset behind an output resistance.

Levels are those of the EMF, thus of the open output: the instrument has no load assumption. Each accepted setting
begins the sine anew at the instant it takes effect.
"""

from collections.abc import Mapping

from bandproof.simulated_instruments import faults
from bandproof.simulated_instruments.board import Board, Drive
from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.parameters import Boolean, Choice, Decimal
from bandproof.simulated_instruments.syntax import ScpiError

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

        super().__init__(
            "BANDPROOF,SIMULATED GENERATOR,0,0",
            timing=timing,
            settings=[
                Setting("[SOURce]:FUNCtion[:SHAPe]", "shape", Choice(("SINusoid",), "SIN")),
                Setting("[SOURce]:FREQuency[:CW]", "frequency", Decimal(1e-3, 50e6, 1000.0, "HZ"), frequency),
                Setting(_LEVEL + "[:AMPLitude]", "amplitude", Decimal(0.0, CEILING, 0.1, "V"), level),
                Setting(_LEVEL + ":OFFSet", "offset", Decimal(-CEILING, CEILING, 0.0, "V"), level),
                Setting("OUTPut[:STATe]", "output", Boolean()),
            ],
        )

    def changed(self, name: str, suffixes: tuple[int, ...]) -> None:
        """Drive the board with what is set."""
        if abs(self.value("offset")) + self.value("amplitude") > CEILING * (1 + 1e-9):
            raise ScpiError(-221, "offset and amplitude exceed the output")
        self._board.set_drive(self.at, self._given())

    def disturbed(self, at: float) -> None:
        """Take note that faults began to hold."""
        given = self._given()
        if given != self._board.drive:
            self._board.set_drive(at, given)

    def reset(self) -> None:
        """Take the defaults, thus output off."""
        super().reset()
        self._board.set_drive(self.at, self._given())

    def _given(self) -> Drive:
        """Return what the board gets of what is set."""
        frequency = self.value("frequency")
        actual = frequency * (1 + self._imperfections.frequency_error)
        if faults.OFF_FREQUENCY in self._conditions:
            actual *= ASTRAY
        if not self.value("output") or faults.OPEN_OUTPUT in self._conditions:
            return Drive(actual)
        factor = ASSUMED if faults.WRONG_LOAD in self._conditions else 1.0
        amplitude = self.value("amplitude") * self._imperfections.level(frequency)
        return Drive(actual, factor * amplitude, factor * self.value("offset"))


def _step(value: float, step: float) -> float:
    """Return the nearest multiple of a step; exact decimals where the step is a power of ten."""
    return round(value / step) / round(1 / step) if 0 < step < 1 else value
