"""Several requests in one night: one running order, in which each request is as safe from drift as on its own.

Each request gets a random, spread order of its packets; these are woven by rig time (weaving.py). Then each is finished
at the times that it has in that night, just as a night of its own would be: arrangements inside packets, rhythms that
cancel, and a last draw among flips of its own wanted switch. So each request has its own group of an exact test.
"""

from collections.abc import Mapping
from collections.abc import Sequence as Items
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design import flips
from planner.design.clock import starts
from planner.design.ordering import (
    Draft,
    Effort,
    Positions,
    Progress,
    assemble,
    draft_of,
    draft_order,
    draw_notes,
    judge,
    lane_of,
    make_order,
    positions_of,
)
from planner.design.restricted import RestrictedSet
from planner.design.running_order import Kind, RunningOrder
from planner.design.weaving import Lane, Placed, on_the_clock, weave
from planner.errors import InputError, NotEnoughData
from planner.quantities import format_quantity, unit
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

MEANS = ("additive_mean", "coupled_mean", "any_period_mean")


@dataclass(frozen=True, kw_only=True)
class Part:
    """One request of a night: its shots and the sequence that they come from."""

    table: ShotTable
    sequence: Sequence


def order_night(
    parts: Items[Part], *, seed: int, effort: Effort = "full", progress: Progress | None = None
) -> RunningOrder:
    """The running order of a night of one or several requests; the same parts, seed and effort give the same order.

    Figures of a night of several: means are those of the requests' means, worst and peak those of the worst request;
    `notes["requests"]` has each request's own.

    Raises:
        InputError: two requests contradict each other about a switch or a setting.
        PlanImpossible: as make_order.
    """
    if len(parts) == 1:
        return make_order(parts[0].table, parts[0].sequence, seed=seed, effort=effort, progress=progress)
    check_together([part.sequence for part in parts])
    return _ordered(parts, seed=seed, effort=effort, progress=progress, drawn=True)


def undrawn_night(parts: Items[Part], *, seed: int) -> RunningOrder:
    """The quick order of a night before its last draw: the layout that order_night with this seed has."""
    if len(parts) == 1:
        draft = draft_order(parts[0].table, parts[0].sequence, seed=seed, effort="quick")
        return assemble(draft, np.ones(flips.units_of(draft).count), seed=seed, effort="quick", allowed=None)
    return _ordered(parts, seed=seed, effort="quick", progress=None, drawn=False)


def _ordered(parts: Items[Part], *, seed: int, effort: Effort, progress: Progress | None, drawn: bool) -> RunningOrder:
    lanes, turns, checks = _woven(parts, seed)
    found, notes, drafts = [], [], []
    for number, lane in enumerate(lanes):
        own = seed_of(seed, number)

        def told(step: str, done: float, first: float = number / len(lanes)) -> None:
            if progress is not None:
                progress(step, first + done / len(lanes))

        draft = _drafted(lane, lanes, seed=own, effort=effort, progress=told)
        allowed = None
        if drawn:
            told("drawing the flips of the wanted switch", 0.9)
            allowed = flips.restricted_set(draft, seed=own)
        rng = np.random.default_rng(np.random.SeedSequence(own, spawn_key=(4,)))
        units = flips.units_of(draft)
        signs = allowed.draw(1, rng)[0] if allowed is not None else np.ones(units.count)
        drafts.append(draft)
        found.append(positions_of(draft, signs))
        notes.append(draw_notes(allowed, units))
    return _together(drafts, found, notes, turns, checks, seed=seed, effort=effort)


