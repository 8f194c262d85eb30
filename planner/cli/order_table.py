"""A running order as a CSV of plain numbers, one row a shot."""

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from planner.errors import InputError
from planner.quantities import to_unit

if TYPE_CHECKING:
    from planner.design.merging import Part
    from planner.design.running_order import RunningOrder


def write_order(order: "RunningOrder", parts: "Sequence[Part]", out: str, *, measured_only: bool) -> None:
    """Write an order as CSV, numbers only, with digits enough that shots never seem to overlap.

    A column that a request does not have is empty in its rows. `request` is there where a night has several.

    Raises:
        InputError: the place cannot be written.
    """
    keep = np.flatnonzero(order.kind == 0) if measured_only else np.arange(len(order))
    columns: dict[str, np.ndarray[Any, Any]] = {
        "start_s": (order.start_s + order.settle_s)[keep],
        "duration_s": order.duration_s[keep],
    }
    if len(parts) > 1:
        columns["request"] = order.request[keep]
    own = [_own(part) for part in parts]
    heads = dict.fromkeys(name for group in own for name in group)
    switches = [name for name in heads if name.startswith("switch_")]
    first = ["hold_s", "phase_deg", *switches]
    columns |= {name: _gathered(name, own, order, keep) for name in first}
    columns |= {"settle_s": order.settle_s[keep], "kind": order.kind[keep], "packet": order.packet[keep]}
    columns |= {name: _gathered(name, own, order, keep) for name in ("cell", "repeat")}
    columns["unit"] = order.unit[keep]
    columns |= {name: _gathered(name, own, order, keep) for name in heads if name not in columns}
    rows_out = zip(*(column.tolist() for column in columns.values()), strict=True)
    lines = [",".join(columns)]
    lines += [",".join("" if value is None or value != value else repr(value) for value in row) for row in rows_out]
    try:
        Path(out).write_text("\n".join(lines) + "\n", encoding="utf-8")
    except OSError as wrong:
        raise InputError(f'the order "{out}" cannot be written: {wrong.strerror}') from wrong


def _own(part: "Part") -> dict[str, np.ndarray[Any, Any]]:
    """The columns of one request by heading, along its shot table."""
    table, sequence = part.table, part.sequence
    taken = {"start_s", "duration_s", "settle_s", "request", "kind", "packet", "unit"}
    columns: dict[str, np.ndarray[Any, Any]] = {
        "hold_s": table.hold_s,
        "phase_deg": np.rad2deg(table.phase_rad).round(9),
        "cell": table.cell,
        "repeat": table.repeat,
    }
    columns |= {f"switch_{name}": states for name, states in table.switches.items()}
    for name, values in table.settings.items():
        unit = sequence.settings[name].unit
        heading = f"{name}_{unit}".rstrip("_")
        if (heading in columns or heading in taken) and (name, heading) != (sequence.roles["hold"], "hold_s"):
            heading = f"setting_{heading}"  # a setting called "start" is not the start of a shot
        columns[heading] = np.asarray(to_unit(values, unit))
    return columns


def _gathered(
    name: str, own: "Sequence[dict[str, np.ndarray[Any, Any]]]", order: "RunningOrder", keep: "np.ndarray[Any, Any]"
) -> "np.ndarray[Any, Any]":
    """One column over the positions of all requests."""
    if len(own) == 1:
        return np.asarray(own[0][name][order.shot[keep]])
    out = np.full(len(keep), None, dtype=object)
    for number, columns in enumerate(own):
        mine = order.request[keep] == number
        if name in columns:
            out[mine] = columns[name][order.shot[keep][mine]].tolist()
    return out
