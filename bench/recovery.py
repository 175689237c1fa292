"""What is done after an instrument failed: close, reopen, replay its settings, measure again; a few times at most.

Never a device clear, and never the old connection: a late answer on it would be taken for the next one.
"""

from collections.abc import Callable, Mapping

from bandproof.bench.errors import BenchFault
from bandproof.bench.instruments import Devices
from bandproof.bench.journal import Journal
from bandproof.bench.types import Step
from bandproof.drivers.errors import (
    InstrumentError,
    InstrumentProblem,
    LinkBroken,
    NoAnswer,
    ReplyError,
)

__all__ = ["MOST_IN_A_RUN", "TRIES", "Recovery", "plainly"]

TRIES = 3  # recoveries of one step before it is given up; arbitrary
MOST_IN_A_RUN = 30  # recoveries of one run: a bench that fails this often measures nothing worth having; arbitrary


_WORDS: Mapping[type[InstrumentProblem], str] = {
    NoAnswer: "gave no answer in time",
    LinkBroken: "lost its connection",
    ReplyError: "answered what was not understood",
    InstrumentError: "reported an error",
}


class Recovery:
    """Recoveries of one step; ``elapsed`` tells the bench time in s."""

    def __init__(self, devices: Devices, journal: Journal, elapsed: Callable[[], float]) -> None:
        self._devices, self._journal, self._elapsed = devices, journal, elapsed
        self._tries = 0

    def after(self, problem: InstrumentProblem, step: Step) -> None:
        """Make the instruments usable again after a failure, or give up.

        Raises
        ------
        InstrumentProblem
            The failure itself, when it is none to get over or was met too often.
        BenchFault
            The run needed too many recoveries.
        """
        role = self._devices.role_of(problem.address)
        what = plainly(problem, self._devices)
        if type(problem) not in _WORDS:  # our mistake, or what the instrument will refuse again
            raise problem
        self._tries += 1
        self._journal.told(self._elapsed(), "failure", step=step.index, instrument=role, words=what)
        if self._tries > TRIES:
            raise problem
        if sum(entry["event"] == "failure" for entry in self._journal.history) > MOST_IN_A_RUN:
            raise BenchFault(f"more than {MOST_IN_A_RUN} failures in one run, the last: {problem}") from problem
        self._reopen(step)
        self._journal.told(self._elapsed(), "recovered", step=step.index, instrument=role, attempt=self._tries)
        self._journal.alarm(f"{step.stage}: the {role} {_WORDS[type(problem)]}; it was reopened and measured again")

    def _reopen(self, step: Step) -> None:
        """Reopen every instrument whose link is dirty and replay its settings; a failure of that is another try."""
        for instrument in self._devices.all():
            while instrument.session.link.is_dirty:
                try:
                    instrument.reopen()
                    instrument.restore()
                except InstrumentProblem as problem:
                    if type(problem) not in _WORDS or self._tries >= TRIES:
                        raise
                    self._tries += 1
                    self._journal.told(
                        self._elapsed(),
                        "failure",
                        step=step.index,
                        instrument=self._devices.role_of(problem.address),
                        words=plainly(problem, self._devices),
                    )


def plainly(problem: BaseException, devices: Devices) -> str:
    """Return an error's words, each address with what it is for and as the bench file has it.

    The ports of a rehearsal differ from run to run; what is kept of it must not.
    """
    text = str(problem)
    for instrument in devices.all():
        role = devices.role_of(instrument.address)
        text = text.replace(instrument.address, f"the {role} at {devices.declared.get(role, instrument.address)}")
    return text
