"""What a night measured, as columns: one row per attempt that has ended, in time order.

The time axis is the rig's: UTC anchored to uptime once per boot, zero at the night's begin. `start_s` is the moment
after the settle wait, `mid_s` half-way from there to the end.
"""

import json
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection, Text, select, type_coerce

from planner.arrays import FloatArray, IntArray
from planner.errors import LogbookConflict
from planner.logbook.documents import get_document
from planner.logbook.orders import unpack_order
from planner.logbook.plans import RequestPlan, read_requests
from planner.logbook.states import ENDS
from planner.logbook.tables import Anchor, Attempt, Night, Result, Revision

Columns = dict[str, NDArray[Any]]
MICRO = 1e-6

_RECORD = select(
    Attempt.key,
    Attempt.request_id,
    Attempt.revision,
    Attempt.position,
    Attempt.state,
    Attempt.boot,
    Attempt.settle_s,
    Result.atoms_a,
    Result.atoms_b,
    Result.background,
    Result.saturated,
    Result.started_us,
    Result.finished_us,
    Result.started_uptime_s,
    Result.finished_uptime_s,
    type_coerce(Result.readings, Text),
    type_coerce(Result.flags, Text),
).outerjoin_from(Attempt, Result, Result.attempt_id == Attempt.id)


def read_columns(connection: Connection, night_id: int) -> Columns:
    """The columns of a night.

    Returns:
        `key`, `state`, `flags` (text); `position`, `request`, `shot`, `kind`, `packet`, `cell`, `repeat`, `unit`
        (int64); `hold_s`, `phase_rad`, `start_s`, `mid_s`, `duration_s`, `atoms_a`, `atoms_b`, `background`,
        `saturated` (float64, NaN = not measured); `switch_NAME` (+1, -1; 0 where the request has no such switch);
        `setting_NAME` (SI) and `reading_NAME`. All of shape (n_attempt,).

    Raises:
        LogbookConflict: no such night.
        LogbookDamaged: a stored hash does not match.
    """
    begins_us = connection.execute(select(Night.begins_us).where(Night.id == night_id)).one_or_none()
    if begins_us is None:
        raise LogbookConflict(f"no night with number {night_id}")
    rows = connection.execute(
        _RECORD.where(Attempt.night_id == night_id, Attempt.state.in_(ENDS)).order_by(
            Attempt.position, Attempt.try_number
        )
    ).all()
    (
        key,
        request_id,
        revision,
        position,
        state,
        boot,
        settle_s,
        atoms_a,
        atoms_b,
        background,
        saturated,
        started_us,
        finished_us,
        started_uptime_s,
        finished_uptime_s,
        readings,
        flags,
    ) = zip(*rows, strict=True) if rows else [()] * 17
    requests = read_requests(connection, night_id)
    numbers = {request.id: request.number for request in requests}
    columns: Columns = {
        "key": _text(key),
        "state": _text(state),
        "flags": _text([",".join(words) for words in _parsed(flags, "[]")]),
        "position": np.array(position, dtype=np.int64),
        "request": np.array([numbers[row] for row in request_id], dtype=np.int64),
        "atoms_a": _floats(atoms_a),
        "atoms_b": _floats(atoms_b),
        "background": _floats(background),
        "saturated": _floats(saturated),
    }
    planned = _planned(connection, night_id, np.array(revision, dtype=np.int64), columns["position"])
    columns |= planned
    columns |= _from_tables(requests, columns["request"], columns["shot"])
    axis = _Axis(connection, night_id, begins_us[0] or 0)
    begun = axis.seconds(boot, started_uptime_s, started_us) + _floats(settle_s)
    ended = axis.seconds(boot, finished_uptime_s, finished_us)
    columns |= {"start_s": begun, "duration_s": ended - begun, "mid_s": (begun + ended) / 2}
    columns |= _reading_columns(_parsed(readings, "{}"))
    order = _time_order(begun)
    return {name: column[order] for name, column in columns.items()}


