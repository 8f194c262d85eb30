"""A drawing of one timeline whose time axis is cut openly: every span between two edges is wide enough to be seen.

Spans are drawn by the logarithm of their length, so that a 40 us pulse and a minute of hold fit on one page. Each
drawing carries the true length of every span, and says that widths are not to scale.
"""

from dataclasses import dataclass
from itertools import pairwise
from math import log10
from typing import Any

BLOCKS = "▁▂▃▄▅▆▇█"
PLAIN_BLOCKS = "_.-=+*%#"  # for terminals that know ASCII alone
NOT_TO_SCALE = "widths are not to scale: each span is drawn by the logarithm of its length, written below"
MOST_SPANS = 400


@dataclass(frozen=True, kw_only=True)
class Span:
    """The time between two neighbouring edges of any line."""

    start_s: float
    length_s: float
    weight: float  # relative width in the drawing, at least 1
    levels: dict[str, tuple[float, float]]  # line -> level at its start and its end, in the line's unit


@dataclass(frozen=True, kw_only=True)
class Drawing:
    """All spans of a shot, the units of its lines, and whether spans had to be left out."""

    spans: tuple[Span, ...]
    units: dict[str, str]
    left_out: int = 0


def lay_out(document: dict[str, Any]) -> Drawing:
    """Cut a timeline (as `TimelineSet.document` gives it) into spans."""
    tick, end = document["tick_s"], document["ticks"]
    lines = document["lines"]
    ticks = sorted({edge[0] for line in lines.values() for edge in line["edges"]} | {0, end})
    shortest = min((b - a for a, b in pairwise(ticks) if b > a), default=1)
    spans = []
    for start, stop in list(pairwise(ticks))[:MOST_SPANS]:
        levels = {name: _levels(line["edges"], start, stop, end) for name, line in lines.items()}
        weight = 1.0 + log10((stop - start) / shortest)
        spans.append(Span(start_s=start * tick, length_s=(stop - start) * tick, weight=weight, levels=levels))
    units = {name: line["unit"] for name, line in lines.items()}
    return Drawing(spans=tuple(spans), units=units, left_out=max(0, len(ticks) - 1 - MOST_SPANS))


def _levels(edges: list[list[float]], start: int, stop: int, end: int) -> tuple[float, float]:
    """Level of a line at both ends of a span that no edge of it lies inside."""
    for k, (tick, low, high) in enumerate(edges):
        until = edges[k + 1][0] if k + 1 < len(edges) else end
        if tick <= start < until:
            share = 1.0 / (until - tick)
            return low + (high - low) * (start - tick) * share, low + (high - low) * (stop - tick) * share
    return 0.0, 0.0


def format_time(seconds: float) -> str:
    """A length for people: "40 us", "2.1 s"."""
    for factor, unit_text in ((1.0, "s"), (1e-3, "ms"), (1e-6, "us"), (1e-9, "ns")):
        if seconds >= factor * 0.9999999 or unit_text == "ns":
            return f"{seconds / factor:.6g} {unit_text}"
    return "0 s"


def text_drawing(drawing: Drawing, width: int = 100, *, blocks: str = BLOCKS) -> str:
    """The drawing in characters: one row a line, then the spans with their true start, length and levels.

    `blocks` are the characters from the lowest to the highest level.
    """
    name_width = max((len(name) for name in drawing.units), default=4)
    room = max(width - name_width - 2, len(drawing.spans))
    total = sum(span.weight for span in drawing.spans) or 1.0
    # at least one character for every span; what is left is shared by weight
    spare = max(0, room - len(drawing.spans))
    widths = [1 + int(spare * span.weight / total) for span in drawing.spans]
    rows = []
    for name in drawing.units:
        levels = [level for span in drawing.spans for level in span.levels[name]]
        low, high = min([*levels, 0.0]), max([*levels, 0.0])
        drawn = "".join(
            _bar(span.levels[name], columns, low, high, blocks)
            for span, columns in zip(drawing.spans, widths, strict=True)
        )
        rows.append(f"{name:>{name_width}}  {drawn}")
    marks = "".join("|" + " " * (columns - 1) for columns in widths)
    rows += [f"{'':>{name_width}}  {marks}", NOT_TO_SCALE, ""]
    rows += [f"{'start':>14}  {'length':>12}  levels (lines away from zero)"]
    for span in drawing.spans:
        shown = [_level_text(name, span.levels[name], drawing.units[name]) for name in drawing.units]
        rows.append(
            f"{f'{span.start_s:.8g} s':>14}  {format_time(span.length_s):>12}  {', '.join(filter(None, shown))}"
        )
    if drawing.left_out:
        rows.append(f"... {drawing.left_out} more spans")
    return "\n".join(rows)


def _bar(levels: tuple[float, float], columns: int, low: float, high: float, blocks: str) -> str:
    reach = high - low or 1.0
    bar = ""
    for column in range(columns):
        level = levels[0] + (levels[1] - levels[0]) * (column + 0.5) / columns
        bar += blocks[min(len(blocks) - 1, int((level - low) / reach * len(blocks)))] if level != 0.0 else " "
    return bar


def _level_text(name: str, levels: tuple[float, float], unit_text: str) -> str:
    if levels == (0.0, 0.0):
        return ""
    unit_part = f" {unit_text}" if unit_text else ""
    if levels[0] == levels[1]:
        return f"{name} {levels[0]:.6g}{unit_part}"
    return f"{name} {levels[0]:.6g} to {levels[1]:.6g}{unit_part}"
