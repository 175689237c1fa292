"""What records a scope can take by its dialect, so that none is planned that it refuses in the middle of a sweep."""

from dataclasses import dataclass
from math import ceil, inf

from bandproof.analysis.planning import RecordPlan
from bandproof.bench.types import Bench
from bandproof.drivers.dialect import ScopeDialect, parse

__all__ = ["RecordLimits", "record_limits"]

_LEAST_SAMPLING = 20.0  # samples a period, as `plan_record` has it


@dataclass(frozen=True, slots=True)
class RecordLimits:
    """Least and greatest duration in s, number of points and interval in s."""

    duration: tuple[float, float] = (0.0, inf)
    points: tuple[float, float] = (2, inf)
    interval: tuple[float, float] = (0.0, inf)

    def fitted(self, wanted: RecordPlan, frequency: float = 0.0, longer: float = 1.0) -> RecordPlan:
        """Return a record within the limits, longer than wanted or with other points where it has to be.

        Parameters
        ----------
        wanted : RecordPlan
            Its duration is needed.
        frequency : float
            Hz, of the tone in it; 0: none.
        longer : float
            How many times as long it is to be, if it can.

        Raises
        ------
        ValueError
            There is none; says what is needed and what the dialect lets be had.
        """
        duration = min(max(longer * wanted.duration, self.duration[0]), self.duration[1])
        least = ceil(duration / self.interval[1] - 1e-9)
        points = int(min(max(ceil(longer * wanted.points), self.points[0], least), self.points[1]))
        if frequency:  # longer only as far as the points allow
            duration = max(min(duration, points / (_LEAST_SAMPLING * frequency)), min(duration, wanted.duration))
        duration = min(max(duration, points * self.interval[0]), points * self.interval[1])
        if duration < wanted.duration * (1 - 1e-9):
            raise ValueError(
                f"a record of {wanted.duration:.3g} s is needed, the scope's dialect has limits of {duration:.3g} s"
            )
        if duration > self.duration[1] * (1 + 1e-9) or points < _LEAST_SAMPLING * frequency * duration * (1 - 1e-9):
            raise ValueError(
                f"{_LEAST_SAMPLING:g} samples a period of {frequency:.4g} Hz are needed, by the limits of the scope's "
                f"dialect a record has {points} in {duration:.3g} s"
            )
        return RecordPlan(duration, points)


def record_limits(bench: Bench) -> RecordLimits:
    """Return the limits of the scope's dialect; none where the bench has not its text."""
    dialect = parse(bench.dialect_texts["scope"], "scope") if "scope" in bench.dialect_texts else None
    if not isinstance(dialect, ScopeDialect):
        return RecordLimits()
    told = {name: slot.limits for name in ("duration", "points", "interval") if (slot := getattr(dialect, name)).set}
    limits = {name: (max(low, getattr(RecordLimits(), name)[0]), high) for name, (low, high) in told.items()}
    if dialect.points.fixed:
        limits["points"] = (dialect.points.fixed, dialect.points.fixed)
    return RecordLimits(**limits)
