"""``verify``: whether a stored run is what it says."""

import json
from pathlib import Path

import click

__all__ = ["command"]


@click.command("verify")
@click.argument("run_path", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print one object and nothing else, where RUN can be read.")
def command(run_path: Path, as_json: bool) -> int:
    """Compare a run file with the digest it carries, its figures with its points, its digest with its folder's chain.

    \b
    sound     exit 0; "as it was written" only where a line of the chain has its digest
    damaged   exit 2: the digest is wrong; or no run file, empty, cut off, or of a version that is not read
    altered   exit 2: the digest is right, but the figures do not follow from the points, or the chain is broken

    \b
    Example:
      bandproof verify runs/TB-0001/1/run.h5
    """
    from bandproof.bench.verbs.run import wrapped
    from bandproof.bench.verification import RunAltered, verified

    found = verified(run_path)
    if as_json:
        click.echo(json.dumps(found.plain(), indent=1))
    if found.reasons:
        raise RunAltered(str(run_path), found.reasons)
    if as_json:
        return 0
    run = found.run
    click.echo(f"{run_path}: {found.words}")
    click.echo(
        f"  serial {run.serial}, attempt {run.attempt}, run {run.run_id}, {len(run.points)} records, {run.ended}"
    )
    click.echo(f"  sha256 {found.digest}")
    if (chain := found.chain) and (line := found.line):
        click.echo(f"  link   {line.link}, line {line.number} of {len(chain.entries)} in {chain.path}")
    for note in found.notes:
        click.echo(wrapped(f"note: {note}"))
    return 0
