"""Values as plain JSON and back: the same text for the same value, the same value from its text."""

import json
from dataclasses import asdict, fields
from typing import Any

from bandproof.bench.types import Point, Step, Tone

__all__ = ["point_from", "point_plain", "step_from", "to_json"]


def to_json(value: object) -> str:
    """Return the JSON text of a value: keys sorted, as short as can be, the same for the same value."""
    return json.dumps(value, sort_keys=True, ensure_ascii=False, separators=(",", ":"), allow_nan=True)


def step_from(plain: dict[str, Any]) -> Step:
    """Return a Step from its JSON form."""
    tones = tuple(Tone(**tone) for tone in plain["tones"])
    return Step(**{**plain, "tones": tones, "ranges": (plain["ranges"][0], plain["ranges"][1])})


def point_plain(point: Point) -> dict[str, Any]:
    """Return a point as plain values; the response as its real and imaginary part."""
    return {**asdict(point), "response": [point.response.real, point.response.imag]}


def point_from(plain: dict[str, Any]) -> Point:
    """Return a Point from what `point_plain` gave, before or after JSON."""
    values = {field.name: plain[field.name] for field in fields(Point)}
    tuples = {name: tuple(value) for name, value in values.items() if isinstance(value, list | tuple)}
    return Point(**{**values, **tuples, "response": complex(*values["response"])})
