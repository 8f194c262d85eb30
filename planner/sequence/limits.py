"""Duty and load over a running order: what single shots keep, a night of them may still break.

The order is walked in pieces, so memory does not grow with its length. Within a shot the exact segments count; a ramp
is taken as its mean level, which is wrong by less than one ramp's load.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.errors import LimitExceeded
from planner.quantities import format_quantity, unit
from planner.sequence.compiler import Compiled
from planner.sequence.model import Line, Rig
from planner.sequence.table import ShotTable
from planner.sequence.timeline import TimelineSet

HOUR_S = 3600.0
PIECE = 16_384  # positions looked at together
SLACK = 1e-9  # relative; an order that just touches a limit must not fail by rounding


@dataclass(frozen=True)
class _Limit:
    """One bound on a line: at most `allowed` within any `window_s`."""

    line: Line
    kind: str  # "duty" or "load"
    window_s: float
    allowed: float


def check_order_limits(
    compiled: Compiled, rig: Rig, start_s: FloatArray, shot: IntArray, *, settle_s: FloatArray | None = None
) -> None:
    """Check duty and load of every line over a running order of one sequence: as `check_night_limits`."""
    request = np.zeros(len(shot), dtype=np.int64)
    check_night_limits([(compiled.with_checks, compiled.timelines)], rig, request, start_s, shot, settle_s=settle_s)


def check_night_limits(
    requests: Sequence[tuple[ShotTable, TimelineSet]],
    rig: Rig,
    request: IntArray,
    start_s: FloatArray,
    shot: IntArray,
    *,
    settle_s: FloatArray | None = None,
) -> None:
    """Check duty and load of every line over a running order.

    Args:
        requests: shots and timelines of every request of the night.
        rig: its limits.
        request: which request each position belongs to, shape (n_position,).
        start_s: when each position starts, ascending, shape (n_position,), s.
        shot: the row of its request's shot table that each position runs, shape (n_position,).
        settle_s: wait before the timeline plays, counted within the position; zero if None.

    Raises:
        LimitExceeded: names the position, the shot, the line, what was found and what is allowed.
    """
    driven = tuple(dict.fromkeys(name for _, timelines in requests for name in timelines.lines))
    limits = list(_limits(rig, driven))
    if not limits or len(shot) == 0:
        return
    plays = start_s if settle_s is None else start_s + settle_s
    walkers = {limit: _Walker(limit) for limit in limits}
    for first in range(0, len(shot), PIECE):
        piece = np.arange(first, min(first + PIECE, len(shot)))
        found: dict[_Limit, list[tuple[FloatArray, FloatArray, FloatArray]]] = {limit: [] for limit in limits}
        for number, (table, timelines) in enumerate(requests):
            mine = piece[request[piece] == number]
            if not len(mine):
                continue
            distinct, which = np.unique(table.timeline[shot[mine]], return_inverse=True)
            edges = timelines.edges(distinct)
            for limit in limits:
                if limit.line.name not in timelines.lines:
                    continue
                track = edges.tracks[limit.line.name]
                lengths = (track.lengths(edges.ticks) * rig.tick_s).astype(np.float64)
                offsets = (track.start * rig.tick_s).astype(np.float64)
                away = np.where(track.away(limit.line), lengths, 0.0)
                amount = away if limit.kind == "duty" else track.load(limit.line, lengths)
                starts = (plays[mine, np.newaxis] + offsets.T[which]).reshape(-1)
                found[limit].append((starts, lengths.T[which].reshape(-1), amount.T[which].reshape(-1)))
        for limit, pieces in found.items():
            if pieces:
                start, length, load = (np.concatenate(column) for column in zip(*pieces, strict=True))
                order = np.argsort(start, kind="stable") if len(pieces) > 1 else slice(None)
                walkers[limit].walk(start[order], length[order], load[order], shot, plays)


def _limits(rig: Rig, driven: tuple[str, ...]) -> Iterator[_Limit]:
    for name in driven:
        line = rig.lines[name]
        if line.duty_window_s > 0 and line.duty_limit < 1:
            yield _Limit(line, "duty", line.duty_window_s, line.duty_limit * line.duty_window_s)
        if line.load_per_hour < float("inf"):
            yield _Limit(line, "load", HOUR_S, line.load_per_hour)


class _Walker:
    """Carries the last window's worth of segments of one line from piece to piece."""

    def __init__(self, limit: _Limit) -> None:
        self.limit = limit
        self.start = self.end = self.rate = np.empty(0)

    def walk(
        self, start: FloatArray, length: FloatArray, amount: FloatArray, shot: IntArray, plays: FloatArray
    ) -> None:
        """Take the next segments in time order; raise LimitExceeded if any window that they fill holds too much."""
        some = (amount > 0) & (length > 0)
        self.start = np.concatenate([self.start, start[some]])
        self.end = np.concatenate([self.end, start[some] + length[some]])
        self.rate = np.concatenate([self.rate, amount[some] / length[some]])
        if len(self.start) == 0:
            return
        window = self.limit.window_s
        # cumulative amount: grows within segments, flat between them
        knots = np.column_stack([self.start, self.end]).reshape(-1)
        grown = np.cumsum(self.rate * (self.end - self.start))
        total = np.column_stack([np.concatenate([[0.0], grown[:-1]]), grown]).reshape(-1)
        # the sum in a sliding window only turns from growing to falling where the window opens with a segment or
        # closes with one, so these moments are all that need looking at
        opens = np.concatenate([self.start, self.end - window])
        sums = np.interp(opens + window, knots, total) - np.interp(opens, knots, total)
        worst = int(np.argmax(sums))
        if sums[worst] > self.limit.allowed * (1 + SLACK):
            self._refuse(float(opens[worst]), float(sums[worst]), shot, plays)
        keep = self.end > self.end[-1] - window
        self.start, self.end, self.rate = self.start[keep], self.end[keep], self.rate[keep]

    def _refuse(self, opens_s: float, found: float, shot: IntArray, plays: FloatArray) -> None:
        limit, line = self.limit, self.limit.line
        position = max(int(np.searchsorted(plays, opens_s + limit.window_s)) - 1, 0)
        if limit.kind == "duty":
            said = f"away from rest for {found / limit.window_s:.1%} of {limit.window_s:g} s"
            allowed = f"{line.duty_limit:.1%}"
        else:
            factor = unit(line.unit).factor
            said = f"loaded with {found / factor:.4g} {line.unit} s within an hour"
            allowed = f"{line.load_per_hour / factor:.4g} {line.unit} s"
        raise LimitExceeded(
            f"position {position} (shot {int(shot[position])}, at {format_quantity(opens_s + limit.window_s, 's')}): "
            f'line "{line.name}" has then been {said}; the rig file allows {allowed}. '
            "Longer pauses, or fewer demanding shots in a row, would keep it."
        )
