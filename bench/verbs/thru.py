"""``thru``: the path itself measured, both probes on one node, and kept for later sweeps."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from bandproof.bench.thru import Path as Measured
    from bandproof.bench.thru import Ranges
    from bandproof.bench.thru_job import MeasuredThru

__all__ = ["command"]

RESULT_SCHEMA = "bandproof-thru-result/1"
_ADVICE = "look at probes, their compensation and ground clips, at hum, and at what else hangs on that node"


@click.command("thru")
@click.argument("bench_path", metavar="[BENCH]", required=False, type=click.Path(path_type=Path))
@click.option("--board", "board_path", type=click.Path(path_type=Path), help="Ranges and span of this board's plan.")
@click.option("--ambient", help='Temperature of the room, such as "23 °C".')
@click.option("--operator", "name", default="", help="Who does this.")
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(bench_path: Path | None, board_path: Path | None, ambient: str | None, name: str, as_json: bool) -> int:
    """Measure the path itself on BENCH, both probes on one node, and store it beside the bench file for later sweeps.

    Where no switch route leads to the wire named thru you are asked to move the probe. Without a board the bench's
    ceiling is applied, from 20 Hz to 20 kHz: connect a board only with --board, then it is driven no higher than its
    sweep would.

    \b
    Example:
      bandproof thru my.bench.toml --board my.board.toml --ambient "23 °C"
    """
    from bandproof.bench.bench_file import check_wiring, find_bench, read_bench
    from bandproof.bench.board_file import read_board
    from bandproof.bench.stop import Stop, watching_signals
    from bandproof.bench.thru_file import keep_thru, thru_path
    from bandproof.bench.thru_job import ThruJob
    from bandproof.bench.verbs.conditions import person, stated
    from bandproof.bench.verbs.run import Progress, clock_of

    path, why = find_bench(str(bench_path) if bench_path else None)
    bench, board = read_bench(path), read_board(board_path) if board_path else None
    if board is not None:
        check_wiring(board, bench, str(path))
    click.echo(f"bench: {path} ({why})", err=as_json)
    operator, room = stated(name, ambient)
    kept, stop, progress = thru_path(path), Stop(), Progress()
    log = kept.with_suffix(".log")
    job = ThruJob(
        bench, board, clock_of(bench), person(stop), stop, progress, log, operator_name=operator, ambient=room
    )
    try:
        with watching_signals(stop):
            measured = job.carry_out()
    finally:
        progress.close()
    _show(measured, kept, keep_thru(kept, measured.thru), as_json)
    return 0


def _show(measured: "MeasuredThru", kept: Path, earlier: Path | None, as_json: bool) -> None:
    rows = [_row(ranges, path) for ranges, path in measured.paths.items()]
    notes = [*measured.alarms, *(_not_smooth(row) for row in rows if not row["smooth"])]
    if as_json:
        facts = {"schema": RESULT_SCHEMA, "started": measured.thru.started, "notes": notes, "paths": rows}
        files = {"thru": str(kept), "earlier": str(earlier) if earlier else None}
        click.echo(json.dumps({**facts, "conditions": measured.thru.conditions, "files": files}, indent=1))
        return
    from bandproof.bench.verbs.run import wrapped

    first, second = measured.thru.conditions["channels"]
    when = measured.thru.started[:16].replace("T", " ")
    click.echo(f"The path itself, channel {second} over channel {first}, {when} UTC")
    for line in _table(rows):
        click.echo(line)
    for note in notes:
        click.echo(wrapped(f"note: {note}"))
    click.echo(f"  thru     {kept}")
    if earlier:
        click.echo(f"  earlier  {earlier}")


def _row(ranges: "Ranges", path: "Measured") -> dict[str, Any]:
    """Return what is told of the path on a pair of ranges: SI, ratios."""
    import numpy as np

    fit = path.fit
    gains = np.abs(fit.at(np.array(fit.span))).tolist()
    return {
        "ranges": list(ranges),
        "span": list(fit.span),
        "gain_at_ends": gains,
        "skew": float(fit.theta[1]),
        "skew_expanded_uncertainty": 2.0 * float(fit.covariance[1, 1]) ** 0.5,
        "reduced_chi_square": fit.chi_square / fit.dof if fit.dof else None,
        "degrees_of_freedom": fit.dof,
        "probability": path.probability,
        "smooth": path.is_smooth,
    }


def _table(rows: list[dict[str, Any]]) -> list[str]:
    from bandproof.bench.quantities import engineering

    lines = [f"{'ranges':<14}{'span':<20}{'gain - 1 at its ends':<21}{'delay ± U':<17}chi²/dof"]
    for row in rows:
        ranges = ", ".join(engineering(reach, "V") for reach in row["ranges"])
        span = " to ".join(engineering(end, "Hz", 3) for end in row["span"])
        gains = ", ".join(f"{100.0 * (gain - 1.0):+.3f} %" for gain in row["gain_at_ends"])
        skew = f"{1e9 * row['skew']:+.1f} ± {1e9 * row['skew_expanded_uncertainty']:.1f} ns"
        lines.append(f"{ranges:<14}{span:<20}{gains:<21}{skew:<17}{row['reduced_chi_square'] or 0.0:.2f}")
    return lines


def _not_smooth(row: Mapping[str, Any]) -> str:
    from bandproof.bench.quantities import engineering

    ranges = ", ".join(engineering(reach, "V") for reach in row["ranges"])
    size = row["reduced_chi_square"]
    return f"on {ranges} it is not a smooth path (chi-square {size:.3g} times what noise gives): {_ADVICE}"
