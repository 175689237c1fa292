"""Whether a stored run is what it says: its digest, its figures fitted again, its line in the chain of its folder."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

from bandproof.bench.chain import Chain, Entry, chain_of
from bandproof.bench.documents.stored import Stored, read_stored
from bandproof.bench.errors import BadInput, RunFileDamaged
from bandproof.bench.result import board_verdict, stage_object
from bandproof.bench.run_schema import READABLE
from bandproof.bench.runfile import digest_of, read_result, read_run, read_version
from bandproof.bench.types import Run

__all__ = ["RunAltered", "Verified", "verified"]

# Part of U by which a figure or its U may come out otherwise. A fit ends within 1e-8 of its parameters' own standard
# uncertainties (analysis/least_squares.py) whichever way rounding leads it there, and U follows from it without steps;
# a hundred times that is left for the arithmetic of other library versions (other kernels for the same processor
# differ by 4e-13 U, measured). What is smaller changes no digit shown.
_SHARE = 1e-6
_SHOWN = 5  # lines of a chain that a note names; arbitrary
_COMPARED = ("designed", "lower_limit", "upper_limit", "measured", "expanded_uncertainty")


class RunAltered(BadInput):
    """A run file agrees with its digest, and yet something in it or beside it was changed; has every reason."""

    def __init__(self, path: str, reasons: tuple[str, ...]) -> None:
        super().__init__(path, reasons)
        self.path, self.reasons = path, reasons

    def __str__(self) -> str:
        head = f"{self.path}: is altered: its digest is right, but"
        return "\n".join([head, *(f"  {number}. {reason}" for number, reason in enumerate(self.reasons, 1))])


@dataclass(frozen=True)
class Verified:
    """A run file whose digest is right, why it is altered nevertheless (no reasons: sound), what could not be seen.

    ``absent``: attempts its figures are pooled with and without which they were not held against its points.
    """

    run: Run
    digest: str
    absent: tuple[int, ...]
    reasons: tuple[str, ...]
    notes: tuple[str, ...]
    chain: Chain | None
    path: Path

    @property
    def line(self) -> Entry | None:
        """Return the line of the chain that has its digest."""
        return self.chain.line_of(self.path, self.digest) if self.chain else None

    @property
    def words(self) -> str:
        """Return what a file that is not altered is, no more than was seen."""
        state = "as it was written" if self.line else "matches its digest"
        if self.absent:
            return f"{state}; not compared: attempt {_listed(self.absent)} is not there as it was then"
        return f"sound, {state}; its figures follow from its points"

    def plain(self) -> dict[str, Any]:
        """Return it as an object for ``--json``."""
        line, unseen = self.line, self.absent and not self.line
        return {
            "schema": "bandproof-verification/1",
            "state": "altered" if self.reasons else "not compared" if unseen else "sound",
            "reasons": list(self.reasons),
            "notes": list(self.notes),
            "sha256": self.digest,
            "figures_compared": not self.absent,
            **{name: getattr(self.run, name) for name in ("serial", "attempt", "run_id", "ended", "version")},
            "records": len(self.run.points),
            "chain": {"file": str(self.chain.path), "line": line.number, "link": line.link}
            if self.chain and line
            else None,
        }


def verified(path: Path) -> Verified:
    """Look at a run file from all sides.

    Raises
    ------
    RunFileDamaged
        It is no run file, or its digest is wrong, or this version does not read it.
    """
    run, result, digest = read_run(path), read_result(path), digest_of(path)
    absent: list[int] = []
    try:
        stored = read_stored(path)
        reasons = _other_stages(stored)
        if not reasons and (reasons := list(_differences(stored))) and (absent := _absent_attempts(path, result)):
            reasons = []
    except Exception as problem:  # whatever it is: a file that the program wrote can be evaluated
        reasons = [f"what it holds cannot be evaluated ({type(problem).__name__}: {problem})"]
    notes = _of_version(read_version(path))
    if absent:
        notes.append(
            f"its figures are means with attempt {_listed(absent)}, not to be had as it was then "
            f"({path.parent.parent}): they were not compared"
        )
    if reasons and run.version != version("bandproof"):
        reasons.append(
            f"it was evaluated by bandproof {run.version}, this is {version('bandproof')}: before you accuse "
            "anybody, verify it with that version"
        )
    try:
        chain = chain_of(path)
    except OSError as problem:
        chain = None
        notes.append(f"the chain of its folder cannot be read: {problem}")
    else:
        notes += _unchained(chain, path)
        if chain:
            reasons += _against_chain(chain, path, digest)
            notes += [*_before(chain, path, digest), *_others(chain, path)]
    return Verified(run, digest, tuple(absent), tuple(reasons), tuple(notes), chain, path)


def _listed(numbers: Sequence[int]) -> str:
    return ", ".join(map(str, numbers))


def _of_version(number: int) -> list[str]:
    older = (
        f"it has schema version {number}, older than this bandproof writes ({READABLE[-1]}); it is read all the same"
    )
    return [older] if number < READABLE[-1] else []


def _other_stages(stored: Stored) -> list[str]:
    same = [stage.name for stage in stored.stages] == [stage["name"] for stage in stored.result["stages"]]
    return [] if same else ["it has conclusions of other stages than points"]


def _differences(stored: Stored) -> Iterator[str]:
    """Yield how a run's conclusions, drawn again from its points, differ from those stored."""
    again = [stage_object(stage) for stage in stored.stages]
    verdict = board_verdict(stored.run, stored.stages)
    if verdict != stored.result["verdict"]:
        yield f"its verdict is {stored.result['verdict']}, from its points it comes out {verdict}"
    for now, then in zip(again, stored.result["stages"], strict=True):
        if now["verdict"] not in (then["verdict"], None):  # cut short: earlier versions gave one all the same
            yield f"{now['name']}: its verdict is {then['verdict']}, from its points it comes out {now['verdict']}"
        for quantity, figure in now["parameters"].items():
            yield from _of_figure(f"{now['name']}, {quantity}", figure, then["parameters"][quantity])


