"""A night's columns as they leave the house: units in the names, states in words, nothing that a spreadsheet runs."""

import csv
import os
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.logbook.book import Logbook, NightRow
from planner.quantities import to_unit

KIND_WORDS = ("measure", "warm-up", "check", "sounding")
FIRST = ("position", "request", "shot", "kind", "packet", "cell", "repeat", "unit", "key", "state", "start_utc")
MEASURED = ("hold_s", "phase_deg", "start_s", "mid_s", "duration_s", "atoms_a", "atoms_b", "background", "saturated")
RUN_BY_SPREADSHEETS = ("=", "+", "-", "@", "\t", "\r")  # OWASP, "CSV injection" (from memory)


@dataclass(frozen=True, kw_only=True)
class Export:
    """Columns in the order in which they are written, and what is said about the night as a whole."""

    columns: Mapping[str, Any]
    about: Mapping[str, str]


def export_night(book: Logbook, night: NightRow) -> Export:
    """The columns of a night for other programs."""
    found = book.night_columns(night.id)
    requests = book.requests(night.id)
    reading_units = book.reading_units(night.id)
    settings: dict[str, str] = {}
    switches: dict[str, list[str]] = {}
    for request in requests:
        settings |= {name: str(one["unit"]) for name, one in request.details.get("settings", {}).items()}
        switches |= {name: list(one["states"]) for name, one in request.details.get("switches", {}).items()}
    columns = {name: found[name] for name in FIRST if name in found}
    columns["kind"] = np.array([KIND_WORDS[kind] for kind in found["kind"]], dtype=np.str_)
    columns["start_utc"] = np.array([_utc(night.begins_us, second) for second in found["start_s"]], dtype=np.str_)
    columns["phase_deg"] = np.rad2deg(found["phase_rad"])
    columns |= {name: found[name] for name in MEASURED if name in found}
    columns["flags"] = found["flags"]
    for name, states in switches.items():
        words = np.array([states[1], "", states[0]], dtype=np.str_)
        columns[f"switch_{name}"] = words[found[f"switch_{name}"] + 1]
    for name, unit in settings.items():
        if f"setting_{name}" in found:
            columns[_named("setting", name, unit)] = to_unit(found[f"setting_{name}"], unit)
    for name, values in found.items():
        if name.startswith("reading_"):
            reading = name.removeprefix("reading_")
            columns[_named("reading", reading, reading_units.get(reading, ""))] = values
    ordered = [name for name in (*FIRST, *MEASURED) if name in columns]
    rest = [name for name in columns if name not in ordered]
    about = {
        "night": night.name,
        "rig": night.rig,
        "source": night.source,
        "begins_utc": _utc(night.begins_us, 0.0),
        "sequence_sha256": ",".join(request.sequence_sha256 for request in requests),
        "seeds": ",".join(str(request.seed) for request in requests),
    }
    about |= {f"version_{name}": text for row in book.revisions(night.id)[:1] for name, text in row.versions.items()}
    return Export(columns={name: columns[name] for name in [*ordered, *rest]}, about=about)


def write_csv(export: Export, path: str) -> None:
    """One line an attempt; an empty cell where nothing was measured. The file appears whole or not at all."""
    listed = [_cells(column) for column in export.columns.values()]

    def write(part: str) -> None:
        with open(part, "w", encoding="utf-8", newline="") as file:
            writer = csv.writer(file, lineterminator="\n")
            writer.writerow([_harmless(name) for name in export.columns])
            writer.writerows(zip(*listed, strict=True))

    _whole(write, path)


def write_parquet(export: Export, path: str) -> None:
    """The same columns with their types; the file's metadata say which night, and made by what."""
    import pyarrow as pa
    from pyarrow import parquet

    arrays = {}
    for name, column in export.columns.items():
        missing = np.isnan(column) if column.dtype.kind == "f" else None
        arrays[name] = pa.array(column.tolist() if column.dtype.kind == "U" else column, mask=missing)
    table = pa.table(arrays).replace_schema_metadata(
        {f"nightfringe.{name}": text for name, text in export.about.items()}
    )
    _whole(lambda part: parquet.write_table(table, part), path)


def _whole(write: Any, path: str) -> None:
    part = f"{path}.part"
    try:
        write(part)
        os.replace(part, path)
    except OSError as error:
        raise InputError(f"cannot write {path}: {error.strerror or error}") from error


def _cells(column: Any) -> list[Any]:
    if column.dtype.kind == "f":
        return ["" if value != value else repr(value) for value in column.tolist()]
    if column.dtype.kind == "U":
        return [_harmless(text) for text in column.tolist()]
    return list(column.tolist())


def _harmless(text: str) -> str:
    """Text that a spreadsheet would run as a formula gets an apostrophe in front, as spreadsheets themselves do."""
    return f"'{text}" if text.startswith(RUN_BY_SPREADSHEETS) else text


def _named(group: str, name: str, unit: str) -> str:
    return f"{group}_{name} [{unit}]" if unit else f"{group}_{name}"


def _utc(begins_us: int | None, second: float) -> str:
    if begins_us is None or not np.isfinite(second):
        return ""
    return (
        datetime.fromtimestamp(begins_us / 1e6 + second, UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")
    )
