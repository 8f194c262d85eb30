"""Sequence and rig to shot table and timelines: everything that can be refused before a shot is sent, is refused here.

A cell is one point of the crossed sweeps in one state of the slow switches; a packet is one cell at every readout
phase in every state of the fast switches. The table holds `repeats` packets of every cell, packet after packet.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import prod
from typing import TYPE_CHECKING, TypeVar

import numpy as np

from planner.arrays import FloatArray, IntArray, SignArray
from planner.errors import Problem, ProblemsFound
from planner.quantities import format_quantity
from planner.sequence.against_rig import check_against_rig
from planner.sequence.model import Check, Rig, Sequence
from planner.sequence.shot_checks import Rounding, ShotChecks
from planner.sequence.table import ShotTable, joined
from planner.sequence.timeline import TimelineSet

if TYPE_CHECKING:
    from numpy.typing import NDArray

Number = TypeVar("Number", np.float64, np.int64, np.int8)
CHUNK = 65_536  # timelines looked at together: bounds the memory, not the answer


@dataclass(frozen=True, kw_only=True)
class Compiled:
    """A compiled sequence.

    `notes` are sentences for people: rounding, length of the night. `checks` holds one small table for each kind of
    check shot, by name: cell is -1 for the first kind, -2 for the second and so on, packet is -1, and a switch column
    is 0, which leaves the switch as it stands. Check shots play the last timelines of the set.
    """

    table: ShotTable
    timelines: TimelineSet
    notes: tuple[str, ...]
    checks: Mapping[str, ShotTable] = field(default_factory=dict)

    @property
    def with_checks(self) -> ShotTable:
        """The table with the check shots as its last rows: what a night is ordered and booked from."""
        return joined([self.table, *self.checks.values()]) if self.checks else self.table


def compile_sequence(sequence: Sequence, rig: Rig) -> Compiled:
    """Shot table and timelines of a sequence on a rig.

    Raises:
        ProblemsFound: lines the rig lacks, levels, rates, lengths or loads beyond its limits, pulses that overlap or
            leave their stage, lengths too far from whole ticks, a shot longer than the night. All of them at once,
            with the place in the sequence file.
    """
    problems = check_against_rig(sequence, rig)
    if problems:
        raise ProblemsFound(_ordered(problems))
    template = _template(sequence)
    columns, of_template = _distinct(sequence, template)
    first_check = len(of_template.first)
    count = first_check + len(sequence.checks)
    columns = {name: _with_checks(sequence, name, column) for name, column in columns.items()}
    separation = _separation(sequence, template, of_template)
    checks = ShotChecks(sequence, rig)
    ticks = np.empty(count, dtype=np.int64)
    for start in range(0, count, CHUNK):
        rows = slice(start, min(start + CHUNK, count))
        chunk = {name: column[rows] for name, column in columns.items()}
        apart = None if separation is None else separation[rows]
        ticks[rows] = checks.look_at(chunk, rows.stop - rows.start, apart)
    if checks.problems:
        raise ProblemsFound(_ordered(checks.problems))
    timelines = TimelineSet(stages=sequence.stages, rig=rig, columns=columns, count=count, ticks=ticks)
    table = _table(sequence, timelines, template, of_template.code)
    problem = _longer_than_the_night(sequence, table)
    if problem:
        raise ProblemsFound([problem])
    return Compiled(
        table=table,
        timelines=timelines,
        notes=_notes(sequence, table, checks.rounding),
        checks={
            check.name: _check_table(sequence, timelines, check, number, first_check + number)
            for number, check in enumerate(sequence.checks)
        },
    )


def _ordered(problems: list[Problem]) -> list[Problem]:
    return sorted(problems, key=lambda problem: (problem.line, problem.column))


@dataclass(frozen=True, kw_only=True)
class _Template:
    """One repeat of every cell: arrays of shape (n_cell * per_packet,), packet after packet."""

    cells: int
    per_packet: int
    settings: dict[str, FloatArray]
    switches: dict[str, SignArray]
    codes: dict[str, tuple[IntArray, int]]  # varying setting -> (number of its value, how many values)


def _template(sequence: Sequence) -> _Template:
    slow = [name for name, switch in sequence.switches.items() if switch.slow]
    fast = [name for name, switch in sequence.switches.items() if not switch.slow]
    points = prod(len(sweep) for sweep in sequence.sweeps)
    phases = len(sequence.fringe.phases_rad)
    cells, per_packet = points * 2 ** len(slow), phases * 2 ** len(fast)
    cell, inside = np.arange(cells), np.arange(per_packet)
    settings: dict[str, FloatArray] = {}
    codes: dict[str, tuple[IntArray, int]] = {}
    point, inner = cell // 2 ** len(slow), 1
    for sweep in reversed(sequence.sweeps):
        number = np.repeat((point // inner) % len(sweep), per_packet)
        inner *= len(sweep)
        for name, values in sweep.values.items():
            settings[name] = np.asarray(values, dtype=np.float64)[number]
            codes[name] = (number, len(sweep))
    readout = sequence.roles["readout"]
    phase_number = np.tile(inside // 2 ** len(fast), cells)
    settings[readout] = np.asarray(sequence.fringe.phases_rad)[phase_number]
    codes[readout] = (phase_number, phases)
    for name, setting in sequence.settings.items():
        if name not in settings:
            settings[name] = np.full(cells * per_packet, setting.rest)
    switches = {}
    for bit, name in enumerate(reversed(slow)):
        switches[name] = np.repeat((1 - 2 * ((cell >> bit) & 1)).astype(np.int8), per_packet)
    for bit, name in enumerate(reversed(fast)):
        switches[name] = np.tile((1 - 2 * ((inside >> bit) & 1)).astype(np.int8), cells)
    return _Template(
        cells=cells,
        per_packet=per_packet,
        settings={name: settings[name] for name in sequence.settings},
        switches={name: switches[name] for name in sequence.switches},
        codes=codes,
    )


@dataclass(frozen=True, kw_only=True)
class _Distinct:
    """`code`: the timeline that each template row plays; `first`: for each timeline, the first row that plays it."""

    code: IntArray
    first: IntArray


def _distinct(sequence: Sequence, template: _Template) -> tuple[dict[str, FloatArray], _Distinct]:
    """The settings that timelines depend on, one row for each distinct timeline, and who plays which."""
    used = {name for stage in sequence.stages for expression in stage.expressions() for name in expression.names}
    code = np.zeros(template.cells * template.per_packet, dtype=np.int64)
    for name in template.settings:
        if name in used and name in template.codes:
            number, size = template.codes[name]
            # numbering anew after each setting keeps the codes small, so the product never overflows
            code = np.unique(code * size + number, return_inverse=True)[1].reshape(-1)
    first = np.unique(code, return_index=True)[1]
    columns = {name: column[first] for name, column in template.settings.items() if name in used}
    return columns, _Distinct(code=code, first=first)


def _with_checks(sequence: Sequence, name: str, column: FloatArray) -> FloatArray:
    """A setting's column over timelines, with a row for each kind of check shot at the end."""
    rest = sequence.settings[name].rest
    return np.concatenate([column, [check.settings.get(name, rest) for check in sequence.checks]])


