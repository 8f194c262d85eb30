"""What is known of a rig before the night, and what one packet would tell, as functions of the hold.

Models: contrast C(T) = C_0 exp(-T / tau_c), atoms N(T) = N_0 exp(-T / tau_n); variance of one shot's fraction
excess y (1 - y) / N, projection noise times the excess noise. n shots on equally spaced phases know the contrast with
variance 8 sigma^2 / n and the phase with 8 sigma^2 / (n C^2) (Cramer-Rao, see physics/noise.py), where sigma^2 averages
the shots' variance as the estimate weighs them: by cos^2 of the fringe phase for the contrast, sin^2 for the phase.
With y (1 - y) = (1 - C^2 cos^2) / 4 and mean cos^4 = 3/8, mean cos^2 sin^2 = 1/8, that is

    contrast    excess (1 - 3 C^2 / 4) / (4 N)
    phase       excess (1 - C^2 / 4) / (4 N), and at most excess / (4 N) at any one phase of the fringe
    unweighted  excess (1 - C^2 / 2) / (4 N)
"""

from dataclasses import dataclass, replace

import numpy as np

from planner.arrays import FloatArray
from planner.errors import PlanImpossible
from planner.sequence.model import Expected, Rig, Sequence

DRAWS = 6  # of the uncertain inputs, for robust designs
ATOM_SCATTER = (
    0.06  # relative shot-to-shot scatter of the atom number where nothing is known; common practice, no source
)


@dataclass(frozen=True, kw_only=True)
class Knowledge:
    """Best guesses, times in s; `excess`: variance over shot-noise variance; `dead_s`: all of a cycle but the hold."""

    contrast: float
    coherence_s: float
    atoms: float
    lifetime_s: float
    excess: float
    dead_s: float
    shortest_s: float
    longest_s: float
    phases: int  # readout phases of a full fringe packet
    states: int  # states of the fast switches: a packet holds phases x states shots
    spread: dict[str, float]  # relative standard deviation of each number that is uncertain

    def contrast_at(self, hold_s: FloatArray) -> FloatArray:
        """Expected contrast."""
        return np.asarray(self.contrast * np.exp(-hold_s / self.coherence_s))

    def atoms_at(self, hold_s: FloatArray) -> FloatArray:
        """Expected atom number."""
        return np.asarray(self.atoms * np.exp(-hold_s / self.lifetime_s))

    def variance_at(self, hold_s: FloatArray) -> FloatArray:
        """Variance of one shot's fraction, averaged over the fringe."""
        return self._variance(hold_s, self.contrast_at(hold_s), 1 / 2)

    def _variance(self, hold_s: FloatArray, contrast: FloatArray, less: float) -> FloatArray:
        return np.asarray(self.excess * (1 - less * contrast**2) / (4 * self.atoms_at(hold_s)))

    def phase_error(self, hold_s: FloatArray) -> FloatArray:
        """Standard error of the phase from one full packet, rad, while small; at most, whatever the fringe's phase.

        A shot's noise is at most that at mid-fringe, y = 1/2: for four phases that bound is met at phases 0, 90, ...
        """
        return np.asarray(
            np.sqrt(8 * self._variance(hold_s, self.contrast_at(hold_s), 0.0) / self.packet_shots)
            / self.contrast_at(hold_s)
        )

    @property
    def packet_shots(self) -> int:
        """Shots of one full fringe packet."""
        return self.phases * self.states

    def packet_s(self, hold_s: FloatArray) -> FloatArray:
        """Rig time of one full fringe packet."""
        return np.asarray(self.packet_shots * (hold_s + self.dead_s))

    def contrast_information(self, hold_s: FloatArray, contrast: FloatArray | None = None) -> FloatArray:
        """Fisher information of one packet about the contrast at a hold, where it is the expected one or `contrast`.

        n / (8 sigma^2), times nu^2 / (1 + nu^2), nu the contrast over its own error in one packet: a packet without
        a visible fringe, its phase unknown, tells little, and less the weaker the fringe (the information of a Rice
        distribution about its distance goes as nu^2 for small nu and 1 for large). It is what the unbiased squared
        contrast of a packet, averaged over packets, tells: variance 4 C^2 s^2 + 4 s^4 for a contrast error s.
        """
        true = self.contrast_at(hold_s) if contrast is None else contrast
        full = self.packet_shots / (8 * self._variance(hold_s, true, 3 / 4))
        seen = true**2 * full
        return np.asarray(full * seen / (1 + seen))

    def atom_information(self, hold_s: FloatArray) -> FloatArray:
        """Fisher information of one packet about the mean atom number: n / (N + (scatter N)^2)."""
        atoms = self.atoms_at(hold_s)
        return np.asarray(self.packet_shots / (atoms + (ATOM_SCATTER * atoms) ** 2))

    def draws(self, seed: int = 0, count: int = DRAWS) -> list["Knowledge"]:
        """Other rigs that are as likely: log-normal draws of what is uncertain; the best guess first."""
        rng = np.random.default_rng(seed)
        rigs = [self]
        for _ in range(count - 1):
            changes = {
                name: getattr(self, name) * float(np.exp(rng.normal() * np.log1p(width)))
                for name, width in self.spread.items()
            }
            if "contrast" in changes:
                changes["contrast"] = min(changes["contrast"], 1.0)
            rigs.append(replace(self, **changes))
        return rigs


def knowledge_of(sequence: Sequence, rig: Rig, dead_s: float) -> Knowledge:
    """What a sequence file says of its rig.

    Raises:
        PlanImpossible: contrast, coherence, atoms or lifetime are not said; the message names the keys.
    """
    expected = sequence.expected
    coherence = _coherence(sequence, expected)
    missing = [
        name
        for name, value in (
            ("expected.contrast", expected.contrast),
            ("expected.coherence_constant or expected.coherence", coherence),
            ("expected.atoms", expected.atoms),
            ("expected.lifetime", expected.lifetime_s),
        )
        if value is None
    ]
    if missing or not (expected.contrast and coherence and expected.atoms and expected.lifetime_s):
        raise PlanImpossible(
            f"to share out rig time, say what is known of the rig: {', '.join(missing)} "
            '(each as "value +- standard deviation")'
        )
    hold = sequence.settings[sequence.roles["hold"]]
    low, high = rig.setting_limits.get(hold.name, (hold.low, hold.high))
    excess = expected.excess_noise or (1.0, 0.0)
    numbers = {
        "contrast": expected.contrast,
        "coherence_s": coherence,
        "atoms": expected.atoms,
        "lifetime_s": expected.lifetime_s,
        "excess": excess,
    }
    fast = sum(not switch.slow for switch in sequence.switches.values())
    return Knowledge(
        **{name: value for name, (value, _) in numbers.items()},
        dead_s=dead_s,
        shortest_s=max(hold.low, low),
        longest_s=min(hold.high, high),
        phases=max(4, len(sequence.fringe.phases_rad)),
        states=2**fast,
        spread={name: sd / value for name, (value, sd) in numbers.items() if sd > 0.0},
    )


def _coherence(sequence: Sequence, expected: Expected) -> tuple[float, float] | None:
    if expected.coherence_s is not None:
        return expected.coherence_s
    if expected.coherence_constant is None or "depth" not in sequence.roles or "separation" not in sequence.roles:
        return None
    spread = sequence.settings[sequence.roles["depth"]].rest * sequence.settings[sequence.roles["separation"]].rest
    value, sd = expected.coherence_constant
    return value / spread, sd / spread
