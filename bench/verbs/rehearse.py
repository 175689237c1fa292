"""``rehearse``: the whole job on simulated instruments, over real TCP."""

import json
import tempfile
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.errors import BadInput
from bandproof.bench.types import Bench, Board, Instrument

if TYPE_CHECKING:
    from bandproof.drivers.clock import VirtualClock
    from bandproof.simulated_instruments.bench import World

__all__ = ["command", "simulated", "world_of"]

Drawn = dict[str, dict[str, float]]


@click.command("rehearse")
@click.argument("board_path", metavar="[BOARD]", required=False, type=click.Path(path_type=Path))
@click.option("--seed", default=1, show_default=True, help="Draws the board's parts and the bench's imperfections.")
@click.option("--defect", "defects", multiple=True, metavar="STAGE.PART=VALUE", help="Build in a wrong part.")
@click.option("--folder", type=click.Path(path_type=Path), default=Path("rehearsals"), show_default=True)
@click.option("--serve", is_flag=True, help="Only run the simulated bench, in real time, until Ctrl-C.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(
    board_path: Path | None, seed: int, defects: tuple[str, ...], folder: Path, serve: bool, as_json: bool
) -> int:
    """Do the whole job on simulated instruments; without BOARD on the demo board, an invented talkback equalizer.

    The board's parts are drawn within their tolerances, its bench has the errors real benches have; what they truly
    were is written to truth.json beside the run file.

    \b
    Example:
      bandproof rehearse --seed 7
      bandproof rehearse --defect low.R_shunt=3k4
    """
    from bandproof.bench.board_file import parse_defect, read_board
    from bandproof.bench.circuit import draw_parts
    from bandproof.bench.rehearsal import demo_board, rehearsal_bench

    if seed < 0:
        raise BadInput(f"--seed {seed}: a seed is 0 or more")
    board = read_board(board_path) if board_path else demo_board()
    drawn = draw_parts(board, seed)
    for text in defects:
        stage, part, value = _defect(parse_defect, text, board)
        drawn[stage][part] = value
    bench = rehearsal_bench(board)
    if serve:
        return _serve(board, bench, drawn, seed, folder)
    return _rehearse(board, bench, drawn, seed, folder, as_json)


def _defect(parse: Any, text: str, board: Board) -> tuple[str, str, float]:
    try:
        stage, part, value = parse(text, board)
    except ValueError as problem:
        raise BadInput(f"--defect {problem}") from problem
    return stage, part, value


def world_of(board: Board, bench: Bench, drawn: Drawn, seed: int, run: int) -> "World":
    """Return the world of a rehearsal: the drawn board behind a reference bench, in real time."""
    from bandproof.bench.circuit import board_network
    from bandproof.simulated_instruments.bench import World
    from bandproof.simulated_instruments.imperfections import Imperfections, Sizes

    # Left out until a row of the budget speaks of them.
    sizes = Sizes(range_gain=0, probe_compensation=0, ac_corner=0, nonlinearity=0, hum=0, drift=0, reseating=0)
    routes = {wire.route: board.points[tap].node for tap, wire in bench.wires.items() if wire.route}
    fixed = next(board.points[tap].node for tap, wire in bench.wires.items() if not wire.route)
    return World(
        network=board_network(board, drawn),
        scope={1: fixed, 2: "switch"},
        routes=routes,
        seed=seed,
        run=run,
        imperfections=Imperfections.draw(seed, sizes),
    )


def _at(bench: Bench, ports: dict[str, int], clock: str | None) -> Bench:
    """Return the bench at the ports a simulated bench listens on."""
    instruments = {
        role: Instrument(instrument.role, f"TCPIP::127.0.0.1::{ports[role]}::SOCKET", instrument.dialect)
        for role, instrument in bench.instruments.items()
    }
    return replace(bench, instruments=instruments, clock=clock)


@contextmanager
def simulated(world: "World", bench: Bench) -> "Iterator[tuple[Bench, VirtualClock]]":
    """Run a world as a process of its own in virtual time; yield the bench at its ports and the shared clock."""
    from bandproof.drivers.clock import VirtualClock, create_clock_file
    from bandproof.simulated_instruments.bench import start

    with tempfile.TemporaryDirectory(prefix="bandproof-") as temporary:
        time_file = str(Path(temporary) / "bench.time")
        create_clock_file(time_file)
        with start(replace(world, clock=time_file)) as server, closing(VirtualClock(time_file)) as clock:
            yield _at(bench, server.ports, time_file), clock


def _rehearse(board: Board, bench: Bench, drawn: Drawn, seed: int, folder: Path, as_json: bool) -> int:
    from bandproof.bench.job import Job, new_attempt
    from bandproof.bench.operator import Absent
    from bandproof.bench.stop import Stop, watching_signals
    from bandproof.bench.verbs.run import Progress, show, wall

    begin = wall()
    serial = f"rehearsal-{seed}"
    place, attempt = new_attempt(folder, serial)
    stop, progress = Stop(), Progress()
    world = world_of(board, bench, drawn, seed, attempt)
    _write_truth(place / "truth.json", board, drawn, world)
    with simulated(world, bench) as (reachable, clock), watching_signals(stop):
        outcome = Job(
            board=board,
            bench=reachable,
            serial=serial,
            attempt=attempt,
            run_id=f"rehearsal-{seed}-{attempt}",
            folder=place,
            clock=clock,
            operator=Absent(),
            stop=stop,
            progress=progress,
        ).carry_out()
    progress.close()
    return show(outcome, wall() - begin, as_json)


def _write_truth(path: Path, board: Board, drawn: Drawn, world: "World") -> None:
    from bandproof.bench.circuit import predict

    stages: dict[str, Any] = {}
    for stage in board.stages:
        try:
            true = predict(board, stage, drawn[stage.name])
            figures: dict[str, Any] = {"centre_Hz": true.centre, "q": true.q, "gain": true.gain}
        except ValueError as no_band:
            figures = {"no_band": str(no_band)}
        stages[stage.name] = {"parts": drawn[stage.name], **figures}
    truth = {"stages": stages, "imperfections": world.imperfections.as_plain(), "seed": world.seed, "run": world.run}
    path.write_text(json.dumps(truth, indent=1) + "\n", encoding="utf-8")


def _serve(board: Board, bench: Bench, drawn: Drawn, seed: int, folder: Path) -> int:
    import signal

    from bandproof.simulated_instruments.bench import start

    folder.mkdir(parents=True, exist_ok=True)
    with start(world_of(board, bench, drawn, seed, 1)) as server:
        served = _at(bench, server.ports, None)
        path = folder / "served.bench.toml"
        text = bench.text
        for role, instrument in bench.instruments.items():
            text = text.replace(instrument.address, served.instruments[role].address)
        path.write_text(text, encoding="utf-8")
        for role, instrument in served.instruments.items():
            click.echo(f"{role:<10}{instrument.address}")
        click.echo(f"bench file: {path}\nIt answers until Ctrl-C. Try, in another terminal:  bandproof bench {path}")
        try:
            signal.pause()
        except KeyboardInterrupt:
            click.echo("")
    return 0
