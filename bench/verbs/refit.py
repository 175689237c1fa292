"""``fit``: stored runs fitted again."""

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from bandproof.bench.errors import BadInput

if TYPE_CHECKING:
    from bandproof.bench.types import Run, StageResult

__all__ = ["command"]


@click.command("fit")
@click.argument("run_paths", metavar="RUN...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else; for one RUN.")
@click.option("--budget", "with_budget", is_flag=True, help="Print every source of uncertainty of every figure, too.")
@click.option(
    "--draws",
    type=click.IntRange(100, 1_000_000),
    metavar="N",
    help="Hold the budget against N random draws of all its sources, each fitted again; 100 to 1000000.",
)
def command(run_paths: tuple[Path, ...], as_json: bool, with_budget: bool, draws: int | None) -> int:
    """Fit stored runs again; nothing that was measured is changed, the new result is a file beside the run.

    \b
    Example:
      bandproof fit runs/TB-0001/1/run.h5
      bandproof fit runs/TB-0001/1/run.h5 --budget
      bandproof fit runs/TB-0001/1/run.h5 --draws 10000
    """
    from bandproof.bench.evaluate import evaluate
    from bandproof.bench.finish import Outcome
    from bandproof.bench.refits import keep_refit
    from bandproof.bench.result import result_object
    from bandproof.bench.runfile import read_result, read_run
    from bandproof.bench.summary import budget_lines
    from bandproof.bench.verbs.run import show, wall, worst_code

    if as_json and len(run_paths) > 1:
        raise BadInput("--json prints one object: name one RUN")
    codes = []
    for path in run_paths:
        begin = wall()
        run = read_run(path)
        stages = evaluate(run)
        result = result_object(run, stages, {"run": path.name, "picture": None, "report": None})
        result["alarms"] += _alone(read_result(path))
        refit = keep_refit(path, result)
        outcome = Outcome(run, stages, result, path.parent)
        codes.append(show(outcome, wall() - begin, as_json))
        for line in [line for stage in stages for line in budget_lines(stage)] if with_budget else ():
            click.echo(line, err=as_json)
        for line in _against_draws(run, stages, draws) if draws else ():
            click.echo(line, err=as_json)
        click.echo(f"  refit    {refit}", err=as_json)
    return worst_code(codes)


def _alone(stored: dict[str, Any]) -> list[str]:
    """Return a note for a run whose verdict was of several attempts together, else nothing."""
    together = [str(entry["attempt"]) for entry in stored["attempts"] or () if entry["pooled"]]
    if len(together) < 2:
        return []
    verdict = str(stored["verdict"]).upper()
    return [f"this attempt alone; the board's verdict, of attempts {', '.join(together)}, was {verdict}"]


def _against_draws(run: "Run", stages: Sequence["StageResult"], draws: int) -> Iterator[str]:
    """Yield the lines of every stage with a budget; the same run gives the same draws."""
    from bandproof.bench.drawing import drawn
    from bandproof.bench.evaluate import described
    from bandproof.bench.summary import drawn_lines

    for number, stage in enumerate(stages):
        if (told := described(run, stage.name)) is not None:
            yield from drawn_lines(stage, drawn(*told, draws=draws, seed=number))
