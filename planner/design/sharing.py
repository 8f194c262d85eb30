"""A night shared out among requests: how many packets each gets, so that each has its share of the rig's time."""

from collections.abc import Sequence as Items

import numpy as np

from planner.arrays import FloatArray
from planner.design.fitting import one_of_each_s, packets_that_fit, part_of
from planner.design.merging import Part, order_night
from planner.design.ordering import Effort, Progress
from planner.design.packets import find_packets
from planner.design.running_order import RunningOrder
from planner.errors import InputError, PlanImpossible

TRIES = 8  # rounds of cutting: waits, warm-up and check shots are known only once there is an order
CLOSE = 0.01  # of the night left unused that ends them


def check_shares(shares: Items[float], requests: int) -> None:
    """Refuse shares that contradict each other.

    Raises:
        InputError: not one for each request, none above zero, or more than the whole night together.
    """
    if len(shares) != requests:
        raise InputError(
            f"{requests} sequence file(s) and {len(shares)} share(s): give one --share for each file, in their order"
        )
    for share in shares:
        if not 0.0 < share <= 1.0:
            raise InputError(f"a share lies above 0 and at most at 1 (or 100 %); found {share:g}")
    total = sum(shares)
    if total > 1.0 + 1e-9:
        nearest = ", ".join(f"{share / total:.3g}" for share in shares)
        raise InputError(
            f"the shares sum to {total:.4g}, more than the night: in the same proportion they are {nearest}"
        )


def share_night(
    parts: Items[Part],
    shares: Items[float],
    *,
    hours: float,
    seed: int,
    effort: Effort = "full",
    progress: Progress | None = None,
) -> tuple[list[Part], RunningOrder]:
    """The packets that fit each request's share of a night, and their order; a share is met to within a packet.

    Args:
        parts: with packets enough to fill their shares; what does not fit is left out, of every point alike.
        shares: of the night's hours, each above 0, together at most 1.

    Raises:
        InputError: as check_shares and order_night.
        PlanImpossible: a share has no room for one packet of every point; the message says how much would do.
    """
    check_shares(shares, len(parts))
    wanted = np.array(shares) * hours * 3600.0
    room = wanted.copy()
    fits: list[Part] | None = None
    unused, before = np.inf, np.zeros(len(parts))
    for _ in range(TRIES):
        tried = [
            _cut(part, s, share, hours, seed, n)
            for n, (part, s, share) in enumerate(zip(parts, room, shares, strict=True))
        ]
        order = order_night(tried, seed=seed, effort="quick")
        left = wanted - _rig_s(order, len(parts))
        if (left >= 0).all() and left.sum() < unused:
            fits, unused = tried, float(left.sum())
            if unused < CLOSE * wanted.sum():
                break
        # what waits, warm-up and check shots took of the share is known now; next time it is kept free for them
        used = np.array([part.table.duration_s[: part.table.measuring].sum() for part in tried])
        if np.array_equal(used, before):
            break
        before = used
        room = np.where(left < 0, np.minimum(used + left, used - 1.0), used + left)
    if fits is None:
        raise PlanImpossible(f"no cut of the requests into shares of {hours:g} h was found: try other shares or hours")
    return fits, order_night(fits, seed=seed, effort=effort, progress=progress)


def _rig_s(order: RunningOrder, requests: int) -> FloatArray:
    """Rig time of each request, waits with it, (n_request,)."""
    return np.asarray(np.bincount(order.request, weights=order.settle_s + order.duration_s, minlength=requests), float)


def _cut(part: Part, room_s: float, share: float, hours: float, seed: int, number: int) -> Part:
    packets = find_packets(part.table, part.sequence)
    rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(22, number)))
    none = np.zeros(len(packets), dtype=np.bool_)
    chosen = packets_that_fit(packets, none, rng.permutation(len(packets)), room_s)
    if not chosen.any():
        least_s = one_of_each_s(packets) + share * hours * 3600.0 - room_s
        raise PlanImpossible(
            f'"{part.sequence.title}": its share of {share:g} of {hours:g} h is {60 * share * hours:.0f} min, and one '
            f"packet of every point takes {least_s / 60:.0f} min: a share of {least_s / 3600 / hours:.2f} or a night "
            f"of {least_s / 3600 / share:.1f} h would do"
        )
    table, _ = part_of(part.table, np.flatnonzero(chosen), part.sequence)
    return Part(table=table, sequence=part.sequence)
