"""What a sequence file and a rig file say, checked: frozen values in SI units (lattice depth in recoil energies).

Only the reader makes these; every other room reads them. A `Sequence` that exists is free of problems in itself; what
needs the rig file (limits, ticks) is found by `compile`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

from planner.sequence.expression import Expression

Goal = Literal["signal", "coherence", "curve", "plateau", "revival", "ladder", "budget", "tune"]
ROLES = ("hold", "readout", "depth", "separation", "split")
DRIFT_KINDS = ("additive", "phase", "contrast", "acceleration")


@dataclass(frozen=True, kw_only=True)
class Setting:
    """A named quantity that may vary from shot to shot. Numbers in SI of `unit` (radians, seconds, Er, ...)."""

    name: str
    unit: str  # as written in the file: "deg", "Er", "us"
    rest: float
    low: float  # inclusive; -inf and inf where the setting wraps or has no range
    high: float
    wraps: bool = False  # a phase: values are equal modulo one turn
    settle_s: float = 0.0  # wait after a change of this setting


@dataclass(frozen=True, kw_only=True)
class Switch:
    """A two-state reversal. In columns the first state is +1, the second -1."""

    name: str
    states: tuple[str, str]
    settle_s: float = 0.0
    dwell_s: float = 0.0  # shortest time between flips; 0 for a fast switch, which may flip every shot

    @property
    def slow(self) -> bool:
        """Whether the switch must stay put longer than a shot."""
        return self.dwell_s > 0.0


@dataclass(frozen=True, kw_only=True)
class Pulse:
    """A span inside a stage in which one line holds one level."""

    line: str
    at: Expression  # s after the start of the stage
    lasts: Expression  # s
    level: Expression


@dataclass(frozen=True, kw_only=True)
class Ramp:
    """A straight change of one line's level over the whole stage."""

    line: str
    start: Expression
    end: Expression


@dataclass(frozen=True, kw_only=True)
class Stage:
    """A named span of a shot."""

    name: str
    lasts: Expression  # s
    levels: Mapping[str, Expression] = field(default_factory=dict)
    ramps: tuple[Ramp, ...] = ()
    pulses: tuple[Pulse, ...] = ()

    def expressions(self) -> list[Expression]:
        """All arithmetic of the stage."""
        found = [self.lasts, *self.levels.values()]
        for ramp in self.ramps:
            found += [ramp.start, ramp.end]
        for pulse in self.pulses:
            found += [pulse.at, pulse.lasts, pulse.level]
        return found


@dataclass(frozen=True, kw_only=True)
class Sweep:
    """The values one or several settings take together; sweeps of a sequence are crossed with each other."""

    values: Mapping[str, tuple[float, ...]]  # setting -> values, all of one length
    packets: tuple[int, ...] = ()  # for each value, how many times fringe.repeats packets; () for once each
    # how far a setting stands from where its effect vanishes, and one standard deviation of that
    offsets: Mapping[str, tuple[float, float]] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(next(iter(self.values.values())))


@dataclass(frozen=True, kw_only=True)
class Fringe:
    """The readout phases of a packet, and how many packets each cell of the sweeps gets."""

    phases_rad: tuple[float, ...]
    repeats: int


@dataclass(frozen=True, kw_only=True)
class Sinusoid:
    """A drift with a known period. `amplitude` in the unit of its kind (see `Drift`)."""

    period_s: float
    amplitude: float


