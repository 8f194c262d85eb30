"""The manual's reference of the link agrees with the code: calls, fields, statuses and examples."""

import json
import re
from pathlib import Path

import pytest
from pydantic import BaseModel

import planner
from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import Description, Intent, ShotReport
from planner.link.server import rig_app
from planner.link.wire import dump, read
from tests.link.rigs import EVENING, BenchRig

MANUAL = (Path(planner.__file__).parent / "manual" / "rig-link.md").read_text(encoding="utf-8")
EXAMPLES = [json.loads(block) for block in re.findall(r"```json\n(.*?)```", MANUAL, flags=re.DOTALL)]


def test_every_call_is_in_the_table() -> None:
    """Each route of the server stands in the manual with its method, and the manual promises no other."""
    routes = {
        (method, route.path)  # type: ignore[attr-defined]
        for route in rig_app(Host(BenchRig(), SimulatedClock(EVENING))).routes
        for method in route.methods - {"HEAD"}  # type: ignore[attr-defined]
    }
    told = re.findall(r"^\| `(GET|PUT|DELETE|POST) ([^?`]+)", MANUAL, flags=re.MULTILINE)
    assert set(told) == routes


@pytest.mark.parametrize(("number", "model"), [(0, Description), (1, Intent), (2, ShotReport)])
def test_every_example_is_a_message_with_every_field(number: int, model: type[BaseModel]) -> None:
    """The examples are read by the code, once their shortened ids are written out, and leave no field out."""
    example = EXAMPLES[number]
    filled = {name: "0" * 16 if str(value).endswith("...") else value for name, value in example.items()}
    read(model, dump(filled))
    assert set(example) == set(model.model_fields)


def test_the_caution_is_there() -> None:
    """A lab reads first that the link protects nobody."""
    assert "not a safety system" in MANUAL[: MANUAL.index("## What is promised")]


def test_the_rig_of_the_manual_is_a_rig() -> None:
    """The thirty lines work as printed."""

    class Counts:
        a, b = 5.0, 7.0

    class Box:
        locked = True

        def set_collar(self, state: str) -> None:
            self.collar = state

        def wait(self, seconds: float) -> None:
            self.waited_s = seconds

        def run(self, *, hold_s: float) -> Counts:
            self.hold_s = hold_s
            return Counts()

        def gauge(self) -> float:
            return 2e-9

    (code,) = re.findall(r"```python\n(.*?)```", MANUAL, flags=re.DOTALL)
    names: dict[str, type] = {}
    exec(compile(code, "rig-link.md", "exec"), names)
    host = Host(names["OurRig"](Box()), SimulatedClock(EVENING))
    intent = Intent.sealed(
        driver="d",
        epoch=1,
        description=host.describe().description,
        settings={"hold": 7.0},
        switches={"collar": "far"},
        settle_s=25.0,
        duration_s=35.0,
    )
    host.put("k" * 16, intent)
    report = host.ask("k" * 16, 1.0)
    assert report.atoms is not None
    assert (report.state, report.atoms.a, report.readings) == ("done", 5.0, {"vacuum": 2e-9})
