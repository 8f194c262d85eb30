"""Units of the restricted draw: what is flipped, what a flip does to the shots, and what it does to the figures."""

from collections.abc import Sequence as Items
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from planner.arrays import FloatArray, IntArray, SignArray
from planner.design.arrangements import walk_cost
from planner.design.drift import Prior, added_variance, period_grid, suffix_sums
from planner.design.effects import Effect, coupled_pair, effects_of
from planner.design.quality import any_period
from planner.design.restricted import FlipPart, RestrictedSet
from planner.sequence.model import Sequence

if TYPE_CHECKING:
    from planner.design.ordering import Draft

RHYTHM_WORK = 4e6  # units times effects times frequencies of the any-period bar; longer nights watch fewer frequencies


@dataclass(frozen=True, kw_only=True)
class Units:
    """switch: which is flipped, None where no parity is wanted; of_packet (n_packet,) in running order; count."""

    switch: str | None
    slow: bool
    of_packet: IntArray
    count: int


def flipping_switch(sequence: Sequence) -> str | None:
    """The switch that the last draw flips: the first fast one of the wanted parity, else its first one."""
    wanted = sequence.goal.wanted
    fast = [name for name in wanted if not sequence.switches[name].slow]
    return fast[0] if fast else wanted[0] if wanted else None


def units_of(draft: "Draft") -> Units:
    """Packets for a fast switch, sets of dwells for a slow one, none without a wanted parity."""
    switch = flipping_switch(draft.sequence)
    n = len(draft.layout.packet)
    if switch is None:
        return Units(switch=None, slow=False, of_packet=np.full(n, -1, dtype=np.int64), count=0)
    if draft.sequence.switches[switch].slow:
        sets = draft.layout.dwell_set
        return Units(switch=switch, slow=True, of_packet=sets, count=int(sets.max()) + 1)
    return Units(switch=switch, slow=False, of_packet=np.arange(n), count=n)


def flipped_rows(draft: "Draft", units: Units, signs: FloatArray) -> tuple[IntArray, SignArray]:
    """Table rows of the measured shots in running order, and each one's sign, after flips: both (n_shot,).

    A flip of a fast switch gives every shot of the packet the row of the same phase and the other state; a flip of a
    slow switch exchanges packets between the dwells of a set.
    """
    layout, packets = draft.layout, draft.packets
    order = layout.packet.copy()
    if units.slow and units.switch is not None:
        order = _exchange(draft, units.switch, signs)
    flips = units.switch is not None and not units.slow
    partner = {number: _partners(draft, number, units.switch) for number in draft.shapes} if flips else {}
    rows: list[IntArray] = []
    for place, packet in enumerate(order):
        inside = draft.arrangement[place]
        if flips and signs[place] < 0:
            inside = partner[int(packets.shape[packet])][inside]
        rows.append(packets.first[packet] + inside)
    sizes = packets.size[order]
    sign = np.ones(len(order)) if units.switch is None else signs[units.of_packet]
    return np.concatenate(rows), np.repeat(sign, sizes).astype(np.int8)


def _partners(draft: "Draft", shape: int, switch: str | None) -> IntArray:
    """For each row of a packet the one with the same phase and the other state of the switch."""
    first = int(draft.packets.shape_rows[shape])
    size = draft.shapes[shape].pool.shape[1]
    rows = slice(first, first + size)
    names = [name for name, one in draft.sequence.switches.items() if not one.slow]
    phase = draft.table.phase_rad[rows]
    states = {name: draft.table.switches[name][rows] for name in names}
    turned = {name: -column if name == switch else column for name, column in states.items()}
    here = {key: i for i, key in enumerate(_keys([phase, *states.values()]))}
    return np.array([here[key] for key in _keys([phase, *turned.values()])], dtype=np.int64)


def _keys(columns: Items[FloatArray | SignArray]) -> list[tuple[float, ...]]:
    seen: dict[tuple[float, ...], int] = {}
    keys = []
    for values in zip(*columns, strict=True):
        key = tuple(round(float(value), 9) for value in values)
        seen[key] = seen.get(key, 0) + 1
        keys.append((*key, float(seen[key])))  # a phase that stands twice in a packet keeps its places apart
    return keys


def _exchange(draft: "Draft", switch: str, signs: FloatArray) -> IntArray:
    """Packets in running order after exchanging states inside the flipped sets of dwells."""
    layout, packets = draft.layout, draft.packets
    state = draft.table.switches[switch][packets.first[layout.packet]]
    slow = [name for name, one in draft.sequence.switches.items() if one.slow and name != switch]
    others = np.zeros(len(state), dtype=np.int64)
    for name in slow:
        others = 2 * others + (draft.table.switches[name][packets.first[layout.packet]] < 0)
    order = layout.packet.copy()
    for number in np.flatnonzero(signs < 0):
        places = np.flatnonzero(layout.dwell_set == number)
        queue: dict[tuple[int, int, int], list[int]] = {}
        for place in places:
            key = (int(packets.point[layout.packet[place]]), int(state[place]), int(others[place]))
            queue.setdefault(key, []).append(int(layout.packet[place]))
        for place in places:
            key = (int(packets.point[layout.packet[place]]), -int(state[place]), int(others[place]))
            order[place] = queue[key].pop(0)
    return order


