"""A night as series in time: one value per packet of phase, contrast, offset, atoms, noise and every reading.

Phase, contrast, offset and atoms differ from cell to cell by design (hold, swept settings, switch states), and that is
no instability. So each cell's own level is taken off, told apart from the drift of the night, and the residuals of all
cells make one series.
"""

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from scipy import special

from planner.analysis.data import NightData, fractions, shot_variance
from planner.analysis.fringe import Fringes, fit_fringes, group_sums, phase_half_width
from planner.analysis.holds import NEVER
from planner.analysis.results import fringe_groups, measure_noise
from planner.analysis.stability_cells import LEAST_PER_CELL, cell_levels, cell_residuals
from planner.arrays import BoolArray, FloatArray, IntArray
from planner.errors import InputError, NotEnoughData

MEASURED = ("phase", "contrast", "offset", "atoms", "noise")
UNITS = {"phase": "rad", "contrast": "", "offset": "", "atoms": "relative", "noise": "x shot noise"}
SPARSE = 0.05  # share of packets without a value up to which their slots stay empty
PASSES = 20
SETTLED = 1e-4  # rad
LOST_STEP = 2 * np.pi / 3  # a phase step beyond this may as well be one the other way round ...
LOST_SHARE = 0.01  # ... and with more than this share of such steps a phase is not followed


@dataclass(frozen=True, kw_only=True)
class Series:
    """One quantity over the night. Arrays of shape (n_packet,), in time order; NaN where a packet has no value."""

    name: str
    unit: str
    values: FloatArray
    shot_sd: FloatArray  # what counting atoms alone scatters it by; NaN where that has no meaning
    notes: tuple[str, ...]  # what was done to it, in plain words


@dataclass(frozen=True, kw_only=True)
class Clock:
    """When the packets were, and their place on a regular grid."""

    time_s: FloatArray  # (n_packet,) middle of each packet
    slot: IntArray  # (n_packet,) ascending; a pause leaves slots empty; -1 for a packet that is passed over
    step_s: float  # mean time from packet to packet, pauses left out
    shortest_s: float  # 5 % and 95 % points of the time from one packet's start to the next's
    longest_s: float
    pauses: int
    passed_over: int

    def on_grid(self, values: FloatArray) -> FloatArray:
        """Values (n_packet,) by slot, (n_slot,), NaN where empty."""
        grid = np.full(int(self.slot.max()) + 1, np.nan)
        placed = self.slot >= 0
        grid[self.slot[placed]] = values[placed]
        return grid


def packet_clock(start_s: FloatArray, end_s: FloatArray, held: BoolArray) -> Clock:
    """Packets in order, each one slot; a pause longer than half a step leaves as many slots empty as fit in it.

    Packets of long holds last longer, and that is no gap: only idle time between packets, beyond the usual, is one. A
    packet without a value leaves its slot empty. Where more than one in twenty has none, that would leave no long
    average; those packets are then passed over, and the others take a slot each.

    Args:
        start_s, end_s: of each packet, (n_packet,), starts ascending. held: whether it has a value, (n_packet,).
    """
    sparse = bool(held.mean() < 1 - SPARSE)
    placed = held if sparse and held.sum() > 1 else np.ones(len(held), dtype=np.bool_)
    cycle = np.diff(start_s[placed])
    idle = np.maximum(start_s[1:] - end_s[:-1], 0)
    lost = np.concatenate([[0.0], np.cumsum(np.maximum(idle - np.median(idle), 0))])
    extra = np.diff(lost[placed])
    usual = max(float(np.mean(cycle - extra)), 1e-9)
    empty = np.rint(extra / usual).astype(np.int64)
    kept = cycle - np.where(empty > 0, extra, 0)
    shortest, longest = np.quantile(kept, [0.05, 0.95])
    slot = np.full(len(held), -1, dtype=np.int64)
    slot[placed] = np.concatenate([[0], np.cumsum(1 + empty)])
    return Clock(
        time_s=(start_s + end_s) / 2,
        slot=slot,
        step_s=float(kept.mean()),
        shortest_s=float(shortest),
        longest_s=float(longest),
        pauses=int((empty > 0).sum()),
        passed_over=int((~placed).sum()),
    )