def _separation(sequence: Sequence, template: _Template, of_template: _Distinct) -> FloatArray | None:
    """Largest separation (m) met with each timeline; None where no setting plays that part."""
    name = sequence.roles.get("separation")
    if name is None:
        return None
    found = np.zeros(len(of_template.first))
    np.maximum.at(found, of_template.code, np.abs(template.settings[name]))
    return np.abs(_with_checks(sequence, name, found))


def _durations(timelines: TimelineSet, timeline: IntArray) -> FloatArray:
    """Whole cycles, s. To the picosecond, the finest tick: then 3.25 s is the float 3.25."""
    seconds: FloatArray = np.round(timelines.ticks * timelines.rig.tick_s + timelines.rig.dead_time_s, 12)[timeline]
    return seconds


def _table(sequence: Sequence, timelines: TimelineSet, template: _Template, code: IntArray) -> ShotTable:
    cells, size = template.cells, template.per_packet
    packets = _packets_of_cells(sequence, cells)
    alike = packets.min() == packets.max()

    def spread(column: "NDArray[Number]") -> "NDArray[Number]":
        """A template column for all repeats: packet after packet, the repeats of a cell together."""
        by_cell = column.reshape(cells, 1, size)
        if alike:
            return np.broadcast_to(by_cell, (cells, int(packets[0]), size)).reshape(-1)
        return np.repeat(by_cell[:, 0], packets, axis=0).reshape(-1)

    settings = {name: spread(column) for name, column in template.settings.items()}
    timeline = spread(code)
    count = int(packets.sum())
    cell = np.repeat(np.arange(cells), packets)
    first = np.cumsum(packets) - packets
    return ShotTable(
        settings=settings,
        switches={name: spread(column) for name, column in template.switches.items()},
        hold_s=settings[sequence.roles["hold"]],
        phase_rad=settings[sequence.roles["readout"]],
        duration_s=_durations(timelines, timeline),
        cell=np.repeat(cell, size),
        packet=np.repeat(np.arange(count), size),
        repeat=np.repeat(np.arange(count) - first[cell], size),
        timeline=timeline,
    )


