"""The board file: what was designed, read with every mistake reported at once."""

from math import inf
from pathlib import Path
from typing import Literal, cast

from bandproof.bench.quantities import Kind, QuantityError, read_quantity
from bandproof.bench.reading import Mistakes, Table, nearest, parse_toml, read_text
from bandproof.bench.rules import priors, rules
from bandproof.bench.types import PASSIVE, Board, Limit, OpAmpData, Part, Power, Quantity, Stage, Temperature, TestPoint

__all__ = ["STAGE_PARTS", "parse_board", "parse_defect", "read_board"]

# Part names of each circuit, with the kind of quantity each is.
STAGE_PARTS: dict[str, dict[str, Kind]] = {
    "multiple-feedback": {
        "R_in": "resistance",
        "R_shunt": "resistance",
        "R_feedback": "resistance",
        "C_1": "capacitance",
        "C_2": "capacitance",
    },
    PASSIVE: {},
}
_NAME_RULE = "a name has letters, digits, - and _, at most 40"


def read_board(path: Path) -> Board:
    """Return the board a file describes.

    Raises
    ------
    FileMistakes
        All mistakes found in the file, each with its key path.
    """
    return parse_board(read_text(path), str(path))


def parse_board(text: str, path: str) -> Board:
    """Return the board a text describes; ``path`` is the name its mistakes are reported under (FileMistakes)."""
    mistakes = Mistakes(path)
    top = Table(parse_toml(text, path), "", mistakes)
    stages = _stages(top)
    board = Board(
        title=top.text("title"),
        drawing=top.text("drawing", ""),
        revision=top.text("revision", ""),
        frequencies=cast(Literal["nominal", "exact"], top.choice("frequencies", ["nominal", "exact"], "nominal")),
        input_maximum=_input_maximum(top.table("limits")),
        op_amp=_op_amp(top, stages),
        power=_power(top.table("supply")) if "supply" in top else None,
        temperature=_temperature(top.table("temperature")) if "temperature" in top else None,
        points=_points(top.table("points")),
        stages=stages,
        text=text,
    )
    top.close()
    _check_taps(board, mistakes)
    mistakes.stop_if_any()
    return board


def _input_maximum(limits: Table) -> float:
    value = limits.quantity("input_maximum", "voltage")
    limits.close()
    return value


def _op_amp(top: Table, stages: tuple[Stage, ...]) -> OpAmpData:
    """Return the board's op-amp; one without limits where every stage is passive."""
    if "op_amp" not in top and stages and all(stage.circuit == PASSIVE for stage in stages):
        return OpAmpData(inf, inf, inf)
    table = top.table("op_amp")
    data = OpAmpData(
        gbw=table.quantity("gbw", "frequency"),
        slew=table.quantity("slew", "slew"),
        swing=table.quantity("swing", "voltage"),
    )
    table.close()
    return data


def _power(table: Table) -> Power:
    power = Power(
        positive=table.quantity("positive", "voltage"),
        negative=table.quantity("negative", "voltage"),
        current_limit=table.quantity("current_limit", "current"),
        least_current=table.quantity("least_current", "current"),
        most_current=table.quantity("most_current", "current"),
    )
    if not power.least_current < power.most_current <= power.current_limit:
        table.mistake("most_current", "must be above least_current and not above current_limit")
    table.close()
    return power


def _temperature(table: Table) -> Temperature:
    temperature = Temperature(
        reference=table.quantity("reference", "temperature"),
        coefficient=table.quantity("coefficient", "relative", positive=False),
    )
    table.close()
    return temperature


def _points(table: Table) -> dict[str, TestPoint]:
    points = {}
    for name in table.names():
        entry = table.table(name)
        points[name] = TestPoint(
            name, entry.text("node"), entry.quantity("source_resistance", "resistance", 0.0, positive=False)
        )
        entry.close()
        _check_name(table, name)
    return points