class NightSeries:
    """The packets of a night, ready to be asked for any series.

    Args:
        data: shots that count (`choose`), in any order.

    Raises:
        NotEnoughData: fewer than two packets, or shots without a start time.
    """

    def __init__(self, data: NightData) -> None:
        timed = int(np.isfinite(data.start_s).sum())
        if timed < len(data):
            raise NotEnoughData(
                f"{len(data) - timed} of {len(data)} shots have no start time on record: a series needs all of them"
            )
        order = np.argsort(data.start_s, kind="stable")
        self._data = data.rows(order)
        self._packet = _packets(self._data)
        self._count = int(self._packet.max()) + 1 if len(self._packet) else 0
        if self._count < 2:
            raise NotEnoughData(f"the night has {self._count} packet(s) with shots that count: stability needs many")
        start = _least(self._data.start_s, self._packet, self._count)
        last = -_least(-_ends(self._data), self._packet, self._count)
        rank = np.argsort(start, kind="stable")
        self._packet = np.argsort(rank, kind="stable")[self._packet]
        self._start_s, self._end_s = start[rank], last[rank]
        self._time_s = (self._start_s + self._end_s) / 2

    def __len__(self) -> int:
        return self._count

    def clock_of(self, held: BoolArray) -> Clock:
        """The grid for a series with values in these packets, (n_packet,)."""
        return packet_clock(self._start_s, self._end_s, held)

    @property
    def reading_names(self) -> tuple[str, ...]:
        return tuple(sorted(self._data.readings))

    def get(self, name: str) -> Series:
        """The series of that name: one of `MEASURED` or a reading.

        Raises:
            InputError: no such name. NotEnoughData: it was not measured, or a phase cannot be followed.
        """
        if name == "atoms":
            return self._atoms()
        if name in MEASURED:
            return self._of_fringes(name)
        reading = name.removeprefix("reading_")
        if reading not in self._data.readings:
            known = ", ".join((*MEASURED, *self.reading_names))
            raise InputError(f'the night has no series "{name}"; there are {known}')
        values = self._means(self._data.readings[reading])
        if not np.isfinite(values).any():
            raise NotEnoughData(f'the reading "{reading}" was logged with no shot that counts')
        return Series(name=reading, unit="", values=values, shot_sd=np.full(self._count, np.nan), notes=())

    def reading_residual(self, name: str) -> FloatArray:
        """A reading about its cells' levels, (n_packet,), as the measured series are; NaN where it has none."""
        values = self._means(self._data.readings[name])
        return cell_residuals(values, self.cells)[0]

    @cached_property
    def cells(self) -> IntArray:
        """Cell of each packet, (n_packet,): request, cell of the plan."""
        key = np.stack([self._data.request, self._data.cell])
        label = np.unique(key, axis=1, return_inverse=True)[1].ravel()
        first = np.zeros(self._count, dtype=np.int64)
        first[self._packet[::-1]] = label[::-1]
        return first

    def _means(self, column: FloatArray) -> FloatArray:
        good = np.isfinite(column)
        held = np.bincount(self._packet[good], minlength=self._count)
        sums = group_sums(self._packet[good], column[good], self._count)
        return np.asarray(np.where(held > 0, sums / np.maximum(held, 1), np.nan))

    def _atoms(self) -> Series:
        total = self._data.atoms
        mean = self._means(total)
        shots = np.bincount(self._packet, minlength=self._count)
        residual, usable = cell_residuals(np.log(mean), self.cells)
        _need_cells(usable, "atoms")
        return Series(
            name="atoms",
            unit=UNITS["atoms"],
            values=residual,
            shot_sd=1 / np.sqrt(np.maximum(mean * shots, 1)),
            notes=_cell_notes(self.cells, usable, "logarithm, each cell's own level taken off"),
        )

    @cached_property
    def _fringes(self) -> tuple[Fringes, IntArray, IntArray, float]:
        """Fringes with projection noise as variance; packet and cell (with fast switch states) of each; noise."""
        data = self._data
        if (data.packet < 0).any() and _interleaved(data):
            raise NotEnoughData(
                "the shots of this night are not in packets: a fringe is spread over the night and has no one time; "
                "--of atoms and --of READING still have"
            )
        group, count = fringe_groups(data)
        y = fractions(data)
        flat = fit_fringes(data.phase_rad, y, shot_variance(data), group, count)
        solved = flat.solved[group]
        turn = flat.phase_rad[group] + data.phase_rad
        expected = flat.offset[group] + flat.contrast_plain[group] / 2 * np.cos(turn)
        variance = shot_variance(data, expected=np.where(solved, expected, 0.5))
        fringes = fit_fringes(data.phase_rad, y, variance, group, count)
        if not fringes.solved.any():
            raise NotEnoughData("no packet has three different readout phases with a usable result: there is no fringe")
        noise = measure_noise(fringes)
        first = np.zeros(count, dtype=np.int64)
        first[group[::-1]] = np.arange(len(data))[::-1]
        keys = [data.request[first], data.cell[first]]
        for name in sorted(data.switches):
            column = data.switches[name].astype(np.int64)
            pure = group_sums(group, column.astype(float), count) / np.bincount(group, minlength=count)
            keys.append(np.where(np.abs(pure) == 1, column[first], 0))
        cell = np.unique(np.stack(keys), axis=1, return_inverse=True)[1].ravel()
        return fringes, self._packet[first], cell, (noise.multiple if noise else 1.0)

    def _of_fringes(self, name: str) -> Series:
        fringes, packet, cell, noise = self._fringes
        if name == "noise":
            return self._noise(fringes, packet)
        when = self._time_s[packet]
        bad = spoilt(fringes)
        notes = (
            [f"{int(bad.sum())} fringes left out whose own shots scatter far beyond the others'"] if bad.any() else []
        )
        fringes = replace(fringes, solved=fringes.solved & ~bad)
        variance = np.full(len(fringes), np.nan)
        if name == "offset":
            raw, variance = np.where(fringes.solved, fringes.offset, np.nan), fringes.covariance[:, 0, 0]
        elif name == "contrast":
            raw = np.where(fringes.solved, fringes.contrast_plain, np.nan)
            variance = 4 * _along(fringes, across=False)
        else:
            power = fringes.amplitude_squared / (fringes.quadrature_variance * max(noise, 1.0) ** 2)
            stands = fringes.solved & (phase_half_width(np.nan_to_num(power)) < np.pi)
            if not stands.any():
                raise NotEnoughData("no packet's fringe stands out of its noise: there is no phase to follow")
            raw = np.where(stands, fringes.phase_rad, np.nan)
            variance = _along(fringes, across=True) / np.maximum(fringes.amplitude_squared, 1e-300)
            if (fringes.solved & ~stands).any():
                notes.append(f"{int((fringes.solved & ~stands).sum())} fringes do not stand out and have no phase")
            raw = follow_phase(raw, when, cell)
        order = np.argsort(when, kind="stable")
        residual, usable = np.empty(len(raw)), np.empty(len(raw), dtype=np.bool_)
        residual[order], usable[order] = cell_residuals(raw[order], cell[order])
        _need_cells(usable, name)
        weight = np.where(usable & np.isfinite(variance) & (variance > 0), 1 / variance, 0.0)
        held = group_sums(packet, weight, self._count)
        values = group_sums(packet, weight * np.nan_to_num(residual), self._count) / np.maximum(held, 1e-300)
        return Series(
            name=name,
            unit=UNITS[name],
            values=np.where(held > 0, values, np.nan),
            shot_sd=np.where(held > 0, 1 / np.sqrt(np.maximum(held, 1e-300)), np.nan),
            notes=(*_cell_notes(cell, usable, "each cell's own level taken off"), *notes),
        )

    def _noise(self, fringes: Fringes, packet: IntArray) -> Series:
        dof = group_sums(packet, fringes.dof.astype(float), self._count)
        if not dof.any():
            raise NotEnoughData("no packet has more shots than the three numbers of a fringe: there is no scatter")
        chi = group_sums(packet, np.where(fringes.dof > 0, fringes.chi_squared, 0.0), self._count)
        known = dof > 0
        return Series(
            name="noise",
            unit=UNITS["noise"],
            values=np.where(known, np.sqrt(chi / np.maximum(dof, 1)), np.nan),
            shot_sd=np.where(known, 1 / np.sqrt(2 * np.maximum(dof, 1)), np.nan),
            notes=("scatter of a packet's shots about their fringe",),
        )


