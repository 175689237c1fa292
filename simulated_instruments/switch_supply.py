"""Simulated switch and supply.

The switch speaks SCPI-99 ROUTe: one route at a time leads a node of the board to the scope. The supply speaks SOURce,
OUTPut and MEASure: two outputs, the positive and the negative rail of the board.
"""

from collections.abc import Mapping

from bandproof.simulated_instruments import faults
from bandproof.simulated_instruments.commands import Command
from bandproof.simulated_instruments.device import Device, Setting, Timing
from bandproof.simulated_instruments.parameters import Boolean, Decimal, RouteList, show_number
from bandproof.simulated_instruments.syntax import ScpiError
from bandproof.simulated_instruments.wiring import Wiring

__all__ = ["LEAST_RAIL", "Supply", "Switch"]

LEAST_RAIL = 3.0  # V, below which op-amps do nothing; about what their data sheets ask for, from memory
_RAILS = (1, 2)


class Switch(Device):
    """A switch of which closing one route opens the other ones.

    Parameters
    ----------
    wiring : Wiring
    timing : Timing
    """

    def __init__(self, wiring: Wiring, *, timing: Timing) -> None:
        self._wiring = wiring
        routes, takes = (RouteList(),), timing.switching
        super().__init__(
            "BANDPROOF,SIMULATED SWITCH,0,0",
            timing=timing,
            settings=[],
            commands=[
                Command("ROUTe:CLOSe", self._close, routes, 1, takes),
                Command("ROUTe:CLOSe?", self._state, routes, 1),
                Command("ROUTe:CLOSe:STATe?", lambda _: f"(@{wiring.closed})".encode("ascii")),
                Command("ROUTe:OPEN", self._open, routes, 1, takes),
                Command("ROUTe:OPEN:ALL", lambda _: wiring.close(self.at, ""), duration=takes),
            ],
        )

    @property
    def closed(self) -> str:
        """The closed route, empty if none is."""
        return self._wiring.closed

    def reset(self) -> None:
        """Open all routes."""
        super().reset()
        self._wiring.close(self.at, "")

    def _close(self, suffixes: tuple[int, ...], routes: tuple[str, ...]) -> None:
        self._check(routes)
        if len(routes) != 1:
            raise ScpiError(-224, "one route at a time")
        self._wiring.close(self.at, routes[0])

    def _open(self, suffixes: tuple[int, ...], routes: tuple[str, ...]) -> None:
        self._check(routes)
        if self._wiring.closed in routes:
            self._wiring.close(self.at, "")

    def _state(self, suffixes: tuple[int, ...], routes: tuple[str, ...]) -> bytes:
        self._check(routes)
        return b",".join(b"1" if route == self._wiring.closed else b"0" for route in routes)

    def _check(self, routes: tuple[str, ...]) -> None:
        for route in routes:
            if route not in self._wiring.routes:
                raise ScpiError(-224, f"there is no route {route}")


class Supply(Device):
    """A supply with two outputs, both of which the board needs.

    Parameters
    ----------
    wiring : Wiring
        Told when the board gets or loses its supply.
    opamps : int
        How many the board has.
    quiescent : float
        A, of one op-amp, from each rail.
    timing : Timing
    conditions : mapping
        Faults that hold (see `FaultPlan`): an unpowered board draws nothing.
    """

    def __init__(
        self,
        wiring: Wiring,
        *,
        opamps: int,
        quiescent: float,
        timing: Timing,
        conditions: Mapping[str, float] = faults.NO_CONDITIONS,
    ) -> None:
        self._wiring, self._drawn, self._conditions = wiring, opamps * quiescent, conditions
        level = "[:LEVel][:IMMediate][:AMPLitude]"
        super().__init__(
            "BANDPROOF,SIMULATED SUPPLY,0,0",
            timing=timing,
            settings=[
                Setting("[SOURce<1:2>]:VOLTage" + level, "voltage", Decimal(0.0, 30.0, 0.0, "V")),
                Setting("[SOURce<1:2>]:CURRent" + level, "limit", Decimal(0.0, 1.0, 0.1, "A")),
                Setting("OUTPut<1:2>[:STATe]", "output", Boolean()),
            ],
            commands=[Command("MEASure<1:2>[:SCALar]:CURRent[:DC]?", lambda rail: show_number(self.current(*rail)))],
        )

    def changed(self, name: str, suffixes: tuple[int, ...]) -> None:
        """Let the board be powered or not."""
        self._wiring.power(self.at, all(self._carries(rail) for rail in _RAILS))

    def reset(self) -> None:
        """Take the defaults, thus outputs off."""
        super().reset()
        self._wiring.power(self.at, False)

    def _gives(self, rail: int) -> bool:
        return bool(self.value("output", rail)) and self.value("voltage", rail) >= LEAST_RAIL

    def _carries(self, rail: int) -> bool:
        """Whether an output gives its voltage, not held down by its current limit."""
        return self._gives(rail) and self.value("limit", rail) >= self._drawn

    def current(self, rail: int) -> float:
        """Return what an output (1, 2) gives now, in A."""
        if not self._gives(rail) or faults.UNPOWERED in self._conditions:
            return 0.0
        return min(self._drawn, float(self.value("limit", rail)))
