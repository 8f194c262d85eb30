"""What a short command loads: the start-up budget is kept by what is never imported, not by a stopwatch."""

import subprocess
import sys

import pytest

HEAVY = (
    "numpy",
    "scipy",
    "matplotlib",
    "sqlalchemy",
    "alembic",
    "httpx",
    "starlette",
    "uvicorn",
    "pyarrow",
    "pydantic",
    "pint",
    "rich",
)


def loaded_by(code: str) -> set[str]:
    """Top-level modules in sys.modules after running `code` in a new interpreter."""
    program = f"import sys\n{code}\nprint('\\n'.join(sorted({{name.split('.')[0] for name in sys.modules}})))"
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True, timeout=60)
    return set(done.stdout.split())


@pytest.mark.parametrize("args", [["--help"], ["--version"]])
def test_help_and_version_load_nothing_heavy(args: list[str]) -> None:
    """`nightfringe --help` and `--version` import none of the heavy libraries."""
    loaded = loaded_by(f"from planner.cli.app import run\nrun({args!r})")
    assert loaded.isdisjoint(HEAVY), loaded.intersection(HEAVY)


def test_the_package_itself_loads_nothing_heavy() -> None:
    """`import planner` costs nothing: version and names only."""
    assert loaded_by("import planner").isdisjoint(HEAVY)
