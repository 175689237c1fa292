"""Damaged board, bench and dialect files: all mistakes told, or a right result."""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from bandproof.bench.bench_file import check_wiring, read_bench
from bandproof.bench.board_file import read_board
from bandproof.bench.errors import BadInput
from bandproof.bench.plan import Planner
from bandproof.bench.rehearsal import DEMO_BENCH, DEMO_BOARD, demo_board, demo_text, rehearsal_bench
from bandproof.drivers.clock import RealClock
from bandproof.drivers.dialect import Dialect, GeneratorDialect, ScopeDialect, SwitchDialect, load, shipped, source
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.generator import Generator
from bandproof.drivers.link import Link
from bandproof.drivers.schema import DialectMistakes
from bandproof.drivers.scope import Scope
from bandproof.drivers.session import Session
from bandproof.drivers.switch import Switch
from tests.benchmarks._instrument import MemoryPort, Registers
from tests.benchmarks._mutations import mutated
from tests.benchmarks._tally import Tally

__all__ = ["damaged_files"]

LONGEST = 10.0  # s for one file; a valid one is planned, which takes most of a second
Case = Callable[[Path], str]


def damaged_files(count: int, seed: int, folder: Path) -> tuple[Tally, list[Path]]:
    """Read so many damaged files; return the account and the files."""
    tally, paths = Tally("board, bench and dialect files", LONGEST), []
    for number in range(count):
        draw = random.Random(f"{seed} {number}")
        name, text, case = _kinds(draw)[number % 3]
        path = folder / f"{number:04d}.{name}"
        path.write_bytes(mutated(text.encode("utf-8"), draw))
        tally.case(path.name, lambda path=path, case=case: case(path), (BadInput, DialectMistakes))
        paths.append(path)
    return tally, paths


def _kinds(draw: random.Random) -> tuple[tuple[str, str, Case], ...]:
    dialect = draw.choice(shipped())
    return (
        (DEMO_BOARD, demo_text(DEMO_BOARD), _board),
        (DEMO_BENCH, demo_text(DEMO_BENCH), _bench),
        (f"{dialect}.toml", source(dialect), lambda path: _dialect(path, load(dialect))),
    )


def _board(path: Path) -> str:
    board = read_board(path)
    if replace(board, text="") == replace(demo_board(), text=""):
        return "board: unchanged"
    steps = Planner(board, rehearsal_bench(board)).more(())
    assert [step.purpose for step in steps] == ["no-signal"] * len(board.stages), steps
    assert all(0.0 < step.duration <= 10.0 and 0.0 <= step.dwell < 1e4 and step.samples < 1e6 for step in steps), steps
    return "board: another one, planned"


def _bench(path: Path) -> str:
    bench, board = read_bench(path), demo_board()
    if replace(bench, text="") == replace(rehearsal_bench(board), text=""):
        return "bench: unchanged"
    check_wiring(board, bench, str(path))
    assert Planner(board, bench).more(())[0].purpose == "no-signal"
    return "bench: another one, planned"


def _dialect(path: Path, original: Dialect) -> str:
    """Load a dialect; one that is accepted is tried on an instrument that keeps what it is told."""
    dialect = load(path)
    if dialect == original:
        return "dialect: unchanged"
    try:
        _used(dialect)
    except InstrumentProblem as told:
        return f"dialect: another one, {type(told).__name__} when used"
    return "dialect: another one, used"


def _used(dialect: Dialect) -> None:
    port = MemoryPort(Registers())
    session = Session(Link("MEMORY", RealClock(margin=0.05, factor=0.0), opener=lambda *_: port), dialect.habits)
    if isinstance(dialect, GeneratorDialect):
        generator = Generator(session, dialect, ceiling=2.0)
        generator.identify()
        generator.be_safe()
        generator.reset()
        generator.set_sine()
        generator.set_frequency(1000.0)
        generator.set_amplitude(1.0)
        generator.output(True)
    elif isinstance(dialect, ScopeDialect):
        scope = Scope(session, dialect)
        scope.identify()
        scope.set_channel(1, range=1.0)
        scope.set_channel(2, range=1.0)
        scope.set_record(0.02, 2048)
        scope.acquire()
    elif isinstance(dialect, SwitchDialect):
        switch = Switch(session, dialect)
        switch.identify()
        switch.close("101")
        switch.open_all()
