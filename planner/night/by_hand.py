"""Results of a rig with no link: a CSV that somebody wrote, read whole, all its problems at once.

The columns are those of `nightfringe export`; the manual's chapter on the logbook lists them.
"""

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import Any

import numpy as np

from planner.design.running_order import Kind, RunningOrder
from planner.errors import Problem, ProblemsFound, QuantityError
from planner.logbook.booking import NewNight, NewRequest
from planner.logbook.documents import sha256
from planner.logbook.driving import Outcome
from planner.logbook.recording import HandEnd
from planner.night.csv_cells import rows
from planner.quantities import from_unit, nearest, unit
from planner.sequence.table import ShotTable

NEEDED = ("hold_s", "phase_deg", "atoms_a", "atoms_b")
TIMES = ("start_utc", "start_s")
OPTIONAL = ("duration_s", "background", "saturated", "flags", "state", "kind", "packet", "cell")
# written by an export and worked out anew here
PASSED_OVER = ("key", "position", "request", "shot", "repeat", "unit", "mid_s", "phase_rad")
GROUPS = ("setting_", "switch_", "reading_")
WITH_UNIT = re.compile(r"(?P<group>setting|reading)_(?P<name>[^\[\]]+?)(?: \[(?P<unit>[^\[\]]*)\])?$")
STATES = ("done", "failed")
MOST_PROBLEMS = 200
MOST_ROWS = 1_000_000
KINDS = {"measure": Kind.MEASURE, "warm-up": Kind.WARM_UP, "check": Kind.CHECK, "sounding": Kind.SOUNDING}


@dataclass(frozen=True, kw_only=True)
class Recorded:
    """A night as written down, ready to be stored."""

    night: NewNight
    ends: tuple[HandEnd, ...]
    readings: dict[str, str]


@dataclass(kw_only=True)
class _Reader:
    """One file being read: its columns, and what is wrong with it."""

    file: str
    problems: list[Problem] = field(default_factory=list)
    columns: dict[str, list[Any]] = field(default_factory=dict)

    def problem(self, line: int, column: int, where: str, message: str, hint: str = "") -> None:
        if len(self.problems) < MOST_PROBLEMS:
            self.problems.append(
                Problem(file=self.file, line=line, column=column, where=where, message=message, hint=hint)
            )


def parse_record(text: str, file: str, *, name: str, rig: str, begins_us: int) -> Recorded:
    """Read results written down by hand.

    Args:
        file: the name that problems carry.
        begins_us: the night's begin for a file that gives `start_s` alone, microseconds since 1970 UTC.

    Raises:
        ProblemsFound: with every problem of the file, line and column each.
    """
    reader = _Reader(file=file)
    lines = rows(text)
    head = next(lines, None)
    if head is None:
        raise ProblemsFound([Problem(file=file, line=0, column=0, where="", message="the file is empty")])
    header_line, header = head
    names = _names(reader, header_line, header)
    for number, cells in lines:
        if len(reader.columns.get("line", [])) >= MOST_ROWS:
            reader.problem(number, 1, "", f"more than {MOST_ROWS:,} rows")
            break
        _read_row(reader, names, number, cells)
    if not reader.columns.get("line") and not reader.problems:
        reader.problem(header_line, 1, "", "no shots below the header")
    switches = _switches(reader)
    if reader.problems:
        raise ProblemsFound(sorted(reader.problems, key=lambda one: (one.line, one.column)))
    return _assemble(reader, names, switches, text, name=name, rig=rig, begins_us=begins_us)


def _names(reader: _Reader, line: int, header: list[tuple[str, int]]) -> list[str]:
    """The columns by name; problems for those that are unknown, missing or there twice."""
    known = (*NEEDED, *TIMES, *OPTIONAL)
    names = []
    for text, column in header:
        if text in names:
            reader.problem(line, column, text, "this column is there twice")
        elif text.startswith(GROUPS):
            _check_group(reader, line, column, text)
        elif text not in known and text not in PASSED_OVER:
            close = nearest(text, known)
            hint = f'did you mean "{close}"?' if close else f"columns: {', '.join(known)}, and {', '.join(GROUPS)}NAME"
            reader.problem(line, column, text, "unknown column", hint)
        names.append(text)
    for needed in NEEDED:
        if needed not in names:
            reader.problem(line, 1, needed, "this column is missing")
    if not any(time in names for time in TIMES):
        reader.problem(line, 1, "start_utc", "a column start_utc or start_s is missing")
    return names


