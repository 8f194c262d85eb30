"""`run.py bench` and `run.py proof`: measure every stated figure and judge it.

    python -m tests.figures bench [NAME ...]
    python -m tests.figures proof [NAME ...]

Each module of tests/bench or tests/proof with a function `rows()` returns (or yields) rows

    {"name", "value", "unit", "bound", "reference", "ratio", "ok"}

`bound` says what must hold in words and number ("<= 0.02"), `reference` what it was measured against in the same run
(None if nothing), `ratio` value over reference. All rows go to build/<verb>.json and a table; the exit code is 1 if
any row is not ok. Proof is resumable: a finished module is kept by the hash of the whole program and of the module,
and is not run again until one of them changes (`--again` runs it all the same).
"""

import argparse
import hashlib
import importlib
import json
import pkgutil
import sys
import time
import traceback
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.table import Table

ROOT = Path(__file__).resolve().parent.parent
FIELDS = ("name", "value", "unit", "bound", "reference", "ratio", "ok")
Row = dict[str, Any]


def program_hash(module_file: Path) -> str:
    """A hash of every Python source of the program and of one proof."""
    digest = hashlib.sha256()
    for path in [*sorted((ROOT / "planner").rglob("*.py")), *sorted((ROOT / "db").rglob("*.py")), module_file]:
        digest.update(str(path.relative_to(ROOT)).encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()


def checked(row: Row, source: str) -> Row:
    """The row itself, or a row that is not ok if it lacks a field."""
    missing = [field for field in FIELDS if field not in row]
    if missing:
        return failure(f"{source}: a row without {', '.join(missing)}")
    return {**{field: row[field] for field in FIELDS}, "from": source}


def failure(name: str) -> Row:
    return {
        "name": name,
        "value": None,
        "unit": "",
        "bound": "runs",
        "reference": None,
        "ratio": None,
        "ok": False,
        "from": name,
    }


def measure(name: str) -> list[Row]:
    """Run one module's rows; an exception becomes a row that is not ok, with its traceback on stderr."""
    module = importlib.import_module(name)
    if not hasattr(module, "rows"):
        return []
    rows: list[Row] = []
    try:
        rows.extend(checked(row, name) for row in module.rows())
    except Exception as error:  # noqa: BLE001 - one broken measurement must not hide the others
        traceback.print_exc()
        rows.append(failure(f"{name}: {type(error).__name__}: {error}"))
    return rows


def text(value: Any) -> str:
    if value is None:
        return ""
    return f"{value:.4g}" if isinstance(value, float) else str(value)


def show(rows: Iterable[Row], title: str) -> None:
    table = Table(title=title)
    for heading in ("what", "measured", "unit", "must be", "reference", "ratio", ""):
        table.add_column(heading, overflow="fold")
    for row in rows:
        cells = [text(row[field]) for field in FIELDS[:-1]]
        table.add_row(*cells, "ok" if row["ok"] else "[bold red]MISSED[/]")
    Console(width=None if sys.stdout.isatty() else 140).print(table)


def main(argv: list[str]) -> int:
    parser = argparse.ArgumentParser(description="Measure every stated figure.")
    parser.add_argument("kind", choices=["bench", "proof"])
    parser.add_argument("names", nargs="*", help="modules to run (default: all)")
    parser.add_argument("--again", action="store_true", help="proof: run also what is already proved")
    args = parser.parse_args(argv)
    build = ROOT / "build"
    kept = build / "proof-parts"
    kept.mkdir(parents=True, exist_ok=True)
    package = importlib.import_module(f"tests.{args.kind}")
    known = sorted(info.name for info in pkgutil.iter_modules(package.__path__) if not info.name.startswith("_"))
    unknown = [name for name in args.names if name not in known]
    if unknown:
        print(f"no such {args.kind}: {', '.join(unknown)}; there are: {', '.join(known)}", file=sys.stderr)  # noqa: T201
        return 2
    every: list[Row] = []
    for name in args.names or known:
        part = kept / f"{name}.json"
        stamp = program_hash(ROOT / "tests" / args.kind / f"{name}.py")
        if args.kind == "proof" and part.exists() and not args.again:
            old = json.loads(part.read_text(encoding="utf-8"))
            if old["hash"] == stamp and all(row["ok"] for row in old["rows"]):
                print(f"{name}: kept from {old['when']}", file=sys.stderr)  # noqa: T201
                every += old["rows"]
                continue
        began = time.monotonic()
        rows = measure(f"tests.{args.kind}.{name}")
        print(f"{name}: {len(rows)} rows in {time.monotonic() - began:.0f} s", file=sys.stderr, flush=True)  # noqa: T201
        if args.kind == "proof":
            record = {"hash": stamp, "when": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime()), "rows": rows}
            part.write_text(json.dumps(record, indent=1, allow_nan=False), encoding="utf-8")
        every += rows
    (build / f"{args.kind}.json").write_text(json.dumps(every, indent=1), encoding="utf-8")
    show(every, f"{args.kind}: {sum(row['ok'] for row in every)} of {len(every)} reached")
    return 0 if every and all(row["ok"] for row in every) else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
