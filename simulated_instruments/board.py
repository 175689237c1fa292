"""The world behind the instruments: volts at the scope's inputs as a pure function of time and stamped events.

Between two events everything is linear and time-invariant, so the solution is exact: steady state plus decaying modes,
carried from event to event. An event is a change of the generator, of the routes, or of a channel's coupling. The
generator's EMF is a sum of harmonics, most often of one: `offset + amplitude sin(2 pi frequency (t - event))`. Its
phase begins at each event of its own.

Clipping is memoryless: a tap that is an op-amp output is limited to +-swing, and what lies behind that op-amp
still sees the unlimited voltage. So is slewing: such a tap shows its steady state as `slewing` has it, what decays is
added unlimited.

A probe loads the node it is on. Moved, it meets its new node at that node's voltage: no voltage jumps.
"""

from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from math import inf, isfinite

import numpy as np
from numpy.typing import NDArray

from bandproof.analysis.network import GROUND, Capacitor, Network, Resistor, state_space
from bandproof.simulated_instruments.dynamics import ComplexArray, Dynamics, FloatArray, sum_of_exponentials
from bandproof.simulated_instruments.slewing import excess

__all__ = ["Board", "Drive", "FrontEnd", "Section"]

HISTORY = 256  # events kept, arbitrary: more than fall into one record


@dataclass(frozen=True, slots=True)
class Drive:
    """EMF of the generator: Hz, V peak, V.

    With harmonics (order, weight) it is offset + amplitude Im(sum of weight exp(j 2 pi order frequency (t - event))).
    """

    frequency: float = 1000.0
    amplitude: float = 0.0
    offset: float = 0.0
    harmonics: tuple[tuple[int, complex], ...] = ((1, 1.0 + 0.0j),)

    @property
    def orders(self) -> NDArray[np.int_]:
        """Multiples of the frequency, (K,)."""
        return np.array([order for order, _ in self.harmonics], dtype=np.int_)

    @property
    def phasors(self) -> ComplexArray:
        """V peak of the harmonics, (K,)."""
        return self.amplitude * np.array([weight for _, weight in self.harmonics], dtype=np.complex128)

    def turned(self, elapsed: float) -> ComplexArray:
        """Return exp(j angle) of each harmonic some s after the event, (K,)."""
        angle = 2 * np.pi * (self.frequency * elapsed % 1.0)
        return np.asarray(np.exp(1j * angle * self.orders), dtype=np.complex128)


@dataclass(frozen=True, slots=True)
class Section:
    """First-order section: w' = rate (input - w), output = through input + stored w; rate in 1/s.

    A high-pass has through 1, stored -1; a low-pass 0, 1; a probe with an error e of its compensation 1 + e, -e.
    """

    rate: float
    through: float
    stored: float


@dataclass(frozen=True, slots=True)
class FrontEnd:
    """What a channel looks at and through: a node (None: an open input), sections in order, grounded or not.

    `limit`, in V, is the greatest magnitude the node reaches, if its op-amp's swing is not smaller still; `slew`, in
    V/s, likewise. `resistance`, in ohm, and `capacitance`, in F, lie between the node and ground.
    """

    node: str | None
    sections: tuple[Section, ...] = ()
    grounded: bool = False
    limit: float = inf
    slew: float = inf
    resistance: float = inf
    capacitance: float = 0.0


@dataclass(frozen=True, slots=True)
class _Event:
    at: float
    drive_at: float
    drive: Drive
    front_ends: tuple[FrontEnd, ...]
    dynamics: Dynamics
    constant: FloatArray  # (n,) steady state of the constant inputs
    phasor: ComplexArray  # (K, n) steady state of the harmonics, peak, phase from drive_at
    free: ComplexArray  # (n,) what decays, at the event


