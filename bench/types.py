"""The values that travel the road: asked (Board, Bench, Step), measured (Point), concluded (Comparison, Result).

All frozen; SI inside; plain enough to be written as JSON and read back unchanged.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    from bandproof.analysis.uncertainty import Combined

from bandproof.analysis.decision import SIMPLE, Prior, Rule
from bandproof.drivers.serial_line import Serial

__all__ = [
    "Accuracy",
    "Bench",
    "Board",
    "Check",
    "CheckHistory",
    "CheckPlan",
    "Comparison",
    "Instrument",
    "Limit",
    "OpAmpData",
    "Part",
    "Point",
    "Power",
    "Purpose",
    "Stage",
    "StageResult",
    "Step",
    "Suspect",
    "Temperature",
    "TestPoint",
    "Thru",
    "Tone",
    "Verdict",
    "Wire",
]

Verdict = Literal["pass", "fail", "undecided"]
Purpose = Literal["no-signal", "low-level", "curve", "closing", "thru"]
Quantity = Literal["centre", "q", "gain"]

QUANTITIES: tuple[Quantity, ...] = ("centre", "q", "gain")
UNITS: Mapping[Quantity, str] = {"centre": "Hz", "q": "", "gain": "V/V"}
PASSIVE = "passive"  # the circuit of a stage without op-amps whose parts are not stated: nothing is predicted


# --- asked ---


@dataclass(frozen=True, slots=True)
class Part:
    """A resistor or capacitor as drawn: its name in the stage, value in SI and relative tolerance."""

    name: str
    value: float
    tolerance: float


@dataclass(frozen=True, slots=True)
class Limit:
    """What a figure was designed to be and the limits it must keep.

    ``rule`` as written, ``decides`` as meant; ``prior`` is the spread of the process, None where it is not known.
    """

    designed: float
    lower: float
    upper: float
    rule: str = "simple"
    decides: Rule = SIMPLE
    prior: Prior | None = None


@dataclass(frozen=True, slots=True)
class OpAmpData:
    """The op-amp of a board: gain-bandwidth product in Hz, slew rate in V/s, greatest output in V peak."""

    gbw: float
    slew: float
    swing: float


@dataclass(frozen=True, slots=True)
class Power:
    """What a board wants of a supply: rail voltages and current limit per rail, and the window its current must be in.

    All positive: V, A.
    """

    positive: float
    negative: float
    current_limit: float
    least_current: float
    most_current: float


@dataclass(frozen=True, slots=True)
class Temperature:
    """Where a board's limits hold, in °C, and what f0 changes per kelvin, relative: half-width of either sign."""

    reference: float
    coefficient: float


@dataclass(frozen=True, slots=True)
class TestPoint:
    """A place a probe can reach: its node in the circuit, its source resistance in Ω."""

    __test__ = False  # not a test class, whatever pytest thinks of the name
    name: str
    node: str
    source_resistance: float


@dataclass(frozen=True, slots=True)
class Stage:
    """One band of a board: taps, limits per figure, circuit and parts; or the path itself (``thru``), without any.

    A `PASSIVE` circuit has no parts.
    """

    name: str
    kind: Literal["band", "thru"]
    tap_in: str
    tap_out: str
    limits: Mapping[Quantity, Limit]
    circuit: str
    parts: tuple[Part, ...]


@dataclass(frozen=True, slots=True)
class Board:
    """A board as designed; ``text`` is the file it was read from."""

    title: str
    drawing: str
    revision: str
    input_maximum: float
    op_amp: OpAmpData
    points: Mapping[str, TestPoint]
    stages: tuple[Stage, ...]
    text: str
    frequencies: Literal["nominal", "exact"] = "nominal"
    power: Power | None = None
    temperature: Temperature | None = None

    def stage(self, name: str) -> Stage:
        """Return a stage by name (KeyError when there is none)."""
        for stage in self.stages:
            if stage.name == name:
                return stage
        raise KeyError(name)


@dataclass(frozen=True, slots=True)
class Instrument:
    """Where an instrument is, which dialect it understands, and how its line is set where it is a serial one.

    ``calibrated`` is the day of its last calibration as the bench file states it (ISO 8601), "" where it does not.
    """

    role: Literal["generator", "scope", "switch", "supply"]
    address: str
    dialect: str
    serial: Serial | None = None
    calibrated: str = ""


@dataclass(frozen=True, slots=True)
class Wire:
    """How a test point reaches the scope: a channel, and a switch route or the operator's hands (neither: fixed)."""

    channel: int
    route: str | None = None
    by_hand: bool = False


@dataclass(frozen=True, slots=True)
class Accuracy:
    """What a bench file says about errors of its instruments: half-widths of uniform distributions.

    Relative and per channel, except: ``generator_frequency``; ``channel_skew`` in s; ``linearity`` in steps of the
    converter; ``drift`` of a channel's gain in 1/s; ``probe_compensation`` of the division above ``probe_corner`` Hz;
    ``probe_resistance`` in Ω and ``probe_capacitance`` in F load the point that is probed. ``reseating`` is that of a
    contact made anew. ``declared`` names those that the file states, the others have careful defaults.
    """

    channel_gain: float
    generator_frequency: float
    channel_skew: float = 100e-9
    linearity: float = 0.5
    range_gain: float = 0.02
    drift: float = 0.001 / 60.0
    reseating: float = 0.005
    probe_compensation: float = 0.05
    probe_corner: float = 1.5e3
    probe_resistance: float = 1e6
    probe_capacitance: float = 100e-12
    declared: frozenset[str] = frozenset()


@dataclass(frozen=True, slots=True)
class CheckPlan:
    """How a bench is checked: the board file of its check standard, after how many boards and s a check is too old."""

    board: str
    every: int
    longest_age: float


