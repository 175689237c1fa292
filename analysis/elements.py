"""The parts of a linear network and how they are joined."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from difflib import get_close_matches
from math import inf, isfinite
from typing import Any

__all__ = [
    "GROUND",
    "Capacitor",
    "Network",
    "OpAmp",
    "Resistor",
    "from_plain",
    "refuse_unknown",
    "to_plain",
    "two_ended",
]

GROUND = "0"


@dataclass(frozen=True, slots=True)
class Resistor:
    """A resistance in ohm between nodes a and b."""

    name: str
    a: str
    b: str
    resistance: float


@dataclass(frozen=True, slots=True)
class Capacitor:
    """A capacitance in farad between nodes a and b."""

    name: str
    a: str
    b: str
    capacitance: float


@dataclass(frozen=True, slots=True)
class OpAmp:
    """An op-amp with open-loop gain gbw / (j f) and an output without impedance.

    `gbw` in Hz (inf: ideal), `offset` in V at the plus input, `swing` the greatest |output| in V and `slew` in V/s;
    the last two describe limits and take no part in the linear analysis.
    """

    name: str
    plus: str
    minus: str
    out: str
    gbw: float = inf
    offset: float = 0.0
    swing: float = inf
    slew: float = inf


@dataclass(frozen=True, slots=True)
class Network:
    """Parts between named nodes, driven at `input` by an EMF through `source_resistance` (0: directly)."""

    resistors: tuple[Resistor, ...]
    capacitors: tuple[Capacitor, ...]
    opamps: tuple[OpAmp, ...] = ()
    input: str = "in"
    source_resistance: float = 0.0

    def __post_init__(self) -> None:
        _check_names(self)
        for name, value in (*self.parts.items(), *((u.name, u.gbw) for u in self.opamps)):
            if not value > 0 or (value == inf and name in self.parts):
                raise ValueError(f"part {name!r} must have a positive value, found {value!r}")
        if not (self.source_resistance >= 0 and isfinite(self.source_resistance)):
            raise ValueError(f"source_resistance must not be negative, found {self.source_resistance!r}")
        _check_drivers(self)

    @property
    def nodes(self) -> tuple[str, ...]:
        """Every node but ground, in order of appearance, the input first."""
        ends = [node for part in two_ended(self) for node in (part.a, part.b)]
        of_opamps = [node for u in self.opamps for node in (u.plus, u.minus, u.out)]
        return tuple(node for node in dict.fromkeys([self.input, *ends, *of_opamps]) if node != GROUND)

    @property
    def parts(self) -> dict[str, float]:
        """Resistances in ohm and capacitances in farad by name."""
        resistances = {part.name: part.resistance for part in self.resistors}
        return resistances | {part.name: part.capacitance for part in self.capacitors}

    def with_parts(self, values: Mapping[str, float]) -> Network:
        """Return the same network with other values for the named resistors and capacitors."""
        refuse_unknown("part", values, self.parts)
        return replace(
            self,
            resistors=tuple(replace(r, resistance=float(values.get(r.name, r.resistance))) for r in self.resistors),
            capacitors=tuple(replace(c, capacitance=float(values.get(c.name, c.capacitance))) for c in self.capacitors),
        )

    def driven_through(self, resistance: float) -> Network:
        """Return the same network driven through another source resistance in ohm."""
        return replace(self, source_resistance=resistance)


def to_plain(network: Network) -> dict[str, Any]:
    """Return the network as dictionaries, lists, text and numbers; an infinite number is left out."""

    def plain(part: Resistor | Capacitor | OpAmp) -> dict[str, Any]:
        fields = {name: getattr(part, name) for name in part.__slots__}
        return {name: value for name, value in fields.items() if value != inf}

    return {
        "resistors": [plain(part) for part in network.resistors],
        "capacitors": [plain(part) for part in network.capacitors],
        "opamps": [plain(part) for part in network.opamps],
        "input": network.input,
        "source_resistance": network.source_resistance,
    }


def from_plain(plain: Mapping[str, Any]) -> Network:
    """Return the network that `to_plain` wrote."""
    return Network(
        resistors=tuple(Resistor(**part) for part in plain["resistors"]),
        capacitors=tuple(Capacitor(**part) for part in plain["capacitors"]),
        opamps=tuple(OpAmp(**part) for part in plain["opamps"]),
        input=plain["input"],
        source_resistance=plain["source_resistance"],
    )


def two_ended(network: Network) -> list[Resistor | Capacitor]:
    """Return the resistors, then the capacitors."""
    return [*network.resistors, *network.capacitors]


def _check_names(network: Network) -> None:
    seen: set[str] = set()
    all_parts: list[Resistor | Capacitor | OpAmp] = [*two_ended(network), *network.opamps]
    for part in all_parts:
        if part.name in seen:
            raise ValueError(f"part name {part.name!r} is used twice: give every part its own name")
        seen.add(part.name)
        ends = (part.plus, part.minus, part.out) if isinstance(part, OpAmp) else (part.a, part.b)
        if "" in (part.name, *ends):
            raise ValueError(f"part {part.name!r} has an empty name or node")


def _check_drivers(network: Network) -> None:
    if network.input == GROUND:
        raise ValueError("the input must not be ground")
    if len({GROUND, network.input, *(u.out for u in network.opamps)}) != 2 + len(network.opamps):
        raise ValueError(
            "two sources drive one node: the input, ground and every op-amp output need nodes of their own"
        )


def refuse_unknown(kind: str, asked: Iterable[str], known: Iterable[str]) -> None:
    """Raise ValueError for the first name that is not known, with the nearest one that is."""
    known = tuple(known)
    for name in asked:
        if name not in known:
            near = get_close_matches(name, known, n=1)
            hint = f", did you mean {near[0]!r}?" if near else f": known are {', '.join(sorted(known))}"
            raise ValueError(f"the network has no {kind} {name!r}{hint}")
