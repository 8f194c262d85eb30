"""Atom number against hold, with the night's slow drift of the loading taken out first."""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from scipy import special
from scipy.optimize import nnls

from planner.analysis.decay import Decay, as_times, need_two_holds, search_limits
from planner.analysis.fringe import group_sums
from planner.analysis.shapes import EXPONENTIAL
from planner.arrays import FloatArray, IntArray
from planner.errors import NotEnoughData

MOST_DRIFT_TERMS = 8
PACKETS_PER_TERM = 8  # a drift term needs this many packets, or it would follow the holds instead of the loading
# Huber's constant: packets within 1.5 standard deviations count fully; 96 % efficient on Gaussian scatter.
HUBER = 1.5
HUBER_SQUARE = 0.7785  # mean square of Gaussian scatter held back so (computed)
PASSES = 12
LEAST_SPREAD = 1e-9  # relative; far below one atom in any cloud, so that data made without noise stay finite


@dataclass(frozen=True, kw_only=True)
class HoldAtoms:
    """Atoms per hold, at the middle of the night's drift. Arrays of shape (n_hold,)."""

    hold_s: FloatArray
    packets: IntArray
    log_atoms: FloatArray
    covariance: FloatArray  # (n_hold, n_hold) of log_atoms
    freedom: int  # degrees of freedom of the packet scatter behind the covariance
    packet_scatter: FloatArray  # standard deviation of a packet's mean atom number, relative
    drift_terms: int
    held_back: int  # packets that lie so far off that they count less (they are not left out)

    @property
    def atoms(self) -> FloatArray:
        return np.exp(self.log_atoms)

    @property
    def low(self) -> FloatArray:
        """Lower end of the 95 % interval, (n_hold,)."""
        return np.exp(self.log_atoms - self._step)

    @property
    def high(self) -> FloatArray:
        """Upper end of the 95 % interval, (n_hold,)."""
        return np.exp(self.log_atoms + self._step)

    @property
    def _step(self) -> FloatArray:
        return np.asarray(special.stdtrit(self.freedom, 0.975) * np.sqrt(np.diag(self.covariance)))