@dataclass(slots=True)
class Board:
    """A drawn network behind the generator's output resistance, seen through front ends.

    Parameters
    ----------
    network : Network
        Including the generator's resistance; op-amps with finite gbw.
    front_ends : sequence of FrontEnd
        One per scope channel; the number and rates of their sections never change, only nodes and weights.

    Raises
    ------
    ValueError
        A node is unknown, or the network has no steady state at 0 Hz.
    """

    network: Network
    front_ends: Sequence[FrontEnd]
    _events: list[_Event] = field(init=False, default_factory=list)
    _known: dict[tuple[FrontEnd, ...], Dynamics] = field(init=False, default_factory=dict)

    def __post_init__(self) -> None:
        drive, front_ends = Drive(), tuple(self.front_ends)
        dynamics = self._dynamics(front_ends)
        constant, phasor = self._steady(dynamics, drive)
        free = np.zeros(len(constant), dtype=complex)  # the bench has been on for a long time
        self._events.append(_Event(-1e9, 0.0, drive, front_ends, dynamics, constant, phasor, free))

    @property
    def drive(self) -> Drive:
        """What the generator gives since its last event."""
        return self._events[-1].drive

    def set_drive(self, at: float, drive: Drive) -> None:
        """Note what the generator gives from `at` on; its phase begins there."""
        self._change(at, at, drive, self._events[-1].front_ends)

    def set_front_end(self, at: float, channel: int, front_end: FrontEnd) -> None:
        """Note what a channel (from 0) sees from `at` on."""
        last = self._events[-1]
        if last.front_ends[channel] == front_end:
            return
        front_ends = (*last.front_ends[:channel], front_end, *last.front_ends[channel + 1 :])
        self._change(at, last.drive_at, last.drive, front_ends)

    def volts(self, channel: int, first: float, interval: float, count: int, *, delay: float = 0.0) -> FloatArray:
        """Return the volts a channel sees.

        Parameters
        ----------
        channel : int
            From 0.
        first, interval : float
            s: first instant and distance of instants.
        count : int
        delay : float
            s by which the channel looks later.

        Returns
        -------
        (count,) float array
            V.
        """
        result = np.empty(count)
        stamps = [event.at for event in self._events[1:]]
        at, done = bisect_right(stamps, first + delay), 0
        while done < count:
            last = at == len(stamps)
            stop = count if last else min(count, max(done, int(np.ceil((stamps[at] - first - delay) / interval))))
            if stop > done:
                ahead = delay + done * interval
                result[done:stop] = self._part(self._events[at], channel, first, ahead, interval, stop - done)
            done, at = stop, at + 1
        return result

    def _part(self, event: _Event, channel: int, first: float, ahead: float, interval: float, count: int) -> FloatArray:
        """Return volts while no event happens, from `ahead` after `first` on."""
        front_end, system = event.front_ends[channel], event.dynamics
        if front_end.grounded:
            return np.zeros(count)
        rows = np.array([2 * channel, 2 * channel + 1])  # through the front end; at the node
        swing, slew = self._limits(front_end)
        rows = rows if isfinite(swing) or isfinite(slew) else rows[:1]
        drive, orders = event.drive, event.drive.orders
        inputs = self._inputs(drive)
        constant = system.c[rows] @ event.constant + system.d[rows] @ inputs
        # one by one: so the last bits of a sine do not depend on how many an algebra library takes together
        lines = [
            system.c[rows] @ line + system.d[rows, 0] * emf
            for line, emf in zip(event.phasor, drive.phasors, strict=True)
        ]
        since = _elapsed(event.drive_at, first) + ahead
        steps = np.asarray(2j * np.pi * drive.frequency * interval * orders, dtype=np.complex128)
        sines = [line * turn / 1j for line, turn in zip(lines, drive.turned(since), strict=True)]
        volts = sum_of_exponentials(np.stack(sines, axis=1), steps, count)
        volts += constant[:, None]
        volts += system.outputs(event.free, rows, _elapsed(event.at, first) + ahead, interval, count)
        if isfinite(slew):
            start, turn = drive.frequency * since % 1.0, drive.frequency * interval
            volts -= excess(
                np.array([line[1] for line in lines]),
                orders,
                drive.frequency,
                slew,
                start + turn * np.arange(count, dtype=np.float64),
            )
        if isfinite(swing):
            volts[0] -= volts[1] - np.clip(volts[1], -swing, swing)
        return np.asarray(volts[0])

    def _change(self, at: float, drive_at: float, drive: Drive, front_ends: tuple[FrontEnd, ...]) -> None:
        last = self._events[-1]
        at = max(at, last.at)
        turned = last.drive.turned(_elapsed(last.drive_at, at))
        state = last.constant + _instant(last.phasor, turned) + last.dynamics.later(last.free, _elapsed(last.at, at))
        before, after = _loaded(self.network, last.front_ends), _loaded(self.network, front_ends)
        if after != before:
            inputs = self._inputs(last.drive)
            inputs[0] += (last.drive.phasors * turned).imag.sum()
            state = _met(before, after, state, inputs)
        dynamics = self._dynamics(front_ends)
        constant, phasor = self._steady(dynamics, drive)
        turned = drive.turned(_elapsed(drive_at, at))
        free = dynamics.free(state - constant - _instant(phasor, turned))
        self._events.append(_Event(at, drive_at, drive, front_ends, dynamics, constant, phasor, free))
        del self._events[:-HISTORY]

    def _inputs(self, drive: Drive) -> FloatArray:
        return np.array([drive.offset, *(u.offset for u in self.network.opamps)])

    def _steady(self, system: Dynamics, drive: Drive) -> tuple[FloatArray, ComplexArray]:
        constant = system.constant(self._inputs(drive))
        if drive.amplitude == 0:
            return constant, np.zeros((len(drive.harmonics), len(constant)), dtype=complex)
        steady = [system.phasor(float(order) * drive.frequency) for order in drive.orders]
        return constant, np.stack(steady) * drive.phasors[:, None]

    def _limits(self, front_end: FrontEnd) -> tuple[float, float]:
        """Return swing in V and slew rate in V/s of the op-amp a channel looks at, without end where there is none."""
        found = [u for u in self.network.opamps if u.out == front_end.node]
        slew = min(front_end.slew, *(u.slew for u in found)) if found else inf
        return min([front_end.limit, *(u.swing for u in found)]), slew

    def _dynamics(self, front_ends: tuple[FrontEnd, ...]) -> Dynamics:
        if front_ends not in self._known:
            self._known[front_ends] = _assemble(_loaded(self.network, front_ends), front_ends)
        return self._known[front_ends]


