"""The distinct timelines of a plan, in whole ticks, evaluated columnwise and on demand.

A set of a million timelines is kept as the columns of the settings that they depend on; edges are worked out for a
slice of rows when they are looked at, so memory does not grow with the number of edges.
"""

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.quantities import unit
from planner.sequence.expression import Expression
from planner.sequence.model import Line, Rig, Stage

FAR = 2**53  # ticks; longer lengths are no whole numbers as floats, and a few hundred of them would overflow


@dataclass(frozen=True, kw_only=True)
class Track:
    """The segments of one line, row by row: each array has shape (n_segment, n_row).

    Segment k runs from start[k] to start[k + 1] (the last one to the end of the shot), its level going straight from
    level_from[k] to level_to[k] in SI. Segments may have no length; the first of them starts at tick 0.
    """

    start: IntArray
    level_from: FloatArray
    level_to: FloatArray

    def lengths(self, ticks: IntArray) -> IntArray:
        """Length of every segment in ticks, shape (n_segment, n_row)."""
        return np.diff(self.start, axis=0, append=ticks[np.newaxis, :])

    def away(self, line: Line) -> BoolArray:
        """Whether a segment is away from rest at all, shape (n_segment, n_row)."""
        away: BoolArray = (self.level_from != line.rest) | (self.level_to != line.rest)
        return away

    def load(self, line: Line, lengths_s: FloatArray) -> FloatArray:
        """Integral of |level - rest| over every segment, shape (n_segment, n_row)."""
        first, last = np.abs(self.level_from - line.rest), np.abs(self.level_to - line.rest)
        crossing = (self.level_from - line.rest) * (self.level_to - line.rest) < 0
        total = np.where(first + last > 0, first + last, 1.0)
        mean = np.where(crossing, (first**2 + last**2) / (2 * total), (first + last) / 2)
        return mean * lengths_s


@dataclass(frozen=True, kw_only=True)
class Edges:
    """Timelines of some rows: `bounds` (n_stage + 1, n_row) are the ticks at which stages start, and the end."""

    bounds: IntArray
    tracks: Mapping[str, Track]
    pulses: Mapping[tuple[int, int], tuple[IntArray, IntArray]]  # (stage, pulse) -> start and end, ticks, (n_row,)

    @property
    def ticks(self) -> IntArray:
        """Length of every shot in ticks, shape (n_row,)."""
        last: IntArray = self.bounds[-1]
        return last


@dataclass(frozen=True, kw_only=True)
class TimelineSet:
    """The distinct timelines of one compiled sequence. `columns`: the settings that they depend on, (n_timeline,)."""

    stages: tuple[Stage, ...]
    rig: Rig
    columns: Mapping[str, FloatArray]
    count: int
    ticks: IntArray = field(repr=False)  # length of every timeline, (n_timeline,)

    def __len__(self) -> int:
        return self.count

    @cached_property
    def lines(self) -> tuple[str, ...]:
        """The lines that some stage drives, in the order of the rig file."""
        return driven_lines(self.stages, self.rig)

    def edges(self, rows: IntArray | slice) -> Edges:
        """The edges of the timelines `rows`."""
        count = self.ticks[rows].shape[0]
        return work_out(self.stages, self.rig, {name: column[rows] for name, column in self.columns.items()}, count)

    def document(self, i: int) -> dict[str, Any]:
        """Timeline i as the rig link sends it.

        `lines` holds, for every driven line, its unit and its edges [tick, from, to]: from that tick to the next
        edge (or the end) the level goes straight from `from` to `to`; equal numbers hold it. Levels are in the unit.
        """
        edges = self.edges(np.array([i]))
        lines = {}
        for name in self.lines:
            line, track = self.rig.lines[name], edges.tracks[name]
            lines[name] = {"unit": line.unit, "edges": _edge_list(line, track, edges.ticks)}
        return {"tick_s": self.rig.tick_s, "ticks": int(edges.ticks[0]), "lines": lines}

    def digest(self, i: int) -> str:
        """SHA-256 (hex) of the canonical JSON of timeline i: sorted keys, no spaces."""
        text = json.dumps(self.document(i), sort_keys=True, separators=(",", ":"), allow_nan=False)
        return hashlib.sha256(text.encode()).hexdigest()