def _stages(top: Table) -> tuple[Stage, ...]:
    tolerances = top.table("tolerances", optional=True)
    default = {
        "resistance": tolerances.quantity("resistors", "relative", 0.01),
        "capacitance": tolerances.quantity("capacitors", "relative", 0.05),
    }
    tolerances.close()
    table = top.table("stages")
    stages = tuple(_stage(name, table.table(name), default) for name in table.names() if _check_name(table, name))
    if not stages and "stages" in top:
        top.mistake("stages", "is empty; a board has at least one stage")
    return stages


def _check_name(table: Table, name: str) -> bool:
    good = name.replace("-", "").replace("_", "").isalnum() and name.isascii() and len(name) <= 40
    if not good:
        table.mistake(name, f"cannot be a name; {_NAME_RULE}")
    return good


def _stage(name: str, table: Table, default: dict[str, float]) -> Stage:
    kind = table.choice("kind", ["band"])
    circuit = table.choice("circuit", list(STAGE_PARTS))
    stage = Stage(
        name=name,
        kind=cast(Literal["band"], kind),
        tap_in=table.text("from"),
        tap_out=table.text("to"),
        limits=_limits(table),
        circuit=circuit,
        parts=_parts(table.table("parts"), STAGE_PARTS[circuit], default) if STAGE_PARTS[circuit] else (),
    )
    table.close()
    return stage


def _limits(table: Table) -> dict[Quantity, Limit]:
    design, tolerance = table.table("design"), table.table("tolerance")
    decided = rules(table)
    designed: dict[Quantity, float] = {
        "centre": design.quantity("centre", "frequency"),
        "q": design.quantity("q", "number"),
        "gain": design.quantity("gain", "gain"),
    }
    known, limits = priors(table, designed), {}
    for quantity, value in designed.items():
        lower, upper = tolerance.tolerance(quantity)
        limits[quantity] = Limit(value, value * lower, value * upper, *decided[quantity], known.get(quantity))
    design.close()
    tolerance.close()
    return limits


def _parts(table: Table, names: dict[str, Kind], default: dict[str, float]) -> tuple[Part, ...]:
    parts = tuple(_part(table, name, kind, default[kind]) for name, kind in names.items())
    table.close()
    return parts


def _part(table: Table, name: str, kind: Kind, default: float) -> Part:
    if not isinstance(table.peek(name), dict):
        return Part(name, table.quantity(name, kind), default)
    entry = table.table(name)
    part = Part(name, entry.quantity("value", kind), entry.quantity("tolerance", "relative", default))
    if part.tolerance >= 1.0:
        entry.mistake("tolerance", "is 100 % or more")
    entry.close()
    return part


def _check_taps(board: Board, mistakes: Mistakes) -> None:
    for stage in board.stages:
        for key, tap in (("from", stage.tap_in), ("to", stage.tap_out)):
            if tap and tap not in board.points:
                known = ", ".join(board.points) or "none"
                mistakes.add(
                    f"stages.{stage.name}.{key}",
                    f"no test point {tap!r}; points known: {known}{nearest(tap, board.points)}",
                )
        if stage.tap_in and stage.tap_in == stage.tap_out:
            mistakes.add(f"stages.{stage.name}", "from and to are the same test point")


def parse_defect(text: str, board: Board) -> tuple[str, str, float]:
    """Return (stage, part, value) of ``STAGE.PART=VALUE``.

    Raises
    ------
    ValueError
        The text names no part of the board or no value; says what would.
    """
    name, equals, value = text.partition("=")
    stage_name, dot, part_name = name.strip().partition(".")
    parts = {(stage.name, part.name): stage for stage in board.stages for part in stage.parts}
    if not (equals and dot) or (stage_name, part_name) not in parts:
        known = ", ".join(f"{s}.{p}" for s, p in parts)
        if not parts:
            raise ValueError(f"{text!r}: this board's file states no parts that could be wrong")
        raise ValueError(f"{text!r} names no part of this board; write e.g. {known.split(',')[0]}=6k8 (parts: {known})")
    kind = STAGE_PARTS[parts[stage_name, part_name].circuit][part_name]
    try:
        quantity = read_quantity(value.strip(), kind)
    except QuantityError as problem:
        raise ValueError(f"{text!r}: {problem}") from problem
    if quantity <= 0.0:
        raise ValueError(f"{text!r}: a part's value is above zero")
    return stage_name, part_name, quantity
