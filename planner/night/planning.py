"""Booking a night: from a sequence file to a stored order within the rig's limits."""

from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from planner.design.running_order import RunningOrder
from planner.errors import InputError, PlanImpossible
from planner.logbook.book import Logbook, NightRow
from planner.logbook.booking import NewNight, NewRequest
from planner.sequence.compiler import compile_sequence
from planner.sequence.limits import check_order_limits
from planner.sequence.model import Sequence
from planner.sequence.reader import read_sequence
from planner.sequence.rigfile import read_rig, rig_path

if TYPE_CHECKING:
    from planner.design.ordering import Effort

ROOM = 1.1  # a window is so much longer than its order: settle waits after a break, repeats of missed shots
SHORT_ROOM_S = 600.0


@dataclass(frozen=True, kw_only=True)
class Booked:
    """A night that has just been booked. `approval` is the reference in the rig file, where there is one."""

    night: NightRow
    order_s: float
    notes: tuple[str, ...]
    approval: str | None


def book_sequence(
    book: Logbook,
    file: str | Path,
    *,
    now_us: int,
    who: str,
    seed: int,
    name: str | None = None,
    hours: float | None = None,
    link: str | None = None,
    unattended: bool = False,
    effort: "Effort" = "full",
    progress: Callable[[str, float], None] | None = None,
) -> Booked:
    """Read, compile, order, check and store a night of one sequence.

    Args:
        hours: length of the night's window; without it, the order's own length and a tenth more.
        link: address of the rig link in place of the rig file's.
        effort, progress: as make_order takes them.

    Raises:
        ProblemsFound: the sequence or rig file has problems, or the order is beyond the rig's limits.
        PlanImpossible: the order is longer than the window.
        InputError: unattended, and the rig file records no approval.
    """
    from planner.design.ordering import make_order

    sequence = read_sequence(file)
    rig = read_rig(rig_path(str(file), sequence.rig))
    if unattended and rig.approval is None:
        raise InputError(
            f'{rig.file}: an unattended night needs the reference of its approval: write approval = "..." there once '
            "the person responsible for the room has given it"
        )
    compiled = compile_sequence(sequence, rig)
    order = make_order(compiled.table, sequence, seed=seed, effort=effort, progress=progress)
    check_order_limits(compiled, rig, order.start_s, order.shot, settle_s=order.settle_s)
    order_s = length_of(order)
    window_s = order_s * ROOM + SHORT_ROOM_S if hours is None else hours * 3600.0
    if order_s > window_s:
        raise PlanImpossible(
            f"the order takes {order_s / 3600:.2f} h, the night has {window_s / 3600:.2f} h: give it more hours, or "
            "lower the repeats in the sequence file"
        )
    new = NewNight(
        name=name or free_name(book, Path(file).stem, now_us),
        rig=rig.name,
        rig_text=rig.text,
        link=link or rig.link,
        length_s=window_s,
        requests=[
            NewRequest(
                title=sequence.title,
                sequence_text=sequence.text,
                table=compiled.table,
                timelines=(compiled.timelines.document(i) for i in range(len(compiled.timelines))),
                goal=sequence.goal.kind,
                seed=seed,
                details=details_of(sequence),
            )
        ],
        order=order,
        unattended=rig.approval if unattended else None,
    )
    night = book.book_night(new, now_us=now_us, who=who)
    return Booked(night=night, order_s=order_s, notes=compiled.notes, approval=rig.approval)


def length_of(order: RunningOrder) -> float:
    """From the start of the night to the end of the last shot, s."""
    return float(order.start_s[-1] + order.settle_s[-1] + order.duration_s[-1])


def details_of(sequence: Sequence) -> dict[str, Any]:
    """What sending a shot needs besides the shot table: units, states, waits."""
    return {
        "settings": {
            name: {"unit": setting.unit, "settle_s": setting.settle_s} for name, setting in sequence.settings.items()
        },
        "switches": {
            name: {"states": list(switch.states), "settle_s": switch.settle_s, "dwell_s": switch.dwell_s}
            for name, switch in sequence.switches.items()
        },
        "roles": dict(sequence.roles),
    }


def free_name(book: Logbook, stem: str, now_us: int) -> str:
    """A name that no night has: the file's, the date, and a number from the second on."""
    day = datetime.fromtimestamp(now_us / 1e6, UTC).date().isoformat()
    taken = {night.name for night in book.nights()}
    name, number = f"{stem}-{day}", 2
    while name in taken:
        name, number = f"{stem}-{day}-{number}", number + 1
    return name


CAUTIONS = (
    "Nightfringe replaces no interlock: laser, current, high-voltage and motion limits belong in hardware.",
    "Local rules and the person responsible for the room decide whether this night may run.",
    "Keep clear of moving masses while shots run; they move without warning.",
)


def cautions(*, unattended: str | None) -> list[str]:
    """Short cautions to show where a night is booked."""
    approved = f"Unattended, under approval: {unattended}." if unattended else "Somebody stays with the rig all night."
    return [*CAUTIONS, approved]
