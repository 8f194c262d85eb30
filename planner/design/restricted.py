"""The restricted draw: the last random choice of an order, and the group of the exact randomisation test.

All else fixed, the wanted switch is flipped in whole units: packets of a fast switch, whole sets of dwells of a slow
one (states exchanged between dwells that are alike). Of all 2^n flips those count that keep every figure of the
wanted effects under a stated bar; one of them is drawn, each with the same chance. Under the hypothesis that the
switch does nothing to any shot, every member of that set was as likely as the one that ran, and would have given the
same counts: that is an exact test, whatever the drift did.

How it stays quick: a figure is quadratic in the signs z. With units that each sum to zero, walks of drift reach an
effect inside units alone and no flip changes that; rhythms add |sum_u z_u R_u|^2. Where units do not sum to zero, the
full form z'Qz is taken apart into its eigenvectors. Units of different points do not meet in one effect, so the set is
drawn point by point against the bars on single effects, and accepted whole against the bars on means and peak: a
uniform draw from a product of sets, kept if it passes, is uniform on what passes.
"""

from dataclasses import dataclass
from math import log2

import numpy as np

from planner.arrays import FloatArray, IntArray

BATCH = 4096
TRIALS = 16384  # random flips that set the bars
EFFECT_SHARE = 0.05  # share of random flips of a point that may pass the bars on its single effects
FEW_UNITS = 64  # with so few units (dwells) all meet in one part, and flips decide most of the figures: be choosier
FEW_SHARE = 0.002
LEAST_LOG2 = 20.0  # but leave at least a million members
NIGHT_SHARES = (0.5, 0.5, 0.03)  # share of what is left that may pass the bars on means (additive, coupled) and peak
MOST_TRIES = 4000  # batches before a draw gives up


@dataclass(frozen=True, kw_only=True)
class FlipPart:
    """Units that meet in the same effects, and how signs turn into figures.

    units: (n_unit,) numbers of the units. features: (n_effect, n_unit, n_feature): an effect's flip-dependent added
    variance is the sum over features of (z @ feature)^2, plus constant (n_effect,). additive: (n_effect,) bool, else
    coupled; effects with a coupled response hold its two quadratures one after the other in u, v pairs that are added.
    rhythm: (n_wanted, n_unit, n_frequency) complex responses at any period.
    """

    units: IntArray
    features: FloatArray
    constant: FloatArray
    additive: "np.typing.NDArray[np.bool_]"
    rhythm: "np.typing.NDArray[np.complex64]"

    def effects(self, signs: FloatArray) -> FloatArray:
        """Added variance of each effect, (n_draw, n_effect), for signs (n_draw, n_unit)."""
        n_effect, n_unit, n_feature = self.features.shape
        flat = self.features.transpose(1, 0, 2).reshape(n_unit, n_effect * n_feature)
        return np.asarray(((signs @ flat) ** 2).reshape(len(signs), n_effect, n_feature).sum(axis=2) + self.constant)

    def periods(self, signs: FloatArray) -> FloatArray:
        """Sum over the wanted effects of the power at each frequency, (n_draw, n_frequency)."""
        out = np.zeros((len(signs), self.rhythm.shape[2]), dtype=np.float32)
        single = signs.astype(np.float32)
        for response in self.rhythm:
            out += (single @ response.real) ** 2 + (single @ response.imag) ** 2
        return out.astype(np.float64)


@dataclass(frozen=True, kw_only=True)
class Bars:
    """What every figure of a member must stay under. Means are over the wanted effects, the peak over all effects."""

    additive_worst: float
    coupled_worst: float
    additive_mean: float
    coupled_mean: float
    any_period_peak: float


