"""What has happened in a run so far: steps planned, points measured, its story. The seam for keeping it on disk."""

from collections.abc import Sequence
from typing import Any

from bandproof.bench.types import Point, Step

__all__ = ["Journal"]


class Journal:
    """The growing record of one run, in memory."""

    def __init__(self) -> None:
        self.steps: list[Step] = []
        self.points: list[Point] = []
        self.alarms: list[str] = []
        self.history: list[dict[str, Any]] = []

    def planned(self, steps: Sequence[Step]) -> None:
        """Keep a batch of steps before its first is run."""
        self.steps.extend(steps)

    def measured(self, point: Point) -> None:
        """Keep a finished point before the next step begins."""
        self.points.append(point)

    def alarm(self, text: str) -> None:
        """Keep something a reader of the result must know, once."""
        if text not in self.alarms:
            self.alarms.append(text)

    def told(self, time: float, event: str, **details: Any) -> None:
        """Add a line to the run's story at a bench time in s."""
        self.history.append({"time": time, "event": event, **details})
