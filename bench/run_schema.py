"""What a run file holds: every name in it with its unit and its meaning, once, for writing, reading and RUN_FILE.md.

A key of a JSON text is written as its way there: ``stages[].name`` in a list of objects, ``*`` where any name stands.
Kinds are those of JSON, "or null" where it may be.
"""

from collections.abc import Mapping
from dataclasses import dataclass

__all__ = ["ABOUT", "COLUMNS", "EVENTS", "JSON", "RAW", "READABLE", "SCHEMA", "TEXTS", "USER_BLOCK", "Column", "Keys"]

READABLE = (1,)  # versions of the schema, the last is written
SCHEMA = f"bandproof-run/{READABLE[-1]}"
USER_BLOCK = 512  # bytes

Keys = Mapping[str, tuple[str, str, str]]  # key: (kind, unit, meaning)


@dataclass(frozen=True, slots=True)
class Column:
    """A dataset of a stage's points: the field of Point, its index in a tuple field or None, kind, unit, meaning."""

    field: str
    part: int | None
    kind: str
    unit: str
    meaning: str


COLUMNS: Mapping[str, Column] = {
    "step": Column("step", None, "integer", "", "number of the record in the run; `index` in `steps`"),
    "purpose": Column(
        "purpose", None, "text", "", "no-signal, low-level, curve, closing (the first of the curve again), thru"
    ),
    "attempt": Column("attempt", None, "integer", "", "which take of the record this is, from 0"),
    "time": Column("time", None, "number", "s", "bench time at its start"),
    "frequency": Column("frequency", None, "number", "Hz", "as the generator read it back; 0 without signal"),
    "amplitude": Column("amplitude", None, "number", "V", "peak of the generator's level, read back; 0 without signal"),
    "response_real": Column("response", 0, "number", "V/V", "H(tap out)/H(tap in) as read: the path is still in it"),
    "response_imag": Column("response", 1, "number", "V/V", "its imaginary part"),
    "variance_real": Column("covariance", 0, "number", "1", "variance of the real part, from the record itself"),
    "covariance_real_imag": Column("covariance", 1, "number", "1", "covariance of both parts"),
    "variance_imag": Column("covariance", 2, "number", "1", "variance of the imaginary part"),
    "level_in": Column("levels", 0, "number", "V", "peak of the sine at tap in"),
    "level_out": Column("levels", 1, "number", "V", "peak of the sine at tap out"),
    "offset_in": Column("offsets", 0, "number", "V", "mean at tap in"),
    "offset_out": Column("offsets", 1, "number", "V", "mean at tap out"),
    "residual_rms_in": Column("residuals", 0, "number", "V", "rms of what the sine leaves at tap in"),
    "residual_rms_out": Column("residuals", 1, "number", "V", "rms of what the sine leaves at tap out"),
    "lsb_in": Column("lsb", 0, "number", "V", "step of the converter at tap in"),
    "lsb_out": Column("lsb", 1, "number", "V", "step of the converter at tap out"),
    "range_in": Column("ranges", 0, "number", "V", "range at tap in, peak at the probe's tip, read back"),
    "range_out": Column("ranges", 1, "number", "V", "range at tap out, peak at the probe's tip, read back"),
    "sample_interval": Column("sample_interval", None, "number", "s", "as the scope read it back"),
    "samples": Column("samples", None, "integer", "", "of each channel"),
    "distortion": Column("distortion", None, "number", "V/V", "rms of harmonics 2 to 5 over the sine, tap out"),
    "settling": Column(
        "settling", None, "number", "", "how far both halves differ, over what noise may do: settled to 1"
    ),
    "flags": Column("flags", None, "text", "", "what the record's own checks found; several with blanks between"),
}

RAW: Mapping[str, str] = {"volts_in": "V at tap in", "volts_out": "V at tap out"}

TEXTS: Mapping[str, tuple[str, str]] = {  # dataset: (form, meaning)
    "about": ("JSON", "what run this is and how it ended"),
    "budget": ("JSON", "the uncertainty budget of every figure; empty where nothing was fitted"),
    "history": ("JSON lines", "the run's story; empty where nothing happened"),
    "result": ("JSON", "what was concluded: the object that `--json` prints"),
    "steps": ("JSON lines", "every record that was planned, in order"),
    "texts/bench": ("TOML", "the bench file as it was"),
    "texts/board": ("TOML", "the board file as it was"),
    "texts/checks": ("JSON", "checks of the bench on its check standard; absent where there were none"),
    "texts/dialect_ROLE": ("TOML", "the dialect of the generator, the scope, the switch, the supply as it was"),
    "texts/thru": ("JSON", "the stored thru that was used; absent where the run measured its own or had none"),
}

