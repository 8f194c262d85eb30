"""The restricted draw: who is a member, and that each member is as likely as the others."""

from functools import cache

import numpy as np
import pytest

from planner.arrays import FloatArray
from planner.design import flips
from planner.design.ordering import (
    Draft,
    assemble,
    draft_order,
    make_order,
    quality_of,
    randomisation_group,
    redraw,
)
from planner.design.restricted import RestrictedSet
from planner.errors import InputError, NotEnoughData
from tests.design.nights import night, night_a, small_night


@cache
def small() -> tuple[Draft, RestrictedSet, FloatArray]:
    """The small night's draft, its set, and all 2^10 flips."""
    table, sequence = small_night()
    draft = draft_order(table, sequence, seed=4, effort="quick")
    allowed = flips.restricted_set(draft, seed=4)
    if allowed is None:
        raise ValueError("the small night wants no parity")
    every = 1.0 - 2.0 * ((np.arange(2**10)[:, None] >> np.arange(10)) & 1)
    return draft, allowed, every


def test_members_are_the_flips_that_keep_every_figure_under_its_bar() -> None:
    """All 1,024 flips of a small night, each assembled and judged whole: members keep every bar, and those that do not
    are over a bar, or over the one on the peak of one point with the other at its mean."""
    draft, allowed, every = small()
    inside = allowed.contains(every)
    bars = allowed.bars
    assert 50 < inside.sum() < 700
    listed = np.ones(len(every), dtype=np.bool_)
    for part, one in zip(allowed._parts, allowed._lists, strict=True):
        listed &= one.find(every[:, part.units])[1]
    for signs, member, known in zip(every, inside, listed, strict=True):
        order = assemble(draft, signs, seed=4, effort="quick", allowed=None)
        quality = quality_of(order, draft.table, draft.sequence)
        kick = quality.of_parity(("kick",))
        # coupled figures of the set bound the worst fringe phase from above, by at most a factor of two
        under = (
            kick["additive_worst"] <= bars.additive_worst
            and kick["additive_mean"] <= bars.additive_mean
            and quality.any_period_peak <= bars.any_period_peak
            and kick["coupled_worst"] <= bars.coupled_worst
            and kick["coupled_mean"] <= bars.coupled_mean
        )
        if member:
            assert under
        elif known:
            assert (
                not under
                or 2 * kick["coupled_worst"] > bars.coupled_worst
                or 2 * kick["coupled_mean"] > bars.coupled_mean
            )


def test_the_draw_is_uniform_over_the_members() -> None:
    """50,000 draws of a small night fall on every member, and equally often."""
    _, allowed, every = small()
    members = every[allowed.contains(every)]
    draws = allowed.draw(50_000, np.random.default_rng(1))
    code = ((1 - draws) / 2) @ 2.0 ** np.arange(10)
    expected = ((1 - members) / 2) @ 2.0 ** np.arange(10)
    found, counts = np.unique(code, return_counts=True)
    assert set(found) == set(expected)
    mean = 50_000 / len(members)
    chi2 = float(((counts - mean) ** 2 / mean).sum())
    free = len(members) - 1
    # four standard deviations of chi-square, sqrt(2 free) each
    assert abs(chi2 - free) < 4 * np.sqrt(2 * free)
    assert allowed.log2_size == pytest.approx(np.log2(len(members)), abs=0.25)  # measured from 100 acceptances or more


def test_the_size_of_a_real_nights_set_and_its_spread() -> None:
    """A night of 48 packets: more than 1e5 members, no block leans to one state, no draw twice."""
    table, sequence = night_a(8)
    order = make_order(table, sequence, seed=1, effort="quick")
    assert order.notes["log2_members"] > np.log2(1e5)
    signs = redraw(order, table, sequence, n=2000, rng=np.random.default_rng(2))
    assert signs.shape == (2000, 96)
    assert len(np.unique(signs, axis=0)) > 1990
    # each block is as often flipped as not: five standard errors of 2,000 fair coins
    assert np.abs(signs.mean(axis=0)).max() < 5 / np.sqrt(2000)


def test_the_order_that_ran_is_a_member_of_its_own_group() -> None:
    """The group is found again from the order, and the flips that were drawn are in it; from another table it is not
    found, and the message says where to look."""
    table, sequence = small_night()
    order = make_order(table, sequence, seed=7)
    allowed, signs = randomisation_group(order, table, sequence)
    assert allowed.contains(signs[None]).all()
    assert allowed.log2_size == pytest.approx(order.notes["log2_members"], abs=0.01)
    other, other_sequence = night_a(2)
    with pytest.raises(InputError, match="version that are stored with the night"):
        randomisation_group(order, other, other_sequence)


def test_without_a_wanted_parity_nothing_is_drawn() -> None:
    """No wanted switch: no units, no group, and the error says what to write."""
    table, sequence = night("reference-night-a.toml", ("repeats = 22", "repeats = 3"), ('wanted = "kick"\n', ""))
    order = make_order(table, sequence, seed=1, effort="quick")
    assert (order.flip == 1).all()
    assert (order.unit == -1).all()
    with pytest.raises(NotEnoughData, match=r"goal\.wanted"):
        redraw(order, table, sequence, n=10, rng=np.random.default_rng(1))


@pytest.mark.parametrize("repeats", [13, 17])
def test_parts_with_few_flips_to_list(repeats: int) -> None:
    """A point of 13 or 17 packets has fewer good flips than are listed for larger ones: the draw is made all the same,
    from a set that is large."""
    table, sequence = night_a(repeats)
    order = make_order(table, sequence, seed=1, effort="quick")
    assert order.notes["log2_members"] > 17
