"""Trials in blocks, each with a random stream of its own: the same numbers on one core, on many, on other machines."""

from collections.abc import Callable, Iterable

import numpy as np
from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]

from planner.arrays import FloatArray

BLOCK = 500  # trials; fixed, so that the result does not depend on how many workers there are
Task = Callable[[np.random.Generator, int], FloatArray]
Block = tuple[Task, np.random.SeedSequence, int]
Spread = Callable[[Callable[[Block], FloatArray], list[Block]], Iterable[FloatArray]]


def run_block(block: Block) -> FloatArray:
    """One block's trials, on one thread: sums over threads would differ in their last digits from core to core."""
    task, seed, trials = block
    with threadpool_limits(limits=1):
        return task(np.random.default_rng(seed), trials)


def in_blocks(task: Task, trials: int, seed: int, spread: Spread = map) -> FloatArray:
    """task(rng, n) for all trials, joined along the first axis.

    spread(function, blocks) runs the blocks wherever it likes and gives the results in their order; `map` does so here.
    """
    seeds = np.random.SeedSequence(seed).spawn(-(-trials // BLOCK))
    blocks: list[Block] = [(task, one, min(BLOCK, trials - k * BLOCK)) for k, one in enumerate(seeds)]
    return np.concatenate(list(spread(run_block, blocks)))
