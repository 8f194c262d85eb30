"""The restricted draw: the last random choice of an order, and the group of the exact randomisation test.

All else fixed, the wanted switch is flipped in whole units: packets of a fast switch, whole sets of dwells of a slow
one (states exchanged between dwells that are alike). Those flips are allowed that keep every figure of the wanted
effects under a stated bar; one of them is drawn, each with the same chance. Under the hypothesis that the switch does
nothing to any shot, every member of that set was as likely as the one that ran, and would have given the same counts:
that is an exact test, whatever the drift did.

How it stays quick: a figure is quadratic in the signs z. With units that each sum to zero, walks of drift reach an
effect inside units alone and no flip changes that; rhythms add |sum_u z_u R_u|^2. Where units do not sum to zero, the
full form z'Qz is taken apart into its eigenvectors. Units of different points do not meet in one effect, so each point
has a part of its own. For each part a list of flips is made once, from the seed: random ones that keep the part's own
figures under the bars (all of them where there are few). A member of the set takes one listed flip for each part, such
that means and peak stay under theirs. A uniform draw from a product of lists, kept if it passes, is uniform on what
passes; and sums of listed numbers are most of what it costs. Effects of the whole night, in which all units meet, are
looked at last. A night of one part with many units has no product to draw
from: there fresh flips are tried.
"""

from dataclasses import dataclass, replace
from math import log2
from typing import Any

import numpy as np
from numpy.typing import NDArray

from planner.arrays import BoolArray, FloatArray, IntArray

SingleArray = NDArray[np.float32]
Drawn = Any  # what a list draws: numbers of listed flips (n,), or fresh signs (n, n_unit)

BATCH = 4096
TRIALS = 16384  # random flips that set the bars
EFFECT_SHARE = 0.02  # share of random flips of a part that may pass the bars on its single effects
ONE_PART_SHARE = 0.002  # a night of one part has no later choice: be choosier,
LEAST_LOG2 = 20.0  # but leave at least a million members
LEAST_OF_PART = 4.0  # and at least 16 flips of a part with few units
ROUNDING = 1e-5  # above a bar: figures summed in another order, some in single precision
PEAK_SHARE = 0.1  # share of those that may pass the bar on the peak with the other parts at their mean
SAMPLE = 512  # flips of a part that set that bar
LISTED_LOG2 = 26  # members of the product of all lists, at least: a set of a million leaves room for the bars
LISTED = 256  # flips listed for a part, at least
WHOLE = 12  # parts with so few units have all their flips looked at
NIGHT_SHARES = (0.5, 0.5, 0.05)  # share of the product that may pass the bars on means (additive, coupled) and peak
ONE_PART_SHARES = (0.9, 0.9, 0.5)  # the same where there is one part, whose flips cost more
FEWEST = 8  # draws of the sample behind the bars that must pass them all: what can be drawn is never next to nothing
LEADING = 4  # features that are looked at first
HOT = 64  # frequencies with the highest mean power, looked at first
SIGNS_AT_ONCE = 20_000_000  # numbers: 160 MB of signs of a whole night
MOST_TRIES = 4000  # batches before a draw gives up
QUIET, QUIET_SHARE = 3, 20  # batches in a row that add less than a twentieth to a list end it


