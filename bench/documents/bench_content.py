"""What the report says of the bench a run was made on: instruments, declared accuracy, the path, the check standard."""

import hashlib
from typing import Any

from bandproof.bench.documents.cells import utc
from bandproof.bench.quantities import engineering
from bandproof.bench.thru import THRU
from bandproof.bench.types import Accuracy, Run

__all__ = ["bench_content"]

# field of Accuracy: what it is, how it is shown
_SIZES = (
    ("generator_frequency", "generator, frequency", "ppm"),
    ("channel_gain", "scope, gain of a channel", "%"),
    ("range_gain", "scope, what a range adds to the gain", "%"),
    ("linearity", "scope, departure from a straight line", "LSB"),
    ("channel_skew", "scope, delay of a channel", "s"),
    ("drift", "scope, drift of a channel's gain", "%/min"),
    ("reseating", "contact made anew", "%"),
    ("probe_compensation", "probe, wrong division above its corner", "%"),
    ("probe_corner", "probe, corner of its compensation", "Hz"),
    ("probe_resistance", "probe, resistance", "Ω"),
    ("probe_capacitance", "probe, capacitance", "F"),
)
_SCALED = {"ppm": 1e6, "%": 100.0, "LSB": 1.0, "%/min": 6000.0}


def bench_content(run: Run) -> dict[str, Any]:
    """Return what a run was measured with."""
    bench = run.bench
    factors = ", ".join(f"channel {channel}: {factor:g}:1" for channel, factor in sorted(bench.probe_factors.items()))
    return {
        "title": bench.title,
        "facts": [
            ["Greatest level the bench allows", engineering(bench.ceiling, "V")],
            ["Mains frequency", engineering(bench.mains, "Hz")],
            ["Probes", factors or "not stated"],
            ["The path itself", _path(run)],
            ["Check standard", _checks(run)],
        ],
        "instruments": [
            [
                role,
                run.identities.get(role) or "does not say",
                instrument.calibrated or "not stated",
                instrument.address,
                instrument.dialect,
            ]
            for role, instrument in bench.instruments.items()
        ],
        "accuracy": [_size(bench.accuracy, *entry) for entry in _SIZES],
        "texts": _texts(run),
    }


def _path(run: Run) -> str:
    own = sum(point.purpose == THRU for point in run.points)
    told = [f"measured in this run, {own} points"] if own else []
    if run.thru is not None:
        told.append(f"stored: measured {utc(run.thru.started)}, {len(run.thru.points)} points")
    return "; ".join(told) or "not measured: what it does is in U"


def _checks(run: Run) -> str:
    if run.checks is None:
        return "none"
    last = run.checks.checks[-1]
    return f"{run.checks.standard}: {len(run.checks.checks)} checks in order, the last {utc(last.started)}"


def _size(accuracy: Accuracy, name: str, meaning: str, unit: str) -> list[str]:
    value = getattr(accuracy, name)
    text = f"{value * _SCALED[unit]:.4g} {unit}" if unit in _SCALED else engineering(value, unit)
    return [meaning, text, "declared" if name in accuracy.declared else "not stated, careful default"]


def _texts(run: Run) -> list[list[str]]:
    """Return the SHA-256 of every file the run began with; their texts are in the run file."""
    texts = {"board file": run.board.text, "bench file": run.bench.text}
    texts |= {f"dialect of the {role}": text for role, text in sorted(run.bench.dialect_texts.items())}
    return [[name, hashlib.sha256(text.encode("utf-8")).hexdigest()] for name, text in texts.items()]