def _packets_of_cells(sequence: Sequence, cells: int) -> IntArray:
    """How many packets each cell gets, (n_cell,)."""
    slow = 2 ** sum(switch.slow for switch in sequence.switches.values())
    point, inner = np.arange(cells) // slow, 1
    packets = np.full(cells, sequence.fringe.repeats, dtype=np.int64)
    for sweep in reversed(sequence.sweeps):
        if sweep.packets:
            packets *= np.array(sweep.packets)[(point // inner) % len(sweep)]
        inner *= len(sweep)
    return packets


def _check_table(sequence: Sequence, timelines: TimelineSet, check: Check, number: int, timeline: int) -> ShotTable:
    count = check.shots
    settings = {
        name: np.full(count, check.settings.get(name, setting.rest)) for name, setting in sequence.settings.items()
    }
    readout = settings[sequence.roles["readout"]]
    plays = np.full(count, timeline, dtype=np.int64)
    return ShotTable(
        settings=settings,
        switches={name: np.zeros(count, dtype=np.int8) for name in sequence.switches},
        hold_s=settings[sequence.roles["hold"]],
        phase_rad=np.mod(readout, 2 * np.pi),
        duration_s=_durations(timelines, plays),
        cell=np.full(count, -1 - number, dtype=np.int64),
        packet=np.full(count, -1, dtype=np.int64),
        repeat=np.arange(count),
        timeline=plays,
    )


def _longer_than_the_night(sequence: Sequence, table: ShotTable) -> Problem | None:
    hours = sequence.goal.hours
    longest = float(table.duration_s.max())
    if hours is None or longest <= hours * 3600.0:
        return None
    line, column = sequence.places.get("goal.hours", (0, 0))
    hold = format_quantity(float(table.hold_s[table.duration_s.argmax()]), "s")
    return Problem(
        file=sequence.file,
        line=line,
        column=column,
        where="goal.hours",
        message=f"the shot with hold {hold} takes {longest:.6g} s, longer than the night of {hours:g} h",
        hint="a longer night, or shorter holds",
    )


def _notes(sequence: Sequence, table: ShotTable, rounding: Rounding) -> tuple[str, ...]:
    hours = float(table.duration_s.sum()) / 3600.0
    notes = [rounding.sentence(sequence.tick_tolerance_rad)]
    if sequence.goal.hours is not None and hours > sequence.goal.hours:
        notes.append(
            f"all shots take {hours:.2f} h without settling; the night has {sequence.goal.hours:g} h, "
            "so not every repeat will run"
        )
    return tuple(notes)