class RestrictedSet:
    """The set of allowed flips of a night. Build it from parts; the same parts and bars give the same set."""

    def __init__(
        self,
        parts: list[FlipPart],
        n_unit: int,
        *,
        background: FloatArray,
        effects: int,
        bars: Bars | None = None,
        seed: int = 0,
    ) -> None:
        """n_unit: units of the night. background (n_frequency,): power at any period of the effects that no flip
        touches; effects: how many effects there are in all. Without bars they are set from random flips drawn with
        `seed`."""
        self._parts = parts
        self._background = background.astype(np.float32)
        self._effects = effects
        self.n_unit = n_unit
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(7,)))
        self.bars = bars or self._set_bars(rng)
        self.log2_size = self._measure(np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(8,))))

    def contains(self, signs: FloatArray) -> "np.typing.NDArray[np.bool_]":
        """Whether each row of signs (n_draw, n_unit) is a member."""
        inside = np.ones(len(signs), dtype=np.bool_)
        for part in self._parts:
            inside &= self._passes(part, part.effects(signs[:, part.units]))
        inside[inside] = self._passes_whole(signs[inside])
        return inside

    def draw(self, n: int, rng: np.random.Generator) -> FloatArray:
        """n members, each uniform over the set: signs (n, n_unit) of +1 and -1."""
        out = np.ones((n, self.n_unit))
        if not self._parts:
            return out
        filled = 0
        for _ in range(MOST_TRIES):
            tried = self._draw_by_part(min(BATCH, 2 * (n - filled) + 64), rng)
            kept = tried[self._passes_whole(tried)]
            take = min(len(kept), n - filled)
            out[filled : filled + take] = kept[:take]
            filled += take
            if filled == n:
                return out
        raise RuntimeError("the restricted set is too small to draw from; its bars were set from another night")

    def _draw_by_part(self, n: int, rng: np.random.Generator) -> FloatArray:
        signs = np.ones((n, self.n_unit))
        for part in self._parts:
            filled = 0
            for _ in range(MOST_TRIES):
                tried = _coins(rng, BATCH, len(part.units))
                kept = tried[self._passes(part, part.effects(tried))]
                take = min(len(kept), n - filled)
                signs[filled : filled + take, part.units] = kept[:take]
                filled += take
                if filled == n:
                    break
        return signs

    def _passes(self, part: FlipPart, values: FloatArray) -> "np.typing.NDArray[np.bool_]":
        limit = np.where(part.additive, self.bars.additive_worst, self.bars.coupled_worst)
        return np.asarray((values <= limit).all(axis=1))

    def _whole(self, signs: FloatArray) -> FloatArray:
        """Mean additive, mean coupled and peak of each draw, (n_draw, 3)."""
        additive, coupled = np.zeros(len(signs)), np.zeros(len(signs))
        n_additive = n_coupled = 0
        power = np.tile(self._background, (len(signs), 1))
        for part in self._parts:
            mine = signs[:, part.units]
            values = part.effects(mine)
            additive += values[:, part.additive].sum(axis=1)
            coupled += values[:, ~part.additive].sum(axis=1)
            n_additive += int(part.additive.sum())
            n_coupled += int((~part.additive).sum())
            power += part.periods(mine)
        return np.column_stack(
            [additive / max(1, n_additive), coupled / max(1, n_coupled), power.max(axis=1) / self._effects]
        )

    def _passes_whole(self, signs: FloatArray) -> "np.typing.NDArray[np.bool_]":
        limits = (self.bars.additive_mean, self.bars.coupled_mean, self.bars.any_period_peak)
        passed = np.empty(len(signs), dtype=np.bool_)
        for first in range(0, len(signs), BATCH):
            passed[first : first + BATCH] = (self._whole(signs[first : first + BATCH]) <= limits).all(axis=1)
        return passed

    def _set_bars(self, rng: np.random.Generator) -> Bars:
        """Bars that a stated share of random flips passes: on single effects, point by point, then on the whole."""
        additive_worst = coupled_worst = 0.0
        for part in self._parts:
            n = len(part.units)
            few = len(self._parts) == 1 and n <= FEW_UNITS
            share = min(1.0, max(FEW_SHARE, 2.0 ** (LEAST_LOG2 + 4 - n))) if few else EFFECT_SHARE
            values = part.effects(_coins(rng, TRIALS, n))
            # the share is that of both bars together, so each alone is passed by more
            for is_additive in (True, False):
                mine = values[:, part.additive == is_additive]
                if mine.shape[1]:
                    bar = float(np.quantile(mine.max(axis=1), share))
                    if is_additive:
                        additive_worst = max(additive_worst, bar)
                    else:
                        coupled_worst = max(coupled_worst, bar)
        if not self._parts:
            return Bars(additive_worst=0, coupled_worst=0, additive_mean=0, coupled_mean=0, any_period_peak=0)
        wide = Bars(
            additive_worst=additive_worst,
            coupled_worst=coupled_worst,
            additive_mean=np.inf,
            coupled_mean=np.inf,
            any_period_peak=np.inf,
        )
        self.bars = wide
        whole = self._whole(self._draw_by_part(1024, rng))
        means = [float(np.quantile(whole[:, k], share)) for k, share in enumerate(NIGHT_SHARES)]
        return Bars(
            additive_worst=additive_worst,
            coupled_worst=coupled_worst,
            additive_mean=means[0],
            coupled_mean=means[1],
            any_period_peak=means[2],
        )

    def _measure(self, rng: np.random.Generator) -> float:
        """log2 of the number of members, estimated from the share of random flips that pass each stage."""
        size = 0.0
        for part in self._parts:
            passed = tried = 0
            while passed < 100 and tried < 50 * BATCH:
                signs = _coins(rng, BATCH, len(part.units))
                passed += int(self._passes(part, part.effects(signs)).sum())
                tried += BATCH
            size += len(part.units) + log2(max(passed, 1) / tried)
        if self._parts:
            size += log2(max(1, int(self._passes_whole(self._draw_by_part(1024, rng)).sum())) / 1024)
        return size


def _coins(rng: np.random.Generator, n: int, units: int) -> FloatArray:
    """Random signs (n, units)."""
    return np.where(rng.integers(0, 2, size=(n, units)) == 0, -1.0, 1.0)
