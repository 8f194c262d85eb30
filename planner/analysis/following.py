"""Following a fringe through a night: which turn each packet lies on, and how its phase walked.

A packet gives its phase only up to whole turns, and a packet at mid-fringe only up to which slope it lies on. Between
packets the laser's phase walks, and an acceleration (tilt, tide) walks and moves each hold by its own scale factor. So
the path is found by a Kalman filter that keeps many hypotheses on turns and slopes at once, and weighs them by how well
they predicted what came.

The phase is the one common to all states of the wanted switch; nothing here looks at what differs between them.
"""

from dataclasses import dataclass

import numpy as np
from scipy import optimize

from planner.arrays import FloatArray, IntArray
from planner.errors import InputError, NotEnoughData

SEARCHED = 300  # packets that the rates of the walks are searched on
HYPOTHESES = 64  # kept after each packet; the weight beyond is lost
NEARBY = np.arange(-2, 3)  # turns looked at about the nearest
WIDE = 10.0  # rad^2, of a hold's phase before its first packet: wider than a circle
TURN = 2 * np.pi
NONE = -300.0  # log weight of a hypothesis that is not there


@dataclass(frozen=True, kw_only=True)
class Walk:
    """How fast things walk: variance per second of the laser's phase, rad^2/s, and of the acceleration, (m/s^2)^2/s."""

    phase: float
    acceleration: float


