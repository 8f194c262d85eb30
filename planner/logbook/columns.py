"""The column container: named numpy columns and a small JSON text as bytes that are the same for the same content.

Layout: magic (8 bytes, with the version), length of the header (uint32), header (canonical JSON: `rows`, `meta`, and
per column its name and type), then the columns one after another in the header's order. Everything little-endian.
Nothing in it can run: reading builds arrays and nothing else.
"""

import json
import struct
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from planner.errors import LogbookDamaged
from planner.logbook.types import canonical_json

MAGIC = b"NFCOLS\x00\x01"
KINDS = {"f8": "<f8", "i8": "<i8", "i1": "|i1"}
Columns = dict[str, NDArray[Any]]


def pack(columns: Mapping[str, NDArray[Any]], meta: Mapping[str, Any]) -> bytes:
    """Columns of equal length and a JSON-able `meta` as bytes; columns are put in the order of their names.

    Raises:
        ValueError: columns of unequal length, more than one dimension, or a type other than float64, int64, int8.
    """
    lengths = {column.shape for column in columns.values()}
    if len(lengths) > 1 or any(len(shape) != 1 for shape in lengths):
        raise ValueError(f"columns must be one-dimensional and of equal length; found shapes {sorted(lengths)}")
    names = sorted(columns)
    kinds = {name: columns[name].dtype.kind + str(columns[name].dtype.itemsize) for name in names}
    unknown = [f"{name} ({columns[name].dtype})" for name in names if kinds[name] not in KINDS]
    if unknown:
        raise ValueError(f"column types must be float64, int64 or int8; found {', '.join(unknown)}")
    header = canonical_json(
        {
            "columns": [[name, kinds[name]] for name in names],
            "rows": lengths.pop()[0] if lengths else 0,
            "meta": dict(meta),
        }
    ).encode()
    parts = [MAGIC, struct.pack("<I", len(header)), header]
    parts += [columns[name].astype(KINDS[kinds[name]], copy=False).tobytes() for name in names]
    return b"".join(parts)


def unpack(content: bytes) -> tuple[Columns, dict[str, Any]]:
    """Columns and meta of what `pack` made.

    Raises:
        LogbookDamaged: not such a container, of a later version, or cut short.
    """
    if content[: len(MAGIC)] != MAGIC:
        raise LogbookDamaged("a column blob does not start as one of this version does")
    try:
        (length,) = struct.unpack_from("<I", content, len(MAGIC))
        at = len(MAGIC) + 4
        header = json.loads(content[at : at + length])
        at += length
        rows = int(header["rows"])
        columns: Columns = {}
        for name, kind in header["columns"]:
            dtype = np.dtype(KINDS[kind])
            columns[name] = np.frombuffer(content, dtype=dtype, count=rows, offset=at)
            at += rows * dtype.itemsize
        meta = header["meta"]
    except (struct.error, ValueError, KeyError, TypeError) as error:
        raise LogbookDamaged(f"a column blob is cut short or garbled: {error}") from error
    if at != len(content):
        raise LogbookDamaged(f"a column blob has {len(content) - at} bytes too many")
    return columns, dict(meta)
