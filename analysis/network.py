"""Linear networks of resistors, capacitors and op-amps: response, state space and modes.

The response is nodal analysis with one row per node; a driven node's current law is replaced by what drives it. The
state space takes as states the voltages on a spanning tree of the largest capacitors, and the op-amp outputs: capacitor
loops, capacitors across op-amp outputs and capacitors of very different size then need no numerical rank decision.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from difflib import get_close_matches
from math import inf, isfinite
from typing import Any

import numpy as np
from bandproof.analysis.types import ComplexArray, FloatArray
from numpy.typing import ArrayLike

__all__ = [
    "GROUND",
    "Capacitor",
    "Network",
    "OpAmp",
    "Resistor",
    "StateSpace",
    "from_plain",
    "modes",
    "response",
    "state_space",
    "to_plain",
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
        two_ended = [node for part in _two_ended(self) for node in (part.a, part.b)]
        of_opamps = [node for u in self.opamps for node in (u.plus, u.minus, u.out)]
        return tuple(node for node in dict.fromkeys([self.input, *two_ended, *of_opamps]) if node != GROUND)

    @property
    def parts(self) -> dict[str, float]:
        """Resistances in ohm and capacitances in farad by name."""
        resistances = {part.name: part.resistance for part in self.resistors}
        return resistances | {part.name: part.capacitance for part in self.capacitors}

    def with_parts(self, values: Mapping[str, float]) -> Network:
        """Return the same network with other values for the named resistors and capacitors."""
        _refuse_unknown("part", values, self.parts)
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


def response(
    network: Network,
    frequency: ArrayLike,
    nodes: Sequence[str],
    *,
    values: Mapping[str, FloatArray] | None = None,
) -> ComplexArray:
    """Return the volts at nodes per volt of the driving EMF.

    Parameters
    ----------
    network : Network
    frequency : (N,) floats
        Hz, not negative.
    nodes : M names
    values : part name to (K,) floats, optional
        K values for some resistors (ohm), capacitors (F) or op-amps (their gbw in Hz): K networks at once.

    Returns
    -------
    (M, N) complex array, or (K, M, N) with values

    Raises
    ------
    ValueError
        An unknown node or part, or a network whose equations have no single solution.

    Examples
    --------
    >>> low_pass = Network((Resistor("R1", "in", "out", 1e3),), (Capacitor("C1", "out", "0", 159.15494309e-9),))
    >>> response(low_pass, [1000.0], ["out"]).round(6)
    array([[0.5-0.5j]])
    """
    _refuse_unknown("node", nodes, (*network.nodes, GROUND))
    index = {node: i for i, node in enumerate(network.nodes)}
    conductance, capacitance, slowness = _part_values(network, values or {})
    f = np.atleast_1d(np.asarray(frequency, dtype=float))
    matrix = _nodal_matrix(network, index, f, conductance, capacitance, slowness)
    drive = np.zeros(len(index))
    drive[index[network.input]] = 1 / network.source_resistance if network.source_resistance else 1.0
    scale = np.abs(matrix).max(axis=-1, keepdims=True)
    if not scale.all():
        raise ValueError("a node of the network is not connected to anything")
    try:
        volts = np.linalg.solve(matrix / scale, drive[:, None] / scale)[..., 0]
    except np.linalg.LinAlgError as error:
        raise ValueError(
            "the network has no single solution: a floating node, or an op-amp without feedback"
        ) from error
    padded = np.concatenate([volts, np.zeros_like(volts[..., :1])], axis=-1)
    picked: ComplexArray = np.swapaxes(padded[..., [index.get(node, len(index)) for node in nodes]], -1, -2)
    return picked if values else picked[0]


@dataclass(frozen=True, slots=True, eq=False)
class StateSpace:
    """x' = a x + b u and volts = c x + d u; u holds the EMF, then each op-amp's offset, all in V.

    Shapes: a (n, n) 1/s, b (n, 1 + number of op-amps), c (M, n), d (M, 1 + number of op-amps).
    """

    a: FloatArray
    b: FloatArray
    c: FloatArray
    d: FloatArray


def state_space(network: Network, nodes: Sequence[str]) -> StateSpace:
    """Return the network's differential equations with the volts at nodes as outputs.

    The EMF may jump: where capacitors tie nodes to an EMF without source resistance, d carries the jump.

    Raises
    ------
    ValueError
        An op-amp without a finite gbw, an unknown node, or nodes that no resistor ties to the rest.

    Examples
    --------
    >>> low_pass = Network((Resistor("R1", "in", "out", 1e3),), (Capacitor("C1", "out", "0", 1e-6),))
    >>> state_space(low_pass, ["out"]).a
    array([[-1000.]])
    """
    _refuse_unknown("node", nodes, (*network.nodes, GROUND))
    pencil = _pencil(network)
    rows = np.array([pencil.rows[node] for node in nodes]).reshape(len(nodes), -1)
    outputs = rows @ pencil.unfold
    n = pencil.storage.shape[0]
    rates: FloatArray = np.asarray(np.linalg.solve(pencil.storage, pencil.flow), dtype=np.float64)
    return StateSpace(rates[:, :n], rates[:, n:], outputs[:, :n], outputs[:, n:])


def modes(network: Network) -> ComplexArray:
    """Return the network's natural modes in 1/s, the slowest first.

    A matrix of rates resolves its fast modes only, its inverse the slow ones; each mode is taken from the better.

    Raises
    ------
    ValueError
        As for `state_space`.
    """
    pencil = _pencil(network)
    n = pencil.storage.shape[0]
    if n == 0:
        return np.zeros(0, dtype=complex)
    fast = _by_size(np.linalg.eigvals(np.linalg.solve(pencil.storage, pencil.flow[:, :n])))
    try:
        slow = _by_size(1 / np.linalg.eigvals(np.linalg.solve(pencil.flow[:, :n], pencil.storage)))
    except np.linalg.LinAlgError:  # a mode at 0 1/s: an integrator without feedback
        return fast
    middle = np.sqrt(np.abs(slow[0]) * np.abs(fast[-1]))
    better: ComplexArray = np.where(np.abs(fast) > middle, fast, slow)
    return better


def _by_size(eigenvalues: ComplexArray | FloatArray) -> ComplexArray:
    values = eigenvalues.astype(np.complex128)
    return values[np.lexsort((values.imag, np.abs(values)))]


def _part_values(network: Network, values: Mapping[str, FloatArray]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return conductances (K, R), capacitances (K, C) and 1/gbw (K, U)."""
    known = network.parts | {u.name: u.gbw for u in network.opamps}
    _refuse_unknown("part", values, known)
    columns = {name: np.atleast_1d(np.asarray(value, dtype=float)) for name, value in values.items()}
    count = len(np.broadcast_arrays(np.zeros(1), *columns.values())[0])

    def table(names: Iterable[str]) -> FloatArray:
        return np.array([np.broadcast_to(columns.get(n, known[n]), count) for n in names]).reshape(-1, count).T

    return (
        1 / table(part.name for part in network.resistors),
        table(part.name for part in network.capacitors),
        1 / table(part.name for part in network.opamps),
    )


