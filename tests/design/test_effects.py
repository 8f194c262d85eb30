"""Effects, and the variance that drift adds to them, against an independent scorer and published designs."""

import csv
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import hadamard

from planner.arrays import FloatArray, IntArray
from planner.cli.order_table import write_order
from planner.design.drift import Drifts, reference_prior
from planner.design.effects import effects_of, parities, slope_effect, white_variance
from planner.design.merging import Part
from planner.design.ordering import make_order
from planner.design.quality import assess
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable
from tests.design.nights import night_a, night_b
from tests.outside import score_order

DATA = Path(__file__).resolve().parents[1] / "outside" / "data"


def compare_with_scorer(table: ShotTable, rows: IntArray, start_s: FloatArray, path: Path) -> None:
    names = list(table.switches)
    lines = [",".join(["start_s", "duration_s", "hold_s", "phase_deg", *(f"switch_{name}" for name in names)])]
    for row, start in zip(rows, start_s, strict=True):
        cells = [start, table.duration_s[row], table.hold_s[row], np.rad2deg(table.phase_rad[row])]
        cells += [float(table.switches[name][row]) for name in names]
        lines.append(",".join(repr(float(cell)) for cell in cells))
    path.write_text("\n".join(lines) + "\n")
    scored = score_order.score(str(path), worst=1000)
    total = float(start_s[-1] + table.duration_s[rows[-1]])
    mine = assess(
        mid_s=start_s + table.duration_s[rows] / 2,
        total_s=total,
        point=np.unique(table.hold_s, return_inverse=True)[1][rows].astype(np.int64),
        phase_rad=table.phase_rad[rows],
        switches={name: states[rows] for name, states in table.switches.items()},
        drifts=Drifts(additive=reference_prior(total), coupled=reference_prior(total)),
    )
    # both sum the same terms in double precision in another order: relative 1e-9 leaves room for 1e6 roundings;
    # phases went through degrees, which costs 1e-16 each
    near = {"rel": 1e-9, "abs": 1e-9}
    assert len(mine.additive) == scored["effects"]
    for key in ("additive_mean", "additive_worst", "coupled_mean", "coupled_worst"):
        assert getattr(mine, key) == pytest.approx(scored[key], **near)
    assert mine.any_period_mean == pytest.approx(scored["any_period"]["mean"], **near)
    assert mine.any_period_peak == pytest.approx(scored["any_period"]["peak"], **near)
    assert mine.peak_period_s == pytest.approx(scored["any_period"]["peak_period_s"], **near)
    listed = sorted((value for _, value in scored["worst_additive"]), reverse=True)
    assert sorted(mine.additive.values(), reverse=True) == pytest.approx(listed, abs=6e-5)  # printed with 4 digits


# source: score_order.py, a scorer written apart from this program (tests/outside/score_order.py)
@pytest.mark.parametrize("night", [night_a(4), night_b(20)], ids=["one switch", "slow and fast switch"])
@pytest.mark.parametrize("kind", ["table", "shuffled", "reversed"])
def test_figures_equal_those_of_the_outside_scorer(
    night: tuple[ShotTable, Sequence], kind: str, tmp_path: Path
) -> None:
    """Every figure of an order equals the outside scorer's to 1e-9, whatever the order."""
    table, _ = night
    rows = np.arange(len(table))
    if kind == "shuffled":
        rows = np.random.default_rng(5).permutation(rows)
    elif kind == "reversed":
        rows = rows[::-1]
    gaps = np.random.default_rng(6).exponential(2.0, len(rows))  # idle time of uneven length
    busy = table.duration_s[rows] + gaps
    compare_with_scorer(table, rows, np.cumsum(busy) - busy + gaps, tmp_path / "order.csv")


def test_a_planned_order_scores_as_it_says(tmp_path: Path) -> None:
    """The CSV of a planned order, scored outside with the drift that the sequence declares, gives the figures that the
    order claims."""
    table, sequence = night_b(30)
    order = make_order(table, sequence, seed=2, effort="quick")
    path = tmp_path / "order.csv"
    write_order(order, [Part(table=table, sequence=sequence)], str(path), measured_only=True)
    total = float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])
    drift = sequence.drift[0]
    scored = score_order.score(str(path), wander=drift.wander * np.sqrt(total / drift.wander_over_s))
    # source: score_order.py; its wander is the one at the end of the night
    for key in ("additive_mean", "additive_worst", "coupled_mean", "coupled_worst"):
        assert order.figures[key] == pytest.approx(scored[key], rel=1e-9)
    assert order.figures["any_period_peak"] == pytest.approx(scored["any_period"]["peak"], rel=1e-9)


