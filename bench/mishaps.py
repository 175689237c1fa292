"""What befalls the computer itself, for rehearsals: a full disk, a folder gone, an hour of sleep, a clock set back."""

import errno
import os
import shutil
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from bandproof.bench.journal import Journal
from bandproof.bench.types import Point
from bandproof.drivers.clock import RealClock, VirtualClock

__all__ = ["MISHAPS", "struck"]

_HOUR = 3600.0

MISHAPS: Mapping[str, str] = {
    "disk-full": "the disk is full when a record is to be kept",
    "folder-gone": "the run's folder is deleted",
    "computer-asleep": "the computer sleeps for an hour",
    "clock-set-back": "somebody sets the computer's clock back by an hour",
}


def struck(mishaps: Mapping[str, int], clock: VirtualClock | RealClock) -> Callable[[Path, dict[str, Any]], Journal]:
    """Return a maker of journals that are struck by mishaps, each when the record of its step is kept."""

    class Struck(Journal):
        def measured(self, point: Point, **details: Any) -> None:
            for name in [name for name, step in mishaps.items() if step == point.step]:
                _strike(name, self.folder, clock)
            super().measured(point, **details)

    return Struck.begin


def _strike(name: str, folder: Path | None, clock: VirtualClock | RealClock) -> None:
    match name:
        case "disk-full":
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        case "folder-gone":
            if folder is not None:
                shutil.rmtree(folder)
        case "computer-asleep":
            if isinstance(clock, VirtualClock):
                clock.wait(_HOUR)
        case "clock-set-back":
            if isinstance(clock, VirtualClock):  # nobody's real clock is touched
                clock.shift_utc(-_HOUR)
        case _:
            raise ValueError(f"no mishap {name!r}")