def _of_figure(name: str, now: Mapping[str, Any], then: Mapping[str, Any]) -> Iterator[str]:
    tolerance = _SHARE * (now["expanded_uncertainty"] or 0.0)
    for key in _COMPARED:
        a, b = now[key], then[key]
        if (a is None) != (b is None) or (a is not None and not abs(a - b) <= tolerance):
            yield f"{name}: {key.replace('_', ' ')} is {b}, from its points it comes out {a}"
    if now["verdict"] not in (then["verdict"], None):
        yield f"{name}: its verdict is {then['verdict']}, from its points it comes out {now['verdict']}"


def _absent_attempts(path: Path, result: Mapping[str, Any]) -> list[int]:
    """Return the attempts that a run is pooled with and that are not beside it as they were."""
    return [
        entry["attempt"]
        for entry in (result.get("attempts") or ())[:-1]
        if entry["pooled"] and _digest(path.parent.parent / str(entry["attempt"]) / "run.h5") != entry["digest"]
    ]


def _digest(path: Path) -> str:
    """Return the digest of a run file, "" where there is no sound one."""
    try:
        return digest_of(path)
    except RunFileDamaged:
        return ""


def _unchained(chain: Chain | None, path: Path) -> Sequence[str]:
    if chain is None:
        return ["there is no chain.txt two folders above it: whether it is the run that was made there is not known"]
    if not chain.problem and not chain.of(path):
        return [f"{chain.path} has no line for it: that it is the run that was made there is not known"]
    return []


def _against_chain(chain: Chain, path: Path, digest: str) -> list[str]:
    if chain.problem:
        return [f"{chain.path} is broken: {chain.problem}"]
    return [
        f"line {entry.number} of {chain.path} has another digest for it: it is not the run that was made there"
        for entry in chain.of(path)[-1:]
        if entry.digest != digest
    ]


def _before(chain: Chain, path: Path, digest: str) -> list[str]:
    """Return that other runs stood in a run's place before it."""
    mine = chain.of(path)
    older = [entry.number for entry in mine if entry.digest != digest]
    genuine = bool(mine) and mine[-1].digest == digest
    return [f"another run stood here before: line {_listed(older)}"] if older and genuine else []


def _others(chain: Chain, path: Path) -> list[str]:
    """Return which files of the chain's other lines are not there, or not as they were."""
    own = chain.of(path)
    digests = {below: _digest(chain.path.parent / below) for below in {entry.path for entry in chain.entries}}
    found = [
        f"line {entry.number} ({entry.path})"
        for entry in chain.entries
        if entry not in own and digests[entry.path] != entry.digest
    ]
    more = f" and {len(found) - _SHOWN} more" if len(found) > _SHOWN else ""
    told = f"of other lines of {chain.path} the file is missing or another one: {', '.join(found[:_SHOWN])}{more}"
    return [told] if found else []