def _edge_list(line: Line, track: Track, ticks: IntArray) -> list[list[float | int]]:
    """Edges of one row in the line's unit: no empty segments, equal neighbours joined."""
    factor = unit(line.unit)
    lengths = track.lengths(ticks)[:, 0]
    edges: list[list[float | int]] = []
    for k in np.flatnonzero(lengths > 0):
        low, high = (
            float(level[k, 0]) * factor.divide / factor.multiply for level in (track.level_from, track.level_to)
        )
        if edges and edges[-1][1] == edges[-1][2] == low == high:
            continue
        edges.append([int(track.start[k, 0]), low, high])
    return edges


def driven_lines(stages: tuple[Stage, ...], rig: Rig) -> tuple[str, ...]:
    """Lines of the rig that some stage names."""
    named = {line for stage in stages for line in stage.levels}
    named |= {ramp.line for stage in stages for ramp in stage.ramps}
    named |= {pulse.line for stage in stages for pulse in stage.pulses}
    return tuple(name for name in rig.lines if name in named)


def value_of(expression: Expression, columns: Mapping[str, FloatArray], count: int) -> FloatArray:
    """An expression for every row, shape (count,), also where it uses no setting."""
    used = {name: columns[name] for name in expression.names}
    return np.broadcast_to(expression.evaluate(used), (count,))


def to_ticks(seconds: FloatArray, tick_s: float) -> IntArray:
    """Nearest whole ticks; what is not finite or beyond 2^53 becomes -1, which the checks refuse."""
    ticks = np.rint(seconds / tick_s)
    return np.where(np.isfinite(ticks) & (np.abs(ticks) < FAR), ticks, -1.0).astype(np.int64)


def work_out(stages: tuple[Stage, ...], rig: Rig, columns: Mapping[str, FloatArray], count: int) -> Edges:
    """Edges of all driven lines for every row of `columns`."""
    lengths = np.stack([to_ticks(value_of(stage.lasts, columns, count), rig.tick_s) for stage in stages])
    bounds = np.concatenate([np.zeros((1, count), dtype=np.int64), np.cumsum(lengths, axis=0)])
    pulses = {}
    for s, stage in enumerate(stages):
        for p, pulse in enumerate(stage.pulses):
            start = bounds[s] + to_ticks(value_of(pulse.at, columns, count), rig.tick_s)
            pulses[s, p] = (start, start + to_ticks(value_of(pulse.lasts, columns, count), rig.tick_s))
    tracks = {}
    for name in driven_lines(stages, rig):
        parts = [_stage_part(stage, s, name, rig, columns, bounds, pulses) for s, stage in enumerate(stages)]
        start, level_from, level_to = (np.concatenate(arrays) for arrays in zip(*parts, strict=True))
        tracks[name] = Track(start=start, level_from=level_from, level_to=level_to)
    return Edges(bounds=bounds, tracks=tracks, pulses=pulses)


def _stage_part(
    stage: Stage,
    s: int,
    line: str,
    rig: Rig,
    columns: Mapping[str, FloatArray],
    bounds: IntArray,
    pulses: Mapping[tuple[int, int], tuple[IntArray, IntArray]],
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Segments of one line in one stage: base level, then for each pulse in time order its level and the base again."""
    count = bounds.shape[1]
    base = Expression.constant(rig.lines[line].rest, ())
    first = last = stage.levels.get(line, base)
    for ramp in stage.ramps:
        if ramp.line == line:
            first, last = ramp.start, ramp.end
    mine = [p for p, pulse in enumerate(stage.pulses) if pulse.line == line]
    level_from, level_to = value_of(first, columns, count), value_of(last, columns, count)
    if not mine:
        return bounds[s][np.newaxis], level_from[np.newaxis], level_to[np.newaxis]
    starts = np.stack([pulses[s, p][0] for p in mine])
    ends = np.stack([pulses[s, p][1] for p in mine])
    levels = np.stack([value_of(stage.pulses[p].level, columns, count) for p in mine])
    order = np.argsort(starts, axis=0, kind="stable")
    starts, ends = np.take_along_axis(starts, order, axis=0), np.take_along_axis(ends, order, axis=0)
    levels = np.take_along_axis(levels, order, axis=0)
    start = np.empty((1 + 2 * len(mine), count), dtype=np.int64)
    level = np.empty((1 + 2 * len(mine), count))
    start[0], start[1::2], start[2::2] = bounds[s], starts, ends
    level[0::2], level[1::2] = level_from, levels
    return start, level, level