@dataclass(frozen=True, kw_only=True)
class Packets:
    """What packets say of the phase, in time order; arrays of shape (n_packet,) but for `candidates`.

    candidates (n_packet, n_candidate): phases in rad that the packet allows, up to whole turns, NaN where there are
    fewer: one for a full fringe, two at mid-fringe. sigma_rad: standard deviation of each. scale: rad per m/s^2. known:
    acceleration that is known, such as the predicted tide, m/s^2.
    """

    time_s: FloatArray
    hold: IntArray  # 0 .. n_hold - 1
    candidates: FloatArray
    sigma_rad: FloatArray
    scale: FloatArray
    known: FloatArray

    def __post_init__(self) -> None:
        size = len(self.time_s)
        for name in ("hold", "candidates", "sigma_rad", "scale", "known"):
            if len(getattr(self, name)) != size:
                raise InputError(f"{name} has {len(getattr(self, name))} rows, time_s has {size}")
        if size and (np.diff(self.time_s) < 0).any():
            raise InputError("packets must be in time order")
        if np.isnan(self.candidates).all(axis=1).any():
            raise InputError("a packet allows no phase at all: leave such packets out first")

    def __len__(self) -> int:
        return len(self.time_s)

    def stretch(self, most: int) -> "Packets":
        """At most so many packets from the middle of the night, their holds numbered anew."""
        first = max(0, (len(self) - most) // 2)
        here = slice(first, first + most)
        return Packets(
            time_s=self.time_s[here],
            hold=np.unique(self.hold[here], return_inverse=True)[1],
            candidates=self.candidates[here],
            sigma_rad=self.sigma_rad[here],
            scale=self.scale[here],
            known=self.known[here],
        )


@dataclass(frozen=True, kw_only=True)
class Followed:
    """The likeliest path; arrays of shape (n_packet,)."""

    phase_rad: FloatArray  # unwrapped, the known acceleration's part left in
    turns: IntArray  # whole turns added to the packet's own phase
    candidate: IntArray  # which of the packet's phases it was
    predicted_rad: FloatArray  # before the packet was seen
    predicted_sigma_rad: FloatArray  # of the phase itself, the packet's own noise not counted
    surprise: FloatArray  # what it was off, over what was expected
    chance: FloatArray  # that turn and slope are right, from the hypotheses that survived
    log_likelihood: float
    walk: Walk

    @property
    def wraps(self) -> int:
        """How often the path passes into another turn."""
        return int(np.abs(np.diff(np.floor(self.phase_rad / TURN + 0.5))).sum())


def follow(packets: Packets, walk: Walk, *, hypotheses: int = HYPOTHESES) -> Followed:
    """The likeliest path through turns and slopes.

    Args:
        packets: at least one. walk: how fast phase and acceleration walk.

    Returns:
        Followed.

    Raises:
        NotEnoughData: no packet.

    References:
        Kalman, J. Basic Eng. 82, 35 (1960); hypotheses kept by weight: Reid, IEEE Trans. Autom. Control 24, 843 (1979)
        (both from memory).
    """
    if not len(packets):
        raise NotEnoughData("no packet says anything of the phase: there is no fringe to follow")
    count, holds = len(packets), int(packets.hold.max()) + 1
    # state: a phase for each hold, the laser's walk and the acceleration's, both from where they were at first
    size = holds + 2
    mean = np.zeros((1, size))
    covariance = np.diag([WIDE] * holds + [0.0, 0.0])
    weight = np.zeros(1)
    steps: list[_Step] = []
    spread = np.empty(count)
    total, before = 0.0, packets.time_s[0]
    seen = np.zeros(holds, dtype=bool)
    for n in range(count):
        passed, before = packets.time_s[n] - before, packets.time_s[n]
        covariance[-2, -2] += walk.phase * passed
        covariance[-1, -1] += walk.acceleration * passed
        hold = packets.hold[n]
        look = np.zeros(size)
        look[hold], look[-2], look[-1] = 1.0, 1.0, packets.scale[n]
        across = covariance @ look
        own = float(look @ across)
        variance = own + packets.sigma_rad[n] ** 2
        expected = mean @ look + packets.scale[n] * packets.known[n]
        allowed = packets.candidates[n][np.isfinite(packets.candidates[n])]
        nearest = np.round((expected[:, None] - allowed) / TURN)
        # the first packet of a hold sets its phase: all turns are the same then
        extra = NEARBY if seen[hold] else np.zeros(1, dtype=np.int64)
        turn = nearest[:, :, None] + extra
        off = allowed[None, :, None] + TURN * turn - expected[:, None, None]
        score = weight[:, None, None] - 0.5 * off**2 / variance - 0.5 * np.log(variance)
        seen[hold] = True
        flat = np.argsort(-score, axis=None)[:hypotheses]
        parent, slope, _ = np.unravel_index(flat, score.shape)
        best = score.ravel()[flat]
        top = best[0]
        shift = top + np.log(np.exp(best - top).sum())
        total += float(shift)
        alive = best - shift > NONE
        parent, slope, flat = parent[alive], slope[alive], flat[alive]
        weight = best[alive] - shift
        gain = across / variance
        mean = mean[parent] + off.ravel()[flat][:, None] * gain
        covariance = covariance - np.outer(gain, across)
        steps.append(
            _Step(
                parent=parent,
                turn=turn.ravel()[flat].astype(np.int64),
                slope=slope,
                predicted=expected[parent],
                surprise=off.ravel()[flat] / np.sqrt(variance),
            )
        )
        spread[n] = np.sqrt(own)
    chosen = int(np.argmax(weight))
    share = np.exp(weight - weight.max())
    share /= share.sum()
    turns, slopes = np.empty(count, dtype=np.int64), np.empty(count, dtype=np.int64)
    predicted, surprise, chance = np.empty(count), np.empty(count), np.empty(count)
    line = np.arange(len(weight))  # where each surviving hypothesis stood after packet n
    for n in range(count - 1, -1, -1):
        step = steps[n]
        mine = line[chosen]
        turns[n], slopes[n] = step.turn[mine], step.slope[mine]
        predicted[n], surprise[n] = step.predicted[mine], step.surprise[mine]
        chance[n] = share[(step.turn[line] == turns[n]) & (step.slope[line] == slopes[n])].sum()
        line = step.parent[line]
    candidate = _column(packets, slopes)
    return Followed(
        phase_rad=packets.candidates[np.arange(count), candidate] + TURN * turns,
        turns=turns,
        candidate=candidate,
        predicted_rad=predicted,
        predicted_sigma_rad=spread,
        surprise=surprise,
        chance=chance,
        log_likelihood=total,
        walk=walk,
    )


@dataclass(frozen=True, kw_only=True)
class _Step:
    """What each hypothesis kept after a packet says of that packet; arrays of shape (n_hypothesis,)."""

    parent: IntArray  # where it stood after the packet before
    turn: IntArray
    slope: IntArray
    predicted: FloatArray
    surprise: FloatArray


def _column(packets: Packets, slope: IntArray) -> IntArray:
    """The column of `candidates` that the slope-th finite one of each row stands in, (n_packet,)."""
    place = np.cumsum(np.isfinite(packets.candidates), axis=1) - 1
    return np.asarray(np.argmax(place >= slope[:, None], axis=1), dtype=np.int64)


def follow_fitted(packets: Packets) -> Followed:
    """The path with the rates of both walks that make the night likeliest.

    Rates are searched on a grid from nothing to a turn between packets and refined from its best point; of a long night
    a stretch of SEARCHED packets from its middle is looked at for that.
    """
    if len(packets) < 3:
        return follow(packets, Walk(phase=0.0, acceleration=0.0))
    searched = packets.stretch(SEARCHED)
    gap = max(float(np.median(np.diff(packets.time_s))), 1e-6)
    reach = max(float(np.abs(packets.scale).max()), 1e-300)
    noise = max(float(np.median(packets.sigma_rad)) ** 2, 1e-12)
    # in units of the phase variance that a packet's gap adds at the longest hold
    steps = [0.0, *(noise * np.geomspace(1e-2, 1e2, 5))]
    steps = [step for step in steps if step <= np.pi**2]
    moving = np.ptp(packets.scale) > 1e-9 * reach

    def at(phase: float, acceleration: float, kept: int = 8) -> Followed:
        return follow(searched, rates(phase, acceleration), hypotheses=kept)

    def rates(phase: float, acceleration: float) -> Walk:
        return Walk(phase=phase / gap, acceleration=acceleration / gap / reach**2)

    pairs = [(one, other) for one in steps for other in (steps if moving else [0.0])]
    best: tuple[float, float] = max(pairs, key=lambda pair: at(*pair).log_likelihood)
    floor = noise * 1e-6
    free = [k for k in range(2) if best[k] > 0]
    if free:

        def cost(logs: FloatArray) -> float:
            pair = list(best)
            for k, log in zip(free, logs, strict=True):
                pair[k] = float(np.exp(np.clip(log, np.log(floor), np.log(np.pi**2))))
            return -at(pair[0], pair[1]).log_likelihood

        start = np.log([best[k] for k in free])
        found = optimize.minimize(cost, start, method="Nelder-Mead", options={"xatol": 0.05, "fatol": 0.01})
        refined = list(best)
        for k, log in zip(free, found.x, strict=True):
            refined[k] = float(np.exp(log))
        best = (refined[0], refined[1])
    return follow(packets, rates(*best))