@dataclass(frozen=True, kw_only=True)
class Drift:
    """One kind of drift that the lab expects.

    Unit of the amplitudes: single-shot noise (standard deviation of y) for additive, phase and contrast; m/s^2 for
    acceleration. `wander` is the RMS of a Wiener process at `wander_over_s`.
    """

    kind: Literal["additive", "phase", "contrast", "acceleration"]
    wander: float = 0.0
    wander_over_s: float = 36000.0
    sinusoids: tuple[Sinusoid, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Expected:
    """What the lab believes of its rig, each as (value, one standard deviation); None where not said."""

    contrast: tuple[float, float] | None = None  # at short hold
    coherence_constant: tuple[float, float] | None = None  # s Er m
    coherence_s: tuple[float, float] | None = None
    atoms: tuple[float, float] | None = None  # at short hold
    lifetime_s: tuple[float, float] | None = None
    excess_noise: tuple[float, float] | None = None  # variance over shot-noise variance


@dataclass(frozen=True, kw_only=True)
class Check:
    """Check shots: the same settings every so often."""

    name: str
    every_s: float
    settings: Mapping[str, float] = field(default_factory=dict)
    shots: int = 1


@dataclass(frozen=True, kw_only=True)
class Cut:
    """A rule, declared before data, that excludes shots: `reading` outside [low, high].

    `reading` is a logged reading, or one of "atoms", "background", "saturated". `relative` means in units of what is
    expected at that hold.
    """

    name: str
    reading: str
    low: float
    high: float
    relative: bool = False


@dataclass(frozen=True, kw_only=True)
class WatchRule:
    """A condition looked at while a night runs, and what to do about it."""

    name: str
    reading: str
    low: float
    high: float
    for_shots: int
    action: Literal["pause", "check", "skip", "end", "tell"]


@dataclass(frozen=True, kw_only=True)
class Knob:
    """A setting that the tuner may move, within `low` to `high`."""

    setting: str
    low: float
    high: float
    log: bool = False
    whole: bool = False


@dataclass(frozen=True, kw_only=True)
class GoalSpec:
    """What the night is for. Targets in SI; None where not set."""

    kind: Goal
    wanted: tuple[str, ...] = ()  # switches whose product carries the signal
    target: float | None = None
    hours: float | None = None
    target_unit: str = ""  # as written: says whether the target is relative ("%", "") or absolute ("s", "um/s^2")
    details: Mapping[str, float] = field(default_factory=dict)  # goal-specific numbers (period_s, depth, risk, ...)


@dataclass(frozen=True, kw_only=True)
class Memory:
    """How much the load of earlier shots matters: relative atom number change per unit of duty, and its fade time."""

    strength: float = 0.0
    fades_s: float = 60.0
    warm_up: int = 2  # shots run and not counted after the start and every gap


@dataclass(frozen=True, kw_only=True)
class Sequence:
    """One measurement, as written and checked."""

    title: str
    text: str  # the file as read; provenance
    file: str
    atom: str
    roles: Mapping[str, str]  # role -> setting name
    settings: Mapping[str, Setting]
    switches: Mapping[str, Switch]
    stages: tuple[Stage, ...]
    sweeps: tuple[Sweep, ...]
    fringe: Fringe
    goal: GoalSpec
    drift: tuple[Drift, ...] = ()
    memory: Memory = field(default_factory=Memory)
    expected: Expected = field(default_factory=Expected)
    checks: tuple[Check, ...] = ()
    cuts: tuple[Cut, ...] = ()
    watch: tuple[WatchRule, ...] = ()
    knobs: tuple[Knob, ...] = ()
    rig: str = ""  # the rig file as written: relative to the sequence file
    # largest interferometer phase that rounding to whole ticks may cost; 10 mrad is the quantum noise of one shot of
    # 10,000 atoms at full contrast
    tick_tolerance_rad: float = 0.01
    # dotted path -> line and column, for problems that only compiling finds
    places: Mapping[str, tuple[int, int]] = field(default_factory=dict, repr=False, compare=False)


@dataclass(frozen=True, kw_only=True)
class Line:
    """One output line of the rig and its absolute limits, in SI of `unit`."""

    name: str
    unit: str
    rest: float  # level when no stage says otherwise
    low: float
    high: float
    max_rate: float = float("inf")  # unit per second
    shortest_s: float = 0.0
    duty_limit: float = 1.0  # largest share of any window of duty_window_s spent away from rest
    duty_window_s: float = 0.0
    load_per_hour: float = float("inf")  # integral of |level - rest| over an hour: energy or charge


@dataclass(frozen=True, kw_only=True)
class Rig:
    """The rig file: what no sequence can override."""

    name: str
    text: str
    file: str
    link: str  # address of the rig link
    tick_s: float
    dead_time_s: float  # added to every shot: what the rig needs between shots
    lines: Mapping[str, Line]
    setting_limits: Mapping[str, tuple[float, float]] = field(default_factory=dict)  # SI
    limit_units: Mapping[str, str] = field(default_factory=dict)  # units that those limits are written in
    latitude_deg: float | None = None
    longitude_deg: float | None = None
    height_m: float = 0.0
    time_zone: str = "UTC"
    approval: str | None = None  # reference of the approval for unattended nights
    wavelength_m: float | None = None  # lattice light
    axis_to_vertical_deg: float = 0.0
