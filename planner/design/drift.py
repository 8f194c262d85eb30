"""Drift: what a lab expects to change slowly, and the variance that it adds to a weighted sum of shots, exactly.

A prior is a Wiener process (variance growing by `rate` each second) plus sinusoids of random phase. For weights w at
rising times t, with suffix sums S_i = sum_{j >= i} w_j,

    w'Kw = rate sum_i S_i^2 (t_i - t_{i-1})  +  sum_k a_k^2 |sum_i w_i exp(i 2 pi t_i / P_k)|^2 ,

which takes time linear in the number of shots. (min(s, t) is the covariance of a Wiener process; summation by parts.)
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray
from planner.design.acceleration import noise_per_acceleration
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

SIDEREAL_DAY_S = 86164.0  # rotation of the Earth
M2_S = 44714.0  # the principal lunar tide, 12.4206 h
AIR_HANDLING_S = 1200.0  # common practice, no source: cooling of a room switches every quarter to half hour


@dataclass(frozen=True, kw_only=True)
class Prior:
    """Drift of one kind in units of single-shot noise: `rate` in 1/s, `periods_s` and `amplitudes` (RMS times sqrt2).

    The covariance of a sinusoid is amplitude^2 cos(2 pi lag / period).
    """

    rate: float
    periods_s: tuple[float, ...] = ()
    amplitudes: tuple[float, ...] = ()

    @property
    def omega(self) -> FloatArray:
        """Angular frequencies (n_period,), rad/s."""
        return 2.0 * np.pi / np.array(self.periods_s, dtype=np.float64)

    @property
    def power(self) -> FloatArray:
        """Squared amplitudes (n_period,)."""
        return np.array(self.amplitudes, dtype=np.float64) ** 2

    @property
    def walk(self) -> "Prior":
        """The walk alone, without the sinusoids."""
        return Prior(rate=self.rate)


NONE = Prior(rate=0.0)


def reference_prior(total_s: float, wander: float = 5.0) -> Prior:
    """What is assumed where a sequence declares nothing: a walk that reaches five times the single-shot noise by the
    end of the night, a sidereal day and the principal tide of the same size, and the room's air handling at one."""
    return Prior(
        rate=wander**2 / total_s, periods_s=(SIDEREAL_DAY_S, M2_S, AIR_HANDLING_S), amplitudes=(wander, wander, 1.0)
    )


@dataclass(frozen=True, kw_only=True)
class Drifts:
    """The drift a plan must withstand: additive, and coupled to the fringe (phase and contrast together).

    `acceleration` is a prior in (m/s^2) in place of single-shot noise; `per_acceleration` (n_shot,), along the shot
    table, turns it into coupled drift; None where no such drift is declared.
    """

    additive: Prior
    coupled: Prior
    acceleration: Prior = NONE
    per_acceleration: FloatArray | None = None

    def coupled_at(self, row: int) -> Prior:
        """Coupled drift of shots like the table's row `row`, that of the acceleration with it."""
        if self.per_acceleration is None:
            return self.coupled
        factor = float(self.per_acceleration[row])
        return Prior(
            rate=self.coupled.rate + self.acceleration.rate * factor**2,
            periods_s=self.coupled.periods_s + self.acceleration.periods_s,
            amplitudes=self.coupled.amplitudes + tuple(factor * size for size in self.acceleration.amplitudes),
        )

    @property
    def omega(self) -> FloatArray:
        """Angular frequencies of all declared rhythms, rising, rad/s."""
        return np.unique(np.concatenate([self.additive.omega, self.coupled.omega, self.acceleration.omega]))


def drifts_of(sequence: Sequence, table: ShotTable) -> Drifts:
    """The declared drift of a sequence; the reference prior for a kind that is not declared, none of the acceleration.

    Phase and contrast reach a fringe through its two quadratures; a plan that is safe for the worst fringe phase
    covers both, so their priors are added.

    Raises:
        PlanImpossible: drift of the acceleration is declared, and nothing to weigh it by (see acceleration.py).
    """
    declared = {drift.kind for drift in sequence.drift}
    reference = reference_prior(float(table.duration_s[: table.measuring].sum()))
    return Drifts(
        additive=prior_of(sequence, "additive") if "additive" in declared else reference,
        coupled=prior_of(sequence, "phase", "contrast") if declared & {"phase", "contrast"} else reference,
        acceleration=prior_of(sequence, "acceleration"),
        per_acceleration=noise_per_acceleration(table, sequence) if "acceleration" in declared else None,
    )


def prior_of(sequence: Sequence, *kinds: str) -> Prior:
    """What a sequence declares of these kinds of drift together; none where it declares none."""
    drifts = [drift for drift in sequence.drift if drift.kind in kinds]
    rate = sum(drift.wander**2 / drift.wander_over_s for drift in drifts)
    periods: dict[float, float] = {}
    for drift in drifts:
        for sinusoid in drift.sinusoids:
            periods[sinusoid.period_s] = periods.get(sinusoid.period_s, 0.0) + sinusoid.amplitude**2
    return Prior(
        rate=rate, periods_s=tuple(periods), amplitudes=tuple(float(np.sqrt(power)) for power in periods.values())
    )


def suffix_sums(weights: FloatArray) -> FloatArray:
    """S_i = sum over j >= i of w_j, along the last axis."""
    return np.cumsum(weights[..., ::-1], axis=-1)[..., ::-1]


def added_variance(weights: FloatArray, mid_s: FloatArray, prior: Prior) -> FloatArray:
    """w'Kw for weights (..., n_shot) at rising times mid_s (n_shot,); in units of single-shot variance."""
    out = prior.rate * (suffix_sums(weights) ** 2 @ np.diff(mid_s, prepend=0.0))
    if prior.periods_s:
        turning = np.exp(1j * np.outer(mid_s, prior.omega))
        out = out + (np.abs(weights @ turning) ** 2) @ prior.power
    return np.asarray(out)


def coupled_form(u: FloatArray, v: FloatArray, mid_s: FloatArray, prior: Prior) -> FloatArray:
    """u'Ku, v'Kv and u'Kv for u, v (..., n_shot): (3, ...)."""
    uv = prior.rate * ((suffix_sums(u) * suffix_sums(v)) @ np.diff(mid_s, prepend=0.0))
    if prior.periods_s:
        turning = np.exp(1j * np.outer(mid_s, prior.omega))
        uv = uv + np.real((u @ turning) * np.conj(v @ turning)) @ prior.power
    return np.array([added_variance(u, mid_s, prior), added_variance(v, mid_s, prior), uv])


def at_worst_phase(form: FloatArray) -> FloatArray:
    """The worst over the fringe phase of (cos u + sin v)'K(cos u + sin v): the top eigenvalue of a form (3, ...)."""
    uu, vv, uv = form
    return np.asarray((uu + vv) / 2 + np.sqrt(((uu - vv) / 2) ** 2 + uv**2))


def coupled_variance(u: FloatArray, v: FloatArray, mid_s: FloatArray, prior: Prior) -> FloatArray:
    """Added variance of a coupled response at its worst fringe phase, for u, v (..., n_shot)."""
    return at_worst_phase(coupled_form(u, v, mid_s, prior))


def period_grid(total_s: float, most: int = 4000) -> FloatArray:
    """Frequencies at which any rhythm is looked for, Hz: 1/(12 h) to 1/(2 min) in steps of a quarter of the night's."""
    low, high = 1 / 43200, 1 / 120
    return np.linspace(low, high, max(2, min(most, int((high - low) * 4 * total_s) + 1)))
