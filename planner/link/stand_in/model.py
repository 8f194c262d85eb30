"""The stand-in's physics: what the simulated instrument counts, one shot or a whole night at a time.

A model of our own, simple enough to be known exactly: two classes of atoms, a contrast that falls with depth times
separation, losses apart from it, shot-to-shot noise, slow drifts and tides, a memory of earlier shots, rare faults.

Everything random is a function of (seed, ordinal), every drift and fault of a laser a function of (seed, time): the
same shots at the same times give the same counts, in whatever pieces they are asked for. A restarted rig so goes on as
if it had never stopped, save that the load of the shots before is gone: it begins at nothing, as after a power cut.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from planner.arrays import BoolArray, FloatArray, IntArray
from planner.link.stand_in.draws import NORMALS, Unlocks, binomial, shot_draws
from planner.link.stand_in.drifts import Walks
from planner.link.stand_in.profile import Profile
from planner.link.stand_in.tide import mean_acceleration
from planner.physics.atoms import atom
from planner.physics.bloch import tunnelling_loss_rate
from planner.physics.constants import STANDARD_GRAVITY
from planner.physics.contrast import coherence_time, two_classes
from planner.physics.interferometer import scale_factor
from planner.physics.loss import population

DRIFTING = ("phase", "acceleration", "offset", "contrast", "atoms")
FADED = 1e-12  # a load that has fallen to this share of its beginning is left out


class PastShot(Protocol):
    """An earlier shot, as far as later ones can feel it."""

    @property
    def start_s(self) -> float: ...

    @property
    def duration_s(self) -> float: ...


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What one shot gave."""

    atoms_a: float
    atoms_b: float
    background: float
    saturated: float
    readings: Mapping[str, float]
    flags: tuple[str, ...]


@dataclass(frozen=True, kw_only=True)
class Counts:
    """What a night gave; arrays of shape (n_shot,). `unlocked` and `outlier` tell what truly happened."""

    atoms_a: FloatArray
    atoms_b: FloatArray
    background: FloatArray
    saturated: FloatArray
    readings: Mapping[str, FloatArray]
    unlocked: BoolArray
    outlier: BoolArray


@dataclass(frozen=True, kw_only=True)
class Truth:
    """The noise-free, drift-free output; arrays of shape (n_shot,)."""

    contrast: FloatArray
    atoms: FloatArray
    phase_rad: FloatArray
    phase_sigma_rad: FloatArray  # shot-to-shot phase noise: lowers a fitted contrast by exp(-s^2/2)


