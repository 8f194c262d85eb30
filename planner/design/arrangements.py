"""Orders of the shots inside a packet that drift can hardly reach.

A packet holds every readout phase in every state of the fast switches, so each contrast that an effect takes between
its shots sums to zero over the packet. A walk of drift then reaches the effect only inside packets: through
S_i^2, the squared suffix sums, times the cycle length. How small that can be is a property of the arrangement alone,
whatever happens around it: this is where most of the resistance to drift comes from, and its limit.
"""

from dataclasses import dataclass
from itertools import combinations, permutations
from math import factorial, sqrt

import numpy as np

from planner.arrays import FloatArray, IntArray
from planner.design.drift import suffix_sums

EVERY = 8  # packets up to this size have all their arrangements looked at (40,320)
STARTS = 3000  # random arrangements that are improved for larger packets
CANCELLED = 0.1  # part of a declared rhythm that later choices leave standing, for patterns that no draw flips
ANY_PERIODS = 16  # frequencies up to 1/SHORTEST_PERIOD_S at which undeclared rhythms are weighed
SHORTEST_PERIOD_S = 120.0
ANY_PERIOD_WEIGHT = 0.02  # of an undeclared rhythm's power against declared drift
FLAT_WEIGHT = 0.01  # of its square: holds of a minute cannot hide from rhythms of minutes, but can spread the hurt
WORST_WEIGHT = 0.7  # of the worst effect's walk beside the mean: no effect pays for the others


@dataclass(frozen=True, kw_only=True)
class Patterns:
    """What the effects of one point take from one packet.

    rows: (n_pattern, size), each effect's weights over the shots of a packet in table order, scaled so that an effect
    with n packets has weights rows / sqrt(n). `coupled` (n_pattern,) says which belong to a coupled response, in pairs
    (u, v) of one effect. `flips` (n_pattern,) says which change sign with the wanted switch, if it is a fast one.
    `importance` (n_pattern,) is each pattern's share in the figures, `effect` (n_pattern,) the number of its effect.
    """

    rows: FloatArray
    coupled: "np.typing.NDArray[np.bool_]"
    flips: "np.typing.NDArray[np.bool_]"
    importance: FloatArray
    effect: IntArray


def patterns_of(phase_rad: FloatArray, fast: dict[str, FloatArray], slow: int, flipping: str | None) -> Patterns:
    """Patterns of a packet with these phases (size,) and states of the fast switches (size,), beside `slow` slow ones.

    The parities of slow switches repeat the patterns of the parity without them, up to a sign of the whole packet, so
    they add to the importance alone.
    """
    size = len(phase_rad)
    cosine, sine, root = np.cos(phase_rad), np.sin(phase_rad), sqrt(2.0)
    rows: list[FloatArray] = []
    coupled, flips, importance, numbers = [], [], [], []
    subsets = [subset for k in range(len(fast) + 1) for subset in combinations(fast, k)]
    additive_effects = coupled_effects = 0
    effect = 0
    for subset in subsets:
        product = np.prod([fast[name] for name in subset], axis=0) if subset else np.ones(size)
        switched = 2**slow - (0 if subset else 1)  # parities with a switch in them that look like this one
        for form, weights in (("cos", product * cosine), ("sin", product * sine), ("offset", product)):
            if form == "offset" and not subset:
                continue  # constant over a packet: the dwells of the slow switch decide
            length = float(np.linalg.norm(weights))
            if length < 1e-9 * sqrt(size):
                continue
            weights = weights / length
            flip = flipping in subset
            rows.append(weights)
            coupled.append(False)
            flips.append(flip)
            importance.append(2.0**slow)
            numbers.append(effect)
            additive_effects += 2**slow
            if switched:
                for response in (root * weights * cosine, -root * weights * sine):
                    rows.append(response)
                    coupled.append(True)
                    flips.append(flip)
                    importance.append(switched / 2.0)
                    numbers.append(effect)
                coupled_effects += switched
            effect += 1
    is_coupled = np.array(coupled, dtype=np.bool_)
    share = np.array(importance, dtype=np.float64)
    share[~is_coupled] /= max(1, additive_effects)
    share[is_coupled] /= max(1, coupled_effects)
    return Patterns(
        rows=np.array(rows).reshape(-1, size),
        coupled=is_coupled,
        flips=np.array(flips, dtype=np.bool_),
        importance=share,
        effect=np.array(numbers, dtype=np.int64),
    )


