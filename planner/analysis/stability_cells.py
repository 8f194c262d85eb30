"""The level of each cell of a night, told apart from the drift that runs through all of them.

A plain mean of a cell's packets follows where in the night they happened to be: with drift much above the noise, cells
would get levels that differ by chance, and their packets would seem to jump. So the levels are fitted together, with
the night as white noise plus a random walk of unknown size. The cosine transform (DCT-II) makes that a weighted least
squares with one weight a coefficient, and the size of the walk is the one of greatest restricted likelihood.

References:
    Patterson and Thompson, Biometrika 58, 545 (1971), restricted likelihood; the DCT-II holds the principal components
    of a random walk about its mean: Strang, SIAM Rev. 41, 135 (1999) (both from memory).
"""

import numpy as np
from scipy import fft

from planner.arrays import BoolArray, FloatArray, IntArray

LEAST_PER_CELL = 4  # packets that make a cell's level; with fewer the residual is mostly the level's own error
# step of the walk, as a variance over the white noise's: from none to a walk in which noise is not seen
WALKS = np.concatenate([[0.0], np.logspace(-6, 2, 17)])


def cell_residuals(values: FloatArray, cell: IntArray) -> tuple[FloatArray, BoolArray]:
    """Values with their cells' levels taken off, and which of them have one.

    A fitted level follows its own packets and makes white residuals smaller, by sqrt(1 - (cells - 1) / n) over all;
    that is undone.

    Args:
        values: in time order, (n,); NaN where there is none. cell: of each, (n,).

    Returns:
        Residuals about a mean of zero, (n,), NaN where a cell has fewer than 4 values; and where they are, (n,).
    """
    good = np.isfinite(values)
    held = np.bincount(cell[good], minlength=int(cell.max()) + 1)
    usable = good & (held[cell] >= LEAST_PER_CELL)
    found = np.full(len(values), np.nan)
    if not usable.any():
        return found, usable
    label = np.unique(cell[usable], return_inverse=True)[1].ravel()
    residual = values[usable] - cell_levels(values[usable], label)[label]
    cells, count = int(label.max()) + 1, len(label)
    found[usable] = (residual - residual.mean()) * np.sqrt(count / max(count - cells + 1, 1))
    return found, usable


def cell_levels(values: FloatArray, cell: IntArray) -> FloatArray:
    """Level of each cell against the first, (n_cell,), with the drift of the night fitted as a random walk.

    Args:
        values: in time order, finite, (n,). cell: 0 .. n_cell - 1, none empty, (n,).
    """
    count, cells = len(values), int(cell.max()) + 1
    if cells == 1:
        return np.zeros(1)
    y = fft.dct(values, norm="ortho")[1:]
    design = fft.dct(np.eye(cells)[cell][:, 1:], axis=0, norm="ortho")[1:]
    walk = 1 / (4 * np.sin(np.pi * np.arange(1, count) / (2 * count)) ** 2)
    best, least = np.zeros(cells - 1), np.inf
    for size in WALKS:
        weight = 1 / (1 + size * walk)
        weighted = design * weight[:, None]
        information = weighted.T @ design
        levels = np.linalg.lstsq(information, weighted.T @ y, rcond=None)[0]
        square = float(np.sum(weight * (y - design @ levels) ** 2))
        sign, log_determinant = np.linalg.slogdet(information)
        if sign <= 0:
            continue
        freedom = count - cells
        criterion = freedom * np.log(max(square, 1e-300)) - np.log(weight).sum() + log_determinant
        if criterion < least:
            best, least = levels, criterion
    return np.concatenate([[0.0], best])
