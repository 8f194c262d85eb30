"""Nights that the tests of running orders share, made from the example sequences."""

from functools import cache
from pathlib import Path

from planner.sequence.compiler import compile_sequence
from planner.sequence.model import Sequence
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import read_rig
from planner.sequence.table import ShotTable

SEQUENCES = Path(__file__).resolve().parents[2] / "sequences"


@cache
def night(name: str, *changes: tuple[str, str]) -> tuple[ShotTable, Sequence]:
    """Table and sequence of an example file, after replacing pieces of its text."""
    text = (SEQUENCES / name).read_text(encoding="utf-8")
    for old, new in changes:
        if old not in text:
            raise ValueError(f'{name} does not say "{old}"')
        text = text.replace(old, new)
    sequence = parse_sequence(text, str(SEQUENCES / name))
    return compile_sequence(sequence, read_rig(str(SEQUENCES / "gallery-rig.toml"))).table, sequence


def night_a(repeats: int = 22) -> tuple[ShotTable, Sequence]:
    """Twelve holds, four phases, one fast switch."""
    return night("reference-night-a.toml", ("repeats = 22", f"repeats = {repeats}"))


def night_b(repeats: int = 124) -> tuple[ShotTable, Sequence]:
    """Two holds, two phases, a slow and a fast switch."""
    return night("reference-night-b.toml", ("repeats = 124", f"repeats = {repeats}"))


def small_night() -> tuple[ShotTable, Sequence]:
    """Two holds of five packets each: few enough that every flip can be looked at."""
    return night(
        "reference-night-a.toml",
        ('hold = { from = "0.25 s", to = "64 s", count = 12, spacing = "log" }', "hold = [4, 16]"),
        ("repeats = 22", "repeats = 5"),
    )
