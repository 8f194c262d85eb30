"""From the rig's report of a shot to what the logbook keeps."""

import hashlib

from planner.link.messages import ShotReport
from planner.link.wire import canonical
from planner.logbook.driving import Outcome
from planner.night.shots import to_us


def outcome_of(report: ShotReport) -> Outcome | None:
    """What was measured; None where the shot never started."""
    if report.started is None:
        return None
    atoms, detection = report.atoms, report.detection
    return Outcome(
        answer_sha256=hashlib.sha256(canonical(report.document())).hexdigest(),
        atoms_a=None if atoms is None else atoms.a,
        atoms_b=None if atoms is None else atoms.b,
        background=None if detection is None else detection.background,
        saturated=None if detection is None else detection.saturated,
        started_us=to_us(report.started),
        finished_us=None if report.finished is None else to_us(report.finished),
        started_uptime_s=report.started_uptime_s,
        finished_uptime_s=report.finished_uptime_s,
        applied=report.applied,
        readings=report.readings,
        flags=report.flags,
        data_reference=None if detection is None else detection.data,
    )


def fraction_of(report: ShotReport) -> float | None:
    """Population fraction a / (a + b); None where not measured."""
    atoms = report.atoms
    if atoms is None or atoms.a is None or atoms.b is None or atoms.a + atoms.b <= 0:
        return None
    return atoms.a / (atoms.a + atoms.b)
