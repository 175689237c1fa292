"""``report``: a stored run as a PDF document."""

from pathlib import Path

import click

__all__ = ["command"]


@click.command("report")
@click.argument("run_path", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), help="Where to write it; report.pdf beside RUN without.")
def command(run_path: Path, out: Path | None) -> int:
    """Write the report of a stored run as PDF: verdict and all figures on page one, then band by band, then the bench.

    The same run gives the same file, byte for byte. A file that is there is replaced.

    \b
    Example:
      bandproof report runs/TB-0001/1/run.h5
      bandproof report runs/TB-0001/1/run.h5 --out TB-0001.pdf
    """
    from bandproof.bench.documents.report import write_report
    from bandproof.bench.documents.stored import read_stored

    stored = read_stored(run_path)
    path = out or stored.default_path
    write_report(path, stored.run, stored.stages, stored.result, stored.digest, stored.views)
    click.echo(f"  report   {path}")
    return 0
