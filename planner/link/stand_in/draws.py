"""The stand-in's random numbers: each a function of (seed, stream, place), whatever else is asked for.

Made from the raw words of a counter-based generator (Philox), whose order numpy keeps; not from numpy's distributions,
whose order it may change between versions.
"""

import numpy as np
from numpy.typing import NDArray

from planner.arrays import BoolArray, FloatArray, IntArray

NORMALS = 8  # normal numbers of each shot, each from two uniform ones
DRAWS = 24  # uniform numbers of each shot: those behind the normal ones, and eight of their own
WORDS_A_BLOCK = 4  # Philox makes four words a step
EXACT_BELOW = 1000  # atoms below which the outcome is drawn from the binomial itself, not its normal limit
HOUR_S = 3600.0


def _key(seed: int, stream: int) -> NDArray[np.uint64]:
    return np.asarray(np.random.SeedSequence(seed, spawn_key=(stream,)).generate_state(2, np.uint64), dtype=np.uint64)


def _uniform(words: NDArray[np.uint64]) -> FloatArray:
    """Numbers in (0, 1), never an end."""
    return np.asarray(((words >> np.uint64(11)) + 0.5) * 2.0**-53, dtype=np.float64)


def shot_draws(seed: int, ordinal: IntArray, stream: int = 0) -> tuple[FloatArray, FloatArray]:
    """Uniform (n, DRAWS) and normal (n, NORMALS) numbers that belong to each ordinal (n,).

    The normal ones are made from the first 2 NORMALS uniforms in pairs (Box & Muller); draws that are used as uniform
    take later columns.
    """
    first = int(ordinal.min()) if len(ordinal) else 0
    count = int(ordinal.max()) - first + 1 if len(ordinal) else 0
    if count > 4 * len(ordinal) + 64:  # far apart: each by itself
        parts = [shot_draws(seed, ordinal[i : i + 1], stream) for i in range(len(ordinal))]
        return np.concatenate([u for u, _ in parts]), np.concatenate([v for _, v in parts])
    counter = (first * DRAWS // WORDS_A_BLOCK) % 2**256
    words = np.random.Philox(key=_key(seed, stream), counter=counter).random_raw(count * DRAWS).reshape(count, DRAWS)
    uniform = _uniform(words[ordinal - first])
    radius = np.sqrt(-2 * np.log(uniform[:, :NORMALS]))
    normal = np.asarray(radius * np.cos(2 * np.pi * uniform[:, NORMALS : 2 * NORMALS]), dtype=np.float64)
    return uniform, normal


class Unlocks:
    """Spans in which a laser is out of lock: they begin at random, `per_hour` times an hour, and last `lasts_s`.

    A Poisson process, made hour by hour from exponential gaps, so that any time can be asked for by itself.
    """

    def __init__(self, seed: int, per_hour: float, lasts_s: float) -> None:
        self._key = _key(seed, 1000)
        self._rate, self._lasts = per_hour / HOUR_S, lasts_s

    def at(self, time_s: FloatArray) -> BoolArray:
        """Whether each time (n,) lies within such a span."""
        if self._rate <= 0.0 or self._lasts <= 0.0 or not len(time_s):
            return np.zeros(len(time_s), dtype=np.bool_)
        back = int(np.ceil(self._lasts / HOUR_S))
        last = np.unique(np.floor(time_s / HOUR_S).astype(np.int64))
        hours = np.unique((last[:, None] - np.arange(back + 1)).ravel())
        begins = np.concatenate([[-np.inf], *(self._begins(int(hour)) for hour in hours)])
        latest = begins[np.searchsorted(begins, time_s, side="right") - 1]
        return np.asarray(time_s - latest < self._lasts)

    def _begins(self, hour: int) -> FloatArray:
        """Where the spans of an hour begin, s. The number of words leaves a chance below 1e-20 to run out of them."""
        expected = self._rate * HOUR_S
        words = np.random.Philox(key=self._key, counter=(hour % 2**128) << 128).random_raw(
            int(expected + 12 * np.sqrt(expected) + 40)
        )
        gone = np.cumsum(-np.log(_uniform(words)) / self._rate)
        return np.asarray(hour * HOUR_S + gone[gone < HOUR_S])


def binomial(atoms: FloatArray, fraction: FloatArray, normal: FloatArray, uniform: FloatArray) -> FloatArray:
    """How many of `atoms` fall into output a, each with chance `fraction`: (n,) whole numbers.

    The normal limit where both outputs expect many atoms; the distribution itself, by its running sum, elsewhere.
    """
    variance = atoms * fraction * (1 - fraction)
    out = np.clip(np.round(atoms * fraction + np.sqrt(variance) * normal), 0.0, atoms)
    for i in np.flatnonzero((variance < 25.0) | (atoms < EXACT_BELOW)):
        out[i] = _binomial_exact(int(atoms[i]), float(fraction[i]), float(uniform[i]))
    return out


def _binomial_exact(n: int, p: float, uniform: float) -> float:
    """The smallest k with P(K <= k) >= uniform, by summing up from the nearer end."""
    if p <= 0.0 or n == 0:
        return 0.0
    if p > 0.5:
        return n - _binomial_exact(n, 1 - p, uniform)
    k = np.arange(min(n, int(n * p + 12 * np.sqrt(n * p * (1 - p)) + 30)) + 1)
    steps = np.log((n - k[:-1]) / (k[1:])) + np.log(p / (1 - p))
    log_chance = n * np.log1p(-p) + np.r_[0.0, np.cumsum(steps)]
    return float(min(np.searchsorted(np.cumsum(np.exp(log_chance)), uniform), k[-1]))
