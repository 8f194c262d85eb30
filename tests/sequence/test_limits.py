"""Duty and load: within a shot and over a running order, against a direct count."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.errors import LimitExceeded, ProblemsFound
from planner.sequence import limits
from planner.sequence.compiler import compile_sequence
from planner.sequence.limits import check_order_limits
from planner.sequence.windows import worst_window
from tests.sequence.helpers import small, small_rig


@settings(deadline=None)
@given(
    st.lists(st.tuples(st.integers(1, 50), st.integers(0, 20)), min_size=1, max_size=12),
    st.integers(1, 200),
)
def test_worst_window_is_that_of_a_direct_count(segments: list[tuple[int, int]], window: int) -> None:
    """Against sliding the window by one unit of time over a count per unit: no window holds more."""
    lengths = np.array([float(length) for length, _ in segments])
    amounts = np.array([float(amount) for _, amount in segments])
    starts = np.concatenate([[0.0], np.cumsum(lengths)[:-1]])
    found = worst_window(starts[:, None], lengths[:, None], amounts[:, None], float(window))[0]
    per_second = np.repeat(amounts / lengths, lengths.astype(int))
    padded = np.concatenate([np.zeros(window), per_second, np.zeros(window)])
    direct = np.convolve(padded, np.ones(window), "valid").max()
    # whole-number segments and windows: the extreme window starts or ends on a whole number, so the count is exact
    assert found == pytest.approx(direct, rel=1e-9, abs=1e-9)


def order(made: object, gaps: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    table = made.table  # type: ignore[attr-defined]
    shot = rng.integers(0, len(table), len(gaps))
    duration = table.duration_s[shot]
    return np.concatenate([[0.0], np.cumsum(duration + gaps)[:-1]]), shot


def direct_duty(made: object, start: np.ndarray, shot: np.ndarray, name: str, window: float, step: float) -> float:
    """Largest share of a window away from rest, counted on a grid of `step` seconds."""
    table, timelines = made.table, made.timelines  # type: ignore[attr-defined]
    count = int((start[-1] + 60.0) / step)
    away = np.zeros(count)
    for at, row in zip(start, shot, strict=True):
        document = timelines.document(int(table.timeline[row]))
        edges = [*document["lines"][name]["edges"], [document["ticks"], 0.0, 0.0]]
        for (tick, low, high), (until, _, _) in pairwise(edges):
            if (low, high) != (0.0, 0.0):
                first, last = (at + 1e-8 * tick) / step, (at + 1e-8 * until) / step
                away[int(np.ceil(first - 0.5)) : int(np.ceil(last - 0.5))] = 1.0
    width = int(window / step)
    grown = np.cumsum(np.concatenate([[0.0], away]))
    return float((grown[width:] - grown[:-width]).max() / width)


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("piece", [7, 16_384])
def test_duty_over_an_order_is_that_of_a_direct_count(seed: int, piece: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """The limit at which an order is refused lies where a count on a 5 ms grid puts it, whatever the piece size."""
    monkeypatch.setattr(limits, "PIECE", piece)
    made = compile_sequence(small(), small_rig())
    start, shot = order(made, np.random.default_rng(seed).exponential(0.3, 60), np.random.default_rng(seed + 100))
    share = direct_duty(made, start, shot, "coil", 10.0, 0.005)
    # the grid misplaces each of at most 20 edges in a window by half a step: 20 * 0.0025 s / 10 s
    for allowed, refused in ((share + 0.005, False), (share - 0.005, True)):
        rig = small_rig(('share = "50 %"', f'share = "{allowed * 100:.4f} %"'))
        if refused:
            with pytest.raises(LimitExceeded, match='line "coil" has then been away from rest'):
                check_order_limits(compile_sequence(small(), small_rig()), rig, start, shot)
        else:
            check_order_limits(made, rig, start, shot)


def test_each_shot_keeps_the_duty_and_a_crowd_of_them_does_not() -> None:
    """Single shots are fine, the same shots back to back are not: only the order shows it."""
    made = compile_sequence(small(), small_rig(('share = "50 %"', 'share = "20 %"')))
    rig = made.timelines.rig
    shortest = int(np.argmin(made.table.hold_s))
    shot = np.full(30, shortest)
    cycle = made.table.duration_s[shortest]
    check_order_limits(made, rig, np.arange(30) * (cycle + 2.0), shot)
    with pytest.raises(LimitExceeded, match=r"position 6 \(shot 0.*31.0%|position \d+ \(shot 0"):
        check_order_limits(made, rig, np.arange(30) * cycle, shot)


def test_the_settle_wait_counts_as_rest() -> None:
    """A settle wait before each shot thins the duty out."""
    made = compile_sequence(small(), small_rig(('share = "50 %"', 'share = "20 %"')))
    shot = np.zeros(30, dtype=np.int64)
    start = np.arange(30) * (made.table.duration_s[0] + 2.0)
    check_order_limits(made, made.timelines.rig, start, shot, settle_s=np.full(30, 2.0))


def test_load_in_an_hour_is_summed_over_shots() -> None:
    """Energy of the lattice over an hour: 3600 s of back-to-back shots, worked out by hand."""
    made = compile_sequence(small(("hold = [1, 2, 5]", "hold = [5]")), small_rig())
    cycle = made.table.duration_s[0]
    shot = np.zeros(1000, dtype=np.int64)
    start = np.arange(1000) * cycle
    # per shot: 10 Er for 5 s, and two ramps of 10 ms at a mean of 5 Er
    hourly = (10 * 5 + 2 * 0.01 * 5) * 3600 / cycle
    # a window need not start with a shot: one shot's load more or less
    for allowed, refused in ((hourly + 51, False), (hourly - 51, True)):
        rig = small_rig(('"20000 Er s"', f'"{allowed:.6f} Er s"'))
        if refused:
            with pytest.raises(LimitExceeded, match="Er s within an hour"):
                check_order_limits(made, rig, start, shot)
        else:
            check_order_limits(made, rig, start, shot)


@pytest.mark.parametrize("piece", [7, 16_384])
def test_load_over_an_order_of_unequal_shots(piece: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Weak shots, then strong ones: the worst hour ends with the last strong one and cuts a weak one in two."""
    monkeypatch.setattr(limits, "PIECE", piece)
    made = compile_sequence(small(("hold = [1, 2, 5]", "hold = [40]\ndepth = [5, 10]")), small_rig())
    strong = made.table.settings["depth"] == 10.0
    shot = np.concatenate([np.full(60, np.flatnonzero(~strong)[0]), np.full(60, np.flatnonzero(strong)[0])])
    start = np.concatenate([[0.0], np.cumsum(made.table.duration_s[shot])[:-1]])
    # all segments of the lattice in one row, judged by the function that is itself checked against a direct count
    edges = made.timelines.edges(made.table.timeline[shot])
    track, line = edges.tracks["lattice"], made.timelines.rig.lines["lattice"]
    lengths = (track.lengths(edges.ticks) * 1e-8).T.reshape(-1, 1)
    begins = (start[:, None] + (track.start * 1e-8).T).reshape(-1, 1)
    worst = worst_window(
        begins, lengths, track.load(line, (track.lengths(edges.ticks) * 1e-8)).T.reshape(-1, 1), 3600.0
    )
    for share, refused in ((1 + 1e-6, False), (1 - 1e-6, True)):
        rig = small_rig(('"20000 Er s"', f'"{worst[0] * share:.6f} Er s"'))
        if refused:
            with pytest.raises(LimitExceeded, match="Er s within an hour"):
                check_order_limits(made, rig, start, shot)
        else:
            check_order_limits(made, rig, start, shot)


