"""What fringe fits promise at every contrast: intervals that cover, estimates without bias, false alarms as stated.

Cells by contrast over its error. `rows()` runs 100,000 fringes a cell; the tests run 10,000 with wider bars, which are
the same bars plus three binomial standard errors of 10,000.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest

from planner.analysis.amplitude import amplitude_interval, zero_test
from planner.analysis.fringe import Fringes, contrasts, fit_fringes, phase_half_width

CELLS = (0.0, 1.0, 2.0, 3.0, 5.0, 10.0, 20.0)
SHOTS = 8
SIGMA = 0.05
FULL, SHORT = 100_000, 10_000


@dataclass(frozen=True, kw_only=True)
class Cell:
    """What one cell of simulated fringes shows; biases in standard deviations of the estimate or of the noise."""

    ratio: float
    cover: float
    cover_estimated: float  # with the noise of each fringe estimated from its own five residual degrees of freedom
    phase_cover: float
    squared_bias: float  # over the standard deviation of the squared contrast
    bias: float  # of the contrast over its standard error
    contrast_variance: float  # over the Cramer-Rao bound
    phase_variance: float
    false_alarm: float  # of the 1 % test of zero contrast, known noise
    false_alarm_estimated: float
    never_empty: bool


def simulate(ratio: float, count: int, seed: int) -> tuple[Fringes, np.ndarray, float]:
    """Fringes of eight shots whose contrast is `ratio` times its error, at any phase: fits, phases, contrast."""
    rng = np.random.default_rng(seed)
    contrast = ratio * 2 * SIGMA * np.sqrt(2 / SHOTS)
    phi = rng.uniform(-np.pi, np.pi, count)
    theta = np.tile(np.arange(SHOTS) * 2 * np.pi / SHOTS, count)
    group = np.repeat(np.arange(count), SHOTS)
    y = 0.5 + contrast / 2 * np.cos(phi[group] + theta) + SIGMA * rng.standard_normal(len(theta))
    return fit_fringes(theta, y, np.full(len(theta), SIGMA**2), group, count), phi, contrast


def measure(ratio: float, count: int, seed: int = 20261201) -> Cell:
    fringes, phi, contrast = simulate(ratio, count, seed + int(ratio))
    found = contrasts(fringes)
    own = fringes.chi_squared / fringes.dof
    sigma = np.sqrt(own * fringes.quadrature_variance)
    power = fringes.amplitude_squared / sigma**2
    dof = float(fringes.dof[0])
    low, high = amplitude_interval(power, 2.0, dof)
    inside = (2 * sigma * low <= contrast) & (contrast <= 2 * sigma * high)
    off = np.abs(np.angle(np.exp(1j * (fringes.phase_rad - phi))))
    half = phase_half_width(fringes.amplitude_squared / fringes.quadrature_variance)
    bound = found.error[0] ** 2  # source: Kay, Estimation Theory (1993) (from memory): var C = 4 x 2 sigma^2 / N
    return Cell(
        ratio=ratio,
        cover=float(((found.low <= contrast) & (contrast <= found.high)).mean()),
        cover_estimated=float(inside.mean()),
        phase_cover=float((off <= half).mean()),
        squared_bias=float((found.squared.mean() - contrast**2) / found.squared.std()),
        bias=float((found.value.mean() - contrast) / found.error[0]),
        contrast_variance=float(found.value.var() / bound),
        phase_variance=float((off**2).mean() * contrast**2 / bound) if ratio else np.nan,
        false_alarm=float((found.p_zero < 0.01).mean()),
        false_alarm_estimated=float((zero_test(power, 2.0, dof) < 0.01).mean()),
        never_empty=bool((found.high > found.low).all() and (high > low).all()),
    )


def claims(cell: Cell, count: int) -> Iterator[tuple[str, float, float, float]]:
    """(what, value, lowest, highest) for one cell; bars widened by three standard errors where `count` is short."""
    slack = 0.0 if count >= FULL else 3.0
    cover = slack * np.sqrt(0.95 * 0.05 / count)
    alarm = slack * np.sqrt(0.01 * 0.99 / count)
    mean = slack / np.sqrt(count)
    spread = slack * np.sqrt(2 / count)
    yield "95 % contrast interval covers", cell.cover, 0.94 - cover, 0.96 + cover
    yield "95 % contrast interval, noise estimated, covers", cell.cover_estimated, 0.94 - cover, 0.96 + cover
    yield "no contrast interval is empty", float(cell.never_empty), 1, 1
    yield "squared contrast, bias over its sigma", cell.squared_bias, -0.02 - mean, 0.02 + mean
    if cell.ratio > 0:
        yield "95 % phase interval covers", cell.phase_cover, 0.94 - cover, 0.96 + cover
    if cell.ratio >= 2:
        yield "contrast, bias over its error", cell.bias, -0.05 - mean, 0.05 + mean
    if cell.ratio >= 10:
        yield "contrast, variance over Cramer-Rao", cell.contrast_variance, 0.0, 1.03 + spread
        yield "phase, variance over Cramer-Rao", cell.phase_variance, 0.0, 1.03 + spread
    if cell.ratio == 0:
        yield "zero-contrast test at 1 % fires", cell.false_alarm, 0.008 - alarm, 0.012 + alarm
        yield "the same, noise estimated", cell.false_alarm_estimated, 0.008 - alarm, 0.012 + alarm


@pytest.mark.parametrize("ratio", CELLS)
def test_what_fringe_fits_promise(ratio: float) -> None:
    """Each promise holds in each cell of 10,000 fringes, within the scatter of that many."""
    cell = measure(ratio, SHORT)
    for what, value, lowest, highest in claims(cell, SHORT):
        assert lowest <= value <= highest, f"{what} at {ratio:g}: {value}"


def rows() -> list[dict[str, Any]]:
    found = []
    for ratio in CELLS:
        for what, value, lowest, highest in claims(measure(ratio, FULL), FULL):
            found.append(
                {
                    "name": f"{what}, contrast {ratio:g} x its error",
                    "value": value,
                    "unit": "",
                    "bound": f"{lowest:g} to {highest:g}",
                    "reference": None,
                    "ratio": None,
                    "ok": bool(lowest <= value <= highest),
                }
            )
    return found
