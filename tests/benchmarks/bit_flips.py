"""Run files with one bit changed, cut off anywhere, empty, foreign: all noticed by ``verify``, in one clear sentence.

1,500 flips, seeded: one in five in the user block, the others anywhere; 300 lengths; HDF5 files of others. Bounds: 0
unnoticed, 0 other exceptions.
"""

from __future__ import annotations

import random
import tempfile
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import h5py

from bandproof.bench.errors import RunFileDamaged
from bandproof.bench.verification import verified

FLIPS, CUTS, SEED = 1500, 300, 1
RUN = Path(__file__).parents[1] / "reference_runs" / "v1" / "PASS-1" / "1" / "run.h5"
USER_BLOCK = 512
# A flip in the first words makes them those of no run file, one in the version's digit another version's.
FLIPPED = ("damaged: its content", "damaged: its end", "not a run file", "has schema version")
CUT = ("damaged: its end is missing",)


def flips(content: bytes, count: int, seed: int) -> Iterator[bytes]:
    """Yield contents with one bit changed."""
    draw = random.Random(f"flips {seed}")
    for number in range(count):
        bit = draw.randrange(8 * (USER_BLOCK if number % 5 == 0 else len(content)))
        yield content[: bit // 8] + bytes([content[bit // 8] ^ (1 << bit % 8)]) + content[bit // 8 + 1 :]


def cuts(content: bytes, count: int, seed: int) -> Iterator[bytes]:
    """Yield contents that end early, one in five in the user block."""
    draw = random.Random(f"cuts {seed}")
    for number in range(count):
        yield content[: draw.randrange(1, USER_BLOCK if number % 5 == 0 else len(content))]


def foreign(folder: Path) -> Iterator[bytes]:
    """Yield HDF5 files that are none of ours."""
    for block in (0, 512, 4096):
        with h5py.File(folder / "foreign.h5", "w", userblock_size=block) as file:
            file["points/low/frequency"] = [1.0, 2.0]
        yield (folder / "foreign.h5").read_bytes()


def noticed(name: str, contents: Iterator[bytes], words: tuple[str, ...], path: Path) -> bool:
    """Verify every content as a file and print the account; return whether each was refused with one of the words."""
    told: Counter[str] = Counter()
    for content in contents:
        path.write_bytes(content)
        try:
            verified(path)
        except RunFileDamaged as problem:
            told[next((word for word in words if word in problem.reason), f"OTHER WORDS: {problem.reason}")] += 1
        except Exception as problem:
            told[f"EXCEPTION: {type(problem).__name__}: {problem}"] += 1
        else:
            told["UNNOTICED"] += 1
    print(f"{name}: {told.total()}; " + ", ".join(f"{count} {word!r}" for word, count in told.most_common()))
    return set(told) <= set(words) and told.total() > 0


def main(flipped: int = FLIPS, cut: int = CUTS) -> bool:
    """Print what became of every file; return whether all were noticed."""
    content = RUN.read_bytes()
    with tempfile.TemporaryDirectory() as temporary:
        path = Path(temporary) / "run.h5"
        kinds = (
            ("one bit changed", flips(content, flipped, SEED), FLIPPED),
            ("cut off", cuts(content, cut, SEED), CUT),
            ("empty", iter([b""]), ("is empty",)),
            ("HDF5 of others", foreign(Path(temporary)), ("is HDF5, but not a run file",)),
        )
        good = [noticed(name, contents, words, path) for name, contents, words in kinds]
    return all(good)
