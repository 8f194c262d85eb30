"""The nonlinear fitter against certified fits, and the likelihood walk against a case with a known answer."""

import csv
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from planner.analysis.curve_fit import fit_curve, hessian, maximise, profile_interval
from planner.errors import InputError, NotEnoughData

DATA = Path(__file__).resolve().parent.parent / "outside" / "data"
Model = Callable[[np.ndarray, np.ndarray], np.ndarray]


def _enso(x: np.ndarray, b: np.ndarray) -> np.ndarray:
    year, slow, fast = 2 * np.pi * x / 12, 2 * np.pi * x / b[3], 2 * np.pi * x / b[6]
    wave = b[1] * np.cos(year) + b[2] * np.sin(year)
    return b[0] + wave + b[4] * np.cos(slow) + b[5] * np.sin(slow) + b[7] * np.cos(fast) + b[8] * np.sin(fast)


def _lanczos(x: np.ndarray, b: np.ndarray) -> np.ndarray:
    return b[0] * np.exp(-b[1] * x) + b[2] * np.exp(-b[3] * x) + b[4] * np.exp(-b[5] * x)


# source: model formulas as in the first line of each tests/outside/data/nist_strd_*.csv (NIST/ITL StRD)
MODELS: dict[str, Model] = {
    "Misra1a": lambda x, b: b[0] * (1 - np.exp(-b[1] * x)),
    "BoxBOD": lambda x, b: b[0] * (1 - np.exp(-b[1] * x)),
    "DanWood": lambda x, b: b[0] * x ** b[1],
    "Chwirut1": lambda x, b: np.exp(-b[0] * x) / (b[1] + b[2] * x),
    "Chwirut2": lambda x, b: np.exp(-b[0] * x) / (b[1] + b[2] * x),
    "Lanczos1": _lanczos,
    "Lanczos2": _lanczos,
    "Lanczos3": _lanczos,
    "MGH17": lambda x, b: b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4]),
    "Eckerle4": lambda x, b: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "ENSO": _enso,
}


def rows(name: str) -> list[dict[str, str]]:
    with (DATA / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


@pytest.mark.parametrize("start", ["start1", "start2"])
@pytest.mark.parametrize("name", MODELS)
def test_certified_fits(name: str, start: str) -> None:
    """From both of NIST's starts the fit ends at the certified parameters, standard deviations and residual."""
    # source: NIST/ITL Statistical Reference Datasets, nonlinear regression, tests/outside/data/nist_strd_certified.csv
    certified = [row for row in rows("nist_strd_certified.csv") if row["dataset"] == name]
    parameters = [row for row in certified if row["start1"]]
    facts = {row["parameter"]: float(row["certified"]) for row in certified if not row["start1"]}
    data = rows(f"nist_strd_{name.lower()}.csv")
    x, y = (np.array([float(row[column]) for row in data]) for column in ("x", "y"))
    fit = fit_curve(MODELS[name], x, y, np.array([float(row[start]) for row in parameters]))
    wanted = np.array([float(row["certified"]) for row in parameters])
    # finite-difference least squares reaches 5.9 digits or more on all of these (measured); 1e-5 asks for five
    np.testing.assert_allclose(fit.parameters, wanted, rtol=1e-5, atol=0)
    assert fit.dof == facts["dof"]
    if name != "Lanczos1":  # its data are exact: residual and deviations are rounding, 1e-14
        sds = np.array([float(row["certified_sd"]) for row in parameters])
        np.testing.assert_allclose(fit.errors, sds, rtol=1e-3, atol=0)
        # Lanczos2 leaves 1e-6 of the data over: its residual has five digits left
        relative = 1e-5 if name == "Lanczos2" else 1e-8
        assert fit.residual_ss == pytest.approx(facts["residual_ss"], rel=relative)


def test_what_cannot_be_fitted_is_refused() -> None:
    """Too few points, parameters that trade off, errors of zero and values that are not finite are named."""
    line: Model = lambda x, b: b[0] + b[1] * x  # noqa: E731
    x = np.arange(4.0)
    with pytest.raises(NotEnoughData, match="1 points cannot fix 2"):
        fit_curve(line, x[:1], x[:1], np.zeros(2))
    with pytest.raises(NotEnoughData, match="trade off"):
        fit_curve(lambda x, b: (b[0] + b[1]) * x, x, 2 * x, np.ones(2))
    with pytest.raises(InputError, match="not a positive number"):
        fit_curve(line, x, x, np.zeros(2), error=np.zeros(4))
    with pytest.raises(InputError, match="not finite"):
        fit_curve(line, x, x * np.nan, np.zeros(2))


def test_profile_of_a_gaussian_is_its_standard_error() -> None:
    """On a correlated Gaussian the interval is 1.96 marginal standard deviations, and the Hessian the inverse."""
    covariance = np.array([[4.0, 1.2], [1.2, 0.5]])
    inverse = np.linalg.inv(covariance)

    def log_likelihood(p: np.ndarray) -> float:
        return float(-0.5 * (p - 1) @ inverse @ (p - 1))

    best = maximise(log_likelihood, np.array([3.0, 0.0]), np.array([1.0, 1.0]))
    np.testing.assert_allclose(best, [1, 1], rtol=0, atol=1e-3)  # a simplex search, stopped at 1e-8 of likelihood
    np.testing.assert_allclose(-hessian(log_likelihood, best, np.array([0.1, 0.1])), inverse, rtol=1e-6, atol=0)
    low, high = profile_interval(
        log_likelihood, best, np.array([2.0, 0.7]), index=1, drop=0.5 * 1.959964**2, limits=(-50.0, 50.0)
    )
    # source: the profile of a Gaussian likelihood is Gaussian with the marginal variance
    reach = 1.959964 * np.sqrt(0.5)
    assert low == pytest.approx(1 - reach, abs=2e-3)
    assert high == pytest.approx(1 + reach, abs=2e-3)


def test_an_open_profile_ends_at_the_limit() -> None:
    """A likelihood that does not fall on one side returns the limit there."""
    low, high = profile_interval(
        lambda p: float(-(max(p[0], 0.0) ** 2) - p[1] ** 2),
        np.array([0.0, 0.0]),
        np.ones(2),
        index=0,
        drop=2.0,
        limits=(-9.0, 9.0),
    )
    assert low == -9.0
    assert high == pytest.approx(np.sqrt(2), abs=1e-3)
