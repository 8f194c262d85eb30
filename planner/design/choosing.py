"""Which good arrangement each packet takes, so that rhythms cancel over the night.

Inside packets, drift that walks is already as small as it gets (arrangements.py). What is left are rhythms: the
declared ones, and any other period, since no one knows the building's habits. A rhythm reaches an effect as the sum
over packets of a complex response, |sum_p R_p exp(i omega t_p)|^2; packets are gone through in random order, and each
takes the arrangement of its pool that makes the sums smallest, the others as they stand.

Effects whose sign the last draw flips packet by packet add up as random numbers do, sum_p |R_p|^2: for them each
arrangement has its own cost, whatever the others are.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from planner.arrays import FloatArray, IntArray
from planner.design.arrangements import Patterns

ComplexArray = NDArray[np.complex64]

WORK = 1.5e9  # complex products per pass that a pass may cost; sets pool and band for large nights
BAND = 800  # frequencies watched for rhythms that nobody declared
BAND_WEIGHT = 5.0  # of the band's fourth power against the declared rhythms: a peak costs, a plain does not
WORST_ABOVE = 0.02  # added variance from rhythms above which an effect counts as a worst case
WORST_WEIGHT = 0.3


@dataclass(frozen=True, kw_only=True)
class Shape:
    """What `choose` needs of one make-up of packets: its patterns, and a pool (n_arrangement, size) with its scores."""

    patterns: Patterns
    pool: IntArray
    scores: FloatArray
    cycle_s: float
    power: FloatArray  # (n_pattern, n_period): squared amplitudes of the declared rhythms


def limits_for(packets: int, patterns: int) -> tuple[int, int]:
    """Pool size and number of band frequencies that keep a pass within WORK."""
    each = WORK / max(1, packets * patterns)
    band = int(np.clip(each / 64, 24, BAND))
    return int(np.clip(each / (band + 8), 16, 96)), band


def choose(
    *,
    shapes: Mapping[int, Shape],
    shape: IntArray,
    point: IntArray,
    start_s: FloatArray,
    slow_sign: FloatArray,
    omega: FloatArray,
    band: FloatArray,
    rng: np.random.Generator,
    passes: int,
    progress: Callable[[float], None] | None = None,
) -> IntArray:
    """Number of the arrangement of each packet, (n_packet,) in running order.

    shape, point, start_s: (n_packet,); slow_sign: (n_packet, n_slow_parity) with the empty parity first;
    omega: (n_period,) rad/s of the declared rhythms; band: (n_band,) rad/s of the watched ones.
    """
    every = np.r_[omega, band]
    counts = np.bincount(point).astype(np.float64)
    slow = slow_sign.shape[1]
    additive = max(
        1,
        sum(
            slow * int((~shapes[int(s)].patterns.coupled).sum()) for s in dict(zip(point, shape, strict=True)).values()
        ),
    )
    tables = {number: _Table(one, every, len(omega)) for number, one in shapes.items()}
    turning = np.exp(1j * np.outer(start_s, every)).astype(np.complex64)
    choice = np.array([rng.integers(len(shapes[int(number)].pool)) for number in shape])
    sums: dict[int, ComplexArray] = {}
    band_power = np.zeros(len(band), dtype=np.float32)
    for i, number in enumerate(shape):
        table, p = tables[int(number)], int(point[i])
        share = _share(table.response[choice[i]], slow_sign[i], turning[i])
        sums[p] = sums[p] + share if p in sums else share
        band_power += slow * table.alone[choice[i]] / (counts[p] * additive)
    for p, number in dict(zip(point.tolist(), shape.tolist(), strict=True)).items():
        band_power += tables[number].in_band(sums[p]) / (counts[p] * additive)
    for turn in range(passes):
        for done, i in enumerate(rng.permutation(len(shape))):
            p, table = int(point[i]), tables[int(shape[i])]
            rest = sums[p] - _share(table.response[choice[i]], slow_sign[i], turning[i])
            tried = (
                rest[None]
                + slow_sign[i].astype(np.float32)[None, :, None, None] * (table.response * turning[i])[:, None]
            )
            heard = table.heard(tried) / counts[p]
            before = table.in_band(sums[p]) + slow * table.alone[choice[i]]
            after = table.in_band(tried) + slow * table.alone
            whole = band_power + (after - before) / np.float32(counts[p] * additive)
            cost = heard @ table.importance / slow + WORST_WEIGHT * np.maximum(heard - WORST_ABOVE, 0.0).sum(axis=1)
            # a packet's own score is one of n that make up the effect, as its rhythm's share is
            cost += table.scores / counts[p] + BAND_WEIGHT * (whole**4).mean(axis=1)
            best = int(cost.argmin())
            choice[i], sums[p], band_power = best, tried[best], whole[best]
            if progress is not None and done % 256 == 0:
                progress((turn + done / len(shape)) / passes)
    return choice


class _Table:
    """Responses of one shape's pool at every frequency, for the effects whose packets add up with fixed signs.

    response: (n_arrangement, n_pattern, n_frequency); alone: (n_arrangement, n_band), the band power of the patterns
    that the last draw flips.
    """

    def __init__(self, shape: Shape, every: FloatArray, declared: int) -> None:
        patterns = shape.patterns
        turning = np.exp(1j * np.outer((np.arange(shape.pool.shape[1]) + 0.5) * shape.cycle_s, every))
        full = np.einsum("qaj,jf->aqf", patterns.rows[:, shape.pool], turning)
        fixed = ~patterns.flips
        lone = patterns.flips & ~patterns.coupled
        self.response = full[:, fixed].astype(np.complex64)
        self.alone = (np.abs(full[:, lone, declared:]) ** 2).sum(axis=1).astype(np.float32)
        self.power = shape.power[fixed].astype(np.float32)
        self.importance = patterns.importance[fixed]
        self.additive = ~patterns.coupled[fixed]
        self.scores = shape.scores - shape.scores.min()
        self.declared = declared

    def heard(self, sums: ComplexArray) -> FloatArray:
        """Power of the declared rhythms per pattern, (n, n_pattern), for sums (n, n_slow, n_pattern, n_frequency)."""
        near = sums[..., : self.declared]
        return np.asarray(np.einsum("asqf,qf->aq", near.real**2 + near.imag**2, self.power), dtype=np.float64)

    def in_band(self, sums: ComplexArray) -> FloatArray:
        """Power in the watched band over the additive patterns, (..., n_band)."""
        far = sums[..., self.additive, self.declared :]
        return np.asarray((far.real**2 + far.imag**2).sum(axis=(-3, -2)))


def _share(response: ComplexArray, signs: FloatArray, turning: ComplexArray) -> ComplexArray:
    """One packet's part of the sums, (n_slow_parity, n_pattern, n_frequency)."""
    return np.asarray(signs[:, None, None].astype(np.float32) * (response * turning)[None])