def walk_cost(patterns: FloatArray, arrangements: IntArray) -> FloatArray:
    """Sum of S_i^2 over the gaps inside a packet, (n_pattern, n_arrangement).

    patterns: (n_pattern, size); arrangements (n_arrangement, size) give the table row run at each place. The part of a
    pattern that is constant over the packet is left out: it is not the arrangement's to mend.
    """
    centred = patterns - patterns.mean(axis=1, keepdims=True)
    return np.asarray((suffix_sums(centred[:, arrangements])[..., 1:] ** 2).sum(axis=-1))


def best_arrangements(score: "Score", size: int, count: int, rng: np.random.Generator) -> tuple[IntArray, FloatArray]:
    """The `count` arrangements of a packet with the lowest score, and the scores; ties in random order."""
    if size <= EVERY:
        pool = np.array(list(permutations(range(size))), dtype=np.int64)
        costs = score(pool)
    else:
        pool = np.array([rng.permutation(size) for _ in range(STARTS)])
        costs = score(pool)
        everyone = np.arange(len(pool))
        for _ in range(40 * size):
            tried = pool.copy()
            i, j = rng.integers(size, size=(2, len(pool)))
            tried[everyone, i], tried[everyone, j] = pool[everyone, j], pool[everyone, i]
            new = score(tried)
            better = new <= costs
            pool[better], costs[better] = tried[better], new[better]
        pool, where = np.unique(pool, axis=0, return_index=True)
        costs = costs[where]
    shuffled = rng.permutation(len(pool))
    chosen = shuffled[np.argsort(np.round(costs[shuffled], 12), kind="stable")[: min(count, factorial(min(size, 20)))]]
    return pool[chosen], costs[chosen]


class Score:
    """What an arrangement costs: walks inside the packet, and rhythms that no later choice can cancel.

    The response to a declared rhythm counts in full for patterns whose sign the restricted draw flips at random, since
    then packets add up as random numbers do; for the others a later choice of arrangements cancels most of it. Rhythms
    that nobody declared count a little at every period.
    """

    def __init__(
        self, patterns: Patterns, *, cycle_s: float, rates: FloatArray, omega: FloatArray, power: FloatArray
    ) -> None:
        """rates (n_pattern,): drift variance per second for each pattern; omega, power (n_period, ) and
        (n_pattern, n_period): angular frequencies and squared amplitudes of the declared rhythms."""
        self._patterns = patterns
        self._rate = rates * cycle_s
        size = patterns.rows.shape[1]
        every = np.r_[omega, 2 * np.pi * (np.arange(ANY_PERIODS) + 0.5) / ANY_PERIODS / SHORTEST_PERIOD_S]
        self._turning = np.exp(1j * np.outer((np.arange(size) + 0.5) * cycle_s, every))
        self._additive = np.where(patterns.coupled, 0.0, patterns.importance)
        declared = power * np.where(patterns.flips, 1.0, CANCELLED)[:, None]
        unknown = np.where(patterns.coupled, 0.0, ANY_PERIOD_WEIGHT / ANY_PERIODS)[:, None] * np.ones(ANY_PERIODS)
        self._power = patterns.importance[:, None] * np.concatenate([declared, unknown], axis=1)

    def __call__(self, arrangements: IntArray) -> FloatArray:
        """Scores (n_arrangement,)."""
        out = np.empty(len(arrangements))
        for first in range(0, len(arrangements), 4096):
            chunk = arrangements[first : first + 4096]
            walk = self._rate[:, None] * walk_cost(self._patterns.rows, chunk)
            response = self._patterns.rows[:, chunk] @ self._turning
            power = response.real**2 + response.imag**2
            heard = np.einsum("paf,pf->a", power, self._power)
            flat = (np.tensordot(self._additive, power[..., -ANY_PERIODS:], 1) ** 2).mean(axis=1)
            mean = self._patterns.importance @ walk
            out[first : first + 4096] = mean + WORST_WEIGHT * walk.max(axis=0) + heard + FLAT_WEIGHT * flat
        return out
