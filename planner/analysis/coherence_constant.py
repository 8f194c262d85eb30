"""The coherence constant over many nights: coherence time x depth x separation, and whether it is one constant.

A held interferometer whose contrast goes by a spread of the lattice light loses it in a time that falls as one over
depth and separation (common practice, no source). Each night then gives the same product, up to its error and up to
what else changed from night to night.
"""

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from planner.arrays import FloatArray
from planner.errors import InputError, NotEnoughData

APART = 0.05  # spread of a logarithm (5 %) that settings need before a power of them can be fitted


@dataclass(frozen=True, kw_only=True)
class CoherenceConstant:
    """Over nights. `constant` in s Er m; `between` is the scatter of nights beyond their errors, relative."""

    constant: float
    low: float
    high: float
    between: float
    alike_p: float  # of so much scatter if all nights had one constant
    nights: int
    depth_power: float | None  # of the depth, -1 if it follows the rule; None where depths are all alike
    depth_power_error: float | None
    separation_power: float | None
    separation_power_error: float | None


def fit_coherence_constant(
    time_s: FloatArray,
    low_s: FloatArray,
    high_s: FloatArray,
    depth_er: FloatArray,
    separation_m: FloatArray,
    *,
    level: float = 0.95,
) -> CoherenceConstant:
    """One constant over nights, with the scatter between them counted in.

    Args:
        time_s, low_s, high_s: coherence times and their intervals at `level`, (n_night,), finite and positive.
        depth_er, separation_m: settings of each, (n_night,).

    Returns:
        CoherenceConstant.

    Raises:
        NotEnoughData: fewer than two nights. InputError: a value that is not positive and finite.

    References:
        Scatter between nights: Paule and Mandel, J. Res. Natl. Bur. Stand. 87, 377 (1982); interval with Student's t:
        Hartung and Knapp, Stat. Med. 20, 1771 (2001) (both from memory).
    """
    columns = [np.asarray(one, float) for one in (time_s, low_s, high_s, depth_er, separation_m)]
    if len(columns[0]) < 2:
        raise NotEnoughData(
            f"{len(columns[0])} night with a coherence time and an interval closed on both sides: a constant over "
            "nights needs two at least"
        )
    if not all(np.isfinite(one).all() and (one > 0).all() for one in columns):
        raise InputError("coherence times, their intervals, depths and separations must be positive and finite")
    step = special.ndtri(0.5 + level / 2)
    log_time = np.log(columns[0])
    variance = ((np.log(columns[2]) - np.log(columns[1])) / (2 * step)) ** 2
    logs = log_time + np.log(columns[3]) + np.log(columns[4])
    count = len(logs)

    def scatter(between: float) -> float:
        weight = 1 / (variance + between)
        return float((weight * (logs - weight @ logs / weight.sum()) ** 2).sum()) - (count - 1)

    plain = scatter(0.0) + count - 1
    between = 0.0
    if scatter(0.0) > 0:
        top = float(np.var(logs)) * count + float(variance.max())
        between = float(optimize.brentq(scatter, 0.0, top))
    weight = 1 / (variance + between)
    mean = float(weight @ logs / weight.sum())
    spread = max(float((weight * (logs - mean) ** 2).sum()) / (count - 1), 1.0)
    reach = float(special.stdtrit(count - 1, 0.5 + level / 2)) * float(np.sqrt(spread / weight.sum()))
    powers = _powers(log_time, np.log(columns[3]), np.log(columns[4]), weight)
    return CoherenceConstant(
        constant=float(np.exp(mean)),
        low=float(np.exp(mean - reach)),
        high=float(np.exp(mean + reach)),
        between=float(np.sqrt(between)),
        alike_p=float(special.chdtrc(count - 1, plain)),
        nights=count,
        depth_power=powers[0][0],
        depth_power_error=powers[0][1],
        separation_power=powers[1][0],
        separation_power_error=powers[1][1],
    )


def _powers(
    log_time: FloatArray, log_depth: FloatArray, log_apart: FloatArray, weight: FloatArray
) -> tuple[tuple[float | None, float | None], tuple[float | None, float | None]]:
    """Powers of depth and separation and their errors, None where the nights cannot tell."""
    given = [np.ptp(one) > APART for one in (log_depth, log_apart)]
    columns = [one for one, there in zip((log_depth, log_apart), given, strict=True) if there]
    nothing: tuple[float | None, float | None] = (None, None)
    if not columns or len(log_time) < len(columns) + 2:
        return nothing, nothing
    rule = log_time + sum((one for one, there in zip((log_depth, log_apart), given, strict=True) if not there), 0.0)
    design = np.stack([np.ones(len(rule)), *columns], axis=1)
    root = np.sqrt(weight)
    scaled = design * root[:, None]
    if np.linalg.cond(scaled / np.linalg.norm(scaled, axis=0)) > 1e4:
        return nothing, nothing  # depth and separation were always changed together
    covariance = np.linalg.inv(scaled.T @ scaled)
    fitted = covariance @ (scaled.T @ (rule * root))
    rest = (rule - design @ fitted) * root
    covariance *= max(float(rest @ rest) / (len(rule) - len(fitted)), 1.0)
    found = iter(zip(fitted[1:].tolist(), np.sqrt(np.diag(covariance))[1:].tolist(), strict=True))
    one, other = (next(found) if there else nothing for there in given)
    return one, other
