"""What the scope's channels are connected to: fixed nodes or the switch, through probes and couplings."""

import math
from collections.abc import Mapping

import numpy as np

from bandproof.analysis.network import Network
from bandproof.simulated_instruments import faults
from bandproof.simulated_instruments.board import Board, FrontEnd, Section
from bandproof.simulated_instruments.imperfections import Imperfections

__all__ = ["SWITCH", "Wiring"]

SWITCH = "switch"  # stands for the node the closed route leads to
HUM = 0.05  # V peak, of strong hum
DIVISION = 0.1  # of a 10:1 probe
SAGGED = 0.6  # V, swing of op-amps that clip


class Wiring:
    """Board, probes, routes and couplings of a bench.

    Parameters
    ----------
    network : Network
        As drawn, without the generator's output resistance.
    scope : mapping
        Channel (1, 2) to node or "switch".
    routes : mapping
        Switch channel to node.
    imperfections : Imperfections
    seed, run : int
        For the scatter of reseated contacts.
    conditions : mapping
        Faults that hold (see `FaultPlan`). Unpowered, op-amp outputs are at 0 V and the other nodes stay as they were.
    powered : bool
        Whether the board has its supply at the beginning; see `power`.

    Raises
    ------
    ValueError
        A node is not in the network.
    """

    def __init__(
        self,
        network: Network,
        *,
        scope: Mapping[int, str],
        routes: Mapping[str, str],
        imperfections: Imperfections,
        seed: int,
        run: int,
        conditions: Mapping[str, float] = faults.NO_CONDITIONS,
        powered: bool = True,
    ) -> None:
        self._powered = powered
        self.routes, self.closed = dict(routes), ""
        self._imperfections, self._seed, self._conditions = imperfections, (seed, run), conditions
        self._outputs = {u.out for u in network.opamps}
        self._taps = [scope[1], scope[2]]
        self._couplings, self._filters = ["DC", "DC"], [False, False]
        _check_nodes(network, [tap for tap in self._taps if tap != SWITCH] + list(routes.values()))
        driven = network.driven_through(network.source_resistance + imperfections.output_resistance)
        self.board = Board(driven, [self._front_end(channel) for channel in range(2)])

    def couple(self, at: float, channel: int, coupling: str) -> None:
        """Set a channel's (from 0) coupling: DC, AC or GRO."""
        self._couplings[channel] = coupling
        self.board.set_front_end(at, channel, self._front_end(channel))

    def filter(self, at: float, channel: int, on: bool) -> None:
        """Switch a channel's (from 0) bandwidth limit."""
        self._filters[channel] = on
        self.board.set_front_end(at, channel, self._front_end(channel))

    def close(self, at: float, route: str) -> None:
        """Close a route, the other ones open; the empty string opens all."""
        self.closed = route
        self.disturbed(at)

    def power(self, at: float, powered: bool) -> None:
        """Give the board its supply, or take it away."""
        if powered != self._powered:
            self._powered = powered
            self.disturbed(at)

    def disturbed(self, at: float) -> None:
        """Look at the board through what the channels are connected to from `at` on."""
        for channel in range(len(self._taps)):
            self.board.set_front_end(at, channel, self._front_end(channel))

    def gain(self, channel: int) -> float:
        """Return the factor that contact and probe of a channel (from 0) have now."""
        division = DIVISION if channel == 1 and faults.WRONG_PROBE in self._conditions else 1.0
        return division * self._contact(channel)

    def hum(self, channel: int) -> float:
        """Return the mains hum, in V peak, that a channel (from 0) picks up now."""
        return self._imperfections.hum[channel] + (HUM if faults.HUM in self._conditions else 0.0)

    def _tap(self, channel: int) -> str:
        return self._taps[1 - channel if faults.SWAPPED in self._conditions else channel]

    def _contact(self, channel: int) -> float:
        if self._tap(channel) != SWITCH or not self.closed or not self._imperfections.reseating:
            return 1.0
        draw = np.random.default_rng([*self._seed, int(self.closed), channel]).uniform(-1.0, 1.0)
        return float(1 + self._imperfections.reseating * draw)

    def _front_end(self, channel: int) -> FrontEnd:
        tap, coupling, limit, world = self._tap(channel), self._couplings[channel], math.inf, self._imperfections
        node = self.routes.get(self.closed) if tap == SWITCH else tap
        if node in self._outputs and (faults.UNPOWERED in self._conditions or not self._powered):
            node = None
        elif node in self._outputs and faults.CLIPPED in self._conditions:
            limit = SAGGED
        return FrontEnd(
            node,
            tuple(self._sections(channel, coupling)),
            grounded=coupling == "GRO",
            limit=limit,
            slew=world.slew or math.inf,
            resistance=world.probe_resistance or math.inf,
            capacitance=world.probe_capacitance,
        )

    def _sections(self, channel: int, coupling: str) -> list[Section]:
        """Return probe, coupling capacitor and filter; the latter two charge whether they are used or not."""
        error, corner = self._imperfections.probe_compensation[channel], self._imperfections.ac_corner[channel]
        bandwidth, is_limited = self._imperfections.bandwidth_limit[channel], self._filters[channel]
        found = []
        if error and self._imperfections.probe_corner:
            found.append(Section(2 * math.pi * self._imperfections.probe_corner, 1 + error, -error))
        if corner:
            found.append(Section(2 * math.pi * corner, 1.0, -1.0 if coupling == "AC" else 0.0))
        if bandwidth:
            found.append(Section(2 * math.pi * bandwidth, 0.0 if is_limited else 1.0, 1.0 if is_limited else 0.0))
        return found


def _check_nodes(network: Network, nodes: list[str]) -> None:
    known = {*network.nodes, "0"}
    for node in nodes:
        if node not in known:
            raise ValueError(f"there is no node {node!r} in the network; it has {', '.join(sorted(known))}")