def restricted_set(draft: "Draft", *, seed: int) -> RestrictedSet | None:
    """The set that the last draw is made from; None where no switch is wanted."""
    units = units_of(draft)
    if units.switch is None:
        return None
    rows, _ = flipped_rows(draft, units, np.ones(units.count))
    shots = _Shots(draft, rows)
    touched = [effect for effect in shots.effects if units.switch in effect.parity]
    still = [effect for effect in shots.effects if units.switch not in effect.parity]
    points = int(draft.packets.point.max()) + 1
    grid = _rhythms(draft, units.count * (len(touched) if units.slow else len(touched) / points))
    parts = _slow_part(draft, units, shots, grid) if units.slow else _fast_parts(draft, grid)
    return RestrictedSet(
        parts,
        units.count,
        night=None if units.slow else _night_part(draft, units, shots, grid),
        background=any_period(still, shots.mid_s, grid / (2 * np.pi)) * len(still),
        effects=len(shots.effects),
        seed=seed,
    )


class _Shots:
    """The measured shots of a draft in running order, and their effects; arrays (n_shot,)."""

    def __init__(self, draft: "Draft", rows: IntArray) -> None:
        layout, packets = draft.layout, draft.packets
        sizes = packets.size[layout.packet]
        inside = np.arange(len(rows)) - np.repeat(np.cumsum(sizes) - sizes, sizes)
        cycle = np.repeat(packets.cycle_s[layout.packet], sizes)
        self.mid_s = np.repeat(layout.start_s, sizes) + (inside + 0.5) * cycle
        self.place = np.repeat(np.arange(len(sizes)), sizes)
        self.phase_rad = draft.table.phase_rad[rows]
        switches = {name: states[rows] for name, states in draft.table.switches.items()}
        self.effects = list(effects_of(np.repeat(packets.point[layout.packet], sizes), self.phase_rad, switches))
        self._drifts = draft.drifts
        factor = draft.drifts.per_acceleration
        self._factor = None if factor is None else factor[rows]

    def coupled(self, effect: Effect, weights: FloatArray) -> list[tuple[FloatArray, Prior]]:
        """What coupled drift meets in weights (..., n_row) of an effect, and which drift: two quadratures each."""
        pair = coupled_pair(weights, self.phase_rad[effect.rows])
        met = [(row, self._drifts.coupled) for row in pair]
        if self._factor is not None:
            met += [(row * self._factor[effect.rows], self._drifts.acceleration) for row in pair]
        return met


