"""Damaged run files and journals: the damage told, or exactly what was whole before it."""

from __future__ import annotations

import random
import shutil
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path

from bandproof.bench.board_file import parse_board
from bandproof.bench.circuit import draw_parts
from bandproof.bench.errors import BadInput
from bandproof.bench.finish import RUN
from bandproof.bench.job import Job
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.operator import Absent
from bandproof.bench.rehearsal import DEMO_BOARD, demo_text, rehearsal_bench
from bandproof.bench.runfile import digest_of, read_result, read_run
from bandproof.bench.stop import Stop
from bandproof.bench.types import Run
from bandproof.bench.verbs.rehearse import Rehearsal, simulated
from tests.benchmarks._mutations import mutated
from tests.benchmarks._tally import Tally

__all__ = ["Original", "damaged_journals", "damaged_run_files", "rehearsed"]

LONGEST = 5.0  # s for one file


@dataclass(frozen=True)
class Original:
    """A finished run's folder and what its files hold intact."""

    folder: Path
    run: Run

    @property
    def run_file(self) -> Path:
        return self.folder / RUN

    @property
    def journal(self) -> bytes:
        return (self.folder / JOURNAL).read_bytes()


def rehearsed(folder: Path, seed: int) -> Original:
    """Rehearse the demo board's lowest stage and return what it left."""
    head, stage, *_ = demo_text(DEMO_BOARD).split("\n[stages.")
    board = parse_board(f"{head}\n[stages.{stage}\n", "one band")
    bench = rehearsal_bench(board)
    folder.mkdir(parents=True)
    world = Rehearsal(seed).world(board, bench, 1)
    assert draw_parts(board, seed)
    with simulated(world, bench) as (reachable, clock):
        Job(
            board=board,
            bench=reachable,
            serial="FUZZ-1",
            attempt=1,
            run_id="fuzz",
            folder=folder,
            clock=clock,
            operator=Absent(),
            stop=Stop(),
            progress=lambda *_: None,  # type: ignore[arg-type]
            rehearsal=asdict(Rehearsal(seed)),
        ).carry_out()
    return Original(folder, read_run(folder / RUN))


def damaged_run_files(original: Original, count: int, seed: int, folder: Path) -> tuple[Tally, list[Path]]:
    """Read so many damaged run files; return the account and the files."""
    tally, paths, content = Tally("run files", LONGEST), [], original.run_file.read_bytes()

    def case(path: Path) -> str:
        digest_of(path)
        run, result = read_run(path), read_result(path)
        assert path.read_bytes() == content, "another content was taken for a sound run file"
        assert run == original.run
        assert result["points"] == len(run.points)
        return "unchanged"

    for number in range(count):
        draw = random.Random(f"run {seed} {number}")
        path = folder / f"{number:04d}.h5"
        path.write_bytes(mutated(content, draw))
        tally.case(path.name, lambda path=path: case(path), (BadInput,))
        paths.append(path)
    return tally, paths


def damaged_journals(original: Original, count: int, seed: int, folder: Path) -> tuple[Tally, list[Path]]:
    """Read so many damaged journals; return the account and their folders."""
    tally, paths, whole_content = Tally("journals", LONGEST), [], original.journal
    lines = whole_content.splitlines(keepends=True)
    unfinished = b"".join(lines[: 2 * len(lines) // 3])

    def case(path: Path, content: bytes) -> str:
        damaged = (path / JOURNAL).read_bytes()
        whole = _whole_lines(content, damaged)
        found = Journal.peeked(path)
        if _is_moved(damaged[whole:], content[whole:], content):
            return _rearranged(found, original.run)
        expected = _account(content[:whole], path.with_name("whole"))
        assert _state(found) == expected, f"not what the {whole} whole bytes before the damage hold"
        return "unchanged" if damaged == content else "the whole lines before the damage"

    for number in range(count):
        draw, content = random.Random(f"journal {seed} {number}"), whole_content if number % 2 else unfinished
        path = folder / f"{number:04d}"
        path.mkdir()
        (path / JOURNAL).write_bytes(mutated(content, draw))
        tally.case(path.name, partial(case, path, content), (BadInput,))
        paths.append(path)
    return tally, paths


def _whole_lines(content: bytes, damaged: bytes) -> int:
    """Return how many bytes of whole lines stand before the first byte that differs."""
    same = next((i for i, (a, b) in enumerate(zip(content, damaged, strict=False)) if a != b), None)
    same = min(len(content), len(damaged)) if same is None else same
    return content.rfind(b"\n", 0, same) + 1


def _is_moved(rest: bytes, intact: bytes, content: bytes) -> bool:
    """Whether what follows begins with a whole line of the journal, only not the one that stood there."""
    line, newline, _ = rest.partition(b"\n")
    return bool(newline) and line != intact.partition(b"\n")[0] and line in content.split(b"\n")


def _rearranged(found: Journal, run: Run) -> str:
    """See that whole lines lost, doubled or swapped lose no point but those at the end, and move none."""
    assert tuple(found.points) == run.points[: len(found.points)]
    assert tuple(found.steps) == run.steps[: len(found.steps)]
    assert len(found.steps) >= len(found.points)
    return "lines lost, doubled or swapped: points and steps in their order"


def _account(content: bytes, place: Path) -> tuple[object, ...]:
    place.mkdir()
    try:
        (place / JOURNAL).write_bytes(content)
        return _state(Journal.peeked(place))
    finally:
        shutil.rmtree(place)


def _state(journal: Journal) -> tuple[object, ...]:
    return (
        journal.head,
        journal.steps,
        journal.points,
        journal.began,
        journal.finished,
        journal.alarms,
        journal.history,
        journal.end,
    )
