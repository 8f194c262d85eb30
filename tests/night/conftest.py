"""Benches that are closed again."""

from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest

from tests.night.nights import Bench

NewBench = Callable[..., Bench]


@pytest.fixture
def new_bench(tmp_path: Path) -> Iterator[NewBench]:
    """Makes benches in folders of their own; closes them after the test."""
    with ExitStack() as stack:

        def make(**options: Any) -> Bench:
            folder = tmp_path / f"bench-{len(list(tmp_path.iterdir()))}"
            folder.mkdir()
            bench = Bench(folder=folder, **options)
            stack.callback(bench.close)
            return bench

        yield make
