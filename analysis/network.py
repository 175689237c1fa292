"""Linear networks of resistors, capacitors and op-amps, and their response by nodal analysis.

One row per node; the current law of a driven node is replaced by what drives it. The parts are in `elements`, the
state space and the modes in `dynamics`; both are offered here too.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike

from bandproof.analysis.dynamics import StateSpace, modes, state_space
from bandproof.analysis.elements import (
    GROUND,
    Capacitor,
    Network,
    OpAmp,
    Resistor,
    from_plain,
    refuse_unknown,
    to_plain,
)
from bandproof.analysis.types import ComplexArray, FloatArray

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
    frequency : (N,) floats, or (K, N) with values
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
    refuse_unknown("node", nodes, (*network.nodes, GROUND))
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


def _part_values(network: Network, values: Mapping[str, FloatArray]) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return conductances (K, R), capacitances (K, C) and 1/gbw (K, U)."""
    known = network.parts | {u.name: u.gbw for u in network.opamps}
    refuse_unknown("part", values, known)
    columns = {name: np.atleast_1d(np.asarray(value, dtype=float)) for name, value in values.items()}
    count = len(np.broadcast_arrays(np.zeros(1), *columns.values())[0])

    def table(parts: Sequence[Resistor | Capacitor | OpAmp]) -> FloatArray:
        column = np.empty((count, len(parts)))
        for i, part in enumerate(parts):
            column[:, i] = columns.get(part.name, known[part.name])
        return column

    return 1 / table(network.resistors), table(network.capacitors), 1 / table(network.opamps)


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
    matrix: ComplexArray = real[:, None] + 2j * np.pi * frequency[..., None, None] * imaginary[:, None]
    at_input = index[network.input]
    if network.source_resistance:
        matrix[..., at_input, at_input] += 1 / network.source_resistance
    else:
        matrix[..., at_input, :] = unit[network.input]
    for u, slow in zip(network.opamps, slowness.T, strict=True):
        matrix[..., index[u.out], :] = unit[u.minus] - unit[u.plus]
        matrix[..., index[u.out], index[u.out]] += 1j * frequency * slow[:, None]
    return matrix
