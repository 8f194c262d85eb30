"""After a break of any kind: what the rig knows, against what the logbook has open."""

from collections.abc import Callable, Iterable
from contextlib import AbstractContextManager
from dataclasses import dataclass

from planner.errors import RigMalformed
from planner.link.messages import ShotReport
from planner.logbook.driving import Driving, OpenAttempt, Step
from planner.night.contact import Contact
from planner.night.fates import Fate, withdraw


@dataclass(frozen=True, kw_only=True)
class Found:
    """`held`: what the rig still holds, in running order; `fates`: what has ended; `strangers`: keys of others."""

    held: tuple[OpenAttempt, ...]
    fates: tuple[tuple[OpenAttempt, Fate], ...]
    strangers: tuple[ShotReport, ...]


def ask_about(
    attempts: Iterable[OpenAttempt],
    contact: Contact,
    *,
    after: int,
    judge: Callable[[OpenAttempt, ShotReport], Fate | None],
) -> Found:
    """Ask the rig about every attempt, in one call where that works, then key by key."""
    reports = _known(contact, after)
    held: list[OpenAttempt] = []
    fates: list[tuple[OpenAttempt, Fate]] = []
    for attempt in attempts:
        report = reports.pop(attempt.key, None) or _ask(contact, attempt.key)
        fate = judge(attempt, report)
        if fate is None:
            held.append(attempt)
        else:
            fates.append((attempt, fate))
    return Found(held=tuple(held), fates=tuple(fates), strangers=tuple(reports.values()))


def _ask(contact: Contact, key: str) -> ShotReport:
    return contact.patiently(lambda: contact.client.ask(key), key=key)


def _known(contact: Contact, after: int) -> dict[str, ShotReport]:
    """Everything that the rig knows since an ordinal; nothing where one bad record spoils the list."""

    def since() -> dict[str, ShotReport]:
        try:
            return {report.key: report for report in contact.client.since(after).shots}
        except RigMalformed as error:
            contact.put_aside(error, None)
            return {}

    return contact.patiently(since)


def deal_with_strangers(
    strangers: Iterable[ShotReport],
    driving: Driving,
    contact: Contact,
    step: Callable[[], AbstractContextManager[Step]],
) -> list[str]:
    """Shots at the rig that are not open here: ended ones of ours are to be acknowledged (returned); unknown ones, as
    after a restored backup, are withdrawn where they wait, and recorded in the audit."""
    reports = {report.key: report for report in strangers}
    ours = driving.states(list(reports))
    for key, report in reports.items():
        if key in ours:
            continue
        withdrawn = report.state == "waiting" and withdraw(contact, key)
        with step() as writing:
            writing.audit("stranger_found", {"withdrawn": withdrawn, "report": report.document()})
    return [key for key, report in reports.items() if key in ours and report.ended]
