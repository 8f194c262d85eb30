"""A small picture of contrast against hold for a terminal."""

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from planner.analysis.results import CurveResults

WIDTH, HEIGHT = 60, 11


def contrast_lines(curve: "CurveResults") -> list[str]:
    """Lines of a text picture: points `o` with their 95 % intervals `|`, the fit `.`; hold on a logarithmic axis.

    Returns:
        No lines where there is no contrast to draw.
    """
    holds = curve.contrast
    if holds is None or len(holds) < 2 or not (holds.hold_s > 0).all():
        return []
    top = _round_up(float(holds.high.max()))
    first, last = np.log(holds.hold_s[0]), np.log(holds.hold_s[-1])
    grid = [[" "] * WIDTH for _ in range(HEIGHT)]

    def row(value: float) -> int:
        return int(np.clip(round((HEIGHT - 1) * (1 - value / top)), 0, HEIGHT - 1))

    if curve.coherence is not None:
        fine = np.exp(np.linspace(first, last, WIDTH))
        for column, value in enumerate(curve.coherence.value(fine)):
            grid[row(float(value))][column] = "."
    columns = np.rint((np.log(holds.hold_s) - first) / (last - first) * (WIDTH - 1)).astype(int)
    for column, value, low, high in zip(columns, holds.value, holds.low, holds.high, strict=True):
        for line in range(row(high), row(low) + 1):
            grid[line][column] = "|"
        grid[row(value)][column] = "o"
    lines = []
    for number, cells in enumerate(grid):
        mark = f"{top * (1 - number / (HEIGHT - 1)):6.3f}" if number % 5 == 0 else " " * 6
        lines.append(f"{mark} |{''.join(cells).rstrip()}")
    lines.append(f"{'':6} +{'-' * WIDTH}")
    left, right = f"{holds.hold_s[0]:.3g} s", f"{holds.hold_s[-1]:.3g} s"
    middle = "hold, log scale"
    lines.append(f"{'':8}{left}{middle:^{WIDTH - len(left) - len(right)}}{right}")
    return lines


def _round_up(value: float) -> float:
    """The next 1, 2, 2.5, 4, 5, 6, 8 x 10^n at or above."""
    scale = 10.0 ** np.floor(np.log10(max(value, 1e-6)))
    return float(next(step * scale for step in (1, 2, 2.5, 4, 5, 6, 8, 10) if step * scale >= value * 0.999))
