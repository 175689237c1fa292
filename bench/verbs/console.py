"""The command line's edge: runs a verb, turns every expected error into one message and an exit code."""

import os
import sys
import tempfile
import traceback
from collections.abc import Sequence
from contextlib import nullcontext

import click

from bandproof.bench.errors import BadInput, BenchFault, Stopped
from bandproof.bench.types import Verdict
from bandproof.bench.verbs.screen import narrow_output
from bandproof.bench.verbs.table import group
from bandproof.drivers.errors import InstrumentProblem
from bandproof.drivers.schema import DialectMistakes

__all__ = ["EXIT_CODES", "VERDICT_CODES", "main", "run"]

DONE, BOARD_FAILS, BAD_INPUT, BENCH_FAULT, UNDECIDED, INTERRUPTED = range(6)
OUR_MISTAKE = 70  # EX_SOFTWARE of sysexits.h

VERDICT_CODES: dict[Verdict | None, int] = {"pass": DONE, "fail": BOARD_FAILS, "undecided": UNDECIDED, None: DONE}

EXIT_CODES: tuple[tuple[type[BaseException], int], ...] = (  # the first that fits
    (BadInput, BAD_INPUT),
    (DialectMistakes, BAD_INPUT),
    (BenchFault, BENCH_FAULT),
    (InstrumentProblem, BENCH_FAULT),
    (OSError, BENCH_FAULT),  # a folder that cannot be written, a full disk
    (Stopped, INTERRUPTED),
    (KeyboardInterrupt, INTERRUPTED),
    (click.Abort, INTERRUPTED),
)


def main() -> None:
    """Run the command line of this process and exit."""
    # Before numpy is loaded, here and in child processes: for matrices as small as ours threads only cost.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    sys.exit(run(sys.argv[1:]))


def run(arguments: Sequence[str]) -> int:
    """Run a command line and return its exit code; every message is printed, none is raised."""
    try:
        with nullcontext() if "--json" in arguments else narrow_output():
            code = group.main(list(arguments), prog_name="bandproof", standalone_mode=False)
        return code if isinstance(code, int) else DONE
    except click.ClickException as usage:
        usage.show()
        return BAD_INPUT
    except BrokenPipeError:  # the reader of a pipe has gone: nothing to say to it
        return DONE
    except (Exception, KeyboardInterrupt) as problem:
        return _report(problem)


def _report(problem: BaseException) -> int:
    for kind, code in EXIT_CODES:
        if isinstance(problem, kind):
            click.echo(f"bandproof: {str(problem) or 'interrupted'}", err=True)
            return code
    with tempfile.NamedTemporaryFile("w", prefix="bandproof-", suffix=".txt", delete=False) as file:
        traceback.print_exception(problem, file=file)
    click.echo(
        f"bandproof: a mistake of this program ({type(problem).__name__}: {problem}). "
        f"Nothing measured is lost. Please report it with {file.name}",
        err=True,
    )
    return OUR_MISTAKE
