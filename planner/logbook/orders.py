"""Shot tables and running orders as documents, and back.

A revision holds the positions from its `from_position` on; the order in force is each one laid over those before.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.arrays import IntArray
from planner.design.running_order import RunningOrder
from planner.errors import LogbookDamaged
from planner.logbook.columns import Columns, pack, unpack
from planner.sequence.table import ShotTable

ORDER_COLUMNS = ("request", "shot", "kind", "start_s", "settle_s", "duration_s", "packet", "unit", "flip")
TABLE_COLUMNS = ("hold_s", "phase_rad", "duration_s", "cell", "packet", "repeat", "timeline")


@dataclass(frozen=True, kw_only=True)
class OrderInForce:
    """The whole order as the latest revision leaves it; arrays of shape (n_position,).

    `revision` is the number of the revision that each position comes from.
    """

    columns: Mapping[str, Any]
    revision: IntArray

    def __len__(self) -> int:
        return len(self.revision)


def pack_order(order: RunningOrder) -> bytes:
    """A running order (or the tail of one that a revision brings) as the bytes of a document."""
    meta = {"seed": order.seed, "figures": dict(order.figures), "notes": dict(order.notes)}
    return pack({name: np.asarray(getattr(order, name)) for name in ORDER_COLUMNS}, _plain(meta))


def unpack_order(content: bytes) -> RunningOrder:
    """The running order in a document (LogbookDamaged where it is none)."""
    columns, meta = unpack(content)
    try:
        return RunningOrder(
            **{name: columns[name] for name in ORDER_COLUMNS},
            seed=meta["seed"],
            figures=meta["figures"],
            notes=meta["notes"],
        )
    except KeyError as error:
        raise LogbookDamaged(f"an order without its {error}") from error


def pack_table(table: ShotTable, timelines: Sequence[str]) -> bytes:
    """A shot table and the hashes of its timelines as the bytes of a document."""
    columns: Columns = {name: np.asarray(getattr(table, name)) for name in TABLE_COLUMNS}
    columns |= {f"setting_{name}": np.asarray(values, np.float64) for name, values in table.settings.items()}
    columns |= {f"switch_{name}": np.asarray(values, np.int8) for name, values in table.switches.items()}
    return pack(columns, {"timelines": list(timelines)})


def unpack_table(content: bytes) -> tuple[ShotTable, tuple[str, ...]]:
    """The shot table in a document and the hashes of its timelines (LogbookDamaged where it is none)."""
    columns, meta = unpack(content)
    try:
        table = ShotTable(
            settings=_group(columns, "setting_"),
            switches=_group(columns, "switch_"),
            **{name: columns[name] for name in TABLE_COLUMNS},
        )
        return table, tuple(meta["timelines"])
    except KeyError as error:
        raise LogbookDamaged(f"a shot table without its {error}") from error


def in_force(revisions: Sequence[tuple[int, int, RunningOrder]]) -> OrderInForce:
    """Lay revisions over each other.

    Args:
        revisions: (number, from_position, tail) by rising number, the first from position 0.
    """
    parts: dict[str, list[Any]] = {name: [] for name in ORDER_COLUMNS}
    owners: list[IntArray] = []
    length = 0
    for number, start, tail in revisions:
        if start < length:  # a replan: what had not been sent gives way
            whole = {name: np.concatenate(columns)[:start] for name, columns in parts.items()}
            parts = {name: [column] for name, column in whole.items()}
            owners = [np.concatenate(owners)[:start]]
        for name in ORDER_COLUMNS:
            parts[name].append(getattr(tail, name))
        owners.append(np.full(len(tail), number, dtype=np.int64))
        length = start + len(tail)
    return OrderInForce(
        columns={name: np.concatenate(columns) for name, columns in parts.items()}, revision=np.concatenate(owners)
    )


def _group(columns: Columns, prefix: str) -> Columns:
    return {name.removeprefix(prefix): column for name, column in columns.items() if name.startswith(prefix)}


def _plain(value: Any) -> Any:
    """The same value in Python's own types, for JSON."""
    if isinstance(value, Mapping):
        return {str(name): _plain(inner) for name, inner in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(inner) for inner in value]
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, np.generic):
        return value.item()
    return value
