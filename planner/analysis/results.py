"""From a night's columns to what it says: contrast and atoms per hold, two time scales, noise, what was left out."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import special

from planner.analysis.contrast_decay import fit_contrast_decay
from planner.analysis.data import NightData, choose, distinct_holds, fractions, shot_variance
from planner.analysis.decay import Decay
from planner.analysis.fringe import Fringes, fit_fringes
from planner.analysis.holds import HoldContrast, combine
from planner.analysis.loading import HoldAtoms, atoms_per_hold, fit_atom_decay
from planner.analysis.shape_choice import ShapeScore, compare_shapes, fit_best
from planner.analysis.shapes import EXPONENTIAL, Shape
from planner.arrays import FloatArray, IntArray
from planner.errors import NotEnoughData

POOR_FIT = 0.01  # below this p value a curve is said not to describe its points


@dataclass(frozen=True, kw_only=True)
class Noise:
    """Scatter of shots about their fringes over the projection noise, as standard deviations."""

    multiple: float  # root mean square
    low: float
    high: float
    typical: float  # from the median packet: what it would be without rare bad shots
    dof: int


@dataclass(frozen=True, kw_only=True)
class FringeShots:
    """Shots laid on their own packet's fringe, for pictures. Arrays of shape (n_shot,).

    Since each packet is turned by its own fitted phase, noise alone looks like a small fringe here.
    """

    hold_s: FloatArray
    phase_rad: FloatArray  # phi of the packet + theta of the shot
    fraction: FloatArray  # y - B of the packet + 1/2


@dataclass(frozen=True, kw_only=True)
class CurveResults:
    """One curve against hold: all shots of one request that share every other swept setting.

    A time scale that the data cannot give is None, and `why_no_...` says why.
    """

    request: int
    settings: Mapping[str, float]  # the swept settings other than hold and readout, SI
    shots: int
    packets: int
    contrast: HoldContrast | None
    atoms: HoldAtoms | None
    hold_s: FloatArray  # (n_hold,) all holds that were measured
    hold_shots: IntArray  # (n_hold,)
    pooled_contrast: FloatArray  # (n_hold,) from quadratures averaged over the night, biased upwards; NaN if unsolved
    coherence: Decay | None
    why_no_coherence: str
    shapes: tuple[ShapeScore, ...]  # compared where the shape of `coherence` does not describe the contrast; else empty
    lifetime: Decay | None
    why_no_lifetime: str
    noise: Noise | None
    fringe_shots: FringeShots
    unsolved: int  # packets with fewer than three readout phases left


@dataclass(frozen=True, kw_only=True)
class NightResults:
    """What a night says. `notes` are plain words on what it means and what it does not."""

    attempts: int
    used: int
    left_out: Mapping[str, int]
    curves: tuple[CurveResults, ...]
    level: float
    notes: tuple[str, ...]


def fringe_groups(data: NightData) -> tuple[IntArray, int]:
    """Which fringe each shot belongs to: its packet and switch states, or its cell and repeat outside packets.

    Where splitting a packet by switch state would leave fewer than three shots a fringe, its states share one fringe.

    Returns:
        Group of each shot, (n_shot,), numbered from 0, and the number of groups.
    """
    loose = data.packet < 0
    base = np.stack(
        [data.request, np.where(loose, -1, data.packet), np.where(loose, data.cell, 0), np.where(loose, data.repeat, 0)]
    )
    _, packet = np.unique(base, axis=1, return_inverse=True)
    packet = packet.ravel()
    if not data.switches:
        return packet.astype(np.int64), int(packet.max()) + 1
    states = np.stack([packet, *(data.switches[name].astype(np.int64) for name in sorted(data.switches))])
    _, split = np.unique(states, axis=1, return_inverse=True)
    split = split.ravel()
    fewest = np.full(packet.max() + 1, np.iinfo(np.int64).max)
    np.minimum.at(fewest, packet, np.bincount(split)[split])
    _, group = np.unique(np.where(fewest[packet] >= 3, split, split.max() + 1 + packet), return_inverse=True)
    return group.ravel().astype(np.int64), int(group.max()) + 1


def curve_labels(data: NightData, which_hold: IntArray) -> tuple[IntArray, list[dict[str, float]]]:
    """Which curve against hold each shot of one request belongs to.

    Settings that follow the hold or the readout phase belong to the curve; every other setting that moves makes curves.

    Returns:
        Curve of each shot, (n_shot,), and the settings of each curve, SI.
    """
    names = []
    for name in sorted(data.settings):
        column = data.settings[name]
        moving = np.isfinite(column).all() and np.ptp(column) > 1e-9 * np.abs(column).max()
        if moving and not _follows(column, which_hold) and not _is_readout(column, data.phase_rad):
            names.append(name)
    keys = np.stack([np.zeros(len(data)), *(data.settings[name] for name in names)])
    values, label = np.unique(keys, axis=1, return_inverse=True)
    return label.ravel().astype(np.int64), [dict(zip(names, column[1:].tolist(), strict=True)) for column in values.T]


def _follows(column: FloatArray, label: IntArray) -> bool:
    low, high = np.full(label.max() + 1, np.inf), np.full(label.max() + 1, -np.inf)
    np.minimum.at(low, label, column)
    np.maximum.at(high, label, column)
    return bool((high - low <= 1e-9 * np.abs(column).max()).all())


def _is_readout(column: FloatArray, phase_rad: FloatArray) -> bool:
    return bool(np.allclose(np.cos(column - phase_rad), 1.0, rtol=0, atol=1e-9))


def measure_noise(fringes: Fringes) -> Noise | None:
    """Multiple of shot noise from fringes fitted with their projection noise; None without residuals."""
    use = fringes.dof > 0
    if not use.any():
        return None
    chi, dof = fringes.chi_squared[use], fringes.dof[use].astype(float)
    mean = chi.sum() / dof.sum()
    # from the scatter between fringes, since technical noise is not Gaussian; on the logarithm it is nearly symmetric
    relative = np.sqrt(max(((chi - mean * dof) ** 2).sum(), 2 * dof.sum() * 1e-12)) / chi.sum()
    step = special.stdtrit(max(len(chi) - 1, 1), 0.975) * relative
    median = float(np.median(chi / special.chdtri(dof, 0.5)))
    multiple = float(np.sqrt(mean))
    return Noise(
        multiple=multiple,
        low=float(multiple * np.exp(-step / 2)),
        high=float(multiple * np.exp(step / 2)),
        typical=float(np.sqrt(median)),
        dof=int(dof.sum()),
    )


def _curve(
    data: NightData,
    request: int,
    settings: dict[str, float],
    shape: Shape | None,
    compare: bool,
    detection: float,
    level: float,
) -> CurveResults:
    holds, which = distinct_holds(data.hold_s)
    group, count = fringe_groups(data)
    y = fractions(data)
    hold_of = np.zeros(count, dtype=np.int64)
    hold_of[group] = which
    flat = fit_fringes(data.phase_rad, y, shot_variance(data, detection_noise_atoms=detection), group, count)
    contrast, coherence, why_no_coherence = None, None, ""
    shapes: tuple[ShapeScore, ...] = ()
    pooled = np.full(len(holds), np.nan)
    try:
        contrast = combine(flat, hold_of, holds, level=level)
        cells = fit_fringes(data.phase_rad, y, shot_variance(data, detection_noise_atoms=detection), which, len(holds))
        pooled = cells.contrast_plain
        coherence = (
            fit_best(contrast, level=level) if shape is None else fit_contrast_decay(contrast, shape=shape, level=level)
        )
        if compare and coherence.goodness_p < POOR_FIT:
            shapes = compare_shapes(contrast)
    except NotEnoughData as error:
        why_no_coherence = str(error)
    # projection noise depends on where on the fringe a shot lies, and that is known only after a first fit
    turn = flat.phase_rad[group] + data.phase_rad
    expected = flat.offset[group] + flat.contrast_plain[group] / 2 * np.cos(turn)
    solved = flat.solved[group]
    variance = shot_variance(data, expected=np.where(solved, expected, 0.5))
    noise = measure_noise(fit_fringes(data.phase_rad, y, variance, group, count))
    drawn = FringeShots(
        hold_s=holds[which][solved], phase_rad=turn[solved], fraction=(y - flat.offset[group] + 0.5)[solved]
    )
    atoms, lifetime, why_no_lifetime = None, None, ""
    try:
        packet = np.unique(np.stack([which, group]), axis=1, return_inverse=True)[1].ravel()
        atoms = atoms_per_hold(data.atoms, data.start_s, packet, which, holds)
        lifetime = fit_atom_decay(atoms, level=level)
    except NotEnoughData as error:
        why_no_lifetime = str(error)
    return CurveResults(
        request=request,
        settings=settings,
        shots=len(data),
        packets=count,
        contrast=contrast,
        atoms=atoms,
        hold_s=holds,
        hold_shots=np.bincount(which, minlength=len(holds)),
        pooled_contrast=pooled,
        coherence=coherence,
        why_no_coherence=why_no_coherence,
        shapes=shapes,
        lifetime=lifetime,
        why_no_lifetime=why_no_lifetime,
        noise=noise,
        fringe_shots=drawn,
        unsolved=int((~flat.solved).sum()),
    )


def summarise(
    data: NightData,
    *,
    cut_flags: Sequence[str] = (),
    shape: Shape | None = None,
    compare: bool = True,
    detection_noise_atoms: float = 0.0,
    level: float = 0.95,
) -> NightResults:
    """Everything that a night's measuring shots say to first order.

    Args:
        data: the night.
        cut_flags: flags of the rig that exclude a shot, declared beforehand.
        shape: how contrast falls, None for the one that describes it best; atoms always as one exponential.
        compare: whether to compare all shapes where this one does not describe the contrast (a few seconds).
        detection_noise_atoms: what the detector adds to each output's count, one standard deviation; a weight only.
        level: coverage of the intervals.

    Returns:
        NightResults, a curve for each request and for each combination of other swept settings.

    Raises:
        NotEnoughData: no shot is left.
    """
    chosen = choose(data, cut_flags=cut_flags)
    used = chosen.data
    if not len(used):
        reasons = "; ".join(f"{reason}: {count}" for reason, count in chosen.left_out.items())
        raise NotEnoughData(f"none of {len(data)} attempts carries a result that counts ({reasons or 'none was made'})")
    curves = []
    for request in np.unique(used.request).tolist():
        mine = used.rows(used.request == request)
        label, settings = curve_labels(mine, distinct_holds(mine.hold_s)[1])
        for number, values in enumerate(settings):
            curves.append(
                _curve(mine.rows(label == number), request, values, shape, compare, detection_noise_atoms, level)
            )
    return NightResults(
        attempts=chosen.total,
        used=len(used),
        left_out=chosen.left_out,
        curves=tuple(curves),
        level=level,
        notes=tuple(note for curve in curves for note in plain_words(curve)),
    )


def plain_words(curve: CurveResults) -> list[str]:
    """What a curve means and what it does not, a sentence or two each."""
    words = []
    if curve.coherence is None:
        words.append(f"No coherence time: {curve.why_no_coherence}.")
    elif np.isinf(curve.coherence.time_s):
        words.append(
            f"No loss of contrast is seen up to {curve.contrast.hold_s.max():g} s; the coherence time is longer than "
            f"{curve.coherence.low_s:.3g} s at 95 %."
            if curve.contrast is not None
            else ""
        )
    else:
        words.append(
            "The coherence time is the hold at which contrast has fallen to 1/e of its short-hold value. It holds "
            "every loss of contrast, shot-to-shot phase noise too (which lowers contrast as exp(-s^2/2) and grows "
            "with hold): it is not decoherence alone."
        )
    if curve.coherence is not None and curve.coherence.shape != EXPONENTIAL:
        words.append(
            f"The contrast is read as {curve.coherence.shape.words}; its 1/e hold is not the time constant of any one "
            "part of it."
        )
    if curve.coherence is not None and curve.coherence.goodness_p < POOR_FIT:
        shape = curve.coherence.shape
        words.append(
            f"The contrast is not described by {shape.words} (p = {curve.coherence.goodness_p:.2g}): read the "
            "coherence time as a summary, and the points as the result."
        )
        if curve.shapes and curve.shapes[0].shape != shape:
            better = curve.shapes[0].shape
            words.append(f"Of the shapes tried, {better.words} describes it best (--shape {better.name}).")
    if curve.lifetime is None:
        words.append(f"No population lifetime: {curve.why_no_lifetime}.")
    else:
        words.append(
            "The population lifetime is the same for the atom number; it is fitted apart, and says nothing about phase."
        )
        if curve.lifetime.goodness_p < POOR_FIT:
            words.append(
                f"One exponential does not describe the atom number (p = {curve.lifetime.goodness_p:.2g}): loss early "
                "and late differ."
            )
    words.append(
        "A hold's contrast is combined from the squared contrast of its packets, so that a phase that wanders from "
        "packet to packet does not lower it; drift inside a packet raises it a little."
    )
    if curve.noise is None:
        words.append(
            "No packet has more shots than the three numbers of a fringe: the noise was taken to be projection noise, "
            "and the intervals are as right as that."
        )
    elif curve.contrast is not None and curve.contrast.held_back.any():
        words.append(
            f"{int(curve.contrast.held_back.sum())} fringe(s) scatter far beyond the others and count less in the "
            f"contrast. Without rare bad shots the noise would be {curve.noise.typical:.2f} x shot noise."
        )
    if curve.contrast is not None and curve.contrast.unchecked.any():
        words.append(
            f"{int(curve.contrast.unchecked.sum())} fringe(s) lost too many shots to be checked; "
            "they count for atoms, not for contrast."
        )
    if curve.unsolved:
        words.append(
            f"{curve.unsolved} packets kept fewer than three readout phases: they count for atoms, not for contrast."
        )
    return words
