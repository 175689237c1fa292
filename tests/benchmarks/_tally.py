"""Counting what came of many cases: outcomes, the longest case, the greatest memory, what should not have happened."""

from __future__ import annotations

import time
import tracemalloc
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

__all__ = ["Tally", "traced"]


@dataclass
class Tally:
    """Outcomes of one kind of case; `wrong` has what was neither an error of ours nor a right result."""

    title: str
    longest: float  # s, bound of one case
    outcomes: Counter[str] = field(default_factory=Counter)
    wrong: list[str] = field(default_factory=list)
    worst_time: float = 0.0  # s
    worst_memory: int = 0  # bytes, of one case

    def case(self, name: str, run: Callable[[], str], expected: tuple[type[Exception], ...]) -> None:
        """Run a case; it returns the word its outcome is counted under, or raises one of the errors expected."""
        tracemalloc.reset_peak()
        held, began = tracemalloc.get_traced_memory()[0], time.perf_counter()
        try:
            self.outcomes[run()] += 1
        except expected as told:
            self.outcomes[type(told).__name__] += 1
            self._read(name, told)
        except Exception as stranger:
            self.wrong.append(f"{name}: {type(stranger).__name__}: {str(stranger)[:200]!r}")
        took = time.perf_counter() - began
        if took > self.longest:
            self.wrong.append(f"{name}: took {took:.2f} s")
        self.worst_time = max(self.worst_time, took)
        self.worst_memory = max(self.worst_memory, tracemalloc.get_traced_memory()[1] - held)

    def _read(self, name: str, told: Exception) -> None:
        """Read an error as a person would: it must be sayable, and harmless to a terminal."""
        text = str(told)
        if len(text) > 20_000:
            self.wrong.append(f"{name}: {type(told).__name__} with {len(text)} characters")
        if strange := {c for c in text if not c.isprintable() and c != "\n"}:
            self.wrong.append(f"{name}: {type(told).__name__} prints {strange}: {text[:200]!r}")

    def is_good(self, memory: int) -> bool:
        """Print the account; return whether nothing went wrong and no case took more than so many bytes."""
        print(f"{self.title}: {sum(self.outcomes.values())} cases")
        for outcome, count in self.outcomes.most_common():
            print(f"  {count:6d}  {outcome}")
        print(
            f"  longest case {self.worst_time:.2f} s (bound {self.longest:g} s), "
            f"greatest memory {self.worst_memory / 1e6:.1f} MB (bound {memory / 1e6:g} MB), "
            f"{len(self.wrong)} gone wrong (bound 0)"
        )
        for text in self.wrong[:20]:
            print(f"  WRONG {text}")
        return not self.wrong and self.worst_memory <= memory


@contextmanager
def traced() -> Iterator[None]:
    """Trace memory while inside; a warning there is an error, a user would see it."""
    tracemalloc.start()
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            yield
    finally:
        tracemalloc.stop()
