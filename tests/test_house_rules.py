"""Rules of the house that a machine can check on the tracked files."""

import re
import subprocess
import tomllib
from pathlib import Path

import pytest

from planner import __version__
from planner.cli.app import COMMANDS, app

ROOT = Path(__file__).resolve().parent.parent
LONGEST = 500  # lines; a longer file holds two ideas


def sources() -> list[Path]:
    return [*sorted((ROOT / "planner").rglob("*.py")), ROOT / "run.py"]


@pytest.mark.parametrize("path", sources(), ids=lambda path: str(path.relative_to(ROOT)))
def test_no_file_swallows_the_architecture(path: Path) -> None:
    """A source file stays readable in one sitting."""
    assert len(path.read_text(encoding="utf-8").splitlines()) <= LONGEST


def test_version_has_one_home() -> None:
    """pyproject.toml and the package say the same version."""
    assert tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]["version"] == __version__


@pytest.mark.parametrize("name", COMMANDS)
def test_the_command_table_tells_the_truth(name: str) -> None:
    """The one-line summary in the table is the first line of the command's own help."""
    command = app.get_command(app.make_context("nightfringe", ["x"]), name)
    assert command is not None
    own = (command.help or "").strip().split("\n\n")[0].replace("\n", " ")
    assert re.sub(r"\s+", " ", own).rstrip(".") == COMMANDS[name][1].rstrip(".")


def test_locks_name_no_address() -> None:
    """Lock files hold names, versions and hashes, never where they came from."""
    for path in (ROOT / ".locks").glob("*.txt"):
        assert "://" not in path.read_text(encoding="utf-8")


def test_run_py_needs_the_standard_library_alone() -> None:
    """run.py imports nothing that a bare Python lacks."""
    import ast
    import sys

    tree = ast.parse((ROOT / "run.py").read_text(encoding="utf-8"))
    named = {
        alias.name.split(".")[0] for node in ast.walk(tree) if isinstance(node, ast.Import) for alias in node.names
    }
    named |= {(node.module or "").split(".")[0] for node in ast.walk(tree) if isinstance(node, ast.ImportFrom)}
    assert named <= set(sys.stdlib_module_names)


def test_every_lock_pair_serves_a_python_minor() -> None:
    """Each minor has a lock for running and one for developing, and they agree on every version."""
    for run_lock in (ROOT / ".locks").glob("py3.*-run.txt"):
        dev_lock = run_lock.with_name(run_lock.name.replace("-run", "-dev"))
        pins = set(re.findall(r"^\S+==\S+", run_lock.read_text(encoding="utf-8"), flags=re.MULTILINE))
        assert pins
        assert pins <= set(re.findall(r"^\S+==\S+", dev_lock.read_text(encoding="utf-8"), flags=re.MULTILINE))


def test_top_level_holds_only_what_it_must() -> None:
    """The repository's top level stays as short as the README says."""
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False).stdout.split(
        "\n"
    )
    if not any(listed):  # a copy without git has nothing to check
        return
    tops = {name.split("/")[0] for name in listed if name}
    allowed = {
        "README.md",
        "DEVELOPERS.md",
        "LICENSE",
        "pyproject.toml",
        "planner",
        "tests",
        "sequences",
        "db",
        "run.py",
    }
    assert {top for top in tops if not top.startswith(".")} <= allowed