def spoilt(fringes: Fringes) -> BoolArray:
    """Fringes whose residual is beyond what white noise ever does (a laser out of lock for one shot), (n,).

    A residual is independent of the fringe's offset, contrast and phase, so nothing is left out for its value.
    """
    judged = fringes.solved & (fringes.dof > 0)
    if not judged.any():
        return np.zeros(len(fringes), dtype=np.bool_)
    dof = np.maximum(fringes.dof, 1).astype(float)
    usual = float(np.median(fringes.chi_squared[judged] / special.chdtri(dof[judged], 0.5)))
    limit = special.chdtri(dof, NEVER) * max(usual, 1e-12)
    return np.asarray(judged & (np.nan_to_num(fringes.chi_squared) > limit))


def follow_phase(phase_rad: FloatArray, time_s: FloatArray, cell: IntArray) -> FloatArray:
    """Phases about their cell's mean direction, whole turns undone; NaN stays NaN. Shape of `phase_rad`.

    Where all phases keep within three eighths of a turn of their cell's mean there is nothing to undo. Else the phase
    is followed in time, which is refused where more than one step in a hundred is longer than a third of a turn.

    Raises:
        NotEnoughData: the phase moves too far from packet to packet to be followed.
    """
    found = np.full(len(phase_rad), np.nan)
    good = np.flatnonzero(np.isfinite(phase_rad))
    direction = _directions(phase_rad[good], cell[good])
    about = np.angle(np.exp(1j * (phase_rad[good] - direction)))
    if (np.abs(about) < 0.75 * np.pi).all():
        found[good] = about
        return found
    order = np.argsort(time_s[good], kind="stable")
    label = np.unique(cell[good], return_inverse=True)[1].ravel()
    for _ in range(PASSES):  # cells' directions and the common path in turn, until they agree
        path = np.unwrap(about[order])
        step = np.abs(np.diff(path))
        shift = cell_levels(path, label[order])[label]
        shift -= shift.mean()
        if np.abs(shift).max() < SETTLED:
            break
        direction = direction + shift
        about = np.angle(np.exp(1j * (phase_rad[good] - direction)))
    if np.mean(step > LOST_STEP) > LOST_SHARE:
        raise NotEnoughData(
            f"{int((step > LOST_STEP).sum())} of {len(step)} steps of the phase from packet to packet are longer than "
            "a third of a turn: it cannot be told which way it went, so there is no phase series. Shorter holds, or "
            "packets closer in time, can be followed"
        )
    found[good[order]] = path
    return found


