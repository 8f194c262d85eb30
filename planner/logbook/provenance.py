"""What made a plan: versions of everything that its bytes depend on."""

import platform
import sqlite3
from importlib.metadata import PackageNotFoundError, version

import numpy as np

from planner import __version__


def versions() -> dict[str, str]:
    """Versions of Python, numpy, scipy, Nightfringe and SQLite. scipy is named without importing it."""
    try:
        scipy = version("scipy")
    except PackageNotFoundError:
        scipy = "none"
    return {
        "nightfringe": __version__,
        "numpy": np.__version__,
        "python": platform.python_version(),
        "scipy": scipy,
        "sqlite": sqlite3.sqlite_version,
    }
