"""What is wrong with single shots, looked at columnwise: one problem for each place in the file and kind of mistake.

Every problem names the first shot that shows it by the settings that its timeline depends on.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.errors import Problem
from planner.physics.atoms import atom
from planner.physics.gravity import site_gravity
from planner.physics.interferometer import hold_phase_rate
from planner.quantities import format_quantity
from planner.sequence.against_rig import place_of
from planner.sequence.model import Line, Rig, Sequence
from planner.sequence.timeline import FAR, Edges, Track, value_of, work_out
from planner.sequence.windows import worst_window

HOUR_S = 3600.0
SLACK = 1e-9  # relative; levels and rates computed by arithmetic miss a limit they mean to touch by rounding


@dataclass
class Rounding:
    """The largest rounding of a length to whole ticks: seconds, and radians where the separation is known."""

    seconds: float = 0.0
    radians: float | None = None

    def sentence(self, tolerance_rad: float) -> str:
        """For people: how far the lengths are from what was asked."""
        if self.seconds == 0.0:
            return "every length is a whole number of ticks"
        text = f"lengths were rounded to whole ticks, by at most {self.seconds * 1e9:.3g} ns"
        if self.radians is None:
            return f"{text}; no setting is the separation, so this is not stated in phase"
        return (
            f"{text}: {self.radians * 1e3:.3g} mrad of interferometer phase (m g dz dt / hbar; "
            f"{tolerance_rad * 1e3:.3g} mrad is allowed)"
        )


class ShotChecks:
    """Collects problems over slices of timelines; `look_at` one slice after another, then read `problems`."""

    def __init__(self, sequence: Sequence, rig: Rig) -> None:
        self.sequence, self.rig = sequence, rig
        self.problems: list[Problem] = []
        self.rounding = Rounding()
        self._seen: set[tuple[str, str]] = set()
        # phase per second and metre of separation: m g cos(angle to the vertical) / hbar
        along = abs(np.cos(np.deg2rad(rig.axis_to_vertical_deg))) * site_gravity(rig.latitude_deg, rig.height_m)
        self._phase_rate = hold_phase_rate(atom(sequence.atom).mass_kg, 1.0, float(along))
        self._columns: Mapping[str, FloatArray] = {}

    def look_at(self, columns: Mapping[str, FloatArray], count: int, separation_m: FloatArray | None) -> IntArray:
        """Check `count` timelines; returns their lengths in ticks."""
        self._columns = columns
        before = len(self.problems)
        for s, stage in enumerate(self.sequence.stages, 1):
            self._length(f"stages[{s}].lasts", value_of(stage.lasts, columns, count), separation_m)
            for p, pulse in enumerate(stage.pulses, 1):
                where = f"stages[{s}].pulses[{p}]"
                self._length(f"{where}.at", value_of(pulse.at, columns, count), separation_m)
                self._length(f"{where}.lasts", value_of(pulse.lasts, columns, count), separation_m)
        edges = work_out(self.sequence.stages, self.rig, columns, count)
        if len(self.problems) == before:  # pulses of a stage with no proper length would all be wrong too
            self._pulses(edges)
        self._levels(columns, count)
        if len(self.problems) == before:  # what follows reads the edges as they would be played
            for name, track in edges.tracks.items():
                self._line(self.rig.lines[name], track, edges)
        return edges.ticks

    def _refuse(self, where: str, kind: str, bad: BoolArray, message: str, hint: str = "") -> None:
        """One problem at `where` if any row is bad; `message` may use {row} for the first bad row's settings."""
        if (where, kind) in self._seen or not bad.any():
            return
        self._seen.add((where, kind))
        line, column = place_of(self.sequence, where)
        shot = self._shot(int(np.argmax(bad)))
        self.problems.append(
            Problem(file=self.sequence.file, line=line, column=column, where=where, message=message + shot, hint=hint)
        )

    def _shot(self, row: int) -> str:
        parts = [
            f"{name} = {format_quantity(float(column[row]), self.sequence.settings[name].unit)}"
            for name, column in list(self._columns.items())[:4]
        ]
        return f" (shot with {', '.join(parts)})" if parts else ""

    def _length(self, where: str, seconds: FloatArray, separation_m: FloatArray | None) -> None:
        tick = self.rig.tick_s
        finite = np.isfinite(seconds)
        self._refuse(where, "finite", ~finite, "this arithmetic gives no finite time")
        self._refuse(where, "negative", finite & (seconds < 0), f"a time below zero: {_smallest(seconds)}")
        countable = finite & (seconds < FAR * tick)
        self._refuse(where, "long", finite & ~countable, "a time too long to count in ticks")
        usable = np.where(countable & (seconds >= 0), seconds, 0.0)
        ticks = np.rint(usable / tick)
        self._refuse(
            where,
            "tick",
            (usable > 0) & (ticks == 0) & where.endswith(".lasts"),
            f"a length shorter than half a tick of {format_quantity(tick, 'ns')}",
        )
        # below a part in 1e12 the difference is that of the float itself, not of the length asked for
        missed = np.abs(usable - ticks * tick)
        missed[missed <= 1e-12 * usable] = 0.0
        self.rounding.seconds = max(self.rounding.seconds, float(missed.max()))
        if separation_m is None:
            return
        phase = self._phase_rate * separation_m * missed
        self.rounding.radians = max(self.rounding.radians or 0.0, float(phase.max()))
        allowed = self.sequence.tick_tolerance_rad
        self._refuse(
            where,
            "rounding",
            phase > allowed,
            f"rounding to whole ticks of {format_quantity(tick, 'ns')} costs up to {phase.max() * 1e3:.3g} mrad of "
            f"interferometer phase; {allowed * 1e3:.3g} mrad is allowed",
            "choose whole ticks, or set tick_tolerance",
        )

    def _pulses(self, edges: Edges) -> None:
        for s, stage in enumerate(self.sequence.stages):
            for p, pulse in enumerate(stage.pulses):
                where = f"stages[{s + 1}].pulses[{p + 1}]"
                start, end = edges.pulses[s, p]
                beyond = (end > edges.bounds[s + 1]) | (start < edges.bounds[s])
                self._refuse(where, "beyond", beyond, f'the pulse leaves its stage "{stage.name}"')
                for q in range(p):
                    if stage.pulses[q].line != pulse.line:
                        continue
                    other_start, other_end = edges.pulses[s, q]
                    overlap = (start < other_end) & (other_start < end)
                    self._refuse(where, "overlap", overlap, f'the pulse overlaps pulse {q + 1} on line "{pulse.line}"')

    def _levels(self, columns: Mapping[str, FloatArray], count: int) -> None:
        for s, stage in enumerate(self.sequence.stages, 1):
            levels = [(f"stages[{s}].levels.{name}", name, level) for name, level in stage.levels.items()]
            for ramp in stage.ramps:
                where = f"stages[{s}].ramps.{ramp.line}"
                levels += [(f"{where}.from", ramp.line, ramp.start), (f"{where}.to", ramp.line, ramp.end)]
            levels += [
                (f"stages[{s}].pulses[{p}].level", pulse.line, pulse.level) for p, pulse in enumerate(stage.pulses, 1)
            ]
            for where, name, level in levels:
                self._level(where, self.rig.lines[name], value_of(level, columns, count))

    def _level(self, where: str, line: Line, level: FloatArray) -> None:
        self._refuse(where, "finite", ~np.isfinite(level), "this arithmetic gives no finite level")
        slack = SLACK * max(abs(line.low), abs(line.high))
        bad = (level < line.low - slack) | (level > line.high + slack)
        if bad.any():
            found = format_quantity(float(level[np.argmax(bad)]), line.unit)
            ends = f"{format_quantity(line.low, line.unit)} to {format_quantity(line.high, line.unit)}"
            self._refuse(where, "limit", bad, f'{found} is beyond line "{line.name}": the rig file allows {ends}')

    def _line(self, line: Line, track: Track, edges: Edges) -> None:
        seconds: FloatArray = (track.lengths(edges.ticks) * self.rig.tick_s).astype(np.float64)
        starts: FloatArray = (track.start * self.rig.tick_s).astype(np.float64)
        if line.max_rate < float("inf"):
            self._rates(line, track, seconds)
        if line.shortest_s > 0:
            self._shortest(line, track, seconds)
        if line.duty_window_s > 0:
            amount = np.where(track.away(line), seconds, 0.0)
            worst = worst_window(starts, seconds, amount, line.duty_window_s)
            share = worst / line.duty_window_s
            self._refuse(
                self._first_stage(line),
                f"duty {line.name}",
                share > line.duty_limit * (1 + SLACK),
                f'line "{line.name}" is away from rest for {share.max():.1%} of {line.duty_window_s:g} s; '
                f"the rig file allows {line.duty_limit:.1%}",
            )
        if line.load_per_hour < float("inf"):
            load = track.load(line, seconds)
            worst = worst_window(starts, seconds, load, HOUR_S)
            self._refuse(
                self._first_stage(line),
                f"load {line.name}",
                worst > line.load_per_hour * (1 + SLACK),
                f'one shot loads line "{line.name}" by {worst.max() / line.load_per_hour:.3g} of what the rig file '
                "allows in an hour",
            )

    def _first_stage(self, line: Line) -> str:
        """The first stage that drives a line: the place for problems of the line over the whole shot."""
        for s, stage in enumerate(self.sequence.stages, 1):
            parts = [*(ramp.line for ramp in stage.ramps), *(pulse.line for pulse in stage.pulses)]
            if line.name in stage.levels or line.name in parts:
                return f"stages[{s}]"
        return "stages"

    def _stage_of(self, line: Line) -> list[int]:
        """For each segment of a line, the stage (from 1) that it belongs to."""
        found = []
        for s, stage in enumerate(self.sequence.stages, 1):
            found += [s] * (1 + 2 * sum(pulse.line == line.name for pulse in stage.pulses))
        return found

    def _rates(self, line: Line, track: Track, seconds: FloatArray) -> None:
        stage_of = self._stage_of(line)
        allowed = f"{format_quantity(line.max_rate, f'{line.unit}/s' if line.unit else '1/s')}"
        level = np.full(seconds.shape[1], line.rest)
        for k, length in enumerate(seconds):
            there = length > 0
            where = f"stages[{stage_of[k]}]"
            self._refuse(
                where,
                f"step {line.name}",
                there & (track.level_from[k] != level),
                f'line "{line.name}" steps here; the rig file allows {allowed}, so it needs a ramp',
            )
            change = np.abs(track.level_to[k] - track.level_from[k])
            rate = np.divide(change, length, out=np.zeros_like(length), where=there)
            self._refuse(
                f"{where}.ramps.{line.name}",
                "rate",
                rate > line.max_rate * (1 + SLACK),
                f'line "{line.name}" changes faster than the rig file allows ({allowed})',
            )
            level = np.where(there, track.level_to[k], level)
        self._refuse(
            f"stages[{len(self.sequence.stages)}]",
            f"step {line.name}",
            level != line.rest,
            f'line "{line.name}" steps back to rest at the end of the shot; the rig file allows {allowed}',
        )

    def _shortest(self, line: Line, track: Track, seconds: FloatArray) -> None:
        stage_of = self._stage_of(line)
        away = track.away(line)
        run = np.zeros(seconds.shape[1])
        slack = line.shortest_s * (1 - SLACK)
        for k, length in enumerate(seconds):
            ends = ~away[k] & (length > 0) & (run > 0)
            self._too_short(line, stage_of[max(k - 1, 0)], ends & (run < slack))
            run = np.where(length > 0, np.where(away[k], run + length, 0.0), run)
        self._too_short(line, stage_of[-1], (run > 0) & (run < slack))

    def _too_short(self, line: Line, stage: int, bad: BoolArray) -> None:
        self._refuse(
            f"stages[{stage}]",
            f"short {line.name}",
            bad,
            f'line "{line.name}" is away from rest for less than {format_quantity(line.shortest_s, "us")}',
        )


def _smallest(seconds: FloatArray) -> str:
    finite = seconds[np.isfinite(seconds)]
    return format_quantity(float(finite.min()), "s") if len(finite) else "not finite"
