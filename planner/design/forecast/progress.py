"""How far a night has come by a time: packets of each hold, and how drift stands in their way.

Two ways of drift reach a contrast. Inside a packet it adds to the noise of its shots: the added variance of the
packet's own contrast weights (design/drift.py), averaged over the fringe's phase, which differs from packet to packet.
From packet to packet a drift of the contrast moves the holds together: their covariance.
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.drift import Prior, suffix_sums
from planner.design.forecast.night import Night, drifts

POINTS = 48  # times at which the errors are given


@dataclass(frozen=True, kw_only=True)
class Progress:
    """Packets complete by each time: counts (n_time, n_hold) at holds (n_hold,) and times (n_time,) in s.

    inside (n_hold,): variance that drift adds inside packets, over that of the shots' noise. common (n_time, n_hold,
    n_hold): covariance of the holds' mean contrast drift, in single-shot noise squared; None without such drift.
    """

    time_s: FloatArray
    hold_s: FloatArray
    counts: IntArray
    shots: IntArray  # shots of one packet at each hold
    inside: FloatArray
    common: FloatArray | None = None


def times_of(night: Night, end_s: float | None = None, points: int = POINTS) -> FloatArray:
    """Evenly spaced times up to a night's last packet, or to end_s."""
    return np.linspace(0.0, float(night.done_s.max()) if end_s is None else end_s, points + 1)[1:]


def progress_of(night: Night, time_s: FloatArray) -> Progress:
    """How many packets of each hold are complete by each time."""
    first = np.flatnonzero(np.diff(night.packet, prepend=-1))
    size = np.diff(np.r_[first, len(night)])
    hold, which = np.unique(night.hold_s[first], return_inverse=True)
    which = which.reshape(-1)
    done = night.done_s[first]
    counts = np.array([np.bincount(which[done <= time], minlength=len(hold)) for time in time_s], dtype=np.int64)
    added = _inside(night, first, size)
    return Progress(
        time_s=time_s,
        hold_s=hold,
        counts=counts,
        shots=np.array([int(size[which == k].max()) for k in range(len(hold))]),
        inside=np.bincount(which, weights=added) / np.bincount(which),
        common=_common(night, first, size, which, counts, time_s) if drifts(night.drift.contrast) else None,
    )


def _inside(night: Night, first: IntArray, size: IntArray) -> FloatArray:
    """Added variance of each packet's contrast, over its shots' noise, averaged over the fringe's phase: (n_packet,).

    At a fringe phase phi the contrast's weights are sqrt(2/n) cos(theta + phi); drift of the phase reaches a shot by
    -sqrt2 sin(theta + phi), so that its weights are -sin(2 theta + 2 phi) / sqrt n.
    """
    out = np.zeros(len(first))
    for n in np.unique(size):
        mine = np.flatnonzero(size == n)
        rows = first[mine, None] + np.arange(n)
        time = night.mid_s[rows] - night.mid_s[rows[:, :1]]
        theta = night.phase_rad[rows]
        for prior, order, share in (
            (night.drift.additive, 1, np.sqrt(2 / n)),
            (night.drift.phase, 2, np.sqrt(1 / n)),
            (night.drift.acceleration, 2, np.sqrt(1 / n) * night.per_acceleration[rows]),
        ):
            if drifts(prior):
                for wave in (np.cos(order * theta), np.sin(order * theta)):
                    out[mine] += _row_variance(share * wave, time, prior) / 2
    return out


def _row_variance(weights: FloatArray, time_s: FloatArray, prior: Prior) -> FloatArray:
    """w'Kw for each row of weights and times (n, n_shot): `added_variance` where every row has its own times."""
    out = prior.rate * (suffix_sums(weights) ** 2 * np.diff(time_s, prepend=0.0, axis=-1)).sum(axis=-1)
    for omega, power in zip(prior.omega, prior.power, strict=True):
        out = out + power * np.abs((weights * np.exp(1j * omega * time_s)).sum(axis=-1)) ** 2
    return np.asarray(out)


def _common(
    night: Night, first: IntArray, size: IntArray, which: IntArray, counts: IntArray, time_s: FloatArray
) -> FloatArray:
    """Covariance (n_time, n_hold, n_hold) of the mean contrast drift of the packets complete by each time."""
    prior, done = night.drift.contrast, night.done_s[first]
    mid = np.add.reduceat(night.mid_s, first) / size
    step, turning = np.diff(mid, prepend=0.0), np.exp(1j * np.outer(mid, prior.omega))
    out = np.zeros((len(time_s), counts.shape[1], counts.shape[1]))
    for k, time in enumerate(time_s):
        weights = (which == np.arange(counts.shape[1])[:, None]) * (done <= time) / np.maximum(counts[k], 1)[:, None]
        sums, turned = suffix_sums(weights), weights @ turning
        out[k] = prior.rate * (sums * step) @ sums.T + np.real((turned * prior.power) @ turned.conj().T)
    return out
