"""Nonlinear least squares, and intervals by walking down a likelihood."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import optimize

from planner.arrays import FloatArray
from planner.errors import InputError, NotEnoughData

Curve = Callable[[FloatArray, FloatArray], FloatArray]  # (x of shape (n,), parameters) -> (n,)
LogLikelihood = Callable[[FloatArray], float]


@dataclass(frozen=True, kw_only=True)
class CurveFit:
    """A least-squares fit. `covariance` is scaled by the residual variance when no errors were given."""

    parameters: FloatArray  # (n_parameter,)
    covariance: FloatArray  # (n_parameter, n_parameter)
    residual_ss: float  # sum of (residual / error)^2
    dof: int

    @property
    def errors(self) -> FloatArray:
        """Standard errors, (n_parameter,)."""
        return np.sqrt(np.diag(self.covariance))


def fit_curve(
    curve: Curve, x: FloatArray, y: FloatArray, start: FloatArray, *, error: FloatArray | None = None
) -> CurveFit:
    """Least squares by Levenberg-Marquardt.

    Args:
        curve: model, called with (x, parameters). x, y: (n,). start: first guess, (n_parameter,). error: standard
        deviations of y, (n,); without them the residual scatter sets the covariance.

    Returns:
        CurveFit.

    Raises:
        NotEnoughData: fewer points than parameters, or no minimum was found.
        InputError: values that are not finite or errors that are not positive.

    References:
        Checked against the certified fits of the NIST/ITL Statistical Reference Datasets.
    """
    x, y, start = np.asarray(x, float), np.asarray(y, float), np.asarray(start, float)
    sigma = np.ones(len(y)) if error is None else np.asarray(error, float)
    if not (np.isfinite(x).all() and np.isfinite(y).all() and np.isfinite(start).all()):
        raise InputError("a curve fit was given values that are not finite")
    if not (np.isfinite(sigma).all() and (sigma > 0).all()):
        raise InputError("a curve fit was given an error that is not a positive number")
    if len(y) < len(start):
        raise NotEnoughData(f"{len(y)} points cannot fix {len(start)} parameters")

    def residual(parameters: FloatArray) -> FloatArray:
        return (curve(x, parameters) - y) / sigma

    with np.errstate(over="ignore", invalid="ignore"):
        found = optimize.least_squares(
            residual,
            start,
            method="lm",
            jac="2-point",
            x_scale=1.0,  # scaling by the Jacobian runs off to where the curve is flat on hard starts (NIST BoxBOD)
            xtol=1e-14,
            ftol=1e-14,
            gtol=1e-14,
            max_nfev=20000,
        )
        # two-point differences lose half of the digits, which is too few for the covariance
        jacobian = _jacobian(residual, found.x)
    if not np.isfinite(found.x).all() or found.status <= 0:
        raise NotEnoughData(f"the curve fit found no minimum: {found.message}")
    _, singular, basis = np.linalg.svd(jacobian, full_matrices=False)
    if singular[-1] <= np.finfo(float).eps * max(jacobian.shape) * singular[0]:
        raise NotEnoughData("these points do not fix all parameters of the curve: two of them trade off exactly")
    dof = len(y) - len(start)
    residual_ss = float(found.fun @ found.fun)
    scale = residual_ss / dof if error is None and dof else 1.0
    return CurveFit(
        parameters=found.x, covariance=scale * (basis.T / singular**2) @ basis, residual_ss=residual_ss, dof=dof
    )


def _jacobian(residual: Callable[[FloatArray], FloatArray], at: FloatArray) -> FloatArray:
    """Central differences, (n, n_parameter)."""
    step = np.finfo(float).eps ** (1 / 3) * np.where(at == 0, 1.0, np.abs(at))
    moves = np.diag(step)
    columns = [(residual(at + move) - residual(at - move)) / (2 * size) for move, size in zip(moves, step, strict=True)]
    return np.array(columns).T


def maximise(log_likelihood: LogLikelihood, start: FloatArray, scale: FloatArray) -> FloatArray:
    """Parameters of the largest log likelihood, from `start`, with steps of about `scale`; (n_parameter,)."""
    start, scale = np.asarray(start, float), np.asarray(scale, float)

    def cost(step: FloatArray) -> float:
        return -log_likelihood(start + scale * step)

    if len(start) == 1:
        found = optimize.minimize_scalar(lambda step: cost(np.array([step])), bracket=(-0.3, 0.3), tol=1e-7)
        return np.asarray(start + scale * found.x)
    corner = np.vstack([np.zeros(len(start)), np.eye(len(start))])
    found = optimize.minimize(
        cost,
        np.zeros(len(start)),
        method="Nelder-Mead",
        options={"initial_simplex": corner, "xatol": 1e-5, "fatol": 1e-8, "maxiter": 2000},
    )
    return np.asarray(start + scale * found.x)


def hessian(log_likelihood: LogLikelihood, at: FloatArray, step: FloatArray) -> FloatArray:
    """Second derivatives by central differences, (n_parameter, n_parameter)."""
    size = len(at)
    out = np.empty((size, size))
    for i in range(size):
        for j in range(i, size):
            a = step[i] * (np.arange(size) == i)
            b = step[j] * (np.arange(size) == j)
            corners = [log_likelihood(at + p * a + q * b) * p * q for p in (-1, 1) for q in (-1, 1)]
            out[i, j] = out[j, i] = sum(corners) / (4 * step[i] * step[j])
    return out


def profile_interval(
    log_likelihood: LogLikelihood,
    best: FloatArray,
    scale: FloatArray,
    *,
    index: int,
    drop: float,
    limits: tuple[float, float],
) -> tuple[float, float]:
    """Where the profile likelihood of one parameter has fallen by `drop` below its top.

    Args:
        best: the maximum. scale: about one standard error of each parameter. index: the parameter. limits: how far to
        look; an end that does not fall within them is returned as the limit itself.

    Returns:
        Lower and upper end.
    """
    top = log_likelihood(best)
    others = np.arange(len(best)) != index

    def fall(value: float, guess: FloatArray) -> tuple[float, FloatArray]:
        def inner(rest: FloatArray) -> float:
            whole = best.copy()
            whole[index], whole[others] = value, rest
            return log_likelihood(whole)

        rest = maximise(inner, guess, scale[others])
        return top - inner(rest), rest

    ends = []
    for side, limit in zip((-1.0, 1.0), limits, strict=True):
        inside, outside = best[index], best[index]
        guess = best[others]
        step = scale[index] * np.sqrt(2 * drop)
        for _ in range(60):
            outside = side * min(side * (outside + side * step), side * limit)
            fallen, found = fall(outside, guess)
            if fallen >= drop or outside == limit:
                break
            inside, guess, step = outside, found, step * 1.6
        if fallen < drop:
            ends.append(limit)
            continue
        here = guess  # from the inner side, so that both ends of the bracket are judged as they were above

        def beyond(value: float, guess: FloatArray = here) -> float:
            # the root of the fall is close to linear in the parameter, so the root is found in a few steps
            return float(np.sqrt(max(fall(value, guess)[0], 0.0)) - np.sqrt(drop))

        ends.append(float(optimize.brentq(beyond, inside, outside, xtol=1e-4 * scale[index], rtol=1e-8)))
    return ends[0], ends[1]
