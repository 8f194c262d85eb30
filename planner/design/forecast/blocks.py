"""Trials in blocks, each with a random stream of its own: the same numbers on one core, on many, on other machines."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np

from planner.arrays import FloatArray

BLOCK = 500  # trials; fixed, so that the result does not depend on how many workers there are


@dataclass(frozen=True, kw_only=True)
class Block:
    """Some trials: task(rng, trials=n) gives an array whose first axis are the trials."""

    task: Callable[..., FloatArray]
    seed: np.random.SeedSequence
    trials: int


def run_block(block: Block) -> FloatArray:
    """One block's trials."""
    return block.task(np.random.default_rng(block.seed), trials=block.trials)


Spread = Callable[[Callable[[Block], FloatArray], list[Block]], Iterable[FloatArray]]


def in_blocks(task: Callable[..., FloatArray], trials: int, seed: int, spread: Spread = map) -> FloatArray:
    """task(rng, trials=n) for all trials, joined along the first axis.

    spread(function, blocks) runs the blocks wherever it likes and gives the results in their order; `map` does so here.
    """
    seeds = np.random.SeedSequence(seed).spawn(-(-trials // BLOCK))
    blocks = [Block(task=task, seed=one, trials=min(BLOCK, trials - k * BLOCK)) for k, one in enumerate(seeds)]
    return np.concatenate(list(spread(run_block, blocks)))
