"""Mutated files: whatever a file says, the answer is a list of problems or a plan, never a traceback."""

import random
from contextlib import suppress
from pathlib import Path
from tempfile import TemporaryDirectory

from hypothesis import given, settings
from hypothesis import strategies as st

from planner.cli.check import find_problems
from planner.errors import ProblemsFound
from planner.sequence.compiler import compile_sequence
from planner.sequence.reader import parse_sequence
from planner.sequence.rigfile import parse_rig
from tests.sequence.helpers import EXAMPLES, RIG_TEXT, SMALL, small_rig
from tests.sequence.mutations import mutated

RIG = small_rig()


def outcome(text: str) -> str:
    """ "problems" or "plan"; anything else is an exception that the test shows."""
    try:
        compile_sequence(parse_sequence(text, "fuzz.toml"), RIG)
    except ProblemsFound as found:
        for problem in found.problems:
            assert problem.message
            assert problem.line <= text.count("\n") + 1
        return "problems"
    return "plan"


@settings(max_examples=300, deadline=None)
@given(st.integers(0, 2**32))
def test_mutated_sequences_end_in_problems_or_a_plan(seed: int) -> None:
    """Random edits of good files: numbers, units, brackets, lines lost, doubled and swapped."""
    rng = random.Random(seed)
    source = rng.choice([SMALL, *(path.read_text(encoding="utf-8") for path in EXAMPLES)])
    assert outcome(mutated(source, rng)) in ("problems", "plan")


@settings(max_examples=100, deadline=None)
@given(st.integers(0, 2**32))
def test_mutated_rig_files_end_in_problems_or_a_rig(seed: int) -> None:
    """The same for rig files."""
    with suppress(ProblemsFound):
        parse_rig(mutated(RIG_TEXT, random.Random(seed)), "fuzz.toml")


@settings(max_examples=100, deadline=None)
@given(st.binary(max_size=300))
def test_any_bytes_are_answered(content: bytes) -> None:
    """A file of any bytes at all is answered with problems."""
    with TemporaryDirectory() as folder:
        path = Path(folder) / "fuzz.toml"
        path.write_bytes(content)
        problems, _ = find_problems(str(path))
    assert problems


def test_mutations_reach_both_outcomes() -> None:
    """The mutator is neither harmless nor always fatal, so the tests above see both sides (200 fixed seeds)."""
    seen = {outcome(mutated(SMALL, random.Random(seed))) for seed in range(200)}
    assert seen == {"problems", "plan"}