@dataclass(frozen=True, kw_only=True)
class FlipPart:
    """Units that meet in the same effects, and how signs turn into figures.

    units: (n_unit,) numbers of the units. features: (n_effect, n_unit, n_feature), large ones first where they are
    many: an effect's flip-dependent added variance is the sum over features of (z @ feature)^2, plus constant
    (n_effect,). additive: (n_effect,) bool, else
    coupled; effects with a coupled response hold its two quadratures one after the other in u, v pairs that are added.
    rhythm: (n_wanted, n_unit, n_frequency) complex responses at any period.
    """

    units: IntArray
    features: FloatArray
    constant: FloatArray
    additive: BoolArray
    rhythm: NDArray[np.complex64]

    def effects(self, signs: FloatArray) -> FloatArray:
        """Added variance of each effect, (n_draw, n_effect), for signs (n_draw, n_unit)."""
        n_effect, n_unit, n_feature = self.features.shape
        flat = self.features.transpose(1, 0, 2).reshape(n_unit, n_effect * n_feature)
        return np.asarray(((signs @ flat) ** 2).reshape(len(signs), n_effect, n_feature).sum(axis=2) + self.constant)

    def under(self, signs: FloatArray, bars: "Bars") -> BoolArray:
        """Which flips (n_draw, n_unit) keep every single effect under its bar.

        The first features of each effect alone bound it from below and turn most flips away.
        """
        limit = np.where(self.additive, bars.additive_worst, bars.coupled_worst)
        n_effect, n_unit, n_feature = self.features.shape
        left = np.arange(len(signs))
        if n_feature > 2 * LEADING:
            leading = self.features[:, :, :LEADING].astype(np.float32).transpose(1, 0, 2).reshape(n_unit, -1)
            seen = (signs.astype(np.float32) @ leading) ** 2
            least = seen.reshape(len(signs), n_effect, LEADING).sum(axis=2) + self.constant
            left = np.flatnonzero((least <= limit * (1 + ROUNDING)).all(axis=1))
        passed = np.zeros(len(signs), dtype=np.bool_)
        passed[left] = (self.effects(signs[left]) <= limit).all(axis=1)
        return passed

    def sums(self, signs: FloatArray) -> FloatArray:
        """Sum over the additive and over the coupled effects, (n_draw, 2)."""
        values = self.effects(signs)
        return np.column_stack([values[:, self.additive].sum(axis=1), values[:, ~self.additive].sum(axis=1)])

    def periods(self, signs: FloatArray) -> SingleArray:
        """Sum over the wanted effects of the power at each frequency, (n_draw, n_frequency)."""
        out = np.zeros((len(signs), self.rhythm.shape[2]), dtype=np.float32)
        single = signs.astype(np.float32)
        for response in self.rhythm:
            out += (single @ response.real) ** 2
            out += (single @ response.imag) ** 2
        return out


@dataclass(frozen=True, kw_only=True)
class Bars:
    """What every figure of a member must stay under. Means are over the wanted effects, the peak over all effects.

    `peak_of_part`: the peak with the other parts at their mean; infinite where there is one part.
    """

    additive_worst: float
    coupled_worst: float
    peak_of_part: float
    additive_mean: float
    coupled_mean: float
    any_period_peak: float


