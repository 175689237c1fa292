"""``verify``: compare a run file with its digest."""

from pathlib import Path

import click

__all__ = ["command"]


@click.command("verify")
@click.argument("run_path", metavar="RUN", type=click.Path(path_type=Path))
def command(run_path: Path) -> int:
    """Compare a run file with the digest it carries, and read it whole.

    \b
    Example:
      bandproof verify runs/TB-0001/1/run.h5
    """
    from bandproof.bench.runfile import digest_of, read_run

    run = read_run(run_path)
    click.echo(f"{run_path}: as it was written")
    click.echo(
        f"  serial {run.serial}, attempt {run.attempt}, run {run.run_id}, {len(run.points)} records, {run.ended}"
    )
    click.echo(f"  sha256 {digest_of(run_path)}")
    return 0
