"""``report``: a stored run as a PDF document, as data and as pictures."""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Literal

import click

from bandproof.bench.errors import BadInput

__all__ = ["command"]


@click.command("report")
@click.argument("run_path", metavar="RUN", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), help="Where to write the PDF; report.pdf beside RUN without.")
@click.option(
    "--data", type=click.Path(path_type=Path), metavar="FOLDER", help="Write points and figures as CSV, result as JSON."
)
@click.option("--pictures", type=click.Path(path_type=Path), metavar="FOLDER", help="Write a picture of every stage.")
@click.option(
    "--format", "kind", type=click.Choice(["svg", "png"]), default="svg", show_default=True, help="Of pictures."
)
@click.option(
    "--with",
    "other",
    type=click.Path(path_type=Path),
    metavar="OTHER_RUN",
    help="Instead: one page about both runs of the same board, figure by figure, such as before and after a repair.",
)
def command(
    run_path: Path,
    out: Path | None,
    data: Path | None,
    pictures: Path | None,
    kind: Literal["svg", "png"],
    other: Path | None,
) -> int:
    """Write the report of a stored run as PDF: verdict and all figures on page one, then band by band, then the bench.

    With --data or --pictures those are written, and the PDF only with --out. The same run gives the same files, byte
    for byte. A PDF that is there is replaced; data and pictures replace only what they once wrote.

    \b
    Example:
      bandproof report runs/TB-0001/1/run.h5
      bandproof report runs/TB-0001/1/run.h5 --out TB-0001.pdf
      bandproof report runs/TB-0001/1/run.h5 --data data --pictures pictures --format png
      bandproof report runs/TB-0001/1/run.h5 --with runs/TB-0001/2/run.h5
    """
    from bandproof.bench.documents.report import write_report
    from bandproof.bench.documents.stored import read_stored

    if other:
        from bandproof.bench.documents.side_by_side import write_side_by_side

        if data or pictures:
            raise BadInput("--with makes one page about two runs: leave --data and --pictures out, or name them alone")
        with _writing(out):
            click.echo(f"  report   {write_side_by_side(run_path, other, out)}")
        return 0
    stored = read_stored(run_path)
    if data or pictures:
        from bandproof.bench.documents.exports import data_files, picture_files, write_exports

        wanted = {data: data_files(stored)} if data else {}
        if pictures:
            wanted[pictures] = {**wanted.get(pictures, {}), **picture_files(stored, kind)}
        for path in write_exports(wanted):
            click.echo(f"  {path.suffix[1:]:<8} {path}")
    if out or not (data or pictures):
        path = out or stored.default_path
        with _writing(out):
            write_report(path, stored.run, stored.stages, stored.result, stored.digest, stored.views, stored.link)
        click.echo(f"  report   {path}")
    return 0


@contextmanager
def _writing(out: Path | None) -> Iterator[None]:
    """Refuse to write over what is no PDF, and say where one cannot be written (BadInput)."""
    if out and out.exists() and (not out.is_file() or not out.read_bytes().startswith(b"%PDF-")):
        raise BadInput(f"{out}: is there and is no PDF; name another file")
    try:
        yield
    except OSError as problem:
        where = out or str(problem.filename).removesuffix(".part")
        raise BadInput(f"{where}: cannot be written: {problem.strerror}; name another file with --out") from problem
