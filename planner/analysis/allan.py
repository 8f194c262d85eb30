"""Allan's family of deviations of a series on a regular grid, overlapping, with empty slots allowed.

A series is values of one quantity (a phase of a packet, a temperature), each the mean over one slot; it takes the place
of frequency data in the literature. All estimates come from cumulative sums, so one averaging time costs O(n) and a
ladder of octaves O(n log n).

The rule for gaps: an average over m slots counts if at least nine in ten of them are filled, and is the mean of those.
An estimate uses every pair (or triple) of adjoining averages that count. So one missing packet costs no long
averaging time, and the white noise of an average is at most 1/0.9 of what it would be in variance, 5 % in deviation.

References:
    W. J. Riley, Handbook of Frequency Stability Analysis, NIST SP 1065 (2008), section 5.2 (formulae from memory; the
    handbook's worked examples are reproduced by the tests).
"""

from dataclasses import dataclass

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.errors import InputError, NotEnoughData

FILLED = 0.9  # share of an average's slots that must hold a value


@dataclass(frozen=True, kw_only=True)
class Deviations:
    """A deviation at several averaging times. Arrays of shape (n_factor,)."""

    factor: IntArray  # slots in one average, m
    value: FloatArray  # in the unit of the series; NaN where no term counts
    terms: IntArray  # differences of averages that went in
    possible: IntArray  # how many there would be without gaps

    def __len__(self) -> int:
        return len(self.factor)


def octaves(slots: int, *, share: float = 1 / 3) -> IntArray:
    """Averaging factors 1, 2, 4, ... up to a share of the series, (n_factor,)."""
    most = int(slots * share)
    return 2 ** np.arange(max(most, 1).bit_length(), dtype=np.int64)


def allan(values: FloatArray, factors: IntArray) -> Deviations:
    """Overlapping Allan deviation: root of half the mean square of the difference of adjoining averages.

    Args:
        values: one per slot, (n_slot,); NaN where a slot is empty. factors: averaging factors m, (n_factor,).

    Returns:
        Deviations; n - 2m + 1 terms are possible.

    Raises:
        InputError: a factor below 1, or a value that is infinite. NotEnoughData: no slot is filled.
    """
    return _ladder(values, factors, order=2)


def hadamard(values: FloatArray, factors: IntArray) -> Deviations:
    """Overlapping Hadamard deviation: from second differences of averages, blind to a steady drift.

    Args, returns and errors as `allan`; n - 3m + 1 terms are possible.
    """
    return _ladder(values, factors, order=3)


def modified_allan(values: FloatArray, factors: IntArray) -> Deviations:
    """Modified Allan deviation: differences of adjoining averages, themselves averaged over m shifts.

    For white noise of the series it is 1/sqrt(2) of Allan's at long averages. Args,
    returns and errors as `allan`; n - 3m + 2 terms are possible.
    """
    series, filled = _checked(values, factors)
    found = []
    for m in factors.tolist():
        difference, counts = _differences(series, filled, m, 2)
        windows = len(difference) - m + 1
        if windows < 1:
            found.append((np.nan, 0, max(windows, 0)))
            continue
        mean, enough = _averages(np.where(counts, difference, 0.0), counts, m)
        found.append((*_mean_square(mean[enough], 2.0), windows))
    return _deviations(factors, found)


def total(values: FloatArray, factors: IntArray) -> Deviations:
    """Total deviation: Allan's, of the series continued by its mirror image at both ends.

    More degrees of freedom at long averages, and biased low there for flicker and random-walk noise. A mirror image has
    no meaning for a series with holes, so gaps leave NaN. Args, returns and errors as `allan`.

    References:
        SP 1065, section 5.2.11 (from memory).
    """
    series, filled = _checked(values, factors)
    size = len(series)
    if not filled.all() or size < 2:
        return _deviations(factors, [(np.nan, 0, max(size - 1, 0))] * len(factors))
    longest = int(min(factors.max(), size))
    running = np.concatenate(
        [[0.0], np.cumsum(np.concatenate([series[:longest][::-1], series, series[::-1][:longest]]))]
    )
    found: list[tuple[float, int, int]] = []
    for m in factors.tolist():
        if m > size:
            found.append((np.nan, 0, size - 1))
            continue
        at = np.arange(longest + 1, longest + size)
        second = (running[at + m] - 2 * running[at] + running[at - m]) / m
        found.append((*_mean_square(second, 2.0), size - 1))
    return _deviations(factors, found)


def _ladder(values: FloatArray, factors: IntArray, *, order: int) -> Deviations:
    series, filled = _checked(values, factors)
    found = []
    for m in factors.tolist():
        difference, counts = _differences(series, filled, m, order)
        found.append((*_mean_square(difference[counts], 2.0 if order == 2 else 6.0), len(difference)))
    return _deviations(factors, found)


def _checked(values: FloatArray, factors: IntArray) -> tuple[FloatArray, BoolArray]:
    series = np.asarray(values, float)
    if len(factors) and int(np.min(factors)) < 1:
        raise InputError(f"an averaging factor is a whole number from 1; found {int(np.min(factors))}")
    if np.isinf(series).any():
        raise InputError(f"{int(np.isinf(series).sum())} of {len(series)} values are infinite; leave such values out")
    filled = np.isfinite(series)
    if not filled.any():
        raise NotEnoughData("the series holds no value")
    # sums of values near zero keep their digits: a temperature is 296 and moves by a thousandth
    return np.where(filled, series - series[filled].mean(), 0.0), filled


def _averages(series: FloatArray, filled: BoolArray, m: int) -> tuple[FloatArray, BoolArray]:
    """Means over m slots from every start, and which of them count; (n_slot - m + 1,)."""
    sums = np.concatenate([[0.0], np.cumsum(series)])
    held = np.concatenate([[0], np.cumsum(filled)])
    count = held[m:] - held[:-m]
    return (sums[m:] - sums[:-m]) / np.maximum(count, 1), count >= max(FILLED * m, 1)


def _differences(series: FloatArray, filled: BoolArray, m: int, order: int) -> tuple[FloatArray, BoolArray]:
    """First (order 2) or second (order 3) differences of adjoining averages, and which count; empty if too short."""
    if len(series) < order * m:
        return np.empty(0), np.empty(0, dtype=np.bool_)
    mean, enough = _averages(series, filled, m)
    for _ in range(order - 1):
        mean, enough = mean[m:] - mean[:-m], enough[m:] & enough[:-m]
    return mean, enough


def _mean_square(terms: FloatArray, norm: float) -> tuple[float, int]:
    return (float(np.sqrt(np.mean(terms**2) / norm)) if len(terms) else np.nan), len(terms)


def _deviations(factors: IntArray, found: list[tuple[float, int, int]]) -> Deviations:
    value, terms, possible = zip(*found, strict=True) if found else ((), (), ())
    return Deviations(
        factor=np.asarray(factors, np.int64),
        value=np.array(value, float),
        terms=np.array(terms, np.int64),
        possible=np.array(possible, np.int64),
    )