def atoms_per_hold(
    atoms: FloatArray, time_s: FloatArray, packet: IntArray, which: IntArray, hold_s: FloatArray
) -> HoldAtoms:
    """Atom number of each hold from packet means, with a slow relative drift in common to all holds.

    The logarithm of a packet's mean is a hold's level plus a polynomial in time, fitted together with Huber's weights;
    the number of terms is the one with the smallest Schwarz criterion.

    Args:
        atoms: detected atoms, (n_shot,), positive. time_s: when, (n_shot,). packet: 0 .. n_packet - 1, (n_shot,).
        which: hold index of each shot, (n_shot,). hold_s: (n_hold,).

    Returns:
        HoldAtoms.

    Raises:
        NotEnoughData: as many packets as holds: nothing repeats, so there is no scatter to judge by.

    References:
        Huber, Ann. Math. Stat. 35, 73 (1964); Schwarz, Ann. Stat. 6, 461 (1978) (both from memory).
    """
    shots = np.bincount(packet)
    mean = np.bincount(packet, weights=atoms) / shots
    when = np.bincount(packet, weights=time_s) / shots
    hold = np.zeros(len(shots), dtype=np.int64)
    hold[packet] = which
    count, size = len(shots), len(hold_s)
    if count <= size:
        raise NotEnoughData(
            f"{count} packets for {size} holds: no hold is repeated, so there is no scatter to judge atom numbers by"
        )
    reach = max(float(np.ptp(when)), 1e-9)
    x = 2 * (when - when.min()) / reach - 1
    y = np.log(mean)
    levels = np.zeros((count, size))
    levels[np.arange(count), hold] = 1
    fits = [
        _robust_fit(np.hstack([levels, legendre.legvander(x, terms)[:, 1:]]), y, hold, terms)
        for terms in range(1 + max(0, min(MOST_DRIFT_TERMS, (count - size) // PACKETS_PER_TERM)))
    ]
    best = min(fits, key=lambda fit: fit.criterion)
    return HoldAtoms(
        hold_s=hold_s,
        packets=np.bincount(hold, minlength=size),
        log_atoms=best.solution[:size],
        covariance=best.covariance[:size, :size],
        freedom=count - size - best.terms,
        packet_scatter=np.array([best.sd[hold == h].mean() for h in range(size)]),
        drift_terms=best.terms,
        held_back=int((best.weight < 0.5).sum()),
    )


@dataclass(frozen=True, kw_only=True)
class _Fit:
    terms: int
    solution: FloatArray  # (n_column,)
    covariance: FloatArray  # (n_column, n_column)
    weight: FloatArray  # (n_packet,) Huber's
    sd: FloatArray  # (n_packet,)
    criterion: float  # Schwarz


def _robust_fit(design: FloatArray, y: FloatArray, hold: IntArray, terms: int) -> _Fit:
    """Least squares with Huber's weights and a scatter that depends on the hold's atom number.

    The relative variance of a packet's mean is a + b/N + c/N^2 with none negative: fluctuations of the load, counting,
    detection. Few atoms at long holds scatter more, and long holds carry the lifetime.
    """
    count, columns = design.shape
    freedom = count - columns
    size = columns - terms
    counts = np.bincount(hold, minlength=size)
    solution = np.linalg.lstsq(design, y, rcond=None)[0]
    # 1.4826 makes the median absolute deviation the standard deviation of Gaussian scatter
    spread = 1.4826 * float(np.median(np.abs(y - design @ solution))) * np.sqrt(count / freedom)
    sd = np.full(count, max(spread, LEAST_SPREAD))
    weight = np.ones(count)
    for _ in range(PASSES):
        residual = y - design @ solution
        weight = np.minimum(1.0, HUBER * sd / np.maximum(np.abs(residual), LEAST_SPREAD))
        squares = group_sums(hold, (weight * residual) ** 2, size) / HUBER_SQUARE / counts * (count / freedom)
        relative = np.exp(solution[:size].max() - solution[:size])
        basis = np.stack([np.ones(size), relative, relative**2], axis=1)
        pull = np.sqrt(counts) / group_sums(hold, sd**2, size) * counts
        variance = basis @ nnls(basis * pull[:, None], squares * pull)[0]
        sd = np.sqrt(np.maximum(variance, LEAST_SPREAD**2))[hold]
        root = np.sqrt(weight) / sd
        solution = np.linalg.lstsq(design * root[:, None], y * root, rcond=None)[0]
    standard = weight * (y - design @ solution) / sd
    whole = float(np.mean(weight >= 1))
    # Huber's covariance with his correction for as many parameters as there are here, Robust Statistics (1981),
    # section 7.6 (from memory)
    correction = 1 + columns / count * (1 - whole) / whole
    factor = float((standard**2).sum() / freedom / whole**2) * correction**2
    scaled = design / sd[:, None]
    return _Fit(
        terms=terms,
        solution=np.asarray(solution),
        covariance=np.asarray(factor * np.linalg.pinv(scaled.T @ scaled)),
        weight=weight,
        sd=sd,
        criterion=float(2 * np.log(sd).sum() + (standard**2).sum() / HUBER_SQUARE + columns * np.log(count)),
    )


def fit_atom_decay(holds: HoldAtoms, *, level: float = 0.95) -> Decay:
    """Exponential fall of atom number with hold: a straight line through the logarithms, by generalised least squares.

    Args:
        holds: atoms per hold. level: coverage of the intervals (Student's t, with the packet scatter's freedom).

    Returns:
        Decay; `start` in atoms, times in s; `goodness` is the F ratio times its first degrees of freedom.

    Raises:
        NotEnoughData: fewer than two holds, or atoms that grow with hold beyond their error.
    """
    need_two_holds(holds.hold_s, "atom number")
    inverse = np.linalg.pinv(holds.covariance)
    design = np.stack([np.ones(len(holds.hold_s)), -holds.hold_s], axis=1)
    covariance = np.linalg.inv(design.T @ inverse @ design)
    log_start, rate = covariance @ (design.T @ (inverse @ holds.log_atoms))
    residual = holds.log_atoms - design @ np.array([log_start, rate])
    goodness = float(residual @ inverse @ residual)
    dof = len(holds.hold_s) - 2
    step = float(special.stdtrit(holds.freedom, 0.5 + level / 2))
    errors = np.sqrt(np.diag(covariance))
    low_rate, high_rate = rate - step * errors[1], rate + step * errors[1]
    if high_rate <= 0:
        raise NotEnoughData(
            "the atom number grows with hold, beyond its error: no lifetime describes this; look at what the detection "
            "or the load does at short holds"
        )
    low_s, high_s = as_times(low_rate, high_rate, search_limits(holds.hold_s))
    return Decay(
        shape=EXPONENTIAL,
        parameters=np.array([log_start, rate]),
        covariance=covariance,
        log_likelihood=-0.5 * goodness,
        start=float(np.exp(log_start)),
        start_low=float(np.exp(log_start - step * errors[0])),
        start_high=float(np.exp(log_start + step * errors[0])),
        time_s=float(1 / rate) if rate > 0 else np.inf,
        low_s=low_s,
        high_s=high_s,
        level=level,
        goodness=goodness,
        goodness_dof=dof,
        goodness_p=float(special.fdtrc(dof, holds.freedom, goodness / dof)) if dof else np.nan,
    )
