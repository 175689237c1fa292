"""``resume``: go on where a run stopped."""

from contextlib import closing
from pathlib import Path

import click

__all__ = ["command"]


@click.command("resume")
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the result object and nothing else.")
def command(folder: Path, as_json: bool) -> int:
    """Go on with the unfinished run in FOLDER, or in the only folder below it that has one.

    The same instruments must answer, and the last point is measured again: it shows that the same board is there and
    still powered. A rehearsal's simulated bench is started again.

    \b
    Example:
      bandproof resume runs/TB-0001/1
    """
    from bandproof.bench.attempts import superseded
    from bandproof.bench.errors import BadInput
    from bandproof.bench.finish import board_and_bench
    from bandproof.bench.journal import Journal
    from bandproof.bench.resumption import unfinished
    from bandproof.bench.verbs.rehearse import resume_rehearsal
    from bandproof.bench.verbs.run import carried_out, clock_of, job_of, of_head
    from bandproof.bench.verbs.standard import checked_bench, concluded

    place = unfinished(folder)
    click.echo(f"resuming {place}", err=True)
    with closing(Journal.opened(place)) as journal:
        if journal.head["rehearsal"] is not None:
            return resume_rehearsal(journal, place, as_json=as_json)
        if later := superseded(place.parent, journal.head["attempt"]):
            raise BadInput(later)
        board, bench = board_and_bench(journal)
        job = job_of(board=board, bench=bench, folder=place, clock=clock_of(bench), **of_head(journal.head))
        if path := checked_bench(place, journal.head):
            return concluded(job, path, journal=journal, as_json=as_json)
        return carried_out(job, journal=journal, as_json=as_json)
