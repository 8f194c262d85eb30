"""Sequence and rig to shot table and timelines: everything that can be refused before a shot is sent, is refused here.

A cell is one point of the crossed sweeps in one state of the slow switches; a packet is one cell at every readout
phase in every state of the fast switches. The table holds `repeats` packets of every cell, packet after packet.
"""

from dataclasses import dataclass
from math import prod

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.errors import Problem, ProblemsFound
from planner.quantities import format_quantity
from planner.sequence.against_rig import check_against_rig
from planner.sequence.model import Rig, Sequence
from planner.sequence.shot_checks import Rounding, ShotChecks
from planner.sequence.table import ShotTable
from planner.sequence.timeline import TimelineSet

CHUNK = 65_536  # timelines looked at together: bounds the memory, not the answer


@dataclass(frozen=True, kw_only=True)
class Compiled:
    """A compiled sequence. `notes` are sentences for people: rounding, length of the night."""

    table: ShotTable
    timelines: TimelineSet
    notes: tuple[str, ...]


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
    timelines, of_template = _timelines(sequence, rig, template)
    checks = ShotChecks(sequence, rig)
    ticks = np.empty(len(timelines), dtype=np.int64)
    for start in range(0, len(timelines), CHUNK):
        rows = slice(start, min(start + CHUNK, len(timelines)))
        chunk = {name: column[rows] for name, column in timelines.columns.items()}
        separation = _separation(sequence, template, of_template, rows)
        ticks[rows] = checks.look_at(chunk, rows.stop - rows.start, separation)
    if checks.problems:
        raise ProblemsFound(_ordered(checks.problems))
    timelines = TimelineSet(
        stages=sequence.stages, rig=rig, columns=timelines.columns, count=len(timelines), ticks=ticks
    )
    table = _table(sequence, rig, template, of_template, ticks)
    problem = _longer_than_the_night(sequence, table)
    if problem:
        raise ProblemsFound([problem])
    return Compiled(table=table, timelines=timelines, notes=_notes(sequence, table, checks.rounding))


def _ordered(problems: list[Problem]) -> list[Problem]:
    return sorted(problems, key=lambda problem: (problem.line, problem.column))


@dataclass(frozen=True, kw_only=True)
class _Template:
    """One repeat of every cell: arrays of shape (n_cell * per_packet,), packet after packet."""

    cells: int
    per_packet: int
    settings: dict[str, FloatArray]
    switches: dict[str, "np.typing.NDArray[np.int8]"]
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


def _timelines(sequence: Sequence, rig: Rig, template: _Template) -> tuple[TimelineSet, IntArray]:
    """The distinct timelines, lengths not yet known, and which of them each template row plays."""
    used = {name for stage in sequence.stages for expression in stage.expressions() for name in expression.names}
    rows = template.cells * template.per_packet
    code = np.zeros(rows, dtype=np.int64)
    for name in template.settings:
        if name in used and name in template.codes:
            number, size = template.codes[name]
            # numbering anew after each setting keeps the codes small, so the product never overflows
            code = np.unique(code * size + number, return_inverse=True)[1].reshape(-1)
    first = np.unique(code, return_index=True)[1]
    columns = {name: template.settings[name][first] for name in template.settings if name in used}
    none = np.zeros(len(first), dtype=np.int64)
    return TimelineSet(stages=sequence.stages, rig=rig, columns=columns, count=len(first), ticks=none), code


def _separation(sequence: Sequence, template: _Template, of_template: IntArray, rows: slice) -> FloatArray | None:
    """Largest separation (m) met with each timeline of `rows`; None where no setting plays that part."""
    name = sequence.roles.get("separation")
    if name is None:
        return None
    column = np.abs(template.settings[name])
    if name not in template.codes:
        return np.full(rows.stop - rows.start, column[0])
    found = np.zeros(rows.stop - rows.start)
    inside = (of_template >= rows.start) & (of_template < rows.stop)
    np.maximum.at(found, of_template[inside] - rows.start, column[inside])
    return found


def _table(sequence: Sequence, rig: Rig, template: _Template, of_template: IntArray, ticks: IntArray) -> ShotTable:
    cells, size, repeats = template.cells, template.per_packet, sequence.fringe.repeats

    def spread(column: "np.typing.NDArray[np.generic]") -> "np.typing.NDArray[np.generic]":
        """A template column for all repeats: packet after packet, the repeats of a cell together."""
        packets = column.reshape(cells, 1, size)
        return np.broadcast_to(packets, (cells, repeats, size)).reshape(-1)

    settings = {name: spread(column) for name, column in template.settings.items()}
    timeline = spread(of_template)
    packet = np.repeat(np.arange(cells * repeats), size)
    return ShotTable(
        settings=settings,  # type: ignore[arg-type]
        switches={name: spread(column) for name, column in template.switches.items()},  # type: ignore[misc]
        hold_s=settings[sequence.roles["hold"]],  # type: ignore[arg-type]
        phase_rad=settings[sequence.roles["readout"]],  # type: ignore[arg-type]
        duration_s=(ticks * rig.tick_s + rig.dead_time_s)[timeline],
        cell=packet // repeats,
        packet=packet,
        repeat=packet % repeats,
        timeline=timeline,  # type: ignore[arg-type]
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
