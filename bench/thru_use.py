"""Whether a thru that was stored may be used for a run: every condition it was measured under still holds."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

from bandproof.bench.errors import BadInput
from bandproof.bench.instruments import Devices
from bandproof.bench.quantities import engineering
from bandproof.bench.thru import THRU, Asked, Ranges, paths
from bandproof.bench.thru_file import digest_of_text
from bandproof.bench.types import Bench, Board, Stage, Thru
from bandproof.drivers.errors import InstrumentError, SettingRefused

__all__ = ["Now", "ThruRefused", "asked_of_scope", "conditions_of", "reasons_against", "thru_for"]

_WARMER = 3.0  # K between thru and run; channels' gains change by some 100 ppm/K (common practice)


class ThruRefused(BadInput):
    """A stored thru cannot be used, and the bench cannot measure one by itself; has every reason."""

    def __init__(self, path: str, reasons: tuple[str, ...], bench_path: str) -> None:
        super().__init__(path, reasons, bench_path)
        self.path, self.reasons, self.bench_path = path, reasons, bench_path

    def __str__(self) -> str:
        return "\n".join(
            [
                f"{self.path} cannot be used for this run, nothing was measured",
                *(f"  {number}. {reason}" for number, reason in enumerate(self.reasons, 1)),
                f"Measure a new one:  bandproof thru {self.bench_path} --board BOARD",
                "or sweep --without-thru: then channel gain, range and probe rows count in full",
            ]
        )


@dataclass(frozen=True, slots=True)
class Now:
    """The conditions of a run: identities by role, °C of the room or None, UTC, and what its plan asks of the path.

    ``asked`` has its requests joined for each pair of ranges that the scope really has.
    """

    identities: Mapping[str, str]
    ambient: float | None
    utc: datetime
    asked: Mapping[Ranges, Asked]


def conditions_of(
    bench: Bench, path: Stage, identities: Mapping[str, str], ambient: float | None, operator: str
) -> dict[str, Any]:
    """Return the conditions a thru is measured under, as they are stored; ``bench`` has its dialects' texts."""
    return {
        "identities": dict(identities),
        "dialects": {role: digest_of_text(text) for role, text in bench.dialect_texts.items()},
        "probe_factors": {str(channel): factor for channel, factor in bench.probe_factors.items()},
        "channels": _channels(bench, path),
        "ambient": ambient,
        "operator": operator or "not stated",
        "version": version("bandproof"),
    }


def _channels(bench: Bench, stage: Stage) -> list[int]:
    return [bench.wires[tap].channel for tap in (stage.tap_in, stage.tap_out)]


def asked_of_scope(
    devices: Devices, bench: Bench, stages: Sequence[Stage], asked: Sequence[Asked], *, most: bool = False
) -> dict[Ranges, Asked]:
    """Return what stages ask of the path by the pairs of ranges that the scope really has, as it reads them back.

    The level is the least that any stage is swept at, because the path is driven beyond each stage's own span. With
    ``most`` a pair that the scope refuses is left out.

    Raises
    ------
    InstrumentProblem
        What the drivers met.
    """
    found: dict[Ranges, Asked] = {}
    level = min(pair.level for pair in asked)
    for stage, pair in zip(stages, asked, strict=True):
        try:
            real = devices.set_ranges(_channels(bench, stage), pair.ranges, bench.probe_factors)
        except (SettingRefused, InstrumentError):
            if most:
                continue
            raise
        same = found.get(real, pair)
        span = min(same.span[0], pair.span[0]), max(same.span[1], pair.span[1])
        found[real] = Asked(same.ranges, level, span)
    return found