def _rhythms(draft: "Draft", met: float) -> FloatArray:
    """Angular frequencies of the any-period bar, evenly spread; met: units times the effects that each meets."""
    grid = 2 * np.pi * period_grid(draft.total_s)
    step = max(1, int(np.ceil(met * len(grid) / RHYTHM_WORK)))
    return grid[step // 2 :: step]


def _fast_parts(draft: "Draft", grid: FloatArray) -> list[FlipPart]:
    """A part for each point: packets that sum to zero, so that walks of drift add a constant and rhythms the rest."""
    from planner.design.ordering import slow_signs

    layout, packets, drifts = draft.layout, draft.packets, draft.drifts
    slow = slow_signs(draft.table, draft.sequence, packets.first[layout.packet])
    point = packets.point[layout.packet]
    shape = packets.shape[layout.packet]
    parts = []
    for number in np.unique(point):
        places = np.flatnonzero(point == number)
        one = draft.shapes[int(shape[places[0]])]
        picked = np.flatnonzero(one.patterns.flips)
        arrangements = np.array([draft.arrangement[place] for place in places])
        weights = one.patterns.rows[picked][:, arrangements] / np.sqrt(len(places))  # (pattern, unit, size)
        walk = walk_cost(one.patterns.rows[picked], arrangements).mean(axis=1) * one.cycle_s
        is_coupled = one.patterns.coupled[picked]
        coupled_prior = drifts.coupled_at(int(packets.first[layout.packet[places[0]]]))
        walk *= np.where(is_coupled, coupled_prior.rate, drifts.additive.rate)
        inside: FloatArray = (np.arange(arrangements.shape[1], dtype=np.float64) + 0.5) * one.cycle_s
        features: list[FloatArray] = []
        constant: list[float] = []
        additive: list[bool] = []
        rhythm = []
        for parity in range(slow.shape[1]):
            signed = weights * slow[places, parity][None, :, None]
            for effect in np.unique(one.patterns.effect[picked]):
                mine = one.patterns.effect[picked] == effect
                for prior, kind in ((drifts.additive, False), (coupled_prior, True)):
                    rows = np.flatnonzero(mine & (is_coupled == kind))
                    if not len(rows):
                        continue
                    features.append(
                        np.concatenate(
                            [_responses(signed[row], inside, layout.start_s[places], prior) for row in rows], axis=1
                        )
                    )
                    constant.append(float(walk[rows].sum()))
                    additive.append(not kind)
                    if not kind:
                        turning = np.exp(1j * np.outer(inside, grid))
                        started = np.exp(1j * np.outer(layout.start_s[places], grid))
                        rhythm.append(((signed[rows[0]] @ turning) * started).astype(np.complex64))
        parts.append(
            FlipPart(
                units=places,
                features=_padded(features),
                constant=np.array(constant),
                additive=np.array(additive, dtype=np.bool_),
                rhythm=np.array(rhythm),
            )
        )
    return parts


def _night_part(draft: "Draft", units: Units, shots: _Shots, grid: FloatArray) -> FlipPart:
    """The effects of the whole night, in which all units meet; packets sum to zero, so walks add a constant."""
    first = np.flatnonzero(np.diff(units.of_packet[shots.place], prepend=-1))

    def per_unit(weights: FloatArray, omega: FloatArray) -> "np.typing.NDArray[np.complex128]":
        return np.asarray(np.add.reduceat(weights[:, None] * np.exp(1j * np.outer(shots.mid_s, omega)), first, axis=0))

    features, constant, additive, rhythm = [], [], [], []
    for effect in shots.effects:
        if effect.point >= 0 or units.switch not in effect.parity:
            continue
        for heard in ([(effect.weights, draft.drifts.additive)], shots.coupled(effect, effect.weights)):
            responses = [per_unit(row, prior.omega) * np.sqrt(prior.power) for row, prior in heard]
            features.append(np.concatenate([part for one in responses for part in (one.real, one.imag)], axis=1))
            constant.append(sum(float(added_variance(row, shots.mid_s, prior.walk)) for row, prior in heard))
            additive.append(len(heard) == 1)
        chunks = np.array_split(grid, max(1, len(grid) * len(shots.mid_s) // 4_000_000))
        rhythm.append(np.concatenate([per_unit(effect.weights, some).astype(np.complex64) for some in chunks], axis=1))
    return FlipPart(
        units=np.arange(units.count),
        features=_padded(features),
        constant=np.array(constant),
        additive=np.array(additive, dtype=np.bool_),
        rhythm=np.array(rhythm),
    )


def _responses(weights: FloatArray, inside: FloatArray, start_s: FloatArray, prior: Prior) -> FloatArray:
    """Features (n_unit, 2 n_period) of the declared rhythms for weights (n_unit, size)."""
    response = (weights @ np.exp(1j * np.outer(inside, prior.omega))) * np.exp(1j * np.outer(start_s, prior.omega))
    response = response * np.sqrt(prior.power)
    return np.concatenate([response.real, response.imag], axis=1)


def _padded(features: list[FloatArray]) -> FloatArray:
    widest = max(feature.shape[1] for feature in features)
    return np.array([np.pad(feature, ((0, 0), (0, widest - feature.shape[1]))) for feature in features])


def _slow_part(draft: "Draft", units: Units, shots: _Shots, grid: FloatArray) -> list[FlipPart]:
    """One part: sets of dwells meet in every effect, and do not sum to zero: the full quadratic form, taken apart."""
    drifts = draft.drifts
    unit = units.of_packet[shots.place]
    effects = [effect for effect in shots.effects if units.switch in effect.parity]
    features, additive, rhythm = [], [], []
    for effect in effects:
        times, owner = shots.mid_s[effect.rows], unit[effect.rows]
        split = np.zeros((units.count, len(owner)))
        split[owner, np.arange(len(owner))] = effect.weights
        features.append(_taken_apart(_form(split, times, drifts.additive)))
        additive.append(True)
        forms = [_form(row, times, prior) for row, prior in shots.coupled(effect, split)]
        features.append(_taken_apart(np.sum(forms, axis=0)))
        additive.append(False)
        rhythm.append((split @ np.exp(1j * np.outer(times, grid))).astype(np.complex64))
    return [
        FlipPart(
            units=np.arange(units.count),
            features=_padded(features),
            constant=np.zeros(len(features)),
            additive=np.array(additive, dtype=np.bool_),
            rhythm=np.array(rhythm),
        )
    ]


def _form(split: FloatArray, mid_s: FloatArray, prior: Prior) -> FloatArray:
    """Q (n_unit, n_unit) of the added variance z'Qz, for weights split by unit (n_unit, n_shot)."""
    sums = suffix_sums(split)
    form: FloatArray = prior.rate * (sums * np.diff(mid_s, prepend=0.0)) @ sums.T
    if prior.periods_s:
        response = (split @ np.exp(1j * np.outer(mid_s, prior.omega))) * np.sqrt(prior.power)
        form = form + response.real @ response.real.T + response.imag @ response.imag.T
    return form


def _taken_apart(form: FloatArray) -> FloatArray:
    """Features (n_unit, n_feature) whose squared sums give z'Qz, large ones first: eigenvectors times root values."""
    values, vectors = np.linalg.eigh(form)
    kept = np.flatnonzero(values > max(float(values[-1]), 0.0) * 1e-12)[::-1]
    return np.asarray(vectors[:, kept] * np.sqrt(values[kept]))