def _check_group(reader: _Reader, line: int, column: int, text: str) -> None:
    if text.startswith("switch_"):
        return
    match = WITH_UNIT.match(text)
    if match is None:
        reader.problem(line, column, text, 'expected a name such as "setting_lattice_depth [Er]"')
        return
    if match["group"] == "setting":
        try:
            unit(match["unit"] or "")
        except QuantityError as error:
            reader.problem(line, column, text, str(error))


def _read_row(reader: _Reader, names: list[str], line: int, cells: list[tuple[str, int]]) -> None:
    if len(cells) != len(names):
        reader.problem(line, 1, "", f"found {len(cells)} cells, the header has {len(names)}")
        return
    reader.columns.setdefault("line", []).append(line)
    for name, (text, column) in zip(names, cells, strict=True):
        if name in PASSED_OVER:
            continue
        try:
            value = _read_cell(name, text)
        except ValueError as error:
            reader.problem(line, column, name, str(error))
            value = None
        reader.columns.setdefault(name, []).append(value)


def _read_cell(name: str, text: str) -> Any:
    """The value of one cell; ValueError says what was expected."""
    if name.startswith("switch_"):
        if not text:
            raise ValueError("the state of a switch is missing")
        return text
    return _CELLS.get(name, _number_or_none)(text)


def _number_or_none(text: str) -> float | None:
    return None if not text else _number(text)