def thru_for(thru: Thru, path: Path, *, board: Board, bench: Bench, bench_path: str, now: Now) -> tuple[bool, str]:
    """Return whether a thru may be used, and what a reader of the run must know of it.

    Raises
    ------
    ThruRefused
        It may not, and hands would have to move the probe to measure another.
    """
    reasons = reasons_against(thru, board, bench, now)
    if not reasons:
        return True, _not_smooth(thru, path)
    wire = bench.wires.get(THRU)
    if wire is None or wire.by_hand:
        raise ThruRefused(str(path), tuple(reasons), bench_path)
    return False, f"{path.name} was not used, the run measured the path itself: {'; '.join(reasons)}"


def _not_smooth(thru: Thru, path: Path) -> str:
    rough = [_volts(ranges) for ranges, known in paths(thru.points).items() if not known.is_smooth]
    return f"{path.name} is not a smooth path on {', '.join(rough)}" if rough else ""


def reasons_against(thru: Thru, board: Board, bench: Bench, now: Now) -> list[str]:
    """Return every reason why a stored thru does not hold for a run; ``bench`` has its dialects' texts."""
    had = thru.conditions
    return [
        *_other_instruments(had, bench, now),
        *_other_channels(had, board, bench),
        *_other_room(had["ambient"], now.ambient),
        *_too_old(thru, bench, now.utc),
        *_beyond(thru, now.asked),
    ]


def _other_instruments(had: Mapping[str, Any], bench: Bench, now: Now) -> list[str]:
    reasons = []
    was, answers = had["identities"].get("scope", ""), now.identities.get("scope", "")
    if was != answers:
        reasons.append(f"the scope was {was!r}, now {answers!r} answers")
    if had["dialects"].get("scope") != digest_of_text(bench.dialect_texts["scope"]):
        reasons.append("the scope's dialect was another one")
    factors = {str(channel): factor for channel, factor in bench.probe_factors.items()}
    if had["probe_factors"] != factors:
        told = [", ".join(f"{k}: {v:g}" for k, v in sorted(each.items())) for each in (had["probe_factors"], factors)]
        reasons.append(f"the probe factors by channel were {told[0]}, now {told[1]}")
    return reasons


def _other_channels(had: Mapping[str, Any], board: Board, bench: Bench) -> list[str]:
    others = [stage.name for stage in board.stages if _channels(bench, stage) != had["channels"]]
    if not others:
        return []
    return [f"it is of channel {had['channels'][1]} over {had['channels'][0]}, not so measured: {', '.join(others)}"]


def _other_room(was: float | None, now: float | None) -> list[str]:
    if was is None or now is None or abs(now - was) < _WARMER:
        return []
    return [f"the room was at {was:g} °C, now at {now:g} °C: {_WARMER:g} K or more apart"]


def _too_old(thru: Thru, bench: Bench, utc: datetime) -> list[str]:
    age = (utc - datetime.fromisoformat(thru.started)).total_seconds()
    if age < 0.0:
        return [f"it is dated {thru.started}, later than now: look at the computer's clock"]
    if age < bench.thru_valid:
        return []
    return [f"it is {_hours(age)} old, the bench file lets it be used for {_hours(bench.thru_valid)} (thru_valid)"]


def _hours(seconds: float) -> str:
    return f"{seconds / 3600.0:.3g} h"


def _beyond(thru: Thru, asked: Mapping[Ranges, Asked]) -> list[str]:
    """Return what the plan asks for and the thru does not have: pairs of ranges, frequencies."""
    known, reasons = paths(thru.points), []
    for ranges, wanted in asked.items():
        if ranges not in known:
            reasons.append(f"it has nothing on the ranges {_volts(ranges)}, which the plan asks for")
            continue
        span = known[ranges].fit.span
        if not (span[0] <= wanted.span[0] and wanted.span[1] <= span[1]):
            reasons.append(f"on {_volts(ranges)} it goes {_hertz(span)}, the plan {_hertz(wanted.span)}")
    return reasons


def _volts(ranges: Ranges) -> str:
    return " and ".join(engineering(reach, "V") for reach in ranges)


def _hertz(span: tuple[float, float]) -> str:
    return f"from {engineering(span[0], 'Hz')} to {engineering(span[1], 'Hz')}"
