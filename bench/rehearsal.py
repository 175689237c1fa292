"""The demo board, the bench file of a rehearsal made for any board, and what was true of a rehearsal."""

import json
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any

from bandproof.bench.bench_file import parse_bench
from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import predict
from bandproof.bench.errors import BadInput
from bandproof.bench.thru import THRU
from bandproof.bench.types import Bench, Board

__all__ = ["demo_board", "demo_text", "rehearsal_bench", "write_truth"]

DEMO_BOARD = "talkback.board.toml"
DEMO_BENCH = "simulated.bench.toml"
_FIRST_ROUTE = 101
_SUPPLY = """[supply]                         # switched off, on, and off again at the end; its currents are looked at
address = "TCPIP::127.0.0.1::5028::SOCKET"
dialect = "scpi99-supply"
positive = 1                     # the supply's channel of each rail
negative = 2

"""


def demo_text(name: str) -> str:
    """Return the text of a file that comes with the demo."""
    return (resources.files("bandproof.bench.demo") / name).read_text(encoding="utf-8")


def demo_board() -> Board:
    """Return the demo board."""
    return parse_board(demo_text(DEMO_BOARD), DEMO_BOARD)


def rehearsal_bench(board: Board) -> Bench:
    """Return the simulated bench for a board: its input tap on channel 1, every output tap on a route to channel 2.

    Raises
    ------
    BadInput
        The board's stages are measured from different input taps, or one stage's output is another's input.
    """
    inputs = list(dict.fromkeys(stage.tap_in for stage in board.stages))
    outputs = list(dict.fromkeys(stage.tap_out for stage in board.stages))
    if len(inputs) > 1 or inputs[0] in outputs:
        raise BadInput(
            f"a rehearsal measures all stages from one input tap, this board has {', '.join(inputs)}; "
            "give all stages the same `from`"
        )
    head, mark, _ = demo_text(DEMO_BENCH).partition("[wiring]")
    comment = '                         # test point → scope channel; a switch route, or "by hand"\n'
    wires = [f"{inputs[0]} = {{ channel = 1 }}\n"]
    wires += [f'{THRU} = {{ channel = 2, route = "{_FIRST_ROUTE - 1}" }}  # the node of {inputs[0]!r} on channel 2\n']
    wires += [f'{tap} = {{ channel = 2, route = "{_FIRST_ROUTE + i}" }}\n' for i, tap in enumerate(outputs)]
    if board.power is not None:
        head += _SUPPLY
    return parse_bench(head + mark + comment + "".join(wires), DEMO_BENCH)


def write_truth(path: Path, board: Board, drawn: Mapping[str, Mapping[str, float]], world: Mapping[str, Any]) -> None:
    """Write what is true of a drawn board, its figures by definition, and of the simulated world it is in."""
    stages: dict[str, Any] = {}
    for stage in board.stages:
        try:
            true = predict(board, stage, drawn[stage.name])
            figures: dict[str, Any] = {"centre_Hz": true.centre, "q": true.q, "gain": true.gain}
        except ValueError as no_band:
            figures = {"no_band": str(no_band)}
        stages[stage.name] = {"parts": drawn[stage.name], **figures}
    path.write_text(json.dumps({"stages": stages, **world}, indent=1) + "\n", encoding="utf-8")
