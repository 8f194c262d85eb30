"""Messages are checked at birth: types, states, times that belong together, finite numbers."""

from datetime import UTC, datetime, timedelta, timezone
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from planner.link.clocks import SimulatedClock
from planner.link.host import Host
from planner.link.messages import (
    Description,
    Intent,
    Known,
    Now,
    ShotReport,
    digest_of,
    format_time,
    new_key,
    parse_time,
)
from planner.link.wire import MessageError, dump, read
from tests.link.rigs import EVENING, BenchRig, make_intent

KEY = "k" * 16
TIME = "2026-12-01T20:00:00.000000Z"
DONE: dict[str, Any] = {
    "key": KEY,
    "state": "done",
    "ordinal": 3,
    "started": TIME,
    "finished": TIME,
    "started_uptime_s": 1.0,
    "finished_uptime_s": 2.0,
    "atoms": {"a": 12034.2, "b": 9033.1},
    "detection": None,
    "applied": {},
    "readings": {},
    "flags": [],
    "why": None,
}


def hear(model: type[Any], document: object) -> Any:
    return read(model, dump(document))


def test_a_sound_report_is_read() -> None:
    """The example of the manual is a report."""
    report = hear(ShotReport, DONE)
    assert report.atoms.a == 12034.2
    assert report.started == EVENING
    assert report.document() | {"detection": None} == DONE


def test_what_a_newer_rig_adds_is_passed_over() -> None:
    """Fields that this version does not know do not make a rig's answer unreadable."""
    assert hear(ShotReport, DONE | {"moon": "full", "atoms": {"a": 1.0, "b": 2.0, "c": 3.0}}).atoms.b == 2.0


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"state": "resting"}, "state: Input should be"),
        ({"state": None}, "state"),
        ({"key": "short"}, "key"),
        ({"ordinal": "3"}, "ordinal"),
        ({"ordinal": 3.0}, "ordinal"),
        ({"ordinal": -1}, "ordinal"),
        ({"ordinal": None}, "has an ordinal"),
        ({"started": 1764619200}, "started"),
        ({"started": "2026-12-01T20:00:00"}, "expected a time such as"),
        ({"started": "2026-13-01T20:00:00Z"}, "month"),
        ({"started": None, "started_uptime_s": None}, "has started"),
        ({"started": None}, "come together"),
        ({"finished_uptime_s": None}, "come together"),
        ({"finished": None, "finished_uptime_s": None}, "has finished"),
        ({"finished_uptime_s": 0.5}, "uptime never runs back"),
        ({"atoms": {"a": "12034", "b": 1.0}}, "atoms.a"),
        ({"atoms": {"a": True, "b": 1.0}}, "atoms.a"),
        ({"atoms": {"a": 1.0}}, "atoms.b"),
        ({"atoms": [1.0, 2.0]}, "atoms"),
        ({"readings": {"vacuum": "low"}}, "readings.vacuum"),
        ({"flags": "unlocked"}, "flags"),
        ({"state": "waiting"}, "has not started"),
        ({"state": "withdrawn"}, "has not started"),
        ({"state": "running"}, "has not finished"),
        (
            {"state": "withdrawn", "started": None, "started_uptime_s": None},
            "has no atoms",
        ),
    ],
)
def test_a_report_that_breaks_the_rules_is_refused(changes: dict[str, Any], words: str) -> None:
    """Wrong types, unknown states and records that contradict themselves are refused by name."""
    with pytest.raises(MessageError, match=words):
        hear(ShotReport, DONE | changes)


def test_a_missing_field_is_named() -> None:
    """An answer without a state is no answer."""
    with pytest.raises(MessageError, match="state: Field required"):
        hear(ShotReport, {"key": KEY})


def test_all_problems_come_at_once_and_bounded() -> None:
    """Several problems are listed together, a flood of them is cut."""
    with pytest.raises(MessageError, match=r"ordinal.*atoms\.a"):
        hear(ShotReport, DONE | {"ordinal": "x", "atoms": {"a": "y", "b": 1.0}})
    with pytest.raises(MessageError, match="and 15 more"):
        hear(ShotReport, DONE | {"readings": {f"r{i}": "x" for i in range(20)}})


@pytest.mark.parametrize("name", ["atoms", "readings", "started_uptime_s"])
@pytest.mark.parametrize("value", [float("nan"), float("inf")])
def test_not_a_number_cannot_be_built_either(name: str, value: float) -> None:
    """NaN and infinity are refused in Python as on the wire."""
    wrapped: Any = {"atoms": {"a": value, "b": 1.0}, "readings": {"vacuum": value}, "started_uptime_s": value}[name]
    times = {"started": EVENING, "finished": EVENING}
    with pytest.raises(ValidationError, match="finite number"):
        ShotReport(**(DONE | times | {name: wrapped}))