@dataclass(frozen=True, slots=True)
class Bench:
    """A bench: instruments, wiring, ceilings and what is declared about its accuracy.

    ``rails`` are the supply's channels of the positive and the negative rail; a thru is valid for ``thru_valid`` s.
    ``check`` is None where nothing is said about a check standard; ``place`` is where it stands, "" if not stated.
    """

    title: str
    mains: float
    ceiling: float
    instruments: Mapping[str, Instrument]
    wires: Mapping[str, Wire]
    probe_factors: Mapping[int, float]
    accuracy: Accuracy
    visa_library: str
    clock: str | None
    text: str
    rails: tuple[int, int] = (1, 2)
    thru_valid: float = 12.0 * 3600.0
    check: CheckPlan | None = None
    place: str = ""
    dialect_texts: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Tone:
    """One sine of a step: frequency in Hz, level in V peak at the generator's open output."""

    frequency: float
    amplitude: float


@dataclass(frozen=True, slots=True)
class Step:
    """One record to take: where, with which tones, the waits in s, the ranges in V peak at the probe tips."""

    index: int
    stage: str
    purpose: Purpose
    tones: tuple[Tone, ...]
    dwell: float
    duration: float
    samples: int
    ranges: tuple[float, float]

    @property
    def frequency(self) -> float:
        """Frequency of the first tone in Hz, 0 for a record without signal."""
        return self.tones[0].frequency if self.tones else 0.0

    @property
    def amplitude(self) -> float:
        """Level of the first tone in V peak, 0 for a record without signal."""
        return self.tones[0].amplitude if self.tones else 0.0

    @property
    def setup(self) -> str:
        """What the steps that share wiring have in common: the stage."""
        return self.stage


# --- measured ---


@dataclass(frozen=True, slots=True)
class Point:
    """What one step gave.

    ``frequency`` and ``amplitude`` are read back; ``response`` is H(tap out)/H(tap in) with the 2 × 2 covariance of
    its real and imaginary part; ``levels`` are the peak volts of both channels, ``offsets`` their mean, ``residuals``
    their residual rms; ``flags`` name what the record's own checks found.
    """

    step: int
    stage: str
    purpose: Purpose
    attempt: int
    time: float
    frequency: float
    amplitude: float
    response: complex
    covariance: tuple[float, float, float]
    levels: tuple[float, float]
    offsets: tuple[float, float]
    residuals: tuple[float, float]
    lsb: tuple[float, float]
    ranges: tuple[float, float]
    sample_interval: float
    samples: int
    distortion: float
    settling: float
    flags: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Thru:
    """The path itself, measured before: when (UTC), under which conditions, the points with both probes on one node."""

    started: str
    conditions: Mapping[str, Any]
    points: tuple[Point, ...]


@dataclass(frozen=True, slots=True)
class Check:
    """What one check of a bench gave: when (UTC), and each figure of its standard by stage, value and noise of it."""

    started: str
    figures: Mapping[str, Mapping[Quantity, tuple[float, float]]]


@dataclass(frozen=True, slots=True)
class CheckHistory:
    """The checks of a bench on one standard that are in order, oldest first."""

    standard: str
    checks: tuple[Check, ...]


# --- concluded ---


@dataclass(frozen=True, slots=True)
class Comparison:
    """One figure of one stage, measured against designed; ``prior`` is None where nothing was known beforehand."""

    quantity: Quantity
    unit: str
    designed: float
    predicted: float
    measured: float
    repeatability: float
    standard_uncertainty: float
    expanded_uncertainty: float
    coverage_factor: float
    rule: str
    lower_limit: float
    upper_limit: float
    verdict: Verdict | None
    conformance_probability: float
    prior: Prior | None = None

    @property
    def deviation(self) -> float:
        """Relative deviation from the designed value."""
        return self.measured / self.designed - 1.0


@dataclass(frozen=True, slots=True)
class Suspect:
    """What is suspected: in words, its kind, the parts concerned.

    ``kind`` is "part", "missing", "bridged", "swapped", "common factor", "bench", "not distinguishable" or
    "unexplained"; ``estimate`` a part's value in SI or a factor, None where there is none; ``delta_chi_square`` the
    distance to the runner-up.
    """

    text: str
    kind: str
    parts: tuple[str, ...]
    estimate: float | None
    delta_chi_square: float


@dataclass(frozen=True, slots=True)
class StageResult:
    """What is concluded about a stage: its fit and its figures."""

    name: str
    kind: str
    verdict: Verdict | None
    model: str
    figures: Mapping[Quantity, Comparison]
    theta: tuple[float, ...]
    theta_covariance: tuple[tuple[float, ...], ...]
    reduced_chi_square: float
    points: int
    lack_of_fit: bool
    status: str
    alarms: tuple[str, ...]
    budgets: "Mapping[Quantity, Combined]"
    suspects: tuple[Suspect, ...] = ()


@dataclass(frozen=True, slots=True)
class Run:
    """A whole run: who, what, with what, every point, how it ended (``stopped``: cut short because somebody asked).

    ``ambient`` in °C, None when nobody stated it; ``thru`` is a stored one that was used, None where the run measured
    its own or had none; ``checks`` are those of the bench on its check standard before, None where there are none.
    """

    run_id: str
    serial: str
    attempt: int
    board: Board
    bench: Bench
    identities: Mapping[str, str]
    version: str
    started: str
    ended: Literal["complete", "cut_short"]
    reason: str
    stopped: bool
    bench_seconds: float
    operator: str
    note: str
    steps: tuple[Step, ...]
    points: tuple[Point, ...]
    alarms: tuple[str, ...]
    history: tuple[Mapping[str, Any], ...]
    ambient: float | None = None
    thru: Thru | None = None
    checks: CheckHistory | None = None
