"""Simulated function generator, SCPI-99 SOURce and OUTPut: a sine with offset behind an output resistance.

Levels are those of the EMF, thus of the open output: the instrument has no load assumption. Each accepted setting
begins the sine anew at the instant it takes effect.
"""

from bandproof.simulated_instruments.board import Board, Drive
from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.imperfections import Imperfections
from bandproof.simulated_instruments.parameters import Boolean, Choice, Decimal
from bandproof.simulated_instruments.syntax import ScpiError

__all__ = ["Generator"]

CEILING = 10.0  # V, |offset| + amplitude
_LEVEL = "[SOURce]:VOLTage[:LEVel][:IMMediate]"


class Generator(Device):
    """A generator that drives a board.

    Parameters
    ----------
    board : Board
    imperfections : Imperfections
    timing : Timing
    """

    def __init__(self, board: Board, *, imperfections: Imperfections, timing: Timing) -> None:
        self._board, self._imperfections = board, imperfections

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
        self._drive()

    def reset(self) -> None:
        """Take the defaults, thus output off."""
        super().reset()
        self._drive()

    def _drive(self) -> None:
        frequency = self.value("frequency")
        if self.value("output"):
            amplitude = self.value("amplitude") * self._imperfections.level(frequency)
            offset = self.value("offset")
        else:
            amplitude, offset = 0.0, 0.0
        actual = frequency * (1 + self._imperfections.frequency_error)
        self._board.set_drive(self.at, Drive(actual, amplitude, offset))


def _step(value: float, step: float) -> float:
    """Return the nearest multiple of a step; exact decimals where the step is a power of ten."""
    return round(value / step) / round(1 / step) if 0 < step < 1 else value