def randomisation_group_of(order: RunningOrder, parts: Items[Part], number: int) -> tuple[RestrictedSet, FloatArray]:
    """The set that one request's last draw was made from, and the member that was drawn, in the units of the order.

    The n-th unit of the set is number `notes["requests"][number]["first_unit"]` + n of the order.

    Raises:
        NotEnoughData: the request wants no parity.
        InputError: the order was not made from these parts and this version of the program.
    """
    lanes, _, _ = _woven(parts, order.seed)
    own = seed_of(order.seed, number)
    draft = _drafted(lanes[number], lanes, seed=own, effort=order.notes.get("effort", "full"), progress=None)
    allowed = flips.restricted_set(draft, seed=own)
    if allowed is None:
        raise NotEnoughData(
            f"{parts[number].sequence.title}: no parity is wanted, so nothing was drawn at random at the end of "
            "ordering; name the switches of the signal in goal.wanted before the night"
        )
    mine = order.request == number
    unit = order.unit[mine] - int(order.notes["requests"][number]["first_unit"])
    inside = order.unit[mine] >= 0
    signs = np.ones(allowed.n_unit)
    signs[unit[inside]] = order.flip[mine][inside]
    rows, _ = flips.flipped_rows(draft, flips.units_of(draft), signs)
    if not np.array_equal(rows, order.shot[mine & (order.kind == int(Kind.MEASURE))]):
        raise InputError(
            f"the order of seed {order.seed} is not what these sequences give with this version of Nightfringe: use "
            "the sequence texts and the version that are stored with the night"
        )
    return allowed, signs


def check_together(sequences: Items[Sequence]) -> None:
    """Refuse requests that cannot share a night.

    Raises:
        InputError: a switch with other states, another settle time or another dwell, or a setting of another dimension.
    """
    known: dict[str, tuple[str, tuple[Any, ...]]] = {}
    for sequence in sequences:
        for name, switch in sequence.switches.items():
            says = (switch.states, switch.settle_s, switch.dwell_s)
            title, before = known.setdefault(name, (sequence.title, says))
            if before == says:
                continue
            for what, one, other in zip(("states", "settle", "dwell"), before, says, strict=True):
                if one != other:
                    shown = [_shown(one), _shown(other)]
                    raise InputError(
                        f'switch "{name}": {what} is {shown[0]} in "{title}" and {shown[1]} in "{sequence.title}"; one '
                        "night has one such switch: write the same in both sequence files"
                    )
    _check_settings(sequences)


def _shown(value: Any) -> str:
    return " / ".join(value) if isinstance(value, tuple) else format_quantity(float(value), "s")


def _check_settings(sequences: Items[Sequence]) -> None:
    units: dict[str, tuple[str, str]] = {}
    for sequence in sequences:
        for name, setting in sequence.settings.items():
            title, before = units.setdefault(name, (sequence.title, setting.unit))
            if unit(before).dimension != unit(setting.unit).dimension:
                raise InputError(
                    f'setting "{name}" is in {before or "plain numbers"} in "{title}" and in '
                    f'{setting.unit or "plain numbers"} in "{sequence.title}": rename one of them'
                )


def seed_of(seed: int, number: int) -> int:
    """The seed of one request of a night."""
    return int(np.random.SeedSequence(seed, spawn_key=(20, number)).generate_state(1)[0])


def _woven(parts: Items[Part], seed: int) -> tuple[list[Lane], IntArray, list[Placed]]:
    """Step 1 of every request with the times of the night, which lane runs each packet, and where check shots come."""
    lanes = [lane_of(part.table, part.sequence, seed=seed_of(seed, number)) for number, part in enumerate(parts)]
    turns = weave(lanes, np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(21,))))
    layouts, checks = on_the_clock(lanes, turns)
    timed = [replace(lane, layout=layout) for lane, layout in zip(lanes, layouts, strict=True)]
    return timed, turns, checks


def _drafted(lane: Lane, lanes: Items[Lane], *, seed: int, effort: Effort, progress: Progress | None) -> Draft:
    total = float(sum(one.table.duration_s[: one.table.measuring].sum() for one in lanes))
    return draft_of(lane, total_s=total, seed=seed, effort=effort, progress=progress)


