"""Going on with a run: which one it is, that the same instruments answer, that its last point reads as it did."""

from math import sqrt
from pathlib import Path
from typing import Any

from bandproof.bench.errors import BadInput, BenchFault
from bandproof.bench.journal import JOURNAL, Journal
from bandproof.bench.sweep import Sweep
from bandproof.bench.types import Point

__all__ = ["EARLIER", "ResumeRefused", "check_again", "check_identities", "unfinished"]

# s before the last point began at which a resumed rehearsal's clock starts: room for all that comes before it
EARLIER = 60.0
_NOISE = 5.0  # standard uncertainties a point may differ by
_DRIFT = 0.01  # and this part of it, for what drifted while nobody measured; arbitrary


class ResumeRefused(BenchFault):
    """The run cannot go on as the same run; nothing that was measured is changed."""


def unfinished(folder: Path) -> Path:
    """Return the folder of the one unfinished run at or below a folder.

    Raises
    ------
    BadInput
        There is none, the run is complete, or there are several, which are listed.
    """
    if (folder / JOURNAL).is_file():
        if _is_complete(folder):
            raise BadInput(f"{folder}: this run is complete, there is nothing to resume")
        return folder
    journals = [path.parent for path in sorted(folder.rglob(JOURNAL))] if folder.is_dir() else []
    begun = [place for place in journals if _has_begun(place)]
    found = [place for place in begun if not _is_complete(place)]
    if not found:
        why = "every run in it is complete" if begun else "no run was begun in it"
        raise BadInput(f"{folder}: {f'nothing to resume, {why}' if folder.exists() else 'there is no such folder'}")
    if len(found) > 1:
        listed = "\n".join(f"  {place}" for place in found)
        raise BadInput(f"{folder}: several runs are unfinished, name one:\n{listed}")
    return found[0]


def _has_begun(folder: Path) -> bool:
    """Whether a journal's first line is whole; without it nothing was measured."""
    try:
        Journal.peeked(folder)
    except BadInput:
        return False
    return True


def _is_complete(folder: Path) -> bool:
    try:
        end = Journal.peeked(folder).end
    except BadInput:
        return False
    return end is not None and end["ended"] == "complete"


def check_identities(journal: Journal, identities: dict[str, str]) -> None:
    """Refuse to go on with other instruments than the run began with.

    Raises
    ------
    ResumeRefused
        Names each instrument that answers otherwise.
    """
    began: dict[str, Any] = journal.head["identities"]
    others = [
        f"{role} was {began.get(role, 'absent')!r}, now {identities.get(role, 'absent')!r}"
        for role in sorted(began.keys() | identities.keys())
        if began.get(role) != identities.get(role)
    ]
    if others:
        raise ResumeRefused(f"other instruments answer than this run began with: {'; '.join(others)}. Begin a new run")


def check_again(sweep: Sweep, journal: Journal) -> None:
    """Measure the last point once more and compare; afterwards the instruments stand as they did behind it.

    In a rehearsal the step before it comes first, and the clock is brought to where the last step began: what follows
    is then what an unbroken run would have measured.

    Raises
    ------
    ResumeRefused
        The point reads something else: another board, no supply, another wiring.
    BenchFault
        The point, a first look at a stage, still says that the board must not be driven.
    """
    if not journal.points:
        return
    index = len(journal.points) - 1
    if sweep.clock.is_virtual and index > 0:
        sweep.repeat(journal.steps[index - 1])
    sweep.clock.catch_up(journal.began[index])
    point = sweep.repeat(journal.steps[index])
    sweep.look(journal.steps[index], point)  # what ended the run here may still be so
    _compare(journal.points[index], point)
    if not sweep.clock.is_virtual:
        sweep.continue_at(journal.finished[index] - journal.head["clock_start"])
    journal.told(sweep.elapsed(), "checked", step=point.step, moved=_moved(journal.points[index], point)[0])


def _moved(before: Point, now: Point) -> tuple[float, float]:
    """Return how far a point moved, relative to it, and how far it may."""
    size = abs(before.response)
    if size == 0.0:
        return 0.0, 1.0
    noise = sqrt(sum(point.covariance[0] + point.covariance[2] for point in (before, now))) / size
    return abs(now.response - before.response) / size, _NOISE * noise + _DRIFT


def _compare(before: Point, now: Point) -> None:
    moved, allowed = _moved(before, now)
    if moved > allowed:
        raise ResumeRefused(
            f"the last point of {before.stage} at {before.frequency:.6g} Hz reads {abs(now.response):.4g} V/V "
            f"where it read {abs(before.response):.4g}: another board, no supply, another wiring, or it drifted. "
            "Put it right and resume again, or begin a new run"
        )
