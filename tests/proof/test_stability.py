"""95 % bands of deviations cover the truth, and the correlation table's false discoveries stay below their level."""

from functools import lru_cache
from typing import Any

import numpy as np

from planner.analysis.correlation import correlate
from planner.analysis.stability import deviations

SERIES, VALUES = 2000, 256
BURN_IN = 4000
NAMES = {0: "white", -1: "flicker", -2: "walk"}


def power_law(rng: np.random.Generator, size: int, alpha: int) -> np.ndarray:
    """A series with the spectrum |2 sin(pi f)|^alpha: white noise, summed a fractional number of times.

    References:
        Hosking, Biometrika 68, 165 (1981); Kasdin, Proc. IEEE 83, 802 (1995) (both from memory).
    """
    if alpha == 0:
        return rng.standard_normal(size)
    if alpha == -2:
        return np.cumsum(rng.standard_normal(size))
    length = size + BURN_IN
    k = np.arange(1, length)
    response = np.concatenate([[1.0], np.cumprod((k - 1 - alpha / 2) / k)])
    spectrum = np.fft.rfft(response, 2 * length) * np.fft.rfft(rng.standard_normal(length), 2 * length)
    return np.asarray(np.fft.irfft(spectrum)[size + BURN_IN - size : length])


@lru_cache
def truth(alpha: int, m: int, order: int) -> float:
    """The deviation itself: the spectrum times the filter of the differences of averages, integrated.

    |H|^2 is 2 sin^4(pi m f) / (m sin(pi f))^2 for Allan's, 8/3 sin^6(pi m f) / (m sin(pi f))^2 for Hadamard's variance.
    """
    f = (np.arange(200_000) + 0.5) / 400_000
    filtered = np.sin(np.pi * m * f) ** (2 * order) / (m * np.sin(np.pi * f)) ** 2
    power = (2 * np.sin(np.pi * f)) ** alpha * filtered * (2 if order == 2 else 16 / 6)
    return float(np.sqrt(power.mean()))


def coverage(alpha: int, order: int, series: int, values: int, *, lost: float = 0.0) -> np.ndarray:
    """Share of series whose band holds the true deviation, at each averaging time; the kind of noise is not told.

    Args:
        lost: share of values that are missing at random; a series then has a time only if some average of it counts.
    """
    rng = np.random.default_rng([alpha + 10, order, values])
    inside: dict[int, list[bool]] = {}
    for _ in range(series):
        own = power_law(rng, values, alpha)
        own[rng.random(values) < lost] = np.nan
        found = deviations(own, 1.0)
        curve = found.allan if order == 2 else found.hadamard
        for m, low, high in zip(found.factor.tolist(), curve.low, curve.high, strict=True):
            if np.isfinite(low):
                inside.setdefault(m, []).append(bool(low <= truth(alpha, m, order) <= high))
    # a time that only few series have says nothing of coverage
    return np.array([np.mean(own) for own in inside.values() if len(own) > series / 2])


def independent(rng: np.random.Generator, kind: str, size: int) -> np.ndarray:
    """A series of one kind: white, first-order autoregressive, a walk, both, a steady drift, a warm-up."""
    white, at = rng.standard_normal(size), np.arange(size) / size
    if kind == "autoregressive":
        own = np.zeros(size + 200)
        for step, push in enumerate(rng.standard_normal(size + 200)):
            own[step] = 0.9 * own[step - 1] + push
        return own[200:]
    if kind == "walk":
        return np.cumsum(white)
    if kind == "walk and white":
        return 0.3 * np.cumsum(rng.standard_normal(size)) + white
    if kind == "steady drift":
        return 3 * rng.standard_normal() * at + 0.5 * white
    if kind == "warm-up":
        return 3 * rng.choice([-1, 1]) * np.exp(-at / rng.uniform(0.2, 0.6)) + 0.2 * white
    return white


KINDS = ("white", "autoregressive", "walk", "walk and white", "steady drift", "warm-up")


def false_tables(kind: str, tables: int, *, size: int = 80) -> tuple[float, float]:
    """Of tables of 4 series by 4 readings, all independent: the share with any discovery at q <= 0.05 (the false
    discovery rate where nothing is true), and the share of single chances at or below 0.05.
    """
    rng = np.random.default_rng([41, KINDS.index(kind)])
    any_found, small = 0, 0.0
    for number in range(tables):
        sides = [{f"{side}{i}": independent(rng, kind, size) for i in range(4)} for side in ("series", "reading")]
        rows = correlate(sides[0], sides[1], seed=number).rows
        any_found += rows[0].q <= 0.05
        small += float(np.mean([row.p <= 0.05 for row in rows]))
    return any_found / tables, small / tables


def test_bands_cover_with_lost_packets() -> None:
    """With 4 % of the values lost, 95 % bands cover in 150 flicker series, less 3.5 standard errors."""
    share = coverage(-1, 2, 150, 128, lost=0.04)
    assert share.min() > 0.95 - 3.5 * np.sqrt(0.95 * 0.05 / 150)


def test_false_discoveries_stay_below_their_level() -> None:
    """25 tables of walks and of warm-ups: with a true rate of 0.05 five or more discoveries have a chance of 0.7 %."""
    for kind in ("walk", "warm-up"):
        assert false_tables(kind, 25)[0] * 25 < 5


def rows() -> list[dict[str, Any]]:
    found = []
    for alpha, noise in NAMES.items():
        for order, name in ((2, "Allan"), (3, "Hadamard")):
            share = coverage(alpha, order, SERIES, VALUES)
            for words, value in (("lowest", share.min()), ("mean", share.mean()), ("highest", share.max())):
                text = f"95 % band of {name}, {noise}, {SERIES} series: {words} over averaging times"
                found.append(row(text, float(value), 0.93, 0.97 if words == "mean" else 0.985, 0.95))
    share = coverage(0, 2, SERIES, VALUES, lost=0.04)
    found.append(row("the same, white, 4 % of packets lost: lowest", float(share.min()), 0.92, 0.985, 0.95))
    for kind in KINDS:
        rate, small = false_tables(kind, 300)
        slack = 3 * np.sqrt(0.05 * 0.95 / 300)
        found.append(row(f"false discovery rate at 0.05, independent {kind} series, 300 tables", rate, 0, 0.05 + slack))
        found.append(row(f"share of chances at or below 0.05, {kind}", small, 0, 0.06, 0.05))
    return found


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
