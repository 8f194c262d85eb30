"""Drift of the acceleration, such as the tide: phase drift that grows with hold and separation."""

import numpy as np

from planner.arrays import FloatArray
from planner.errors import PlanImpossible
from planner.physics.atoms import atom
from planner.physics.interferometer import scale_factor
from planner.sequence.model import Sequence
from planner.sequence.table import ShotTable


def noise_per_acceleration(table: ShotTable, sequence: Sequence) -> FloatArray:
    """How far an acceleration moves a shot's fraction, in standard deviations of that shot: per m/s^2, (n_shot,).

    An acceleration a shifts the fringe by kappa a, and the fraction by (C / 2) sin(...) kappa a; coupled drift counts
    in units of sqrt2 sin(...) sigma_y, so the factor is C kappa / (sqrt8 sigma_y), with the variance of one shot
    sigma_y^2 = excess (1 - C^2 / 2) / (4 N), averaged over the fringe. C and N fall with the hold as the sequence
    expects; what it does not say of their fall is left out.

    Raises:
        PlanImpossible: contrast, atoms or the separation are not said; the message names the keys.
    """
    expected = sequence.expected
    name = sequence.roles.get("separation")
    if expected.contrast is None or expected.atoms is None or name is None:
        raise PlanImpossible(
            "drift.acceleration is given in m/s^2; to weigh it against the noise of a shot, say expected.contrast, "
            "expected.atoms and which setting is roles.separation"
        )
    hold, separation = table.hold_s, table.settings[name]
    contrast = expected.contrast[0] * np.exp(-hold / _coherence_s(table, sequence, separation))
    lifetime = np.inf if expected.lifetime_s is None else expected.lifetime_s[0]
    atoms = expected.atoms[0] * np.exp(-hold / lifetime)
    excess = 1.0 if expected.excess_noise is None else expected.excess_noise[0]
    sigma = np.sqrt(excess * (1 - contrast**2 / 2) / (4 * atoms))
    split = sequence.roles.get("split")
    kappa = scale_factor(
        atom(sequence.atom).mass_kg, separation, hold, table.settings[split] if split is not None else 0.0
    )
    return np.asarray(contrast * kappa / (np.sqrt(8.0) * sigma))


def _coherence_s(table: ShotTable, sequence: Sequence, separation: FloatArray) -> FloatArray:
    expected = sequence.expected
    if expected.coherence_s is not None:
        return np.full(len(table), expected.coherence_s[0])
    depth = sequence.roles.get("depth")
    if expected.coherence_constant is None or depth is None:
        return np.full(len(table), np.inf)
    return np.asarray(expected.coherence_constant[0] / (table.settings[depth] * separation))