ABOUT: Keys = {  # all are fields of Run, kept as they are
    "run_id": ("text", "", "of this run alone"),
    "serial": ("text", "", "serial number of the board"),
    "attempt": ("integer", "", "attempt on this serial number, from 1"),
    "identities": ("object", "", "what the instruments say they are"),
    "version": ("text", "", "of bandproof"),
    "started": ("text", "", "UTC, ISO 8601"),
    "ended": ("text", "", "complete or cut_short"),
    "reason": ("text", "", "why it was cut short, else empty"),
    "stopped": ("boolean", "", "whether it was cut short because somebody asked"),
    "bench_seconds": ("number", "s", "what the run took on the bench"),
    "operator": ("text", "", "who measured"),
    "note": ("text", "", "a remark"),
    "ambient": ("number or null", "°C", "temperature of the room; null: not stated"),
    "alarms": ("list", "", "what a reader must know of the run, in words; of stages: in `result`"),
}

_ABOUT_MORE: Keys = {"identities.*": ("text", "", "by role: generator, scope, switch, supply")}

_STEPS: Keys = {
    "index": ("integer", "", "its number in the run, from 0"),
    "stage": ("text", "", "the stage, or thru: the path itself"),
    "purpose": ("text", "", "as `purpose` of a point"),
    "tones": ("list", "", "sines played; empty: no signal"),
    "tones[].frequency": ("number", "Hz", "as asked for"),
    "tones[].amplitude": ("number", "V", "peak, as asked for"),
    "dwell": ("number", "s", "wait before the record"),
    "duration": ("number", "s", "of the record"),
    "samples": ("integer", "", "of each channel"),
    "ranges": ("list", "V", "of tap in and tap out, peak at the probes' tips"),
}

_RESULT: Keys = {
    "schema": ("text", "", "bandproof-result/1"),
    "verdict": ("text or null", "", "pass, fail, undecided; null: cut short"),
    "conformance_probability": ("number or null", "", "that the whole board conforms"),
    "ended": ("text", "", "as in `about`"),
    "serial": ("text", "", "as in `about`"),
    "run_id": ("text", "", "as in `about`"),
    "bench_seconds": ("number", "s", "as in `about`"),
    "wall_seconds": ("null", "s", "null here; `--json` has it"),
    "points": ("integer", "", "points of curves, closing ones too"),
    "alarms": ("list", "", "what a reader must know of run and stages, in words"),
    "stages": ("list", "", "what was concluded of each stage"),
    "stages[].name": ("text", "", "as in the board file"),
    "stages[].kind": ("text", "", "band"),
    "stages[].verdict": ("text or null", "", "the worst of its figures; null: cut short"),
    "stages[].model": ("text", "", "the model that was fitted"),
    "stages[].parameters": ("object", "", "the figures"),
    "stages[].parameters.*": ("object", "", "centre, q, gain"),
    "stages[].parameters.*.unit": ("text", "", "of all values of this figure: Hz, none, V/V"),
    "stages[].parameters.*.designed": ("number or null", "unit", "as in the board file"),
    "stages[].parameters.*.predicted": ("number or null", "unit", "of the drawn parts and the op-amp"),
    "stages[].parameters.*.measured": ("number or null", "unit", "of the fit; null: not found"),
    "stages[].parameters.*.standard_uncertainty": ("number or null", "unit", "u"),
    "stages[].parameters.*.expanded_uncertainty": ("number or null", "unit", "U: measured ± U holds 95.45 %"),
    "stages[].parameters.*.coverage_factor": ("number or null", "", "U / u"),
    "stages[].parameters.*.rule": ("text", "", "of the decision"),
    "stages[].parameters.*.deviation": ("number or null", "", "measured / designed - 1"),
    "stages[].parameters.*.lower_limit": ("number or null", "unit", "of the tolerance"),
    "stages[].parameters.*.upper_limit": ("number or null", "unit", "of the tolerance"),
    "stages[].parameters.*.verdict": ("text or null", "", "pass, fail, undecided; null: cut short"),
    "stages[].parameters.*.conformance_probability": ("number or null", "", "that the figure is within its limits"),
    "stages[].parameters.*.conformance_prior": ("text", "", "flat, or process spread"),
    "stages[].fit": ("object", "", "how well the model follows the points"),
    "stages[].fit.reduced_chi_square": ("number or null", "", "about 1 where noise is all that is left"),
    "stages[].fit.points": ("integer", "", "points in the fit"),
    "stages[].fit.lack_of_fit": ("boolean", "", "whether chi-square is beyond noise and declared errors"),
    "stages[].suspects": ("list", "", "what would explain figures that no parts within tolerance give"),
    "stages[].suspects[].text": ("text", "", "in words"),
    "stages[].suspects[].kind": (
        "text",
        "",
        "part, missing, bridged, swapped, common factor, bench, not distinguishable, unexplained",
    ),
    "stages[].suspects[].parts": ("list", "", "parts concerned"),
    "stages[].suspects[].estimate": ("number or null", "", "a part's value in SI, or a factor"),
    "stages[].suspects[].delta_chi_square": ("number or null", "", "distance to the runner-up"),
    "files": ("object", "", "files written with the run"),
    "files.*": ("text or null", "", "run, picture, report: names in the attempt's folder"),
    "attempts": ("list or null", "", "attempts on the serial number, this one last; null: the first"),
    "attempts[].attempt": ("integer", "", "its number"),
    "attempts[].digest": ("text or null", "", "SHA-256 in its run file; null: this run, or an unfinished one"),
    "attempts[].verdict": ("text or null", "", "its own; in an earlier one that of its run file; null: unfinished"),
    "attempts[].pooled": ("boolean", "", "whether it is in the figures"),
    "attempts[].reason": ("text", "", "why it was asked again; of this run"),
}

