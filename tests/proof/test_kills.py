"""kill -9 of program, rig or both at random moments of a short night, judged by the rig's own journal.

`rows()` is the long form for `run.py proof`; the test runs it too where NF_KILLS asks for a number of kills.
"""

import os
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from tests.night.killing import kill_through_a_night

KILLS = int(os.environ.get("NF_KILLS", "50"))
PER_NIGHT = 25


def rows() -> Iterator[dict[str, Any]]:
    """One row: kills that did no harm. Any harm is an assertion of the judge, and a row that is not ok."""
    done = idle = lost = 0
    for number in range(0, KILLS, PER_NIGHT):
        kills = min(PER_NIGHT, KILLS - number)
        with tempfile.TemporaryDirectory() as folder:
            found = kill_through_a_night(Path(folder), kills=kills, seed=number)
        done, idle, lost = done + kills, idle + found["idle kills"], lost + found["lost"]
    yield {
        "name": f"kill -9 of program or rig without harm ({lost} attempts rightly recorded as lost)",
        "value": done - idle,
        "unit": "kills of a running night",
        "bound": f"== {KILLS}",
        "reference": KILLS,
        "ratio": (done - idle) / KILLS,
        "ok": done - idle == KILLS,
    }


@pytest.mark.skipif("NF_KILLS" not in os.environ, reason="the long form: set NF_KILLS, or use run.py proof")
@pytest.mark.timeout(3600)
def test_kills() -> None:
    """As many kills as NF_KILLS says, each of a night under way."""
    assert all(row["ok"] for row in rows())
