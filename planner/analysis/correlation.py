"""Which readings go with which series, with chances that slow drift does not fake.

Two series that both wander agree or disagree over a night by chance: a handful of slow swings is a handful of values,
however many packets there are. So the chance of a correlation is found in the cosine transform (DCT-II) of the series.
There white noise, a random walk and any sum of them have independent coefficients exactly, other stationary noise
nearly; so under independence the sign of each coefficient of one series is as good as a coin. The correlation is the
sum of the products of coefficients, and its chance the share of coin patterns that give a sum as large.

A steady drift or a warm-up is no random walk, and two of them always agree. So the chance is found a second time with a
cubic in time taken off both series, and the larger of the two chances holds: what agrees only as far as both drift
smoothly is not a discovery.

References:
    Random signs: Fisher, The Design of Experiments (1935), section 21 (from memory). That the DCT-II holds the
    principal components of a random walk about its mean: its rows are the eigenvectors of the path's Laplacian, Strang,
    SIAM Rev. 41, 135 (1999) (from memory). False discoveries: Benjamini and Hochberg, J. R. Stat. Soc. B 57, 289 (1995)
    (from memory).
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.polynomial import legendre
from scipy import fft
from scipy.stats import rankdata

from planner.arrays import FloatArray
from planner.errors import NotEnoughData

LEAST_PAIRS = 16
PATTERNS = 19_999  # coin patterns for each correlation; the smallest chance is 1 / 20,000
BLOCK = 8_000_000  # coins held at a time
SEED = 20_000_519  # the same night gives the same table


@dataclass(frozen=True, kw_only=True)
class Correlation:
    """One series against one reading."""

    series: str
    reading: str
    packets: int  # with both
    pearson: float
    spearman: float
    independent: float  # the number of independent values with the same spread of chance correlations
    p: float  # of Pearson's
    p_spearman: float
    q: float  # least false discovery rate at which this one is among the discoveries, by Benjamini and Hochberg


@dataclass(frozen=True, kw_only=True)
class CorrelationTable:
    """All correlations, most significant first, and why others are missing."""

    rows: tuple[Correlation, ...]
    missing: Mapping[str, str]  # name of a series or reading -> reason


def false_discovery(p: FloatArray) -> FloatArray:
    """Benjamini and Hochberg's adjusted p values, shape of `p`: q_(i) = min over j >= i of n p_(j) / j."""
    order = np.argsort(p)[::-1]
    rank = np.arange(len(p), 0, -1)
    found = np.empty(len(p))
    found[order] = np.minimum.accumulate(np.minimum(p[order] * len(p) / rank, 1.0))
    return found


