"""The command line on damaged things: exit codes 0 to 5, one message, no traceback, in JSON one object or nothing."""

from __future__ import annotations

import io
import json
import random
from collections.abc import Sequence
from contextlib import ExitStack, redirect_stderr, redirect_stdout
from functools import partial
from pathlib import Path

from bandproof.bench.bench_file import parse_bench
from bandproof.bench.errors import FileMistakes
from bandproof.bench.reading import read_text
from bandproof.bench.rehearsal import DEMO_BENCH, DEMO_BOARD, demo_text
from bandproof.bench.verbs.console import run
from tests.benchmarks._fuzz_replies import Damage, listening
from tests.benchmarks._tally import Tally

__all__ = ["on_damaged_files", "on_damaged_journals", "on_damaged_replies", "on_damaged_runs"]

LONGEST = 60.0  # s, a whole rehearsal on a damaged board that is still one, memory traced
_PORTS = ("::5025::", "::5026::", "::5027::")


def _tally(what: str) -> Tally:
    return Tally(f"command line on {what}", LONGEST)


def _case(arguments: Sequence[str]) -> str:
    """Run a command line; return how it ended."""
    out, err = io.StringIO(), io.StringIO()
    with redirect_stdout(out), redirect_stderr(err):
        code = run(arguments)
    told = out.getvalue() + err.getvalue()
    assert code in range(6), f"exit {code}: {told[-300:]}"
    assert "Traceback" not in told, told[-300:]
    assert told.strip(), "not a word"
    if "--json" in arguments and out.getvalue():
        json.loads(out.getvalue())
    return f"{arguments[0]}: exit {code}"


def on_damaged_files(paths: Sequence[Path], folder: Path) -> Tally:
    """Rehearse damaged boards; contact the instruments of damaged benches and those of damaged dialects."""
    tally = _tally("board, bench and dialect files")
    for path in paths:
        if path.name.endswith(DEMO_BOARD):
            arguments = ["rehearse", str(path), "--folder", str(folder / path.stem), "--json"]
        elif path.name.endswith(DEMO_BENCH):
            if not _stays_here(path):
                continue
            arguments = ["bench", str(path)]
        else:
            arguments = ["bench", str(_bench_with(path))]
        tally.case(path.name, partial(_case, arguments), ())
    return tally


def _stays_here(path: Path) -> bool:
    """Whether a bench file names no instrument but those of the demo, where nobody listens: no other is disturbed."""
    try:
        bench = parse_bench(read_text(path), str(path))
    except FileMistakes:
        return True
    expected = parse_bench(demo_text(DEMO_BENCH), "demo").instruments
    return {i.address for i in bench.instruments.values()} <= {i.address for i in expected.values()}


def _bench_with(dialect: Path) -> Path:
    """Write a bench file beside a dialect in which its kind of instrument speaks it."""
    name = dialect.name.partition(".")[2].removesuffix(".toml")
    path = dialect.with_suffix(".bench.toml")
    path.write_text(demo_text(DEMO_BENCH).replace(f'"{name}"', f'"{dialect.name}"'), encoding="utf-8")
    return path


def on_damaged_runs(paths: Sequence[Path]) -> Tally:
    """Verify damaged run files and fit them again."""
    tally = _tally("run files")
    for path in paths:
        tally.case(path.name, partial(_case, ["verify", str(path)]), ())
        tally.case(path.name, partial(_case, ["fit", str(path), "--json"]), ())
    return tally


def on_damaged_journals(paths: Sequence[Path]) -> Tally:
    """Resume runs from damaged journals."""
    tally = _tally("journals")
    for path in paths:
        tally.case(path.name, partial(_case, ["resume", str(path), "--json"]), ())
    return tally


def on_damaged_replies(count: int, seed: int, folder: Path) -> Tally:
    """Contact the instruments of a bench, one of which damages a reply, in real time."""
    tally = _tally("instrument replies")
    for number in range(count):
        draw = random.Random(f"contact {seed} {number}")
        with ExitStack() as stack:
            struck, text = draw.randrange(3), demo_text(DEMO_BENCH)
            for place, port in enumerate(_PORTS):
                damage = Damage(draw, draw.randrange(30) if place == struck else -1)
                address = stack.enter_context(listening(damage))
                text = text.replace(port, f"::{address.split('::')[2]}::")
            path = folder / f"{number}.bench.toml"
            path.write_text(text, encoding="utf-8")
            tally.case(path.name, partial(_case, ["bench", str(path)]), ())
    return tally
