"""What can go wrong in this room, besides what the drivers report (drivers/errors.py).

::

    BenchProblem
      BadInput          what was asked cannot be done as it was asked
        FileMistakes    a user's file, with every mistake found in it
        RunFileDamaged  a file is no run file, or not as it was written
      BenchFault        the bench cannot do it: the sentence says what was seen and what to look at
        OperatorNeeded  a hand is needed and nobody is there to lend it
      Stopped           somebody asked the run to stop
"""

__all__ = ["BadInput", "BenchFault", "BenchProblem", "FileMistakes", "OperatorNeeded", "RunFileDamaged", "Stopped"]

_LONGEST_FINDING = 1000  # characters; arbitrary, three times the longest list of words accepted


class BenchProblem(Exception):
    """Base of this room's errors."""


class BadInput(BenchProblem):
    """What was asked cannot be done; the sentence says why and what could."""


class FileMistakes(BadInput):
    """A user's file cannot be used; lists every mistake found in it."""

    def __init__(self, path: str, findings: tuple[str, ...]) -> None:
        super().__init__(path, findings)
        self.path, self.findings = path, findings

    def __str__(self) -> str:
        count = len(self.findings)
        head = f"{self.path}: {count} mistake{'s' if count != 1 else ''} to mend, nothing was started"
        return "\n".join([head, *(f"  {number}. {_shown(text)}" for number, text in enumerate(self.findings, 1))])


def _shown(finding: str) -> str:
    """Return a finding cut short, and nothing in it that a terminal obeys: keys of a file may hold anything."""
    text = finding if len(finding) <= _LONGEST_FINDING else finding[:_LONGEST_FINDING] + "..."
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in text)


class RunFileDamaged(BadInput):
    """A file is no run file, or not as it was written; says what was found."""

    def __init__(self, path: str, reason: str) -> None:
        super().__init__(path, reason)
        self.path, self.reason = path, reason

    def __str__(self) -> str:
        return f"{self.path}: {self.reason}"


class BenchFault(BenchProblem):
    """The bench cannot do what the run needs; the generator is off where it could be reached."""


class OperatorNeeded(BenchFault):
    """A hand is needed and nobody is there to lend it."""

    def __init__(self, request: str) -> None:
        super().__init__(request)
        self.request = request

    def __str__(self) -> str:
        return (
            f"somebody must: {self.request}; nobody can answer here. "
            "Run it on a terminal, or wire the tap through a switch in the bench file"
        )


class Stopped(BenchProblem):
    """Somebody asked the run to stop; it ended in the safe state."""

    def __init__(self, how: str) -> None:
        super().__init__(how)
        self.how = how

    def __str__(self) -> str:
        return f"stopped by {self.how}; the generator is off"