class _Listed:
    """The listed flips of one part, and their opposites, which have the same figures; what is drawn is numbers (n,):
    2k for the k-th of the list, 2k + 1 for its opposite."""

    def __init__(self, part: FlipPart, signs: FloatArray, power: SingleArray, hot: IntArray) -> None:
        self.log2_size = 1.0 + log2(len(signs))
        self._list = signs
        self._figures = part.sums(signs)
        self._all_power = power
        self._hot_power = np.ascontiguousarray(power[:, hot])
        self._where = {(row * row[0]).tobytes(): number for number, row in enumerate(signs.astype(np.int8))}

    def draw(self, n: int, rng: np.random.Generator) -> IntArray:
        return rng.integers(2 * len(self._list), size=n)

    def find(self, signs: FloatArray) -> tuple[IntArray, BoolArray]:
        """Numbers of these flips (n, n_unit), and which of them are listed."""
        numbers = np.full(len(signs), -1, dtype=np.int64)
        for i, row in enumerate(signs.astype(np.int8)):
            k = self._where.get((row * row[0]).tobytes())
            if k is not None:
                numbers[i] = 2 * k + (row[0] != self._list[k, 0])
        return numbers, numbers >= 0

    def signs(self, drawn: IntArray) -> FloatArray:
        return np.asarray(self._list[drawn // 2] * (1.0 - 2.0 * (drawn % 2))[:, None])

    def sums(self, drawn: IntArray) -> FloatArray:
        return np.asarray(self._figures[drawn // 2])

    def power(self, drawn: IntArray, *, hot: bool) -> SingleArray:
        return np.asarray((self._hot_power if hot else self._all_power)[drawn // 2])


class _Fresh:
    """Flips of one part with many units, made anew for each draw; what is drawn is the signs (n, n_unit)."""

    def __init__(self, part: FlipPart, bars: Bars, hot: IntArray, rng: np.random.Generator) -> None:
        self._part, self._bars, self._hot = part, bars, hot
        passed = tried = 0
        while passed < 100 and tried < 50 * BATCH:
            passed += int(part.under(_coins(rng, BATCH, len(part.units)), bars).sum())
            tried += BATCH
        self.log2_size = len(part.units) + log2(max(passed, 1) / tried)

    def draw(self, n: int, rng: np.random.Generator) -> FloatArray:
        return _flips_under(self._part, self._bars, n, rng)

    def find(self, signs: FloatArray) -> tuple[FloatArray, BoolArray]:
        return signs, self._part.under(signs, self._bars)

    def signs(self, drawn: FloatArray) -> FloatArray:
        return drawn

    def sums(self, drawn: FloatArray) -> FloatArray:
        return self._part.sums(drawn)

    def power(self, drawn: FloatArray, *, hot: bool) -> SingleArray:
        power = self._part.periods(drawn)
        return np.asarray(power[:, self._hot] if hot else power)


class RestrictedSet:
    """The set of allowed flips of a night. Build it from parts; the same parts and seed give the same set."""

    def __init__(
        self,
        parts: list[FlipPart],
        n_unit: int,
        *,
        night: FlipPart | None = None,
        background: FloatArray,
        effects: int,
        seed: int = 0,
    ) -> None:
        """n_unit: units of the night. night: the effects in which units of all parts meet. background (n_frequency,):
        power at any period of the effects that no flip touches; effects: how many effects there are in all. Bars are
        set from random flips drawn with `seed`."""
        self._parts = parts
        self._night = night
        self._background = background.astype(np.float32)
        self._effects = effects
        self.n_unit = n_unit
        every = parts if night is None else [*parts, night]
        self._n_additive = max(1, sum(int(part.additive.sum()) for part in every))
        self._n_coupled = max(1, sum(int((~part.additive).sum()) for part in every))
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(7,)))
        one = _bars_on_effects(parts, night, rng)
        mean_power = [part.periods(_flips_under(part, one, SAMPLE, rng)).mean(axis=0) for part in parts]
        expected = self._background + np.sum(mean_power, axis=0, dtype=np.float32)
        self._hot = np.sort(np.argsort(expected)[-HOT:])
        others = [expected - mine for mine in mean_power]
        self.bars = one if len(parts) < 2 else _with_part_peak(parts, one, others, effects, rng)
        self._lists = [self._list(part, other, rng) for part, other in zip(parts, others, strict=True)]
        self.bars = self._bars_on_night(rng)
        self.log2_size = self._measure(rng)

    def contains(self, signs: FloatArray) -> BoolArray:
        """Whether each row of signs (n_draw, n_unit) is a member."""
        inside = np.ones(len(signs), dtype=np.bool_)
        drawn = []
        for part, listed in zip(self._parts, self._lists, strict=True):
            found, known = listed.find(signs[:, part.units])
            inside &= known
            drawn.append(found)
        inside[inside] = self._under_bars([found[inside] for found in drawn])
        return inside

    def draw(self, n: int, rng: np.random.Generator) -> FloatArray:
        """n members, each uniform over the set: signs (n, n_unit) of +1 and -1."""
        out = np.ones((n, self.n_unit))
        if not self._parts:
            return out
        filled, share = 0, 0.5
        for _ in range(MOST_TRIES):
            batch = int(np.clip(1.2 * (n - filled) / share, 64, 8 * BATCH))
            drawn = [listed.draw(batch, rng) for listed in self._lists]
            kept = np.flatnonzero(self._under_bars(drawn))
            share = max(len(kept), 0.5) / batch
            kept = kept[: n - filled]
            out[filled : filled + len(kept)] = self._signs([mine[kept] for mine in drawn])
            filled += len(kept)
            if filled == n:
                return out
        raise RuntimeError("the restricted set is too small to draw from; its bars were set from another night")

    def _list(self, part: FlipPart, others: SingleArray, rng: np.random.Generator) -> "_Listed | _Fresh":
        n = len(part.units)
        if n <= WHOLE:
            half = np.arange(2 ** (n - 1))[:, None]  # the others are their opposites
            every: FloatArray = 1.0 - 2.0 * ((half >> np.arange(n)) & 1).astype(np.float64)
            signs = every[part.under(every, self.bars)]
            power = part.periods(signs)
            low = self._peaks(power + others) <= self.bars.peak_of_part
            return _Listed(part, signs[low], power[low], self._hot)
        if len(self._parts) == 1:
            return _Fresh(part, self.bars, self._hot, rng)
        wanted = max(LISTED, 2 ** (-(-LISTED_LOG2 // len(self._parts)) - 1))
        kept: dict[bytes, tuple[FloatArray, SingleArray]] = {}
        quiet = 0
        for _ in range(MOST_TRIES):
            before = len(kept)
            signs = _flips_under(part, self.bars, max(SAMPLE, wanted), rng)
            power = part.periods(signs)
            for row in np.flatnonzero(self._peaks(power + others) <= self.bars.peak_of_part):
                signs[row] *= signs[row, 0]  # a flip and its opposite are one entry
                kept[signs[row].astype(np.int8).tobytes()] = (signs[row], power[row])
            # a part of 13 to 20 units may have no more flips than are wanted: stop when hardly any new one turns up
            quiet = quiet + 1 if len(kept) <= before + before // QUIET_SHARE else 0
            if len(kept) >= wanted or (kept and quiet == QUIET):
                break
        chosen = list(kept.values())[:wanted]
        return _Listed(part, np.array([row for row, _ in chosen]), np.array([row for _, row in chosen]), self._hot)

    def _peaks(self, power: SingleArray) -> SingleArray:
        return np.asarray(power.max(axis=1) / self._effects)

    def _figures(self, drawn: "list[Drawn]") -> FloatArray:
        """Mean additive, mean coupled and peak of each draw, (n_draw, 3)."""
        sums, power = self._sums(drawn), self._power(drawn, hot=False)
        if self._night is not None:
            signs = self._signs(drawn)
            sums = sums + self._night.sums(signs)
            power += self._night.periods(signs)
        return np.column_stack([sums / (self._n_additive, self._n_coupled), self._peaks(power)])

    def _sums(self, drawn: "list[Drawn]") -> FloatArray:
        """Sum over the additive and over the coupled effects of the parts, (n_draw, 2)."""
        return np.asarray(np.sum([one.sums(mine) for one, mine in zip(self._lists, drawn, strict=True)], axis=0))

    def _power(self, drawn: "list[Drawn]", *, hot: bool) -> SingleArray:
        """Power at all frequencies, or at the hot ones, without the whole night's effects: (n_draw, n_frequency)."""
        power = np.tile(self._background[self._hot] if hot else self._background, (len(drawn[0]), 1))
        for one, mine in zip(self._lists, drawn, strict=True):
            power += one.power(mine, hot=hot)
        return power

    def _signs(self, drawn: "list[Drawn]") -> FloatArray:
        signs = np.ones((len(drawn[0]), self.n_unit))
        for part, one, mine in zip(self._parts, self._lists, drawn, strict=True):
            signs[:, part.units] = one.signs(mine)
        return signs

    def _under_bars(self, drawn: "list[Drawn]") -> BoolArray:
        """Which draws keep every figure under its bar; those that cost little first, and without what the whole
        night's effects add: what is over a bar without them is over it with them."""
        bars = np.array([self.bars.additive_mean, self.bars.coupled_mean, self.bars.any_period_peak])
        passed: BoolArray = np.all(self._sums(drawn) <= bars[:2] * (self._n_additive, self._n_coupled), axis=1)
        left = np.flatnonzero(passed)
        passed[left] = self._peaks(self._power([mine[left] for mine in drawn], hot=True)) <= bars[2]
        left = np.flatnonzero(passed)
        for first in range(0, len(left), BATCH):
            some = left[first : first + BATCH]
            passed[some] = self._peaks(self._power([mine[some] for mine in drawn], hot=False)) <= bars[2]
        left = np.flatnonzero(passed)
        if self._night is not None and len(left):
            mine = [one[left] for one in drawn]
            passed[left] = np.all(self._figures(mine) <= bars, axis=1)
            passed[left] &= self._night.under(self._signs(mine), self.bars)
        return passed

    def _bars_on_night(self, rng: np.random.Generator) -> Bars:
        """The bars on means and peak, from draws of the product of lists."""
        if not self._parts:
            return self.bars
        fresh = len(self._parts) == 1
        drawn = [one.draw(SAMPLE if fresh else _sample(self.n_unit), rng) for one in self._lists]
        figures = self._figures(drawn)
        least = LEAST_LOG2 - sum(one.log2_size for one in self._lists)
        allowed = np.ones(len(figures), dtype=np.bool_)
        if self._night is not None:
            allowed = self._night.under(self._signs(drawn), self.bars)
            if allowed.sum() < FEWEST:  # the whole night's own effects ask for more than the parts can give
                self.bars = _raised_for(self._night, self._signs(drawn), self.bars)
                allowed = self._night.under(self._signs(drawn), self.bars)
        shares = [_share(share, least) for share in (ONE_PART_SHARES if fresh else NIGHT_SHARES)]
        while True:
            additive, coupled, peak = (
                float(np.quantile(figures[:, k], share, method="higher")) * (1 + ROUNDING)
                for k, share in enumerate(shares)
            )
            passed = allowed & np.all(figures <= (additive, coupled, peak), axis=1)
            if passed.sum() >= FEWEST or min(shares) >= 1.0:
                break
            shares = [min(1.0, 2 * share) for share in shares]
        return replace(self.bars, additive_mean=additive, coupled_mean=coupled, any_period_peak=peak)

    def _measure(self, rng: np.random.Generator) -> float:
        """log2 of the number of members: the lists' product, times the share of draws from it that pass."""
        if not self._parts:
            return 0.0
        passed = tried = 0
        batch = SAMPLE if len(self._parts) == 1 else BATCH
        while passed < 100 and tried < 50 * BATCH:
            passed += int(self._under_bars([listed.draw(batch, rng) for listed in self._lists]).sum())
            tried += batch
        return float(sum(listed.log2_size for listed in self._lists) + log2(max(passed, 1) / tried))


def _sample(units: int) -> int:
    """How many flips of a whole night stand for all: BATCH, fewer where a night has very many units."""
    return max(SAMPLE, min(BATCH, SIGNS_AT_ONCE // max(1, units)))


def _coins(rng: np.random.Generator, n: int, units: int) -> FloatArray:
    """Random signs (n, units)."""
    bits = np.unpackbits(np.frombuffer(rng.bytes(n * (-(-units // 8))), dtype=np.uint8).reshape(n, -1), axis=1)
    return 1.0 - 2.0 * bits[:, :units].astype(np.float64)


def _raised_for(night: FlipPart, signs: FloatArray, bars: Bars) -> Bars:
    """Bars on single effects that half of these flips pass with the whole night's effects."""
    values = night.effects(signs)
    raised = {}
    for name, mine in (("additive_worst", night.additive), ("coupled_worst", ~night.additive)):
        if mine.any():
            raised[name] = max(
                getattr(bars, name), float(np.quantile(values[:, mine].max(axis=1), 0.75)) * (1 + ROUNDING)
            )
    return replace(bars, **raised)


def _share(stated: float, log2_least: float) -> float:
    """A share that may pass a bar: the stated one, or more where 2^log2_least says that too few would be left."""
    return float(min(1.0, max(stated, 2.0**log2_least)))


def _worst(part: FlipPart, signs: FloatArray) -> FloatArray:
    """The worst additive and the worst coupled effect of each flip, (n_draw, 2)."""
    values = part.effects(signs)
    return np.column_stack([values[:, kind].max(axis=1, initial=0.0) for kind in (part.additive, ~part.additive)])


def _flips_under(part: FlipPart, bars: Bars, n: int, rng: np.random.Generator) -> FloatArray:
    """n random flips of a part that keep its single effects under the bars, (n, n_unit)."""
    kept: list[FloatArray] = []
    missing = n
    for _ in range(MOST_TRIES):
        signs = _coins(rng, BATCH, len(part.units))
        signs = signs[part.under(signs, bars)][:missing]
        kept.append(signs)
        missing -= len(signs)
        if missing == 0:
            return np.concatenate(kept)
    raise RuntimeError("hardly any flip passes the bars; they were set from another night")


def _bars_on_effects(parts: list[FlipPart], night: FlipPart | None, rng: np.random.Generator) -> Bars:
    """Bars on single effects that a stated share of the random flips of each part passes."""
    bars = np.zeros(2)
    for part in parts:
        n = len(part.units)
        share = _share(ONE_PART_SHARE, LEAST_LOG2 - n) if len(parts) == 1 else _share(EFFECT_SHARE, LEAST_OF_PART - n)
        worst = _worst(part, _coins(rng, TRIALS, n))
        usual = np.maximum(np.quantile(worst, share, axis=0), 1e-12)
        # one factor for both bars, so that the share is that of both together
        bars = np.maximum(bars, usual * np.quantile((worst / usual).max(axis=1), share, method="higher"))
    if night is not None:  # half of the flips may keep the whole night's effects under the bars
        bars = np.maximum(
            bars, np.median(_worst(night, _coins(rng, _sample(len(night.units)), len(night.units))), axis=0)
        )
    infinite = float("inf")
    return Bars(
        additive_worst=float(bars[0]) * (1 + ROUNDING),
        coupled_worst=float(bars[1]) * (1 + ROUNDING),
        peak_of_part=infinite,
        additive_mean=infinite,
        coupled_mean=infinite,
        any_period_peak=infinite,
    )


def _with_part_peak(
    parts: list[FlipPart], bars: Bars, others: list[SingleArray], effects: int, rng: np.random.Generator
) -> Bars:
    """The bar on the peak of single parts, such that the part that is hardest to keep low passes by PEAK_SHARE."""
    peaks = [
        (part.periods(_flips_under(part, bars, SAMPLE, rng)) + other).max(axis=1) / effects
        for part, other in zip(parts, others, strict=True)
    ]
    low = [
        float(np.quantile(peak, _share(PEAK_SHARE, LEAST_OF_PART - len(part.units)), method="higher"))
        for part, peak in zip(parts, peaks, strict=True)
    ]
    return replace(bars, peak_of_part=max(low) * (1 + ROUNDING))
