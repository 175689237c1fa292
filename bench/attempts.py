"""The attempts on one serial number: whether another one may begin, and the log of repairs.

Measured again and again, a board on its limit passes some day. So a verdict is asked again once at most, with a reason,
and the second one is of both (`pooling`). An attempt that was cut short behind a curve has shown figures: it is gone on
with, or counts as asked. A logged repair makes another board of it, counting begins anew.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from bandproof.bench.chain import CHAIN
from bandproof.bench.errors import BadInput
from bandproof.bench.journal import Journal
from bandproof.bench.runfile import digest_of, read_result
from bandproof.bench.types import Verdict

__all__ = [
    "RUN",
    "Attempt",
    "Repair",
    "earlier",
    "log_repair",
    "numbers",
    "place_of",
    "refusal",
    "repairs",
    "superseded",
]

RUN, REPAIRS = "run.h5", "repairs.txt"
_SERIAL = re.compile(r"[A-Za-z0-9._-]{1,64}")
_REPAIRED = re.compile(r"([^\t]*)\tafter attempt ([0-9]{1,9})\t([^\t]*)\t?(.*)")


@dataclass(frozen=True, slots=True)
class Attempt:
    """An attempt that showed figures: number, digest of its run file, verdict, whether it was after the last repair.

    Digest and verdict are None for one that is unfinished.
    """

    number: int
    digest: str | None
    verdict: Verdict | None
    counts: bool

    def plain(self) -> dict[str, Any]:
        """Return it as the result names it; ``pooled``: it is in the verdict."""
        pooled = self.counts and self.verdict is not None
        return {"attempt": self.number, "digest": self.digest, "verdict": self.verdict, "pooled": pooled}


@dataclass(frozen=True, slots=True)
class Repair:
    """A logged repair: when, after which attempt, by whom, what was done."""

    utc: str
    after: int
    operator: str
    text: str


def place_of(folder: Path, serial: str) -> Path:
    """Return the folder of a serial number.

    Raises
    ------
    BadInput
        It has other characters than letters, digits and ``. _ -``.
    """
    if not _SERIAL.fullmatch(serial) or serial.lower() in (".", "..", CHAIN):
        raise BadInput(f"{serial!r} cannot be a serial number: letters, digits and . _ - only, at most 64, not {CHAIN}")
    return folder / serial


def numbers(place: Path) -> list[int]:
    """Return the numbers of all attempts there are, complete or not, in order."""
    return sorted(int(entry.name) for entry in place.iterdir() if entry.name.isdigit()) if place.is_dir() else []


def earlier(place: Path, *, repaired: bool = False) -> list[Attempt]:
    """Return the attempts on a serial number that showed figures (RunFileDamaged when one cannot be read).

    ``repaired``: none counts any more, a repair is about to be logged.
    """
    last, found = max((repair.after for repair in repairs(place)), default=0), []
    for number in numbers(place):
        path, counts = place / str(number) / RUN, number > last and not repaired
        if path.exists():
            found.append(Attempt(number, digest_of(path), read_result(path)["verdict"], counts))
        elif _has_curve(path.parent):
            found.append(Attempt(number, None, None, counts))
    return found


def _has_curve(folder: Path) -> bool:
    try:
        return any(point.purpose in ("curve", "closing") for point in Journal.peeked(folder).points)
    except BadInput:  # nothing was measured
        return False


def refusal(known: Sequence[Attempt], retest: str, place: Path) -> str:
    """Return why no further attempt may begin after those known on a serial number's place; "" when one may.

    An undecided board is measured once more without asking, any other with a reason; then a person decides.

    Examples
    --------
    >>> failed = Attempt(1, "5e3c", "fail", True)
    >>> refusal([], "", Path("TB-1")), refusal([failed], "a clip had come off", Path("TB-1"))
    ('', '')
    """
    counting = [attempt for attempt in known if attempt.counts]
    if not counting:
        return f"there is nothing to retest: nothing was measured since {_SINCE}. Leave --retest out" if retest else ""
    last = counting[-1]
    if last.verdict is None:
        told = f"attempt {last.number} is unfinished. Go on with it:  bandproof resume {place / str(last.number)}\n"
    else:
        told = f"its verdict is {last.verdict}. "
    if len(counting) > 1:
        return f"it was measured twice since {_SINCE}. Now a person decides: {told}{_REPAIR}"
    if last.verdict != "undecided" and not retest:
        return f'{told}To ask once more, say why: --retest "REASON". {_REPAIR}'
    return ""


_SINCE = "its last logged repair, or its first attempt"
_REPAIR = 'After a repair: --repair "WHAT WAS DONE"'


def superseded(place: Path, number: int) -> str:
    """Return why an unfinished attempt must not go on, which is that a later one showed figures; "" when it may."""
    later = [place / str(n) for n in numbers(place) if n > number]
    if any((folder / RUN).exists() or _has_curve(folder) for folder in later):
        return f"{place / str(number)}: {later[-1]} was begun since; of two attempts only the last goes on"
    return ""


def log_repair(place: Path, text: str, *, operator: str, utc: datetime) -> None:
    """Append a repair to the serial number's log: UTC, the attempts it came after, operator, what was done.

    Raises
    ------
    OSError
        The log cannot be written.
    """
    said, who = (" ".join(words.split()) for words in (text, operator))
    place.mkdir(parents=True, exist_ok=True)
    last = max(numbers(place), default=0)
    stamp = utc.isoformat(timespec="seconds")
    with (place / REPAIRS).open("a", encoding="utf-8") as log:
        log.write(f"{stamp}\tafter attempt {last}\t{who or 'not stated'}\t{said}\n")


def repairs(place: Path) -> list[Repair]:
    """Return the logged repairs of a serial number, in the log's order (BadInput for a line that is none)."""
    path, found = place / REPAIRS, []
    if not path.exists():
        return []
    for line in filter(str.strip, path.read_text(encoding="utf-8").splitlines()):
        if (entry := _REPAIRED.match(line)) is None:
            told = "is no entry; one is UTC, 'after attempt N', operator and text, tabs between"
            raise BadInput(f"{path}: {line[:60]!r} {told}")
        found.append(Repair(entry[1], int(entry[2]), entry[3], entry[4]))
    return found