def test_a_list_names_every_key_once() -> None:
    """Repeated keys or ordinals, and shots without one, spoil a reconciliation."""
    other = DONE | {"key": "m" * 16, "ordinal": 4}
    assert len(hear(Known, {"boot": "b", "shots": [DONE, other]}).shots) == 2
    for second, words in (
        (DONE | {"ordinal": 4}, "key stands twice"),
        (other | {"ordinal": 3}, "ordinal stands twice"),
        ({"key": "m" * 16, "state": "unknown"}, "no ordinal"),
    ):
        with pytest.raises(MessageError, match=words):
            hear(Known, {"boot": "b", "shots": [DONE, second]})


@pytest.mark.parametrize(
    "changes",
    [
        {"link": 2},
        {"clock": "sundial"},
        {"slots": 0},
        {"settings": {"hold": {"unit": "s", "low": 5.0, "high": 1.0}}},
        {"switches": {"collar": ["near"]}},
        {"switches": {"collar": ["near", "far", "gone"]}},
    ],
)
def test_a_description_that_cannot_be_is_refused(changes: dict[str, Any]) -> None:
    """Another version of the link, a range upside down or a switch with three states stop a night before it starts."""
    sound = Host(BenchRig(), SimulatedClock(EVENING)).describe().document()
    assert hear(Description, sound).slots == 2
    with pytest.raises(MessageError):
        hear(Description, sound | changes)


@pytest.mark.parametrize(
    "changes",
    [
        {"epoch": -1},
        {"epoch": 1.5},
        {"settings": {"hold": "7"}},
        {"settings": {"hold": None}},
        {"duration_s": 0.0},
        {"duration_s": 1e6},
        {"settle_s": -1.0},
        {"settle_s": 11.0},
        {"not_before": "2026-12-01T20:00:01Z", "start_by": "2026-12-01T20:00:00Z"},
        {"not_before": "tomorrow"},
        {"timeline": []},
        {"digest": ""},
        {"twice": True},
    ],
)
def test_half_an_instruction_is_not_an_intent(changes: dict[str, Any]) -> None:
    """An intent with a wrong or unknown part is refused as a whole: what is not understood must not be played."""
    intent = make_intent(Host(BenchRig(), SimulatedClock(EVENING)).describe())
    assert hear(Intent, intent.document()) == intent
    with pytest.raises(MessageError):
        hear(Intent, intent.document() | changes)


def test_the_digest_covers_what_is_asked_and_nothing_else() -> None:
    """Every field but digest, driver and epoch changes the digest."""
    intent = make_intent(Host(BenchRig(), SimulatedClock(EVENING)).describe())
    assert intent.digest == digest_of(intent.document())
    changes: dict[str, Any] = {
        "description": "other",
        "settings": {"hold": 7.000000000000001, "readout": 90.0},
        "switches": {"collar": "far"},
        "settle_s": 0.5,
        "duration_s": 10.5,
        "not_before": TIME,
        "start_by": TIME,
        "timeline": {},
    }
    assert set(changes) | {"digest", "driver", "epoch"} == set(Intent.model_fields)
    for name, value in changes.items():
        assert digest_of(intent.document() | {name: value}) != intent.digest, name
    for name, value in {"driver": "z", "epoch": 9, "digest": "y"}.items():
        assert digest_of(intent.document() | {name: value}) == intent.digest, name


@given(st.datetimes(timezones=st.just(UTC), min_value=datetime(1000, 1, 1)))  # noqa: DTZ001 - hypothesis wants it bare
def test_times_survive_to_the_microsecond(time: datetime) -> None:
    """A time is the same after the wire."""
    assert parse_time(format_time(time)) == time


def test_times_are_rfc_3339() -> None:
    """The examples of the standard are read; forms that only resemble it are not."""
    # source: RFC 3339 section 5.8, first two examples
    assert parse_time("1985-04-12T23:20:50.52Z") == datetime(1985, 4, 12, 23, 20, 50, 520_000, tzinfo=UTC)
    assert parse_time("1996-12-19T16:39:57-08:00") == datetime(1996, 12, 20, 0, 39, 57, tzinfo=UTC)
    for text in (
        "1985-04-12",
        "1985-W15-5T23:20:50Z",
        "19850412T232050Z",
        "1985-04-12T23:20:50",
        "٢026-12-01T20:00:00Z",
    ):
        with pytest.raises(ValueError, match="expected a time such as"):
            parse_time(text)


def test_a_time_without_zone_is_refused() -> None:
    """A naive datetime could mean any zone."""
    with pytest.raises(ValidationError, match="time zone"):
        Now(now=datetime(2026, 12, 1, 20), uptime_s=0.0, boot="b", ready=True)  # noqa: DTZ001 - the fault under test
    east = timezone(timedelta(hours=1))
    assert Now(now=datetime(2026, 12, 1, 21, tzinfo=east), uptime_s=0.0, boot="b", ready=True).now == EVENING


def test_keys_are_random() -> None:
    """A thousand keys differ: two attempts never share one."""
    assert len({new_key() for _ in range(1000)}) == 1000