def correlate(
    series: Mapping[str, FloatArray], readings: Mapping[str, FloatArray], *, seed: int = SEED
) -> CorrelationTable:
    """Every series against every reading.

    Args:
        series, readings: (n_packet,) each, in time order; a packet counts for a pair where both are finite. seed: of
        the coin patterns.

    Returns:
        CorrelationTable, sorted by q, then p, then the size of the correlation. Series that are constant or have fewer
        than 16 values in common are named in `missing`.

    Raises:
        NotEnoughData: nothing can be correlated with anything.
    """
    missing: dict[str, str] = {}
    usable: list[dict[str, FloatArray]] = []
    for group in (series, readings):
        kept = {}
        for name, values in group.items():
            reason = _unusable(values)
            if reason:
                missing[name] = reason
            else:
                kept[name] = np.where(np.isfinite(values), values, np.nan)
        usable.append(kept)
    pairs = []
    for name, values in usable[0].items():
        for reading, other in usable[1].items():
            both = np.isfinite(values) & np.isfinite(other)
            reason = _unusable(np.where(both, values, np.nan)) or _unusable(np.where(both, other, np.nan))
            if reason:
                missing[f"{name}, {reading}"] = f"{reason} in the packets that have both"
            else:
                pairs.append((name, reading, values[both], other[both]))
    if not pairs:
        reasons = "; ".join(f"{name}: {reason}" for name, reason in missing.items())
        raise NotEnoughData(f"nothing can be correlated ({reasons or 'no reading was logged'})")
    plain = [_products(x, y) for _, _, x, y in pairs]
    ranked = [_products(rankdata(x), rankdata(y)) for _, _, x, y in pairs]
    level = [_products(_levelled(x), _levelled(y)) for _, _, x, y in pairs]
    level_ranked = [_products(_levelled(rankdata(x)), _levelled(rankdata(y))) for _, _, x, y in pairs]
    chances = sign_chances([*plain, *ranked, *level, *level_ranked], seed=seed)
    chances = np.maximum(chances[: 2 * len(pairs)], chances[2 * len(pairs) :])
    q = false_discovery(chances[: len(pairs)])
    rows = [
        Correlation(
            series=name,
            reading=reading,
            packets=len(x),
            pearson=float(plain[at].sum()),
            spearman=float(ranked[at].sum()),
            independent=float(1 / np.sum(plain[at] ** 2)),
            p=float(chances[at]),
            p_spearman=float(chances[len(pairs) + at]),
            q=float(q[at]),
        )
        for at, (name, reading, x, _) in enumerate(pairs)
    ]
    rows.sort(key=lambda row: (row.q, row.p, -abs(row.pearson)))
    return CorrelationTable(rows=tuple(rows), missing=missing)


def _unusable(values: FloatArray) -> str:
    held = values[np.isfinite(values)]
    if not len(held):
        return "no value"
    if len(held) < LEAST_PAIRS:
        return f"{len(held)} packets with a value; {LEAST_PAIRS} are needed"
    return "constant" if np.ptp(held) <= 1e-12 * np.abs(held).max() else ""


def _levelled(values: FloatArray) -> FloatArray:
    """Values with a cubic in time taken off, (n,)."""
    basis = np.linalg.qr(legendre.legvander(np.linspace(-1, 1, len(values)), 3))[0]
    return np.asarray(values - basis @ (basis.T @ values))


def _products(x: FloatArray, y: FloatArray) -> FloatArray:
    """Products of the cosine coefficients of two series, (n - 1,), scaled so that their sum is the correlation."""
    a, b = (fft.dct(v - v.mean(), norm="ortho")[1:] for v in (x, y))
    return np.asarray(a * b / np.maximum(np.sqrt((a @ a) * (b @ b)), 1e-300))


def sign_chances(products: list[FloatArray], *, patterns: int = PATTERNS, seed: int = SEED) -> FloatArray:
    """Share of coin patterns whose signed sum is at least as large as the plain sum, (n_sum,).

    The pattern that was found counts as one, so a chance is never zero: (1 + larger ones) / (1 + patterns). Sums share
    their coins. Long series get fewer patterns, a quarter at least.

    Args:
        products: the terms of each sum, any lengths.
    """
    longest = max(len(own) for own in products)
    patterns = max(patterns // 4, min(patterns, 20 * BLOCK // longest))
    terms = np.zeros((longest, len(products)), dtype=np.float32)
    for at, own in enumerate(products):
        terms[: len(own), at] = own
    found = np.abs(np.array([own.sum() for own in products]))
    rng = np.random.default_rng(seed)
    larger = np.zeros(len(products), dtype=np.int64)
    done = 0
    while done < patterns:
        count = min(patterns - done, max(BLOCK // longest, 1))
        bits = np.unpackbits(rng.integers(0, 256, (count, -(-longest // 8)), dtype=np.uint8), axis=1, count=longest)
        sums = (2 * bits.astype(np.float32) - 1) @ terms
        # a hair below, so that rounding never hides a tie
        larger += (np.abs(sums) >= found * (1 - 1e-5)).sum(axis=0)
        done += count
    return np.asarray((1 + larger) / (1 + patterns))
