"""The falls of a night's curves in every shape, with a search for a modulation, and what nights have in common."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from planner.analysis.coherence_constant import CoherenceConstant, fit_coherence_constant
from planner.analysis.contrast_decay import fit_contrast_decay
from planner.analysis.data import NightData
from planner.analysis.decay import Decay
from planner.analysis.holds import HoldContrast
from planner.analysis.modulation import Modulation, search_modulation
from planner.analysis.results import CurveResults, summarise
from planner.analysis.shape_choice import ShapeScore, compare_shapes
from planner.errors import NotEnoughData
from planner.sequence.model import Sequence as Plan


@dataclass(frozen=True, kw_only=True)
class CurveDecay:
    """How one curve falls. `fits` has the shape that `results` would report first, then the others by their score."""

    request: int
    settings: dict[str, float]
    contrast: HoldContrast | None
    fits: tuple[Decay, ...]
    scores: tuple[ShapeScore, ...]
    why_no_coherence: str
    lifetime: Decay | None
    why_no_lifetime: str
    modulation: Modulation | None
    why_no_modulation: str
    depth_er: float | None  # None where the sequence does not say, or the setting moves
    separation_m: float | None


def decays_of(
    data: NightData,
    sequences: Mapping[int, Plan],
    *,
    cut_flags: Sequence[str] = (),
    search: bool = False,
    period_s: float | None = None,
) -> tuple[CurveDecay, ...]:
    """The decay of each curve of a night.

    Args:
        data: the night. sequences: by request number, for the roles of depth and separation. search: look for a
        modulation, at `period_s` or at any period.

    Raises:
        NotEnoughData: no shot is left.
    """
    results = summarise(data, cut_flags=cut_flags, compare=False)
    return tuple(_one(curve, data, sequences.get(curve.request), search, period_s) for curve in results.curves)


def _one(curve: CurveResults, data: NightData, plan: Plan | None, search: bool, period_s: float | None) -> CurveDecay:
    fits: list[Decay] = []
    scores: tuple[ShapeScore, ...] = ()
    if curve.coherence is not None and curve.contrast is not None:
        fits.append(curve.coherence)
        scores = compare_shapes(curve.contrast)
        for score in scores:
            if score.shape != curve.coherence.shape:
                try:
                    fits.append(fit_contrast_decay(curve.contrast, shape=score.shape))
                except NotEnoughData:
                    continue  # a shape in which contrast grows; the chosen one says what there is to say
    modulation, why_no_modulation = None, ""
    if search:
        try:
            if curve.contrast is None or curve.coherence is None:
                raise NotEnoughData("there is no fall of contrast to look beside")
            modulation = search_modulation(curve.contrast, curve.coherence, period_s=period_s)
        except NotEnoughData as error:
            why_no_modulation = str(error)
    return CurveDecay(
        request=curve.request,
        settings=dict(curve.settings),
        contrast=curve.contrast,
        fits=tuple(fits),
        scores=scores,
        why_no_coherence=curve.why_no_coherence,
        lifetime=curve.lifetime,
        why_no_lifetime=curve.why_no_lifetime,
        modulation=modulation,
        why_no_modulation=why_no_modulation,
        depth_er=_setting(curve, data, plan, "depth"),
        separation_m=_setting(curve, data, plan, "separation"),
    )


def _setting(curve: CurveResults, data: NightData, plan: Plan | None, role: str) -> float | None:
    name = None if plan is None else plan.roles.get(role)
    if name is None or name not in data.settings:
        return None
    if name in curve.settings:
        return curve.settings[name]
    values = data.settings[name][(data.request == curve.request) & np.isfinite(data.settings[name])]
    same = len(values) and np.ptp(values) <= 1e-9 * np.abs(values).max()
    return float(values[0]) if same else None


def constant_of(curves: Sequence[CurveDecay]) -> tuple[CoherenceConstant | None, str]:
    """The coherence constant over all curves with one coherence time, depth and separation, or why there is none."""
    rows = [
        (curve.fits[0].time_s, curve.fits[0].low_s, curve.fits[0].high_s, curve.depth_er, curve.separation_m)
        for curve in curves
        if curve.fits
        and curve.depth_er is not None
        and curve.separation_m is not None
        and curve.fits[0].low_s > 0
        and np.isfinite(curve.fits[0].high_s)
    ]
    columns = np.array(rows, dtype=float).reshape(-1, 5).T
    try:
        return fit_coherence_constant(*columns), ""
    except NotEnoughData as error:
        return None, str(error)
