"""`nightfringe timeline`: one shot, drawn."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.sequence.drawing import Drawing

PICTURES = (".svg", ".png")


@click.command()
@click.argument("file", type=click.Path())
@click.option("--shot", type=click.IntRange(min=0), default=0, show_default=True, help="row of the shot table")
@click.option("--out", type=click.Path(), help="draw to this file instead: .svg or .png")
@click.option("--json", "as_json", is_flag=True, help="print the timeline as the rig gets it")
def command(file: str, shot: int, out: str | None, as_json: bool) -> None:
    """Draw the timeline of one shot.

    Long spans are cut openly: widths go by the logarithm, and every span's true length stands beside it.
    """
    import json
    import shutil

    from planner.quantities import format_quantity
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.drawing import lay_out, text_drawing
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import rig_of

    if out is not None and Path(out).suffix not in PICTURES:
        raise InputError(f'--out ends in .svg or .png; found "{out}"')
    sequence = read_sequence(file)
    compiled = compile_sequence(sequence, rig_of(sequence))
    if shot >= len(compiled.table):
        raise InputError(f"there is no shot {shot}; this sequence has shots 0 to {len(compiled.table) - 1}")
    document = compiled.timelines.document(int(compiled.table.timeline[shot]))
    if as_json:
        click.echo(json.dumps(document))
        return
    drawing = lay_out(document)
    parts = [
        f"{name} = {format_quantity(float(column[shot]), sequence.settings[name].unit)}"
        for name, column in compiled.table.settings.items()
    ]
    title = f"{sequence.title}, shot {shot}: {', '.join(parts)}"
    if out is None:
        click.echo(title)
        click.echo(text_drawing(drawing, shutil.get_terminal_size((100, 24)).columns, blocks=_blocks()))
        return
    draw_to_file(drawing, title, out)
    click.echo(f"written: {out}")


def _blocks() -> str:
    """Characters for levels that this terminal can show."""
    import sys

    from planner.sequence.drawing import BLOCKS, PLAIN_BLOCKS

    try:
        BLOCKS.encode(sys.stdout.encoding or "ascii")
    except (UnicodeEncodeError, LookupError):
        return PLAIN_BLOCKS
    return BLOCKS


def draw_to_file(drawing: "Drawing", title: str, out: str) -> None:
    """The drawing as SVG or PNG.

    Raises:
        InputError: the place cannot be written.
    """
    import textwrap
    from itertools import pairwise

    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot as plt

    from planner.sequence.drawing import NOT_TO_SCALE, format_time

    edges = [0.0]
    for span in drawing.spans:
        edges.append(edges[-1] + span.weight)
    with matplotlib.rc_context({"svg.hashsalt": "nightfringe", "svg.fonttype": "none"}):
        figure, axes = plt.subplots(
            len(drawing.units), 1, sharex=True, squeeze=False, figsize=(11, 1.6 + 0.8 * len(drawing.units))
        )
        for row, (name, unit_text) in zip(axes[:, 0], drawing.units.items(), strict=True):
            _draw_line(row, drawing, edges, name, unit_text)
        bottom = axes[-1, 0]
        middles = [(a + b) / 2 for a, b in pairwise(edges)]
        bottom.set_xticks(middles, [format_time(span.length_s) for span in drawing.spans], rotation=90, fontsize=7)
        bottom.set_xlabel(NOT_TO_SCALE, fontsize=8)
        figure.suptitle(textwrap.fill(title, 110), fontsize=9)
        figure.tight_layout()
        try:
            figure.savefig(out, metadata={"Date": None} if out.endswith(".svg") else None)
        except OSError as wrong:
            raise InputError(f"cannot write {out}: {wrong.strerror or wrong}") from wrong
        finally:
            plt.close(figure)


def _draw_line(row: Any, drawing: "Drawing", edges: list[float], name: str, unit_text: str) -> None:
    x = [edge for k in range(len(drawing.spans)) for edge in (edges[k], edges[k + 1])]
    y = [level for span in drawing.spans for level in span.levels[name]]
    row.plot(x, y, color="#1f4e79", linewidth=1.2)
    row.fill_between(x, y, color="#1f4e79", alpha=0.15)
    row.set_ylabel(f"{name}\n{unit_text}".strip(), rotation=0, ha="right", va="center", fontsize=8)
    row.tick_params(axis="y", labelsize=7)
    row.spines[["top", "right"]].set_visible(False)
    for edge in edges[1:-1]:
        row.axvline(edge, color="0.85", linewidth=0.5, zorder=0)
