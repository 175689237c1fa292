"""The differential equations of a network of resistors, capacitors and op-amps, and its natural modes.

The states are the voltages on a spanning tree of the largest capacitors, and the op-amp outputs: capacitor loops,
capacitors across op-amp outputs and capacitors of very different size then need no numerical rank decision.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import isfinite

import numpy as np

from bandproof.analysis.elements import GROUND, Capacitor, Network, OpAmp, Resistor, refuse_unknown
from bandproof.analysis.types import ComplexArray, FloatArray

__all__ = ["StateSpace", "modes", "state_space"]


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
    refuse_unknown("node", nodes, (*network.nodes, GROUND))
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
    width = len(rows[GROUND])
    across = np.array([rows[part.a] - rows[part.b] for part in parts]).reshape(len(parts), width)
    value = np.array([1 / p.resistance if isinstance(p, Resistor) else p.capacitance for p in parts])
    result: FloatArray = (across.T * value) @ across
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