@given(st.integers(1, 40), st.integers(0, 3), st.integers(0, 2**32 - 1))
def test_white_noise_gives_every_effect_the_variance_of_one_shot(shots: int, switches: int, seed: int) -> None:
    """Weights have unit length and lie on the shots of their point alone."""
    rng = np.random.default_rng(seed)
    point = rng.integers(3, size=shots)
    states = {f"s{k}": rng.choice([-1, 1], size=shots).astype(np.int8) for k in range(switches)}
    for effect in effects_of(point, rng.uniform(0, 2 * np.pi, shots), states):
        assert white_variance(effect, np.full(shots, 0.3)) == pytest.approx(0.09, rel=1e-12)
        assert effect.point == -1 or (point[effect.rows] == effect.point).all()


def read(name: str) -> list[dict[str, str]]:
    lines = [line for line in (DATA / name).read_text().splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


@pytest.mark.parametrize(("order", "file"), [("2^3", "trend_free_2x3.csv"), ("2^4", "trend_free_2x4.csv")])
def test_trend_free_orders_score_as_published(order: str, file: str) -> None:
    """Offsets of every parity against straight, quadratic and cubic drift: the time counts of trend-free orders."""
    # source: Daniel & Wilcoxon (1966), Cheng & Steinberg (1991): orders by their relabelling rule; counts as kept in
    # trend_time_counts.csv, computed apart from this program
    runs = read(file)
    letters = [name for name in runs[0] if len(name) == 1]
    states = {name: np.array([int(run[name]) for run in runs], dtype=np.int8) for name in letters}
    n = len(runs)
    counts = {row["effect"]: row for row in read("trend_time_counts.csv") if row["order"] == f"{order} {file[:-4]}"}
    offsets = {
        "".join(effect.parity): effect.weights * np.sqrt(n)
        for effect in effects_of(np.zeros(n, dtype=np.int64), np.zeros(n), states)
        if effect.form == "offset" and effect.point == -1
    }
    assert set(offsets) == set(counts)
    place = np.arange(1, n + 1)
    for name, weights in offsets.items():
        for power, degree in enumerate(("linear", "quadratic", "cubic"), start=1):
            assert abs(weights @ place**power) == pytest.approx(abs(int(counts[name][degree])), abs=1e-8)
        changes = int((np.diff(np.sign(weights)) != 0).sum())
        assert changes == int(counts[name]["level_changes"])


def test_thue_morse_order_is_deaf_to_polynomial_drift() -> None:
    """A switch in a Thue-Morse order cancels drift of every degree below k, and not of degree k."""
    # source: Prouhet (1851); thue_morse.csv
    for row in read("thue_morse.csv"):
        states = np.array([1 if sign == "+" else -1 for sign in row["signs"]], dtype=np.int8)
        n, k = len(states), int(row["k"])
        (night,) = (effect for effect in effects_of(np.arange(n), np.zeros(n), {"s": states}) if effect.point == -1)
        weights = night.weights * np.sqrt(n)
        place = np.arange(n, dtype=np.float64)
        for degree in range(k):
            assert weights @ place**degree == pytest.approx(0.0, abs=1e-9 * n**degree)
        assert weights @ place**k == pytest.approx(float(row["moment_k"]), rel=1e-9)


def test_parities_are_the_channels_of_a_hadamard_transform() -> None:
    """Three switches: the eight parities pick the channels of the worked example."""
    # source: parity channels y = H c as in Kara et al. (2012), arXiv 1208.4507; example computed with scipy's hadamard
    y = np.array([11.75, 6.25, 12.25, 9.75, 11.25, 6.75, 12.75, 9.25])
    number = np.arange(8)
    states = {f"s{bit}": (1 - 2 * ((number >> bit) & 1)).astype(np.int8) for bit in range(3)}
    channels = hadamard(8) @ y / 8
    for subset, product in parities(states, 8).items():
        assert product @ y / 8 == channels[sum(1 << int(name[1]) for name in subset)]
    assert channels.tolist() == [10, 2, -1, 0.5, 0, 0, 0, 0.25]
    assert len(parities(states, 8)) == sum(1 for k in range(4) for _ in combinations(range(3), k))


def test_slope_weights_give_the_slope_of_a_straight_line_fit() -> None:
    """The slope effect over the root sum of squares is numpy's least-squares slope."""
    # source: numpy.polyfit, degree 1
    rng = np.random.default_rng(3)
    setting, y = rng.uniform(4, 40, 50), rng.normal(size=50)
    weights = slope_effect(setting)
    spread = np.sqrt(np.sum((setting - setting.mean()) ** 2))
    assert weights @ y / spread == pytest.approx(np.polyfit(setting, y, 1)[0], rel=1e-10)
    assert not slope_effect(np.full(5, 7.3)).any()
