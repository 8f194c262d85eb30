"""The largest amount of something within any window of time: duty and load."""

import numpy as np

from planner.arrays import FloatArray


def worst_window(start_s: FloatArray, length_s: FloatArray, amount: FloatArray, window_s: float) -> FloatArray:
    """Largest sum of `amount` in any window of `window_s`, row by row.

    Args:
        start_s, length_s: segments of each row, shape (n_segment, n_row), in time order and not overlapping, s.
        amount: what each segment holds, spread evenly over its length, not negative.

    Returns:
        shape (n_row,). The largest sum is met by a window that starts with a segment or ends with one: between such
        moments the sum changes linearly, and it only turns from growing to falling at one of them.
    """
    end_s = start_s + length_s
    rate = np.divide(amount, length_s, out=np.zeros_like(amount), where=length_s > 0)
    worst = np.zeros(start_s.shape[1])
    everything: FloatArray = amount.sum(axis=0)
    if np.all(end_s[-1] - start_s[0] <= window_s):
        return everything
    for opens in (*start_s, *(end_s - window_s)):
        inside = np.minimum(end_s, opens + window_s) - np.maximum(start_s, opens)
        worst = np.maximum(worst, (rate * np.clip(inside, 0.0, None)).sum(axis=0))
    return worst