def _number(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise ValueError(f"expected a number, found {text[:40]!r}") from None
    if not math.isfinite(value):
        raise ValueError(
            f"expected a finite number, found {text[:40]!r}; leave a cell empty where nothing was measured"
        )
    return value


def _positive(text: str) -> float:
    value = _number(text)
    if value < 0:
        raise ValueError(f"expected a number that is not negative, found {text[:40]!r}")
    return value


def _utc(text: str) -> int:
    try:
        time = datetime.fromisoformat(text)
    except ValueError:
        raise ValueError(f'expected a time such as "2026-12-01T20:15:00Z", found {text[:40]!r}') from None
    if time.tzinfo is None:
        raise ValueError(f"the time {text[:40]!r} has no zone; write Z for UTC, or an offset such as +01:00")
    return round((time - datetime(1970, 1, 1, tzinfo=UTC)).total_seconds() * 1e6)


def _state(text: str) -> str:
    if text and text not in STATES:
        raise ValueError(f"expected done or failed, found {text[:40]!r}")
    return text or "done"


def _kind(text: str) -> int:
    if text and text not in KINDS:
        raise ValueError(f"expected one of {', '.join(KINDS)}, found {text[:40]!r}")
    return int(KINDS[text or "measure"])


def _whole(text: str) -> int:
    if not re.fullmatch(r"-?\d{1,12}", text):
        raise ValueError(f"expected a whole number, found {text[:40]!r}")
    return int(text)


def _flags(text: str) -> list[str]:
    return [flag.strip() for flag in text.split(",") if flag.strip()]


_CELLS: dict[str, Callable[[str], Any]] = {
    "hold_s": _positive,
    "phase_deg": _number,
    "start_utc": _utc,
    "start_s": _positive,
    "duration_s": _positive,
    "state": _state,
    "kind": _kind,
    "packet": _whole,
    "cell": _whole,
    "flags": _flags,
}


def _switches(reader: _Reader) -> dict[str, list[str]]:
    """The two states of every switch, in the order of their words; more than two are a problem."""
    found = {}
    for name, column in reader.columns.items():
        if name.startswith("switch_"):
            states = sorted({state for state in column if state})
            if len(states) > 2:
                line = next(at for at, state in zip(reader.columns["line"], column, strict=True) if state == states[2])
                reader.problem(line, 1, name, f"a switch has two states; found {', '.join(states[:5])}")
            found[name.removeprefix("switch_")] = [*states, *("other", "another")][:2]
    return found


def _assemble(
    reader: _Reader,
    names: list[str],
    switches: dict[str, list[str]],
    text: str,
    *,
    name: str,
    rig: str,
    begins_us: int,
) -> Recorded:
    columns = reader.columns
    count = len(columns["line"])
    hold_s = np.array(columns["hold_s"], dtype=np.float64)
    phase_rad = np.mod(np.deg2rad(np.array(columns["phase_deg"], dtype=np.float64)), 2 * np.pi)
    if "start_utc" in columns:
        begins_us = min(columns["start_utc"])
        start_s = (np.array(columns["start_utc"]) - begins_us) / 1e6
    else:
        start_s = np.array(columns["start_s"], dtype=np.float64)
    duration_s = np.array(columns.get("duration_s", columns["hold_s"]), dtype=np.float64)
    settings, units = _settings(columns)
    signs = {
        switch: np.array([1 if state == states[0] else -1 for state in columns[f"switch_{switch}"]], dtype=np.int8)
        for switch, states in switches.items()
    }
    cell = np.array(columns["cell"]) if "cell" in columns else _cells(hold_s, settings, signs)
    packet = np.array(columns["packet"]) if "packet" in columns else _packets(cell, phase_rad)
    zeros = np.zeros(count, dtype=np.int64)
    table = ShotTable(
        settings=settings,
        switches=signs,
        hold_s=hold_s,
        phase_rad=phase_rad,
        duration_s=duration_s,
        cell=cell.astype(np.int64),
        packet=packet.astype(np.int64),
        repeat=zeros,
        timeline=zeros,
    )
    order = RunningOrder(
        request=zeros,
        shot=np.arange(count),
        kind=np.array(columns.get("kind", [int(Kind.MEASURE)] * count), dtype=np.int64),
        start_s=start_s,
        settle_s=np.zeros(count),
        duration_s=duration_s,
        packet=packet.astype(np.int64),
        unit=np.full(count, -1, dtype=np.int64),
        flip=np.ones(count, dtype=np.int8),
        seed=0,
    )
    readings = {
        match["name"]: match["unit"] or ""
        for match in map(WITH_UNIT.match, names)
        if match is not None and match["group"] == "reading"
    }
    request = NewRequest(
        title=f"recorded by hand: {reader.file}",
        sequence_text=text,
        table=table,
        timelines=[],
        goal="curve",
        seed=0,
        details={
            "settings": {setting: {"unit": units[setting], "settle_s": 0.0} for setting in settings},
            "switches": {
                switch: {"states": states, "settle_s": 0.0, "dwell_s": 0.0} for switch, states in switches.items()
            },
            "roles": {},
        },
        kind="record",
    )
    night = NewNight(
        name=name,
        rig=rig,
        rig_text=None,
        link="",
        length_s=float(np.max(start_s + duration_s)),
        requests=[request],
        order=order,
        why="recorded by hand",
        source="hand",
    )
    ends = tuple(
        _end(columns, row, begins_us=begins_us, start_s=float(start_s[row]), duration_s=float(duration_s[row]))
        for row in range(count)
    )
    return Recorded(night=night, ends=ends, readings=readings)


def _settings(columns: dict[str, list[Any]]) -> tuple[dict[str, Any], dict[str, str]]:
    values, units = {}, {}
    for name, column in columns.items():
        match = WITH_UNIT.match(name)
        if match is not None and match["group"] == "setting":
            units[match["name"]] = match["unit"] or ""
            values[match["name"]] = from_unit(np.array(column, dtype=np.float64), units[match["name"]])
    return values, units


def _cells(hold_s: Any, settings: dict[str, Any], switches: dict[str, Any]) -> Any:
    """A number for every distinct hold, set of settings and state; the readout phase is not among them by its name."""
    kept = [column for name, column in settings.items() if "phase" not in name and "readout" not in name]
    stacked = np.stack([hold_s, *kept, *(signs.astype(float) for signs in switches.values())])
    return np.unique(np.nan_to_num(stacked, nan=-1.0), axis=1, return_inverse=True)[1].reshape(-1)


def _packets(cell: Any, phase_rad: Any) -> Any:
    """Neighbours of one cell are a packet until a phase comes again."""
    packet, number, seen = np.empty(len(cell), dtype=np.int64), -1, set[float]()
    for row, phase in enumerate(np.round(phase_rad, 6).tolist()):
        if row == 0 or cell[row] != cell[row - 1] or phase in seen:
            number, seen = number + 1, set()
        seen.add(phase)
        packet[row] = number
    return packet


def _end(columns: dict[str, list[Any]], row: int, *, begins_us: int, start_s: float, duration_s: float) -> HandEnd:
    def cell(name: str) -> Any:
        return columns[name][row] if name in columns else None

    started_us = begins_us + round(start_s * 1e6)
    readings = {}
    for name in columns:
        match = WITH_UNIT.match(name)
        if match is not None and match["group"] == "reading":
            readings[match["name"]] = cell(name)
    said = [str(cell(name)) for name in sorted(columns)]
    outcome = Outcome(
        answer_sha256=sha256("\n".join(said).encode()),
        atoms_a=cell("atoms_a"),
        atoms_b=cell("atoms_b"),
        background=cell("background"),
        saturated=cell("saturated"),
        started_us=started_us,
        finished_us=started_us + round(duration_s * 1e6),
        readings=readings,
        flags=cell("flags") or [],
    )
    return HandEnd(state=cell("state") or "done", outcome=outcome)
