"""The answer of an allocation: which packets, what they will reach, and how it was proved."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal


@dataclass(frozen=True, kw_only=True)
class Share:
    """Packets at one hold. `kind`: "fringe" (full fringes) or "mid" (two phases at mid-fringe), or the check's name."""

    hold_s: float
    packets: int
    shots: int
    kind: str
    rig_s: float
    wanted_share: float  # of rig time, before rounding to whole packets


@dataclass(frozen=True, kw_only=True)
class Certificate:
    """Proof of the continuous design: criterion, value and the bound no design beats, for one second of rig time."""

    criterion: Literal["c", "L", "D", "minimax", "T", "closed form", "risk"]
    value: float
    bound: float
    efficiency: float  # proved lower bound, in rig time


@dataclass(frozen=True, kw_only=True)
class Allocation:
    """Shares by rising hold. `errors`: quantity -> expected standard error (SI). `rounded` is the efficiency after
    rounding, against the bound. `lines`: plain words."""

    goal: str
    hours: float
    shares: tuple[Share, ...]
    errors: Mapping[str, float]
    certificate: Certificate
    rounded: float
    lines: tuple[str, ...] = ()
    details: Mapping[str, float] = field(default_factory=dict)

    @property
    def rig_s(self) -> float:
        """Rig time of all packets."""
        return sum(share.rig_s for share in self.shares)
