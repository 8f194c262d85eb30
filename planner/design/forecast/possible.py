"""Can the night answer its goal at all? If not: why, and the nearest plan that can."""

import numpy as np

from planner.design.allocation.knowledge import Knowledge
from planner.design.forecast.curve import OWN, Plan, errors_of
from planner.design.forecast.night import WHOLE_FRINGE, Night
from planner.errors import PlanImpossible
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable

CONTRAST_GOALS = {"coherence": 2, "curve": 1, "plateau": 3, "revival": 4}  # and the holds that each needs
SIGNAL_GOALS = ("signal", "ladder", "budget")


def check_length(table: ShotTable, sequence: Sequence, hours: float) -> None:
    """One packet of every cell must fit.

    Raises:
        PlanImpossible: it does not; the message gives the hours, and the holds, that do.
    """
    once = table.repeat == table.repeat.min()
    needed = float(table.duration_s[once].sum())
    if needed <= hours * 3600:
        return
    hold, seconds = np.unique(table.hold_s[once]), table.duration_s[once]
    spent = np.cumsum([seconds[table.hold_s[once] == one].sum() for one in hold])
    fit = int(np.searchsorted(spent, hours * 3600, side="right"))
    fewer = f", or keep only the shortest {fit} of the {len(hold)} holds, up to {hold[fit - 1]:.3g} s" if fit else ""
    raise PlanImpossible(
        f"{hours:.3g} h are too short for one repeat of this plan, which takes {needed / 3600:.3g} h without settling: "
        f"give --hours {np.ceil(needed / 36) / 100:.2f} or more{fewer}"
    )


def check_question(sequence: Sequence, night: Night, rig: Knowledge) -> None:
    """The shots must be able to tell what the goal asks.

    Raises:
        PlanImpossible: they cannot; the message says what to change.
    """
    kind = sequence.goal.kind
    if kind in SIGNAL_GOALS:
        if not sequence.goal.wanted:
            names = list(sequence.switches)
            do = (
                f"goal.wanted = {names!r}".replace("'", '"') if names else "declare a switch and name it in goal.wanted"
            )
            raise PlanImpossible(f'the goal "{kind}" needs the parity that carries the signal: {do}')
        if not (night.kappa > 0.0).all():
            raise PlanImpossible(f'the goal "{kind}" needs the scale factor: declare roles.separation')
        if not np.abs(np.sin(night.phase_rad)).max() > 1e-6:
            raise PlanImpossible("fringe.phases holds no phase on the fringe's slopes: take [-90, 90] or four phases")
    if kind not in CONTRAST_GOALS:
        return
    phases = len(sequence.fringe.phases_rad)
    if not night.whole_fringes:
        raise PlanImpossible(
            f"{phases} readout phases cannot tell contrast from the fringe's offset and phase; the goal "
            f'"{kind}" needs {WHOLE_FRINGE} or more: fringe.phases = [0, 90, 180, 270]'
        )
    if not night.one_coherence:
        raise PlanImpossible(
            f'the goal "{kind}" is about one coherence time, and the sweep of {", ".join(night.settings)} changes it: '
            "sweep the hold alone"
        )
    hold = np.unique(night.hold_s)
    if len(hold) < CONTRAST_GOALS[kind]:
        raise PlanImpossible(
            f'the goal "{kind}" needs {CONTRAST_GOALS[kind]} different holds; this plan has {len(hold)}. Sweep the '
            f"hold over {_holds_for(rig, CONTRAST_GOALS[kind])}, or see `nightfringe allocate`"
        )
    if kind == "plateau":
        level = sequence.goal.details.get("plateau")
        if level is None:
            raise PlanImpossible(
                'the goal "plateau" needs the contrast it may level off at: details = { plateau = 0.05 }'
            )
        if not 0.0 < level < rig.contrast:
            raise PlanImpossible(
                f"goal.details.plateau = {level:g} must lie between 0 and the contrast at short hold, "
                f"{rig.contrast:g}: take {rig.contrast / 10:.2g}"
            )


def check_known(whole: Plan, plan: Plan, rig: Knowledge) -> None:
    """The goal's quantity must be known by the end of the hours.

    whole: the plan to the end of its order; plan: up to the hours.

    Raises:
        PlanImpossible: it is not; the message says after how many hours it is, or what to change.
    """
    own = OWN.get(plan.goal.kind)
    mine = errors_of(plan, rig)
    if not mine:
        raise PlanImpossible(
            f'the goal "{plan.goal.kind}" leaves nothing to forecast: two holds tell time scales, three readout phases '
            "contrast, and a switch in goal.wanted a signal"
        )
    if own is None or (own in mine and np.isfinite(mine[own][-1])):
        return
    later = errors_of(whole, rig).get(own)
    if later is None or not np.isfinite(later).any():
        need = "both states of every switch in goal.wanted, at more than one value of each setting that is swept"
        holds = "holds far enough apart to tell its parts from each other"
        raise PlanImpossible(
            f"the {own} cannot be told from this plan, however long it is: it needs "
            f"{need if plan.goal.kind in SIGNAL_GOALS else holds}"
        )
    hours = float(whole.time_s[np.flatnonzero(np.isfinite(later))[0]]) / 3600
    raise PlanImpossible(
        f"after {float(plan.time_s[-1]) / 3600:.3g} h the {own} cannot be told yet: in this order it is known after "
        f"{hours:.2f} h; give --hours {np.ceil(hours * 100) / 100:.2f} or more"
    )


def _holds_for(rig: Knowledge, count: int) -> str:
    """Holds that tell an exponential, from a tenth of the coherence time up to it, as far as the rig goes."""
    low = float(np.clip(rig.coherence_s / 10, rig.shortest_s, rig.longest_s))
    high = float(np.clip(rig.coherence_s, rig.shortest_s, rig.longest_s))
    return "[" + ", ".join(f"{one:.2g}" for one in np.linspace(low, high, count)) + "] s"