def _instant(phasors: ComplexArray, turned: ComplexArray) -> FloatArray:
    """Return what (K, n) phasors, turned (K,), are at an instant, (n,)."""
    volts = [(phasor * turn).imag for phasor, turn in zip(phasors, turned, strict=True)]
    return np.asarray(np.sum(volts, axis=0), dtype=np.float64)


def _elapsed(earlier: float, later: float) -> float:
    """Return the s between two instants in whole ns, so that the rounding of late instants leaves no trace."""
    return round(later - earlier, 9)


def _loaded(network: Network, front_ends: tuple[FrontEnd, ...]) -> Network:
    """Return the network with what the channels' probes put between their nodes and ground."""
    resistors, capacitors = list(network.resistors), list(network.capacitors)
    for channel, front_end in enumerate(front_ends, 1):
        if front_end.node in (None, GROUND):
            continue
        if isfinite(front_end.resistance):
            resistors.append(Resistor(f"(probe {channel}) R", str(front_end.node), GROUND, front_end.resistance))
        if front_end.capacitance:
            capacitors.append(Capacitor(f"(probe {channel}) C", str(front_end.node), GROUND, front_end.capacitance))
    if len(resistors) + len(capacitors) == len(network.resistors) + len(network.capacitors):
        return network
    return replace(network, resistors=tuple(resistors), capacitors=tuple(capacitors))


def _met(before: Network, after: Network, state: FloatArray, inputs: FloatArray) -> FloatArray:
    """Return the state behind a change of loads at which no node's voltage jumps but where nothing holds it.

    The states of a network are linear in the voltages across its capacitors and at its op-amp outputs; those of the
    front ends, behind them, stay.
    """
    nodes = before.nodes
    old, new = state_space(before, nodes), state_space(after, nodes)
    unit = dict(zip(nodes, np.eye(len(nodes)), strict=True)) | {GROUND: np.zeros(len(nodes))}
    holding = [unit[part.a] - unit[part.b] for part in after.capacitors] + [unit[u.out] for u in after.opamps]
    held = np.array(holding).reshape(-1, len(nodes))
    volts = old.c @ state[: len(old.a)] + old.d @ inputs
    fresh = np.linalg.lstsq(held @ new.c, held @ (volts - new.d @ inputs), rcond=None)[0]
    return np.concatenate([fresh, state[len(old.a) :]])


def _assemble(network: Network, front_ends: tuple[FrontEnd, ...]) -> Dynamics:
    """Return the dynamics of network and front ends; outputs: per channel behind the front end, and at its node."""
    board = state_space(network, [front_end.node or GROUND for front_end in front_ends])
    n, extra = len(board.a), sum(len(front_end.sections) for front_end in front_ends)
    a = np.zeros((n + extra, n + extra))
    b = np.zeros((n + extra, board.b.shape[1]))
    a[:n, :n], b[:n] = board.a, board.b
    c, d = np.zeros((2 * len(front_ends), n + extra)), np.zeros((2 * len(front_ends), board.b.shape[1]))
    state = n
    for channel, front_end in enumerate(front_ends):
        row, direct = np.concatenate([board.c[channel], np.zeros(extra)]), board.d[channel].copy()
        c[2 * channel + 1], d[2 * channel + 1] = row, direct
        for section in front_end.sections:
            a[state], b[state] = section.rate * row, section.rate * direct
            a[state, state] -= section.rate
            row, direct = section.through * row, section.through * direct
            row[state] += section.stored
            state += 1
        c[2 * channel], d[2 * channel] = row, direct
    return Dynamics(a, b, c, d)
