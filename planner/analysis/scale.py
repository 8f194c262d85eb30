"""The scale factor of a night's shots: phase per acceleration, from what the sequence says its settings mean."""

from planner.analysis.data import NightData
from planner.arrays import FloatArray
from planner.errors import NotEnoughData
from planner.physics.atoms import atom
from planner.physics.interferometer import scale_factor
from planner.sequence.model import Sequence


def shot_scales(data: NightData, sequence: Sequence) -> FloatArray:
    """Phase per acceleration of each shot, rad per m/s^2, (n_shot,).

    Raises:
        NotEnoughData: the sequence does not say which setting is the separation, or the night did not log it.
    """
    name = sequence.roles.get("separation")
    if name is None:
        raise NotEnoughData("the sequence does not say which setting is the separation (roles.separation)")
    if name not in data.settings:
        raise NotEnoughData(f'the night has no column for the separation ("{name}")')
    split = sequence.roles.get("split")
    return scale_factor(
        atom(sequence.atom).mass_kg,
        data.settings[name],
        data.hold_s,
        0.0 if split is None else data.settings.get(split, 0.0),
    )
