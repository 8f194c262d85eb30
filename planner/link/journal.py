"""What truly happened at a rig, one JSON line a fact, on disk before anyone is told.

Events: `boot`, `accept`, `start`, `end` (with the report as told), `withdraw`. The journal is the judge when program
and rig disagree: a key that has two `start` lines was played twice.
"""

import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

from planner.errors import InputError
from planner.link.messages import parse_time
from planner.link.wire import MessageError, dump, load


@dataclass(frozen=True, kw_only=True)
class Recovered:
    """What a new boot takes over from the journal of earlier ones: no shots, but ordinals, time and the fence."""

    last_ordinal: int = 0
    epoch: int = -1
    driver: str = ""
    earliest: datetime | None = None  # the first boot
    latest: datetime | None = None  # nothing in the journal happened, or was to end, after this


class Journal:
    """An open journal. `write` collects lines, `flush` puts them on disk and returns only then.

    Raises InputError where `path` cannot be a journal, or is a damaged one.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            _drop_torn_line(path)
            self.recovered = _recover(path)
            self._file = path.open("ab", buffering=0)
        except OSError as error:
            raise InputError(f"the journal {path} cannot be opened: {error.strerror}") from error
        self._lines: list[bytes] = []

    def write(self, event: str, facts: Mapping[str, Any]) -> None:
        """Collect one line."""
        self._lines.append(dump({"event": event, **facts}) + b"\n")

    def flush(self) -> None:
        """Put the collected lines on disk; raises OSError when the disk will not have them."""
        if not self._lines:
            return
        block = b"".join(self._lines)
        while block:  # an unbuffered write may take a part only
            block = block[self._file.write(block) :]
        os.fsync(self._file.fileno())
        self._lines.clear()

    def close(self) -> None:
        """Close. Lines that were never flushed are dropped: nobody was told of them."""
        self._file.close()


def read_journal(path: Path) -> Iterator[dict[str, Any]]:
    """The facts in order; a last line torn by a crash is left out, any other damage raises InputError."""
    with path.open("rb") as file:
        for number, line in enumerate(file, start=1):
            if not line.endswith(b"\n"):
                return
            try:
                facts = load(line)
            except MessageError as error:
                raise InputError(f"{path}:{number}: not a line of a rig's journal ({error})") from error
            if not isinstance(facts, dict) or not isinstance(facts.get("event"), str):
                raise InputError(f"{path}:{number}: not a line of a rig's journal (no event)")
            yield facts


def _drop_torn_line(path: Path) -> None:
    """Cut a last line without its end: its writer died before it was on disk, so nobody was ever told of it."""
    if not path.exists():
        return
    with path.open("r+b") as file:
        content = file.read()
        whole = content.rfind(b"\n") + 1
        if whole < len(content):
            file.truncate(whole)


def _recover(path: Path) -> Recovered:
    if not path.exists():
        return Recovered()
    last_ordinal, fence = 0, (-1, "")
    earliest: datetime | None = None
    latest: datetime | None = None
    for facts in read_journal(path):
        try:
            at = parse_time(facts["at"])
            if facts["event"] == "accept":
                last_ordinal = max(last_ordinal, facts["ordinal"])
                fence = max(fence, (facts["epoch"], facts["driver"]))
            if facts["event"] == "start":
                at += timedelta(seconds=facts["duration_s"])
        except (KeyError, TypeError, ValueError) as error:
            raise InputError(f"{path}: a line of the journal lacks what it must hold ({error!r})") from error
        earliest = at if earliest is None else earliest
        latest = at if latest is None else max(latest, at)
    return Recovered(last_ordinal=last_ordinal, epoch=fence[0], driver=fence[1], earliest=earliest, latest=latest)
