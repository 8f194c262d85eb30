"""Intervals of coherence time and lifetime cover the truth, over hundreds of whole nights with fixed seeds.

The nights are made up: packets in random order, loading and phase that drift, scatter of the load, detector noise,
and what real nights add: 1 % of shots lost, 1 % flagged and cut, a few without light on one output.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.analysis.data import NightData
from planner.analysis.results import summarise
from tests.analysis.nights import HOLDS, night

COHERENCE_S, LIFETIME_S = 20.0, 30.0
PACKETS, PHASES = 9, 4
CONTRAST, ATOMS, DETECTOR = 0.5, 12_000.0, 15.0
KEPT = 0.98  # of the shots: 1 % are lost and 1 % cut
FULL, SHORT = 2000, 120
FIRST_SEED = 90_000


def troubled_night(seed: int) -> NightData:
    """A night of 432 shots with lost, cut and spoilt ones among them."""
    columns = night(
        seed,
        packets=PACKETS,
        phases=PHASES,
        coherence_s=COHERENCE_S,
        lifetime_s=LIFETIME_S,
        contrast=CONTRAST,
        atoms=ATOMS,
        detector=DETECTOR,
    )
    fate = np.random.default_rng([seed, 1]).random(len(columns["key"]))
    lost, flagged, spoilt = fate < 0.01, (fate > 0.01) & (fate < 0.02), (fate > 0.02) & (fate < 0.023)
    columns["state"][lost] = "lost"
    columns["atoms_a"][lost] = np.nan
    columns["flags"][flagged] = "unlocked"
    columns["atoms_b"][flagged] *= 0.5
    columns["atoms_a"][spoilt] *= 0.02
    return NightData.from_columns(columns)


def information_bound() -> float:
    """Half width of a 95 % interval of the coherence time at the Cramer-Rao bound of the shots that count, relative.

    Each hold's contrast has var C = 8 sigma^2 / n with known noise and a phase of its own in each packet.

    References:
        Kay, Fundamentals of Statistical Signal Processing: Estimation Theory (1993) (from memory).
    """
    atoms = ATOMS * np.exp(-HOLDS / LIFETIME_S)
    sigma2 = 0.25 / atoms + 0.5 * DETECTOR**2 / atoms**2
    contrast = CONTRAST * np.exp(-HOLDS / COHERENCE_S)
    slope = np.stack([contrast, -HOLDS * contrast], axis=1)  # by log start and rate
    information = slope.T @ (slope * (KEPT * PACKETS * PHASES / (8 * sigma2))[:, None])
    return float(1.96 * np.sqrt(np.linalg.inv(information)[1, 1]) * COHERENCE_S)


@dataclass(frozen=True, kw_only=True)
class Coverage:
    """Shares of nights whose interval holds the truth, and median relative half widths."""

    coherence: float
    lifetime: float
    coherence_width: float
    lifetime_width: float


def measure(count: int) -> Coverage:
    inside, widths = np.zeros((count, 2), dtype=bool), np.zeros((count, 2))
    for number in range(count):
        (curve,) = summarise(troubled_night(FIRST_SEED + number), cut_flags=["unlocked"]).curves
        for column, (fit, truth) in enumerate([(curve.coherence, COHERENCE_S), (curve.lifetime, LIFETIME_S)]):
            if fit is not None:  # a night without an answer does not cover
                inside[number, column] = fit.low_s <= truth <= fit.high_s
                widths[number, column] = (fit.high_s - fit.low_s) / 2 / truth
    share, width = inside.mean(axis=0), np.median(widths, axis=0)
    return Coverage(
        coherence=float(share[0]),
        lifetime=float(share[1]),
        coherence_width=float(width[0]),
        lifetime_width=float(width[1]),
    )


def test_time_scales_cover_the_truth() -> None:
    """Over 120 nights both intervals cover in 95 % less or more three standard errors, and stay narrow."""
    found = measure(SHORT)
    slack = 3 * np.sqrt(0.95 * 0.05 / SHORT)
    for share in (found.coherence, found.lifetime):
        assert 0.95 - slack <= share
    assert found.coherence_width < 0.05
    assert found.lifetime_width < 0.02


def rows() -> list[dict[str, Any]]:
    found, bound = measure(FULL), information_bound()

    def row(name: str, value: float, low: float, high: float, reference: float | None = None) -> dict[str, Any]:
        return {
            "name": name,
            "value": value,
            "unit": "",
            "bound": f"{low:g} to {high:g}" if low else f"<= {high:g}",
            "reference": reference,
            "ratio": None if reference is None else value / reference,
            "ok": bool(low <= value <= high),
        }

    return [
        row(f"95 % interval of coherence time covers, {FULL} nights", found.coherence, 0.94, 0.96),
        row(f"95 % interval of lifetime covers, {FULL} nights", found.lifetime, 0.94, 0.96),
        row("median half width of coherence time, relative", found.coherence_width, 0.0, 1.1 * bound, bound),
        row("median half width of lifetime, relative", found.lifetime_width, 0.0, 0.02),
    ]
