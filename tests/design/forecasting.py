"""Forecasts of example nights, made once for tests, proofs and benches."""

from dataclasses import dataclass
from functools import cache

from planner.design.allocation.choose import scale_of
from planner.design.allocation.knowledge import Knowledge, knowledge_of
from planner.design.allocation.signal import Scale
from planner.design.forecast.curve import Forecast, Progress, forecasts, phase_information, progress_of
from planner.design.forecast.rehearsal import Night
from planner.design.forecast.whole_nights import Played, played, signal_widening
from planner.design.ordering import make_order
from planner.design.running_order import RunningOrder
from planner.sequence.model import Sequence
from planner.sequence.rigfile import read_rig
from planner.sequence.table import ShotTable
from tests.design.nights import SEQUENCES, night


@dataclass(frozen=True, kw_only=True)
class Plan:
    """A night with all that its forecast needs."""

    table: ShotTable
    sequence: Sequence
    order: RunningOrder
    known: Knowledge
    progress: Progress
    scale: Scale
    night: Played

    @property
    def packets(self) -> Night:
        """Its packets as the rehearsals of coherence times take them."""
        return Night(hold_s=self.progress.hold_s, packets=self.progress.counts[-1], phases=int(self.progress.shots[0]))

    @property
    def shots(self) -> int:
        """Measured shots."""
        return int((self.progress.counts[-1] * self.progress.shots).sum())

    def forecasts(self, seed: int = 1) -> dict[str, Forecast]:
        """The forecast of each quantity by name, as the command makes it."""
        widen = {
            "decay": self.order.figures["additive_mean"],
            "signal": signal_widening(self.known, self.scale, self.night),
        }
        found = forecasts(
            self.known,
            self.progress,
            scale=self.scale,
            information=phase_information(self.table.phase_rad),
            widen=widen,
            goal=self.sequence.goal.kind,
            details=self.sequence.goal.details,
            seed=seed,
        )
        return {one.name: one for one in found}


@cache
def plan(name: str) -> Plan:
    """An example sequence by its file's stem, ordered quickly."""
    table, sequence = night(f"{name}.toml")
    rig = read_rig(str(SEQUENCES / "gallery-rig.toml"))
    order = make_order(table, sequence, seed=1, effort="quick")
    known = knowledge_of(sequence, rig, float((table.duration_s - table.hold_s).mean()))
    return Plan(
        table=table,
        sequence=sequence,
        order=order,
        known=known,
        progress=progress_of(order, table),
        scale=scale_of(sequence, rig),
        night=played(order, table, sequence),
    )
