"""Contrast of each hold from its packets, whatever the phase did from packet to packet.

Tide, laser phase and slow drift move the fringe between packets; averaging quadratures over a night would take that for
lost contrast. So a hold's contrast comes from the squared amplitudes of its packets: sum |q|^2 minus what noise alone
puts there, the noise taken from the same packets' residuals. That difference is unbiased even when shots scatter
unequally, because both parts see the same scatter.
"""

from dataclasses import dataclass, fields, replace

import numpy as np
from scipy import special

from planner.analysis.amplitude import amplitude_interval, debiased, zero_test
from planner.analysis.fringe import Fringes, group_sums
from planner.analysis.hold_noise import steady_noise
from planner.arrays import BoolArray, FloatArray, IntArray
from planner.errors import NotEnoughData

# White noise makes a residual this unlikely in one of a million packets.
NEVER = 1e-6


@dataclass(frozen=True, kw_only=True)
class HoldContrast:
    """Contrast per hold. Arrays of shape (n_hold,)."""

    hold_s: FloatArray
    fringes: IntArray  # packets (or packet parts) with a fringe of their own
    held_back: IntArray  # of these, fringes that scatter far beyond the others and count less
    unchecked: IntArray  # fringes beside these that lost so many shots that nothing vouches for them: not counted
    power: FloatArray  # sum |q|^2 / (noise variance of a quadrature)
    noise: FloatArray  # variance of a shot over its projection noise, as taken for this hold
    noise_dof: FloatArray  # inf where the noise was assumed
    weight: FloatArray  # sum of 1 / (quadrature variance at noise 1): ncp = (C/2)^2 weight / noise
    squared: FloatArray  # unbiased estimate of C^2
    squared_scatter: FloatArray  # its variance from the scatter between packets; NaN with one packet
    value: FloatArray  # C without the upward bias
    plain: FloatArray  # root mean square of the packets' plain contrasts: biased upwards
    low: FloatArray
    high: FloatArray
    p_zero: FloatArray

    def __len__(self) -> int:
        return len(self.hold_s)

    def without(self, hold: int) -> "HoldContrast":
        """All holds but one."""
        keep = np.arange(len(self)) != hold
        return HoldContrast(**{column.name: getattr(self, column.name)[keep] for column in fields(self)})

    def expected_squared_variance(self, squared: FloatArray) -> FloatArray:
        """Variance of `squared` for white noise if the true squared contrast were this, (n_hold,)."""
        dof = 2.0 * self.fringes
        ncp = np.maximum(squared, 0) / 4 * self.weight / self.noise
        white = 2 * dof + 4 * ncp + 2 * dof**2 / self.noise_dof
        return np.asarray((4 * self.noise / self.weight) ** 2 * white)


def combine(fringes: Fringes, which: IntArray, hold_s: FloatArray, *, level: float = 0.95) -> HoldContrast:
    """Contrast of each hold from its fringes.

    Args:
        fringes: n fringes, fitted with projection noise as the variance. which: hold of each, (n,). hold_s: (n_hold,).
        level: coverage of the intervals.

    Returns:
        HoldContrast for the holds that have at least one solved fringe.

    Raises:
        NotEnoughData: no fringe at all.
    """
    if not fringes.solved.any():
        raise NotEnoughData(
            "no packet has three different readout phases with a usable result: there is no fringe to fit"
        )
    size = len(hold_s)
    # A packet with no shot to spare cannot be seen to be spoilt; where others can, it does not count.
    unchecked = fringes.solved & (fringes.dof == 0) & (fringes.dof.max() > 0)
    fringes = replace(fringes, solved=fringes.solved & ~unchecked)
    label = which[fringes.solved]
    spoilt, fringes = hold_back(fringes, label, size)
    use = fringes.solved
    held_back = np.bincount(label, weights=spoilt[use], minlength=size).astype(np.int64)
    count = np.bincount(label, minlength=size)
    inverse = 1 / fringes.quadrature_variance[use]
    raw = group_sums(label, fringes.amplitude_squared[use] * inverse, size)
    weight = group_sums(label, inverse, size)
    residual = group_sums(label, fringes.chi_squared[use], size)
    dof = group_sums(label, fringes.dof[use].astype(np.float64), size)
    if dof.any():
        noise, noise_dof = steady_noise(residual, dof, hold_s)
    else:
        noise, noise_dof = np.ones(size), np.full(size, np.inf)
    there = count > 0
    kept = np.flatnonzero(there)
    power = raw[kept] / noise[kept]
    low, high = np.empty(len(kept)), np.empty(len(kept))
    root, square, p_zero = np.empty(len(kept)), np.empty(len(kept)), np.empty(len(kept))
    freedoms = np.stack([2.0 * count[kept], noise_dof[kept]], axis=1)
    for freedom, own_dof in np.unique(freedoms, axis=0).tolist():  # holds alike are solved together: few calls a night
        here = (freedoms == [freedom, own_dof]).all(axis=1)
        low[here], high[here] = amplitude_interval(power[here], freedom, own_dof, level)
        root[here], square[here] = debiased(power[here], freedom)
        p_zero[here] = zero_test(power[here], freedom, own_dof)
    unit = noise[kept] / weight[kept]
    scatter = _scatter(fringes, label, noise, noise_dof, raw, weight, count)
    return HoldContrast(
        hold_s=hold_s[kept],
        fringes=count[kept],
        held_back=held_back[kept],
        unchecked=np.bincount(which[unchecked], minlength=size)[kept],
        power=power,
        noise=noise[kept],
        noise_dof=noise_dof[kept],
        weight=weight[kept],
        squared=4 * unit * square,
        squared_scatter=scatter[kept],
        value=2 * np.sqrt(unit) * root,
        plain=2 * np.sqrt(unit * power),
        low=2 * np.sqrt(unit) * low,
        high=2 * np.sqrt(unit) * high,
        p_zero=p_zero,
    )


