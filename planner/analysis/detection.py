"""What the detection does to the two outputs: how much better it sees one of them, and what crosses over.

With N atoms, a fraction p of them truly in output a, the detector counts a = g N (p (1 - x) + (1 - p) x) and
b = N ((1 - p)(1 - x) + p x), up to a factor common to both: g is the efficiency ratio of a over b, x the cross-talk.

- g shows in any night: if it is not 1, the total count rises and falls with the fringe. It bends the fringe, and a bent
  fringe's offset moves with its contrast.
- x only lowers the contrast, by 1 - 2x, and no fringe can show it. It takes shots whose atoms are all in one output.
"""

from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from planner.analysis.fringe import group_sums
from planner.arrays import FloatArray, IntArray
from planner.errors import InputError, NotEnoughData

LEAST_SHOTS = 30
PASSES = 30
HUBER = 1.5  # standard deviations beyond which a shot counts less: its atom number is an outlier


@dataclass(frozen=True, kw_only=True)
class EfficiencyRatio:
    """Efficiency of output a over that of b."""

    value: float
    low: float
    high: float
    error: float  # of the logarithm
    shots: int


def efficiency_ratio(
    atoms_a: FloatArray, atoms_b: FloatArray, fringe: FloatArray, group: IntArray, *, level: float = 0.95
) -> EfficiencyRatio:
    """The ratio at which the total atom number no longer follows the fringe.

    Args:
        atoms_a, atoms_b: counts, (n_shot,). fringe: where on its fringe each shot lies, as the fitted cos(phi + theta),
        (n_shot,): not the shot's own fraction, whose noise would follow its total. group: shots that share an atom
        number up to noise (a hold's packet), (n_shot,).

    Returns:
        EfficiencyRatio.

    Raises:
        NotEnoughData: too few shots, or shots that all lie at one place of the fringe.

    References:
        The condition is a moment equation (instrumental variable); its variance the usual sandwich with clusters:
        Wooldridge, Econometric Analysis of Cross Section and Panel Data (2002), chapter 5 (from memory).
    """
    usable = (atoms_a + atoms_b > 0) & np.isfinite(fringe)
    a, b, x = atoms_a[usable], atoms_b[usable], fringe[usable]
    _, label = np.unique(group[usable], return_inverse=True)
    count = len(a)
    if count < LEAST_SHOTS:
        raise NotEnoughData(f"{count} shots with a fringe: the efficiency ratio needs {LEAST_SHOTS} at least")
    size = int(label.max()) + 1
    each = np.bincount(label, minlength=size)

    def inside(values: FloatArray) -> FloatArray:
        return values - (group_sums(label, values, size) / each)[label]

    place = inside(x)
    if place @ place < 1e-3 * count:
        raise NotEnoughData("all shots lie at one place of the fringe: the efficiency ratio cannot be told")

    weight = np.ones(count)

    def follows(log_ratio: float) -> float:
        """How the total follows the fringe at this ratio."""
        return float(place @ (weight * inside(np.log(np.maximum(a / np.exp(log_ratio) + b, 1.0)))))

    log_ratio = 0.0
    for _ in range(PASSES):
        low, high = -1.0, 1.0
        if follows(low) * follows(high) > 0:
            raise NotEnoughData("no efficiency ratio between 0.4 and 2.7 makes the total independent of the fringe")
        was, log_ratio = log_ratio, float(optimize.brentq(follows, low, high, xtol=1e-10))
        rest = inside(np.log(np.maximum(a / np.exp(log_ratio) + b, 1.0)))
        spread = 1.4826 * float(np.median(np.abs(rest)))
        weight = np.minimum(1.0, HUBER * spread / np.maximum(np.abs(rest), 1e-300)) if spread > 0 else np.ones(count)
        if abs(log_ratio - was) < 1e-8:
            break
    step = 1e-4
    slope = (follows(log_ratio + step) - follows(log_ratio - step)) / (2 * step)
    scores = group_sums(label, place * weight * rest, size)
    filled = int((each > 1).sum())
    error = float(np.sqrt((scores**2).sum() * filled / max(filled - 1, 1)) / abs(slope))
    reach = float(special.stdtrit(max(filled - 1, 1), 0.5 + level / 2)) * error
    return EfficiencyRatio(
        value=float(np.exp(log_ratio)),
        low=float(np.exp(log_ratio - reach)),
        high=float(np.exp(log_ratio + reach)),
        error=error,
        shots=count,
    )


