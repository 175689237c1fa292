"""Boards swept on a simulated bench over TCP, in virtual time, without files."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import pytest

from bandproof.bench.circuit import draw_parts
from bandproof.bench.instruments import opened
from bandproof.bench.journal import Journal
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import demo_board, rehearsal_bench
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Board
from bandproof.bench.verbs.rehearse import simulated, world_of
from bandproof.simulated_instruments.bench import World


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
    """Return a maker of sweeps: seed, defects {(stage, part): value}, faults, options of Sweep."""

    def make(
        seed: int,
        *,
        board: Board | None = None,
        defects: dict[tuple[str, str], float] | None = None,
        change: Callable[[World], World] = lambda world: world,
        raises: type[Exception] | tuple[type[Exception], ...] = (),
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
            try:
                with opened(reachable, clock, None) as devices:
                    Sweep(board, reachable, devices, clock, Absent(), journal, **options).run()
            except raises as found:
                problem = found
        return Swept(board, drawn, world, journal, problem)

    return make


@pytest.fixture(scope="session")
def one_band() -> Board:
    """The demo board's lowest stage alone."""
    board = demo_board()
    return replace(board, stages=board.stages[:1])