class StandInModel:
    """A profile with a seed."""

    def __init__(self, profile: Profile, seed: int) -> None:
        self.profile = profile
        self._seed = seed
        self._mass = atom(profile.atom).mass_kg
        self._number = profile.numbers
        walking = [self._number[f"drift.{name}"] for name in DRIFTING] + [one.walk for one in profile.readings.values()]
        self._drifts = any(walking)  # the walks are most of a shot's work; a rig that does not drift goes without
        self._walks = Walks(seed, len(DRIFTING) + len(profile.readings))
        self._unlocks = Unlocks(seed, self._number["faults.unlocks_per_hour"], self._number["faults.unlock_lasts"])

    def shot(
        self,
        settings_si: Mapping[str, float],
        switches: Mapping[str, str],
        start_s: float,
        ordinal: int,
        history: Sequence[PastShot],
    ) -> Outcome:
        """One shot that starts start_s after the origin of the drifts; history holds earlier shots, oldest first."""
        signs = {
            name: np.array([1.0 if switches.get(name, states[0]) == states[0] else -1.0])
            for name, states in self.profile.switches.items()
        }
        load = 0.0
        for past in reversed(history):
            end = past.start_s + past.duration_s
            still = float(np.exp(-max(0.0, start_s - end) / self._number["memory.fades"]))
            if still < FADED:
                break
            load += self._left(past.duration_s) * still
        counts = self.night(
            {name: np.array([value]) for name, value in settings_si.items()},
            signs,
            np.array([start_s]),
            np.array([ordinal]),
            load=np.array([load]),
        )
        flags = ["unlocked"] if counts.unlocked[0] else []
        return Outcome(
            atoms_a=float(counts.atoms_a[0]),
            atoms_b=float(counts.atoms_b[0]),
            background=float(counts.background[0]),
            saturated=float(counts.saturated[0]),
            readings={name: float(values[0]) for name, values in counts.readings.items()},
            flags=tuple(flags),
        )

    def night(
        self,
        settings_si: Mapping[str, FloatArray],
        signs: Mapping[str, FloatArray],
        start_s: FloatArray,
        ordinal: IntArray,
        *,
        load: FloatArray,
    ) -> Counts:
        """Many shots at once: settings and switch signs (+1 first state) as columns (n_shot,), at times start_s.

        load: the load left by earlier shots, from `loads`.
        """
        truth = self.expected(settings_si, signs)
        n = len(start_s)
        hold = self._quantity(settings_si, "hold", n)
        scale = self._scale(settings_si, n)
        uniform, normal = shot_draws(self._seed, ordinal)
        walks = self._walks.at(start_s) if self._drifts else np.zeros((n, len(DRIFTING) + len(self.profile.readings)))
        drift = {name: walks[:, i] * self._number[f"drift.{name}"] for i, name in enumerate(DRIFTING)}
        turn = np.sin(2 * np.pi * (start_s + hold / 2) / self.profile.rhythm_s)
        acceleration = drift["acceleration"] + self._number["noise.acceleration"] * normal[:, 0]
        acceleration += mean_acceleration(self.profile.tide, start_s, hold)
        phase = truth.phase_rad + drift["phase"] + self._number["noise.phase"] * normal[:, 1] + scale * acceleration
        phase += self.profile.rhythm_phase_rad * turn
        unlocked = self._unlocks.at(start_s)
        contrast = np.where(unlocked, 0.0, np.clip(truth.contrast * (1 + drift["contrast"]), 0.0, 1.0))
        atoms = truth.atoms * (1 + drift["atoms"] + self._number["noise.atoms"] * normal[:, 2])
        atoms = np.maximum(atoms * (1 + self._number["memory.strength"] * load), 0.0).round()
        offset = 0.5 + drift["offset"] + self.profile.rhythm_offset * turn
        fraction = np.clip(offset + contrast / 2 * np.cos(phase), 0.0, 1.0)
        in_a = binomial(atoms, fraction, normal[:, 3], uniform[:, 2 * NORMALS])
        outlier = uniform[:, 2 * NORMALS + 1] < self._number["faults.outliers"]
        in_a = np.where(outlier, np.round(uniform[:, 2 * NORMALS + 2] * atoms), in_a)
        detection, background = self._number["noise.detection"], self._number["noise.background"]
        atoms_a = in_a + detection * normal[:, 4]
        atoms_b = atoms - in_a + detection * normal[:, 5]
        full = self._number["noise.saturates"]
        saturated = (atoms_a > full).astype(np.float64) + (atoms_b > full)
        readings = {
            name: reading.mean
            + reading.walk * walks[:, len(DRIFTING) + index]
            + reading.noise * shot_draws(self._seed, ordinal, stream=1 + index)[1][:, 0]
            for index, (name, reading) in enumerate(self.profile.readings.items())
        }
        return Counts(
            atoms_a=np.minimum(atoms_a, full),
            atoms_b=np.minimum(atoms_b, full),
            background=background + np.sqrt(background) * normal[:, 6],
            saturated=saturated,
            readings=readings,
            unlocked=unlocked,
            outlier=outlier,
        )

    def expected(self, settings_si: Mapping[str, FloatArray], signs: Mapping[str, FloatArray]) -> Truth:
        """The output without noise, drift, tide, memory and faults, for columns of settings and signs (n_shot,)."""
        n = len(next(iter([*settings_si.values(), *signs.values()]), np.ones(1)))
        hold, depth = self._quantity(settings_si, "hold", n), self._quantity(settings_si, "depth", n)
        apart = self._quantity(settings_si, "separation", n)
        cooling, detuning = self._quantity(settings_si, "cooling", n), self._quantity(settings_si, "detuning", n)
        excess = (self._number["cloud.warmest"] - 1) * np.exp(-cooling / self._number["cloud.temperature_falls"])
        at_rest = (self._number["cloud.warmest"] - 1) * np.exp(
            -self.profile.rest["cooling"] / self._number["cloud.temperature_falls"]
        )
        temperature = 1 + excess  # over the coldest there is
        # at the resting cooling time the share is as the profile says; hotter clouds have fewer cold atoms
        share = self._number["cloud.cold_share"] * (1 + at_rest) / temperature
        share = np.clip(share, 0.0, 1.0)
        sigma = self._number["contrast.detuning_width"]
        pulses = np.exp(-((detuning - self._number["contrast.best_detuning"]) ** 2) / (2 * sigma**2))
        cold, warm = (
            coherence_time(self._number[f"contrast.{name}_constant"], depth * temperature, apart) * (1 + at_rest)
            for name in ("cold", "warm")
        )
        contrast = two_classes(hold, self._number["contrast.short_hold"] * pulses, share, cold, warm)
        loaded = self._number["cloud.atoms"] * np.exp(-cooling / self._number["cloud.atoms_lost_cooling"])
        rate = 1 / self._number["loss.vacuum"] + self._number["loss.per_depth"] * depth
        rate = rate + tunnelling_loss_rate(depth, self._mass, self.profile.wavelength_m, STANDARD_GRAVITY)
        spill = self._number["loss.spill"] * np.exp(-depth / self._number["loss.spill_depth"])
        atoms = population(hold, loaded * share, rate) + population(hold, loaded * (1 - share), rate + spill)
        scale = self._scale(settings_si, n)
        parity = np.ones(n)
        for name in self.profile.follows:
            parity = parity * signs.get(name, np.ones(n))
        signal = scale * self._number["signal.acceleration"] * parity if self.profile.follows else np.zeros(n)
        phase = self._quantity(settings_si, "readout", n) + signal
        noise = np.hypot(self._number["noise.phase"], scale * self._number["noise.acceleration"])
        return Truth(contrast=contrast, atoms=atoms, phase_rad=phase, phase_sigma_rad=noise)

    def loads(self, start_s: FloatArray, duration_s: FloatArray) -> FloatArray:
        """The load that earlier shots of a night leave at the start of each, (n_shot,), for `night`."""
        fades = self._number["memory.fades"]
        left = np.empty(len(start_s))
        carried = 0.0
        for i in range(len(start_s)):
            if i:
                gap = max(0.0, float(start_s[i] - start_s[i - 1] - duration_s[i - 1]))
                carried = carried * float(np.exp(-duration_s[i - 1] / fades)) + self._left(float(duration_s[i - 1]))
                carried *= float(np.exp(-gap / fades))
            left[i] = carried
        return left

    def _left(self, duration_s: float) -> float:
        """Load that a shot leaves at its end: it approaches 1 as the shot gets long against the fading."""
        return float(-np.expm1(-duration_s / self._number["memory.fades"]))

    def _quantity(self, settings_si: Mapping[str, FloatArray], quantity: str, n: int) -> FloatArray:
        for name, setting in self.profile.settings.items():
            if setting.plays == quantity and name in settings_si:
                return np.asarray(settings_si[name], dtype=np.float64)
        return np.full(n, self.profile.rest[quantity])

    def _scale(self, settings_si: Mapping[str, FloatArray], n: int) -> FloatArray:
        """Phase per acceleration, rad per m/s^2."""
        return scale_factor(
            self._mass, self._quantity(settings_si, "separation", n), self._quantity(settings_si, "hold", n)
        )
