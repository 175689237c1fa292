"""Simulated switch, SCPI-99 ROUTe: one route at a time leads a node of the board to the scope."""

from bandproof.simulated_instruments.commands import Command
from bandproof.simulated_instruments.device import Device, Timing
from bandproof.simulated_instruments.parameters import RouteList
from bandproof.simulated_instruments.syntax import ScpiError
from bandproof.simulated_instruments.wiring import Wiring

__all__ = ["Switch"]


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