@dataclass(frozen=True, kw_only=True)
class Detector:
    """A calibrated detection; errors are standard deviations, 0 where a value was given."""

    ratio: float = 1.0
    cross_talk: float = 0.0
    ratio_error: float = 0.0
    cross_talk_error: float = 0.0

    def __post_init__(self) -> None:
        if not (np.isfinite(self.ratio) and self.ratio > 0):
            raise InputError(f"an efficiency ratio is a positive number, not {self.ratio}")
        if not 0 <= self.cross_talk < 0.5:
            raise InputError(f"cross-talk lies between 0 and 1/2 (where the outputs are alike), not {self.cross_talk}")

    def correct(self, atoms_a: FloatArray, atoms_b: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Counts as a detector without these faults would give them, (n_shot,) each, on the scale of output b."""
        a = atoms_a / self.ratio
        keep = 1 - 2 * self.cross_talk
        return (
            np.asarray(((1 - self.cross_talk) * a - self.cross_talk * atoms_b) / keep),
            np.asarray(((1 - self.cross_talk) * atoms_b - self.cross_talk * a) / keep),
        )


def from_pure_shots(in_a: tuple[FloatArray, FloatArray], in_b: tuple[FloatArray, FloatArray]) -> Detector:
    """Ratio and cross-talk from shots whose atoms are all in output a, and shots with all in b.

    Args:
        in_a, in_b: counts (a, b) of those shots, (n_shot,) each.

    Returns:
        Detector. The ratio assumes that both kinds of shot had the same atom number on average.

    Raises:
        NotEnoughData: fewer than three shots of a kind, or outputs that cannot be told apart.
    """
    for name, (a, b) in (("a", in_a), ("b", in_b)):
        if len(a) < 3 or len(b) < 3:
            raise NotEnoughData(
                f"{min(len(a), len(b))} shots with all atoms in output {name}: three are needed at least"
            )
    means = [[float(np.mean(column)) for column in pair] for pair in (in_a, in_b)]
    errors = [[float(np.std(column, ddof=1) / np.sqrt(len(column))) for column in pair] for pair in (in_a, in_b)]

    def solved(m: list[list[float]]) -> tuple[float, float]:
        (aa, ab), (ba, bb) = m
        # aa = g N (1-x), ab = N x, ba = g N x, bb = N (1-x)
        ratio = (aa + ba) / (ab + bb)
        return ratio, (ab / bb + ba / aa) / 2 / (1 + (ab / bb + ba / aa) / 2)

    if not (means[0][0] > 0 and means[1][1] > 0 and means[0][0] + means[1][0] > 0):
        raise NotEnoughData("the bright output of the pure shots counts no atoms: the two kinds may be exchanged")
    ratio, cross = solved(means)
    if cross >= 0.5:
        raise NotEnoughData("the two kinds of pure shots look alike or exchanged: nothing can be calibrated from them")
    variance = np.zeros(2)
    for i in range(2):
        for j in range(2):
            moved = [row.copy() for row in means]
            moved[i][j] += errors[i][j]
            variance += (np.array(solved(moved)) - (ratio, cross)) ** 2
    return Detector(
        ratio=ratio,
        cross_talk=max(cross, 0.0),
        ratio_error=float(np.sqrt(variance[0])),
        cross_talk_error=float(np.sqrt(variance[1])),
    )