def test_a_single_shot_beyond_the_duty_is_refused_when_compiling() -> None:
    """A shot that alone breaks a window is a problem of the sequence."""
    with pytest.raises(ProblemsFound, match=r"away from rest for 60\.0% of 10 s"):
        compile_sequence(small(('"500 ms"', '"6 s"')), small_rig())


def test_a_single_shot_beyond_the_load_is_refused_when_compiling() -> None:
    """5 s at 10 Er and two ramps make 50.1 Er s: refused at 50, allowed at 50.2."""
    compile_sequence(small(), small_rig(('"20000 Er s"', '"50.2 Er s"')))
    with pytest.raises(ProblemsFound, match=r'one shot loads line "lattice" by 1 of'):
        compile_sequence(small(), small_rig(('"20000 Er s"', '"50 Er s"')))


def test_a_long_ramp_may_cross_rest() -> None:
    """The load of a ramp from -2 to +2 A over 1 s is two triangles of 0.5 s and 2 A: 1 A s, not zero."""
    made = compile_sequence(
        small(('lasts  = "20 ms"', 'lasts  = "1 s"\nramps = { coil = { from = "-2 A", to = "2 A" } }')), small_rig()
    )
    edges = made.timelines.edges(np.array([0]))
    track, line = edges.tracks["coil"], made.timelines.rig.lines["coil"]
    load = track.load(line, track.lengths(edges.ticks) * 1e-8)
    assert load.sum() == pytest.approx(8 * 0.5 + 1.0, rel=1e-9)