def _nodal_matrix(
    network: Network,
    index: Mapping[str, int],
    frequency: FloatArray,
    conductance: FloatArray,
    capacitance: FloatArray,
    slowness: FloatArray,
) -> ComplexArray:
    """Return the (K, N, nodes, nodes) equations, driven nodes' current laws replaced."""
    unit = {node: np.eye(len(index))[i] for node, i in index.items()} | {GROUND: np.zeros(len(index))}

    def stamped(parts: Sequence[Resistor | Capacitor], value: FloatArray) -> FloatArray:
        across = np.array([unit[part.a] - unit[part.b] for part in parts]).reshape(-1, len(index))
        result: FloatArray = (across.T[None] * value[:, None, :]) @ across
        return result

    real, imaginary = stamped(network.resistors, conductance), stamped(network.capacitors, capacitance)
    matrix: ComplexArray = real[:, None] + 2j * np.pi * frequency[None, :, None, None] * imaginary[:, None]
    at_input = index[network.input]
    if network.source_resistance:
        matrix[..., at_input, at_input] += 1 / network.source_resistance
    else:
        matrix[..., at_input, :] = unit[network.input]
    for u, slow in zip(network.opamps, slowness.T, strict=True):
        matrix[..., index[u.out], :] = unit[u.minus] - unit[u.plus]
        matrix[..., index[u.out], index[u.out]] += 1j * frequency * slow[:, None]
    return matrix


@dataclass(frozen=True, slots=True, eq=False)
class _Pencil:
    """Equations storage · x' = flow · (x, u); rows of a node times unfold · (x, u) give its volts."""

    storage: FloatArray
    flow: FloatArray
    rows: dict[str, FloatArray]
    unfold: FloatArray


