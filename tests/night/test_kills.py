"""A short form of the proof by kill -9; the long one is tests/proof/test_kills.py."""

import sys
from pathlib import Path

import pytest

from tests.night.killing import kill_through_a_night


@pytest.mark.skipif(sys.platform == "win32", reason="a process killed on Windows is not a kill -9")
def test_kills_lose_and_repeat_nothing(tmp_path: Path) -> None:
    """Six kills of program, rig or both: one start a key, one end an attempt, every shot measured."""
    found = kill_through_a_night(tmp_path, kills=6, seed=20261201)
    assert found["done"] == 240