def hold_back(fringes: Fringes, label: IntArray, size: int) -> tuple[BoolArray, Fringes]:
    """Which fringes are held back, (n_fringe,), and the fringes with a larger variance for those.

    A shot without a fringe (a laser out of lock) spoils its packet, and through the noise its whole hold. A packet's
    residual says so, and is independent of its contrast and phase; so a packet whose residual is beyond what white
    noise ever does gets the variance that makes it a usual one. What is usual is the median of the hold, or of the
    night where that is larger (one hold has few packets).
    """
    use = fringes.solved
    dof = fringes.dof[use].astype(np.float64)
    judged = dof > 0
    out = np.zeros(len(fringes), dtype=np.bool_)
    if not judged.any():
        return out, fringes
    unusual = np.where(judged, fringes.chi_squared[use] / np.maximum(special.chdtri(np.maximum(dof, 1), 0.5), 1e-9), 0)
    night = float(np.median(unusual[judged]))
    usual = np.full(size, night)
    for h in np.unique(label[judged]):
        usual[h] = max(night, float(np.median(unusual[judged & (label == h)])))
    limit = special.chdtri(np.maximum(dof, 1), NEVER) * np.maximum(usual[label], 1e-12)
    factor = np.ones(len(fringes))
    residual = fringes.chi_squared[use]
    spoilt = judged & (residual > limit)
    factor[use] = np.where(spoilt, residual / np.maximum(usual[label] * dof, 1e-12), 1.0)
    fringes = replace(
        fringes, covariance=fringes.covariance * factor[:, None, None], chi_squared=fringes.chi_squared / factor
    )
    out[use] = spoilt
    return out, fringes


def _scatter(
    fringes: Fringes,
    label: IntArray,
    noise: FloatArray,
    noise_dof: FloatArray,
    raw: FloatArray,
    weight: FloatArray,
    count: IntArray,
) -> FloatArray:
    """Variance of each hold's squared contrast from the scatter of its packets' squared amplitudes, (n_hold,).

    What is expected of a packet at the hold's mean contrast is taken off before squaring, since packets of unequal
    weight contribute unequally; what the noise's own error adds, in common to all packets, is added at the end.
    """
    use = fringes.solved
    inverse = 1 / fringes.quadrature_variance[use]
    mean_square = (raw - 2 * count * noise) / np.maximum(weight, 1e-300)
    deviation = fringes.amplitude_squared[use] * inverse - mean_square[label] * inverse - 2 * noise[label]
    with np.errstate(divide="ignore", invalid="ignore"):
        correction = np.where(count > 1, count / (count - 1.0), np.nan)
        total = correction * group_sums(label, deviation**2, len(count)) + 8 * (count * noise) ** 2 / noise_dof
        return np.asarray(16 * total / weight**2)