def _pencil(network: Network) -> _Pencil:
    """Return the network's equations over tree voltages, op-amp outputs and inputs.

    Coordinates of a row: tree capacitor voltages y, op-amp outputs o, reference nodes r of islands that no capacitor
    ties to a driven node, the EMF e, offsets. The current law holds for every y (cut set) and every r (whole island).
    """
    for u in network.opamps:
        if not isfinite(u.gbw):
            raise ValueError(f"op-amp {u.name!r} needs a finite gbw for a state space: give its gain-bandwidth in Hz")
    tree, roots = _capacitor_tree(network)
    ny, no, nr = len(tree), len(network.opamps), len(roots)
    rows = _node_rows(network, tree, roots)
    y, o, r = slice(0, ny), slice(ny, ny + no), slice(ny + no, ny + no + nr)
    c, g = _quadratic(rows, network.capacitors), _quadratic(rows, _with_source(network))
    e = ny + no + nr
    keep = [*range(ny + no), *range(e, e + 1 + no)]
    unfold = np.eye(e + 1 + no)[:, keep]
    if nr:
        try:
            unfold[r] = -np.linalg.solve(g[r, r], g[r][:, keep])
        except np.linalg.LinAlgError as error:
            raise ValueError(f"no resistor ties node {roots[0]!r} (or another of {roots}) to the rest") from error
    if ny:
        unfold[y, ny + no] = -np.linalg.solve(c[y, y], c[y, e])  # the jump that an EMF puts on the tree at once
    speed = 2 * np.pi * np.array([u.gbw for u in network.opamps])
    storage = np.zeros((ny + no, ny + no))
    storage[y, y], storage[y, o], storage[o, o] = c[y, y], c[y, o], np.diag(1 / speed)
    law = np.vstack([-g[y], *(_opamp_row(rows, u, i, e) for i, u in enumerate(network.opamps))])
    return _Pencil(storage, law @ unfold, rows, unfold)


def _opamp_row(rows: Mapping[str, FloatArray], u: OpAmp, i: int, e: int) -> FloatArray:
    row: FloatArray = rows[u.plus] - rows[u.minus]
    row[e + 1 + i] += 1
    return row


def _with_source(network: Network) -> tuple[Resistor, ...]:
    if not network.source_resistance:
        return network.resistors
    return (*network.resistors, Resistor("", _EMF, network.input, network.source_resistance))


_EMF = ""  # the node behind the source resistance; no user's node has an empty name


def _quadratic(rows: Mapping[str, FloatArray], parts: Sequence[Resistor | Capacitor]) -> FloatArray:
    """Return the sum over parts of admittance times the outer product of its voltage row."""
    across = np.array([rows[part.a] - rows[part.b] for part in parts]).reshape(len(parts), -1)
    value = np.array([1 / p.resistance if isinstance(p, Resistor) else p.capacitance for p in parts])
    width = len(rows[GROUND])
    result: FloatArray = (across.T * value) @ across if len(parts) else np.zeros((width, width))
    return result


def _driven(network: Network) -> tuple[str, ...]:
    at_input = () if network.source_resistance else (network.input,)
    return (GROUND, *at_input, *(u.out for u in network.opamps))


def _capacitor_tree(network: Network) -> tuple[list[Capacitor], list[str]]:
    """Return the capacitors of the largest spanning tree and one reference node per island."""
    group = {node: node for node in network.nodes} | dict.fromkeys(_driven(network), GROUND)

    def merge(kept: str, lost: str) -> None:
        kept, lost = (lost, kept) if lost == GROUND else (kept, lost)
        group.update({node: kept for node, name in group.items() if name == lost})

    tree = []
    for part in sorted(network.capacitors, key=lambda part: -part.capacitance):
        if group[part.a] != group[part.b]:
            tree.append(part)
            merge(group[part.a], group[part.b])
    return tree, sorted(set(group.values()) - {GROUND})


def _node_rows(network: Network, tree: Sequence[Capacitor], roots: Sequence[str]) -> dict[str, FloatArray]:
    """Return each node's voltage as a row over the coordinates."""
    ny, no = len(tree), len(network.opamps)
    unit = np.eye(ny + no + len(roots) + 1 + no)
    emf = unit[ny + no + len(roots)]
    rows = {GROUND: np.zeros(len(unit)), _EMF: emf}
    rows |= {} if network.source_resistance else {network.input: emf}
    rows |= {u.out: unit[ny + i] for i, u in enumerate(network.opamps)}
    rows |= {root: unit[ny + no + i] for i, root in enumerate(roots)}
    waiting = list(enumerate(tree))
    while waiting:
        i, part = waiting.pop(0)
        if part.a in rows:
            rows[part.b] = rows[part.a] - unit[i]
        elif part.b in rows:
            rows[part.a] = rows[part.b] + unit[i]
        else:
            waiting.append((i, part))
    return rows


def _two_ended(network: Network) -> list[Resistor | Capacitor]:
    return [*network.resistors, *network.capacitors]


def _check_names(network: Network) -> None:
    seen: set[str] = set()
    all_parts: list[Resistor | Capacitor | OpAmp] = [*_two_ended(network), *network.opamps]
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


def _refuse_unknown(kind: str, asked: Iterable[str], known: Iterable[str]) -> None:
    known = tuple(known)
    for name in asked:
        if name not in known:
            near = get_close_matches(name, known, n=1)
            hint = f", did you mean {near[0]!r}?" if near else f": known are {', '.join(sorted(known))}"
            raise ValueError(f"the network has no {kind} {name!r}{hint}")
