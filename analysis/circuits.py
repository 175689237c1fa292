"""The multiple-feedback band-pass: figures, design and network.

R_in leads from the input to an inner node x, R_shunt from x to ground, C_1 from x to the output, C_2 from x to the
op-amp's minus input, R_feedback from the output to the minus input; the plus input is grounded.
Source: R. Mancini (ed.), Op Amps for Everyone, chapter 16, multiple-feedback band-pass.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from math import pi, sqrt

from bandproof.analysis.elements import GROUND, Capacitor, Network, OpAmp, Resistor

__all__ = ["MfbFigures", "MfbParts", "join", "mfb_design", "mfb_figures", "mfb_network"]


@dataclass(frozen=True, slots=True)
class MfbParts:
    """Parts of a multiple-feedback band-pass, in ohm and farad."""

    R_in: float
    R_shunt: float
    R_feedback: float
    C_1: float
    C_2: float

    def __post_init__(self) -> None:
        for field in fields(self):
            if not getattr(self, field.name) > 0:
                raise ValueError(f"{field.name} must be positive, found {getattr(self, field.name)!r}")


@dataclass(frozen=True, slots=True)
class MfbFigures:
    """Centre frequency in Hz, quality factor f0 / (-3 dB bandwidth), and |H| at f0, all with an ideal op-amp."""

    f0: float
    q: float
    gain: float


def mfb_figures(parts: MfbParts) -> MfbFigures:
    """Return the figures of the stage with an ideal op-amp; its gain is inverting.

    Source: nodal analysis of the circuit above, any two capacitors.

    Examples
    --------
    >>> figures = mfb_figures(MfbParts(R_in=7.96e3, R_shunt=80.4, R_feedback=31.8e3, C_1=100e-9, C_2=100e-9))
    >>> print(f"{figures.f0:.3f} {figures.q:.4f} {figures.gain:.5f}")
    1000.370 9.9940 1.99749
    """
    p = parts
    parallel = p.R_in * p.R_shunt / (p.R_in + p.R_shunt)
    w0 = 1 / sqrt(parallel * p.R_feedback * p.C_1 * p.C_2)
    q = sqrt(p.R_feedback * p.C_1 * p.C_2 / parallel) / (p.C_1 + p.C_2)
    return MfbFigures(w0 / (2 * pi), q, p.R_feedback / p.R_in * p.C_2 / (p.C_1 + p.C_2))


def mfb_design(f0: float, q: float, gain: float, capacitance: float) -> MfbParts:
    """Return the parts for wanted figures with two equal capacitors and an ideal op-amp.

    Parameters
    ----------
    f0 : float
        Hz.
    q : float
        f0 / (-3 dB bandwidth).
    gain : float
        Wanted |H| at f0.
    capacitance : float
        Farad, of each capacitor.

    Raises
    ------
    ValueError
        A value is not positive, or q is not above sqrt(gain / 2), the bound of the circuit.

    Examples
    --------
    >>> round(mfb_design(f0=1000.0, q=10.0, gain=2.0, capacitance=100e-9).R_shunt, 6)
    80.381284
    """
    for name, value in (("f0", f0), ("q", q), ("gain", gain), ("capacitance", capacitance)):
        if not value > 0:
            raise ValueError(f"{name} must be positive, found {value!r}")
    bound = sqrt(gain / 2)
    if not q > bound:
        raise ValueError(
            f"q must be above sqrt(gain / 2) = {bound:.6g} for a multiple-feedback band-pass of gain {gain:g}, "
            f"found {q!r}: raise q, or lower the gain below {2 * q * q:.6g} and make it up elsewhere"
        )
    reactance = 1 / (2 * pi * f0 * capacitance)
    return MfbParts(
        R_in=q * reactance / gain,
        R_shunt=q * reactance / (2 * q * q - gain),
        R_feedback=2 * q * reactance,
        C_1=capacitance,
        C_2=capacitance,
    )


def mfb_network(prefix: str, parts: MfbParts, op_amp: OpAmp, *, node_in: str, node_out: str) -> Network:
    """Return the stage as a network of its own, ready to be joined to others.

    Every part and inner node takes the prefix; `op_amp` gives gbw, offset and limits, its nodes are replaced.

    Examples
    --------
    >>> stage = mfb_network(
    ...     "b1.", mfb_design(1e3, 2.0, 3.0, 10e-9), OpAmp("U", "", "", "", gbw=3e6), node_in="in", node_out="out"
    ... )
    >>> sorted(stage.parts)
    ['b1.C_1', 'b1.C_2', 'b1.R_feedback', 'b1.R_in', 'b1.R_shunt']
    """
    x, minus = f"{prefix}x", f"{prefix}minus"
    return Network(
        resistors=(
            Resistor(f"{prefix}R_in", node_in, x, parts.R_in),
            Resistor(f"{prefix}R_shunt", x, GROUND, parts.R_shunt),
            Resistor(f"{prefix}R_feedback", node_out, minus, parts.R_feedback),
        ),
        capacitors=(Capacitor(f"{prefix}C_1", x, node_out, parts.C_1), Capacitor(f"{prefix}C_2", x, minus, parts.C_2)),
        opamps=(replace(op_amp, name=f"{prefix}{op_amp.name}", plus=GROUND, minus=minus, out=node_out),),
        input=node_in,
    )


def join(*networks: Network, input: str = "in", source_resistance: float = 0.0) -> Network:  # noqa: A002 (Network's own word)
    """Return one network of all the parts; nodes of the same name become one node.

    Raises
    ------
    ValueError
        Two parts share a name, or two sources drive one node.
    """
    return Network(
        resistors=tuple(part for network in networks for part in network.resistors),
        capacitors=tuple(part for network in networks for part in network.capacitors),
        opamps=tuple(part for network in networks for part in network.opamps),
        input=input,
        source_resistance=source_resistance,
    )