def _directions(phase_rad: FloatArray, cell: IntArray) -> FloatArray:
    count = int(cell.max()) + 1 if len(cell) else 0
    mean = group_sums(cell, np.cos(phase_rad), count) + 1j * group_sums(cell, np.sin(phase_rad), count)
    return np.asarray(np.angle(mean)[cell])


def _along(fringes: Fringes, *, across: bool) -> FloatArray:
    """Variance of the quadrature along the fringe's own direction or across it, (n,)."""
    c, s = np.cos(fringes.phase_rad), -np.sin(fringes.phase_rad)
    if across:
        c, s = -s, c
    own = fringes.covariance
    return np.asarray(c**2 * own[:, 1, 1] + 2 * c * s * own[:, 1, 2] + s**2 * own[:, 2, 2])


def _need_cells(usable: BoolArray, name: str) -> None:
    if not usable.any():
        raise NotEnoughData(
            f"no cell has {LEAST_PER_CELL} packets with a value: nothing repeats, so {name} that differs by design "
            "cannot be told from drift"
        )


def _cell_notes(cell: IntArray, usable: BoolArray, done: str) -> tuple[str, ...]:
    used, every = len(np.unique(cell[usable])), len(np.unique(cell))
    if used < every:
        return (f"{done} ({used} cells; {every - used} with fewer than {LEAST_PER_CELL} packets left out)",)
    return (f"{done} ({used} cell{'' if used == 1 else 's'})",)


def _packets(data: NightData) -> IntArray:
    """Packet of each shot, numbered from 0; shots outside packets are each their own."""
    loose = data.packet < 0
    lone = np.where(loose, np.arange(len(data)), -1)
    key = np.stack([data.request, np.where(loose, -1, data.packet), lone])
    return np.asarray(np.unique(key, axis=1, return_inverse=True)[1].ravel(), dtype=np.int64)


def _interleaved(data: NightData) -> bool:
    """Whether shots outside packets that share a fringe have other shots between them."""
    loose = data.rows(data.packet < 0)
    key = np.stack([loose.request, loose.cell, loose.repeat])
    group = np.unique(key, axis=1, return_inverse=True)[1].ravel()
    return int((np.diff(group) != 0).sum()) + 1 > len(np.unique(group))


def _ends(data: NightData) -> FloatArray:
    """When each shot ended; the next shot's start at the latest, where no duration is on record."""
    following = np.append(data.start_s[1:], data.start_s[-1])
    return np.asarray(np.where(np.isfinite(data.duration_s), data.start_s + data.duration_s, following))


def _least(values: FloatArray, group: IntArray, count: int) -> FloatArray:
    found = np.full(count, np.inf)
    np.minimum.at(found, group, values)
    return found
