"""The head of a journal: what was fixed when a run began, and the check that all of it is there."""

from typing import Any

from bandproof.bench.plain import checks_from, fits, thru_from

__all__ = ["checked_head", "whole"]

_HEAD: dict[str, Any] = {
    "run_id": str,
    "serial": str,
    "attempt": int,
    "version": str,
    "started": str,
    "clock_start": float,
    "operator": str,
    "note": str,
    "identities": dict[str, str],
    "board": str,
    "bench": str,
    "bench_path": str,
    "dialects": dict[str, str],
    "keep_raw": bool,
}
_SINCE: dict[str, Any] = {
    "ambient": None,
    "thru": None,
    "checks": None,
    "earlier": [],
    "retest": "",
    "longer": 1.0,
}  # what journals of earlier versions lack
_REHEARSAL: dict[str, Any] = {
    "seed": int,
    "defects": list[str],
    "faults": list[str],
    "imperfections": list[str],
    "pace": str,
}


def whole(entry: dict[str, Any], **kinds: Any) -> dict[str, Any]:
    """Return an entry that has these values of these kinds (KeyError, ValueError)."""
    for name, kind in kinds.items():
        if not fits(entry[name], kind):
            raise ValueError(f"{name} is {entry[name]!r:.40}")
    return entry


def checked_head(entry: dict[str, Any]) -> dict[str, Any]:
    """Return a journal's head that has all that a run was begun with (KeyError, TypeError, ValueError)."""
    rehearsal = entry["rehearsal"]
    if rehearsal is not None:
        whole(rehearsal, **_REHEARSAL)
    entry = {**_SINCE, **entry}
    if entry["ambient"] is not None:
        whole(entry, ambient=float)
    if entry["thru"] is not None:
        thru_from(entry["thru"])
    if entry["checks"] is not None:
        checks_from(entry["checks"])
    for attempt in entry["earlier"]:
        whole(attempt, attempt=int, pooled=bool)
        if attempt["pooled"]:
            whole(attempt, digest=str, verdict=str)
    return whole(entry, retest=str, longer=float, **_HEAD)
