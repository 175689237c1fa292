"""Boards swept on a simulated bench over TCP, in virtual time, without files."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest

from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts
from bandproof.bench.instruments import opened
from bandproof.bench.job import Job, Outcome
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent, Operator
from bandproof.bench.rehearsal import DEMO_BOARD, demo_board, demo_text, rehearsal_bench
from bandproof.bench.stop import Stop
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Bench, Board
from bandproof.bench.verbs.rehearse import simulated, world_of
from bandproof.simulated_instruments.bench import World
from bandproof.simulated_instruments.imperfections import Imperfections


@dataclass
class Swept:
    """What a sweep left, and the world it was made in."""

    board: Board
    drawn: dict[str, dict[str, float]]
    world: World
    journal: Journal
    problem: Exception | None


@pytest.fixture(scope="session")
def swept() -> Callable[..., Swept]:
    """Return a maker of sweeps: seed, defects {(stage, part): value}, options of Sweep.

    `change` alters the world, `rewire` what the controller believes of its bench; `log` is the exchange log's path;
    with `prepare` the instruments are reset first, as in a job.
    """

    def make(
        seed: int,
        *,
        board: Board | None = None,
        defects: dict[tuple[str, str], float] | None = None,
        change: Callable[[World], World] = lambda world: world,
        rewire: Callable[[Bench], Bench] = lambda bench: bench,
        operator: Operator | None = None,
        log: Path | None = None,
        raises: type[Exception] | tuple[type[Exception], ...] = (),
        prepare: bool = False,
        **options: Any,
    ) -> Swept:
        board = board or demo_board()
        bench = rehearsal_bench(board)
        drawn = draw_parts(board, seed)
        for (stage, part), value in (defects or {}).items():
            drawn[stage][part] = value
        world = change(world_of(board, bench, drawn, seed, 1))
        journal, problem = Journal(), None
        with simulated(world, bench) as (reachable, clock):
            reachable = rewire(reachable)
            try:
                with opened(reachable, clock, log) as devices:
                    sweep = Sweep(board, reachable, devices, clock, operator or Absent(), journal, **options)
                    if prepare:
                        sweep.prepare()
                    sweep.run()
            except raises as found:
                problem = found
        return Swept(board, drawn, world, journal, problem)

    return make


QUIET = Imperfections(output_resistance=50.0, adc_bits=8, noise=0.5)


@pytest.fixture(scope="session")
def quiet() -> Callable[[World], World]:
    """A change of a world: its bench has noise and a converter of 8 bits, nothing else is wrong with it."""
    return lambda world: replace(world, imperfections=QUIET)


@pytest.fixture(scope="session")
def one_band() -> Board:
    """The demo board's lowest stage alone."""
    board = demo_board()
    return replace(board, stages=board.stages[:1])


def band_text(count: int) -> str:
    """Return the text of a board file with the demo's first bands only."""
    head, *stages = demo_text(DEMO_BOARD).split("\n[stages.")
    return "\n[stages.".join([head, *stages[:count]]) + "\n"


@pytest.fixture(scope="session")
def one_band_text() -> str:
    """The text of a board file with the demo's lowest stage alone."""
    return band_text(1)


@pytest.fixture(scope="session")
def two_band_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A board file with the demo's two lowest stages."""
    path = tmp_path_factory.mktemp("board") / "two.board.toml"
    path.write_text(band_text(2))
    return path


@pytest.fixture(scope="session")
def three_band_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A board file with the demo's three lowest stages."""
    path = tmp_path_factory.mktemp("board") / "three.board.toml"
    path.write_text(band_text(3))
    return path


@pytest.fixture(scope="session")
def outcome(tmp_path_factory: pytest.TempPathFactory) -> Outcome:
    """What a whole job on a board of two bands left; its files are in `outcome.folder`."""
    board = parse_board(band_text(2), "two bands")
    bench = rehearsal_bench(board)
    world = replace(world_of(board, bench, draw_parts(board, 11), 11, 1), imperfections=QUIET)
    folder = tmp_path_factory.mktemp("outcome") / "TB-0011" / "1"
    folder.mkdir(parents=True)
    with simulated(world, bench) as (reachable, clock):
        return Job(
            board=board,
            bench=reachable,
            serial="TB-0011",
            attempt=1,
            run_id="eleven",
            folder=folder,
            clock=clock,
            operator=Absent(),
            stop=Stop(),
            progress=lambda *_: None,
            note="Ω µ ± 'quoted' \"twice\"",
        ).carry_out()