_BUDGET: Keys = {
    "*": ("object", "", "by stage"),
    "*.*": ("list", "", "by figure: centre, q, gain"),
    "*.*[].source": ("text", "", "name of the row"),
    "*.*[].type": ("text", "", "A: from observations; B: from anything else"),
    "*.*[].distribution": ("text", "", "normal, uniform, ..."),
    "*.*[].standard_uncertainty": ("number", "", "of the source, in its own unit"),
    "*.*[].sensitivity": ("number", "", "of the figure to it"),
    "*.*[].contribution": ("number", "unit", "to u, in the figure's unit"),
    "*.*[].degrees_of_freedom": ("number or null", "", "null: infinite"),
    "*.*[].reason": ("text", "", "where it comes from, or why it is 0"),
}

_THRU: Keys = {
    "started": ("text", "", "UTC, ISO 8601"),
    "conditions": ("object", "", "what must still hold where it is used"),
    "conditions.identities": ("object", "", "what the instruments said they are"),
    "conditions.identities.*": ("text", "", "by role"),
    "conditions.dialects": ("object", "", "SHA-256 of the dialects"),
    "conditions.dialects.*": ("text", "", "by role"),
    "conditions.probe_factors": ("object", "", "division of the probes"),
    "conditions.probe_factors.*": ("number", "", "by channel"),
    "conditions.channels": ("list", "", "of tap in and tap out"),
    "conditions.ambient": ("number or null", "°C", "temperature of the room; null: not stated"),
    "conditions.operator": ("text", "", "who measured"),
    "conditions.version": ("text", "", "of bandproof"),
    "points": ("list", "", "records with both probes on one node"),
    "points[].stage": ("text", "", "thru"),
    **{
        f"points[].{one.field}": ("list" if one.part == 0 or name == "flags" else one.kind, one.unit, one.meaning)
        for name, one in COLUMNS.items()
        if not one.part
    },  # of a tuple the first column says what it is, the others follow in the order of COLUMNS
}

_CHECKS: Keys = {
    "standard": ("text", "", "title of the check standard"),
    "checks": ("list", "", "those in order, oldest first"),
    "checks[].started": ("text", "", "UTC, ISO 8601"),
    "checks[].figures": ("object", "", "what was measured"),
    "checks[].figures.*": ("object", "", "by stage"),
    "checks[].figures.*.*": ("list", "unit", "by figure: value, and standard uncertainty of its noise"),
}

_HISTORY: Keys = {
    "time": ("number", "s", "bench time"),
    "event": ("text", "", "one of those below"),
    "step": ("integer", "", "index of the record concerned"),
    "stage": ("text", "", "the stage concerned"),
    "instrument": ("text", "", "role of the one that failed"),
    "words": ("text", "", "what was wrong"),
    "attempt": ("integer", "", "the try that went well"),
    "seconds": ("number", "s", "how long, or how far back"),
    "read": ("number", "V/V", "the gain that made somebody look"),
    "moved": ("number", "", "how far the last point moved, relative"),
    "utc": ("text", "", "UTC of the resume"),
}

EVENTS: Mapping[str, tuple[tuple[str, ...], str]] = {  # event: (its keys besides time and event, meaning)
    "wired": (("stage",), "a stage's test points were connected"),
    "failure": (("instrument", "step", "words"), "an instrument did not do what it should"),
    "recovered": (("attempt", "instrument", "step"), "it was reopened and the record taken again"),
    "taken again": (("step", "words"), "a record was not as it should be, and another was taken"),
    "pause": (("seconds", "step"), "nothing was measured for so long"),
    "clock set back": (("seconds", "step"), "the computer's clock was set back"),
    "probes looked at again": (("read", "stage"), "a gain far from the design, hands on the probes"),
    "resumed": (("utc",), "the run went on after an interruption"),
    "checked": (("moved", "step"), "the last point was measured again before going on"),
}

JSON: Mapping[str, Keys] = {
    "about": {**ABOUT, **_ABOUT_MORE},
    "steps": _STEPS,
    "result": _RESULT,
    "budget": _BUDGET,
    "history": _HISTORY,
    "texts/thru": _THRU,
    "texts/checks": _CHECKS,
}
