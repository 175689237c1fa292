"""Values as plain JSON and back: the same text for the same value, the same value from its text."""

import json
from collections.abc import Mapping
from dataclasses import asdict, fields
from datetime import datetime
from functools import cache
from typing import Any, Literal, get_args, get_origin, get_type_hints

from bandproof.bench.types import QUANTITIES, Check, CheckHistory, Point, Step, Thru, Tone

__all__ = [
    "checks_from",
    "checks_plain",
    "fits",
    "point_from",
    "point_plain",
    "step_from",
    "thru_from",
    "thru_plain",
    "to_json",
]


def to_json(value: object) -> str:
    """Return the JSON text of a value: keys sorted, as short as can be, the same for the same value."""
    return json.dumps(value, sort_keys=True, ensure_ascii=False, separators=(",", ":"), allow_nan=True)


def fits(value: object, kind: Any) -> bool:
    """Whether a value is of a kind as annotations write it; an int will do for a float, none beyond 64 bits."""
    origin, inner = get_origin(kind), get_args(kind)
    if origin is Literal:
        return isinstance(value, str) and value in inner
    if origin is tuple:
        kinds = inner[:1] * len(value) if isinstance(value, tuple) and inner[-1] is ... else inner
        return isinstance(value, tuple) and len(value) == len(kinds) and all(map(fits, value, kinds))
    if origin is list:
        return isinstance(value, list) and all(fits(item, inner[0]) for item in value)
    if origin is dict:
        return isinstance(value, dict) and all(fits(v, inner[1]) for v in value.values())  # JSON's names are texts
    if type(value) is int:
        return kind in (int, float) and abs(value) < 2**63
    return type(value) is kind


@cache
def _kinds(made: type) -> Mapping[str, Any]:
    return get_type_hints(made)


def _made(made: Any, values: dict[str, Any]) -> Any:
    """Return a dataclass of values that are of its kinds (KeyError, TypeError, ValueError)."""
    for name, kind in _kinds(made).items():
        if not fits(values[name], kind):
            raise ValueError(f"{name} of a {made.__name__} is {values[name]!r:.40}")
    return made(**values)


def step_from(plain: dict[str, Any]) -> Step:
    """Return a Step from its JSON form (KeyError, TypeError, ValueError: it is none)."""
    tones = tuple(_made(Tone, tone) for tone in plain["tones"])
    step: Step = _made(Step, {**plain, "tones": tones, "ranges": tuple(plain["ranges"])})
    return step


def point_plain(point: Point) -> dict[str, Any]:
    """Return a point as plain values; the response as its real and imaginary part."""
    return {**asdict(point), "response": [point.response.real, point.response.imag]}


def point_from(plain: dict[str, Any]) -> Point:
    """Return a Point from what `point_plain` gave, before or after JSON.

    Raises
    ------
    KeyError, TypeError, ValueError
        It is no point.
    """
    values = {field.name: plain[field.name] for field in fields(Point)}
    tuples = {name: tuple(value) for name, value in values.items() if isinstance(value, list | tuple)}
    response = tuple(values["response"])
    if not fits(response, tuple[float, float]):
        raise ValueError(f"response of a Point is {response!r:.40}")
    point: Point = _made(Point, {**values, **tuples, "response": complex(*response)})
    return point


def thru_plain(thru: Thru) -> dict[str, Any]:
    """Return a thru as plain values."""
    points = [point_plain(point) for point in thru.points]
    return {"started": thru.started, "conditions": dict(thru.conditions), "points": points}


_CONDITIONS: dict[str, Any] = {
    "identities": dict[str, str],
    "dialects": dict[str, str],
    "probe_factors": dict[str, float],
    "channels": list[int],
    "operator": str,
    "version": str,
}


def thru_from(plain: dict[str, Any]) -> Thru:
    """Return a Thru from what `thru_plain` gave, before or after JSON (KeyError, TypeError, ValueError: it is none)."""
    conditions, started = plain["conditions"], plain["started"]
    for name, kind in _CONDITIONS.items():
        if not fits(conditions[name], kind):
            raise ValueError(f"{name} of a thru is {conditions[name]!r:.40}")
    if conditions["ambient"] is not None and not fits(conditions["ambient"], float):
        raise ValueError(f"ambient of a thru is {conditions['ambient']!r:.40}")
    if datetime.fromisoformat(started).tzinfo is None:
        raise ValueError(f"started of a thru has no time zone: {started!r:.40}")
    return Thru(started, conditions, tuple(point_from(point) for point in plain["points"]))


def checks_plain(history: CheckHistory) -> dict[str, Any]:
    """Return a history of checks as plain values."""
    checks = [
        {
            "started": check.started,
            "figures": {
                stage: {quantity: list(found) for quantity, found in figures.items()}
                for stage, figures in check.figures.items()
            },
        }
        for check in history.checks
    ]
    return {"standard": history.standard, "checks": checks}


def checks_from(plain: dict[str, Any]) -> CheckHistory:
    """Return what `checks_plain` gave, before or after JSON (KeyError, TypeError, ValueError: it is none)."""
    if not fits(plain["standard"], str):
        raise ValueError(f"standard of a history of checks is {plain['standard']!r:.40}")
    return CheckHistory(plain["standard"], tuple(_check_from(check) for check in plain["checks"]))


def _check_from(plain: dict[str, Any]) -> Check:
    if datetime.fromisoformat(plain["started"]).tzinfo is None:
        raise ValueError(f"started of a check has no time zone: {plain['started']!r:.40}")
    figures = {
        stage: {quantity: tuple(found[quantity]) for quantity in QUANTITIES}
        for stage, found in plain["figures"].items()
    }
    for value in (value for found in figures.values() for value in found.values()):
        if not fits(value, tuple[float, float]):
            raise ValueError(f"a figure of a check is {value!r:.40}")
    return Check(plain["started"], figures)