def _time_order(start_s: FloatArray) -> IntArray:
    """Indices by rising start; what never ran has no time of its own and stays behind the row before it."""
    rows = np.arange(len(start_s))
    timed = np.maximum.accumulate(np.where(np.isfinite(start_s), rows, -1)) if len(rows) else rows
    return np.argsort(np.where(timed < 0, -np.inf, start_s[timed]), kind="stable")


class _Axis:
    """Seconds from the night's begin, by uptime within each boot, by UTC where no uptime is on record."""

    def __init__(self, connection: Connection, night_id: int, begins_us: int) -> None:
        rows = connection.execute(
            select(Anchor.boot, Anchor.utc_us, Anchor.uptime_s).where(Anchor.night_id == night_id)
        ).all()
        self._begins_us = begins_us
        self._zero_s = {row.boot: (row.utc_us - begins_us) * MICRO - row.uptime_s for row in rows}

    def seconds(
        self, boot: Sequence[str | None], uptime_s: Sequence[float | None], utc_us: Sequence[int | None]
    ) -> FloatArray:
        zero = np.array([self._zero_s.get(name or "", np.nan) for name in boot], dtype=np.float64)
        by_uptime = zero + _floats(uptime_s)
        by_utc = np.array(
            [np.nan if time is None else (time - self._begins_us) * MICRO for time in utc_us], dtype=np.float64
        )
        return np.where(np.isfinite(by_uptime), by_uptime, by_utc)


def _planned(connection: Connection, night_id: int, revision: IntArray, position: IntArray) -> Columns:
    """What the order says at each attempt: an attempt names the revision that its position comes from."""
    names = ("shot", "kind", "packet", "unit")
    found: Columns = {name: np.zeros(len(position), dtype=np.int64) for name in names}
    rows = connection.execute(
        select(Revision.number, Revision.from_position, Revision.shot_order).where(Revision.night_id == night_id)
    ).all()
    for row in rows:
        here = revision == row.number
        if here.any():
            tail = unpack_order(get_document(connection, row.shot_order))
            for name in names:
                found[name][here] = getattr(tail, name)[position[here] - row.from_position]
    return found


def _from_tables(requests: Sequence[RequestPlan], request: IntArray, shot: IntArray) -> Columns:
    """What the shot tables say at each attempt; settings that a request lacks are NaN, switches 0."""
    size = len(shot)
    found: Columns = {name: np.zeros(size, dtype=np.int64) for name in ("cell", "repeat")}
    found |= {name: np.full(size, np.nan) for name in ("hold_s", "phase_rad")}
    for plan in requests:
        here = request == plan.number
        rows = shot[here]
        for name in ("cell", "repeat", "hold_s", "phase_rad"):
            found[name][here] = getattr(plan.table, name)[rows]
        for name, values in plan.table.settings.items():
            found.setdefault(f"setting_{name}", np.full(size, np.nan))[here] = values[rows]
        for name, signs in plan.table.switches.items():
            found.setdefault(f"switch_{name}", np.zeros(size, dtype=np.int8))[here] = signs[rows]
    return found


def _reading_columns(readings: Sequence[dict[str, Any]]) -> Columns:
    found: Columns = {}
    for row, values in enumerate(readings):
        for name, value in values.items():
            column = found.get(f"reading_{name}")
            if column is None:
                column = found[f"reading_{name}"] = np.full(len(readings), np.nan)
            if isinstance(value, int | float):
                column[row] = value
    return found


def _parsed(texts: Sequence[str | None], empty: str) -> list[Any]:
    """Many JSON texts in one reading."""
    return list(json.loads(f"[{','.join(text or empty for text in texts)}]"))


def _floats(values: Sequence[float | None]) -> FloatArray:
    return np.array(values, dtype=np.float64)  # None becomes NaN


def _text(values: Sequence[str]) -> NDArray[np.str_]:
    return np.array(values, dtype=np.str_)