def _together(
    drafts: list[Draft],
    found: list[Positions],
    notes: list[dict[str, Any]],
    turns: IntArray,
    checks: list[Placed],
    *,
    seed: int,
    effort: Effort,
) -> RunningOrder:
    turn_of = [np.flatnonzero(turns == number) for number in range(len(drafts))]
    turn = np.concatenate(
        [*(turn_of[n][one.place] for n, one in enumerate(found)), *(_full(one.rows, one.turn) for one in checks)]
    )
    # check shots come first of what shares a turn: the shot that opens a dwell stays next to it
    late = np.concatenate([*(_full(one.shot, 1) for one in found), *(_full(one.rows, 0) for one in checks)])
    order = np.lexsort((np.arange(len(turn)), late, turn))

    def column(pick: str, outside: int | None = None) -> Any:
        """A column of the positions, with what check shots have in it, in running order."""
        added = [one.rows if outside is None else _full(one.rows, outside) for one in checks]
        return np.concatenate([*(getattr(one, pick) for one in found), *added])[order]

    request = np.concatenate(
        [*(_full(one.shot, n) for n, one in enumerate(found)), *(_full(one.rows, one.lane) for one in checks)]
    )[order]
    shot, kind, unit = column("shot"), column("kind", int(Kind.CHECK)), column("unit", -1)
    first_unit = np.r_[0, np.cumsum([flips.units_of(draft).count for draft in drafts])]
    duration = np.empty(len(shot))
    for number, draft in enumerate(drafts):
        duration[request == number] = draft.table.duration_s[shot[request == number]]
    settle = np.maximum(column("settle_s", 0), _after_others(drafts, request, shot))
    start = starts(duration, settle)
    mid = start + settle + duration / 2
    figures = [
        judge(draft.table, draft.sequence, shot[mine], mid[mine], kind[mine], draft.drifts).figures()
        for number, draft in enumerate(drafts)
        for mine in [request == number]
    ]
    for number, note in enumerate(notes):
        note["title"] = drafts[number].sequence.title
        note["figures"] = figures[number]
        note["first_unit"] = int(first_unit[number])
        note["rig_s"] = float((settle + duration)[request == number].sum())
    return RunningOrder(
        request=request,
        shot=shot,
        kind=kind,
        start_s=start,
        settle_s=settle,
        duration_s=duration,
        packet=np.where(column("packet", -1) < 0, -1, turn[order]),
        unit=np.where(unit < 0, -1, unit + first_unit[request]),
        flip=column("flip", 1).astype(np.int8),
        seed=seed,
        figures=figures_of_night(figures),
        notes={"effort": effort, "requests": notes},
    )


def _full(like: IntArray, value: int) -> IntArray:
    return np.full(len(like), value, dtype=np.int64)


def figures_of_night(of_requests: Items[Mapping[str, float]]) -> dict[str, float]:
    """Figures of a night from those of its requests: the mean of means, the worst of worst ones and peaks."""
    worst = max(of_requests, key=lambda one: one["any_period_peak"])
    out = {name: float(max(one[name] for one in of_requests)) for name in worst}
    out |= {name: float(np.mean([one[name] for one in of_requests])) for name in MEANS}
    return out | {"peak_period_s": worst["peak_period_s"]}


def _after_others(drafts: list[Draft], request: IntArray, shot: IntArray) -> FloatArray:
    """Waits for settings that another request has moved meanwhile, (n_position,): where the rig does not stand as the
    shot needs it, or where nobody said how it stands."""
    wait = np.zeros(len(shot))
    for name in {name for draft in drafts for name in draft.sequence.settings}:
        value = np.full(len(shot), np.nan)
        settle = np.zeros(len(shot))
        for number, draft in enumerate(drafts):
            if name in draft.sequence.settings:
                mine = request == number
                value[mine] = draft.table.settings[name][shot[mine]]
                settle[mine] = draft.sequence.settings[name].settle_s
        moved = np.r_[True, value[1:] != value[:-1]] & np.isfinite(value)
        wait[moved] = np.maximum(wait[moved], settle[moved])
    return wait
