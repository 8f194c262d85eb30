"""A small sequence and rig for the tests, and ways to change them."""

from pathlib import Path

from planner.sequence.compiler import Compiled, compile_sequence
from planner.sequence.model import Rig, Sequence
from planner.sequence.reader import parse_sequence, read_sequence
from planner.sequence.rigfile import parse_rig, read_rig, rig_path

HERE = Path(__file__).parent
SEQUENCES = HERE.parent.parent / "sequences"
EXAMPLES = sorted(path for path in SEQUENCES.glob("*.toml") if "\nnightfringe = 1" in path.read_text(encoding="utf-8"))
RIG_TEXT = (HERE / "rig.toml").read_text(encoding="utf-8")

SMALL = """
nightfringe = 1
title = "small"
atom  = "Rb-87"
rig   = "rig.toml"
[roles]
hold    = "hold"
readout = "readout"
depth   = "depth"
separation = "separation"
[settings]
hold       = { unit = "s", rest = 1, range = [0.1, 50] }
readout    = { unit = "deg", rest = 0, wraps = true }
depth      = { unit = "Er", rest = 10, range = [1, 40] }
separation = { unit = "um", rest = 4, range = [1, 40] }
wait       = { unit = "ms", rest = 1, range = [0, 10] }
[[stages]]
name   = "load"
lasts  = "500 ms"
levels = { light = 1, coil = "8 A" }
[[stages]]
name   = "split"
lasts  = "20 ms"
pulses = [
    { line = "light", at = "1 ms", lasts = "50 us", level = 0.5 },
    { line = "light", at = "2 ms + wait", lasts = "50 us", level = 0.5 },
]
[[stages]]
name  = "catch"
lasts = "10 ms"
ramps = { lattice = { from = "0 Er", to = "depth" } }
[[stages]]
name   = "hold"
lasts  = "hold"
levels = { lattice = "depth" }
[[stages]]
name  = "release"
lasts = "10 ms"
ramps = { lattice = { from = "depth", to = "0 Er" } }
[sweeps]
hold = [1, 2, 5]
[fringe]
phases  = [0, 90, 180, 270]
repeats = 2
[goal]
kind = "curve"
"""


def changed(*changes: tuple[str, str], text: str = SMALL) -> str:
    """`text` with each (old, new) replaced once; an old text that is not there is a mistake of the test."""
    for old, new in changes:
        if old not in text:
            raise ValueError(f"{old!r} is not in the text")
        text = text.replace(old, new, 1)
    return text


def small_rig(*changes: tuple[str, str]) -> Rig:
    return parse_rig(changed(*changes, text=RIG_TEXT), "rig.toml")


def small(*changes: tuple[str, str]) -> Sequence:
    return parse_sequence(changed(*changes), "small.toml")


def compiled(*changes: tuple[str, str]) -> Compiled:
    return compile_sequence(small(*changes), small_rig())


def compiled_file(path: Path) -> Compiled:
    sequence = read_sequence(path)
    return compile_sequence(sequence, read_rig(rig_path(str(path), sequence.rig)))
