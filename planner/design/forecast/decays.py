"""Expected errors of what a night tells about contrast and atoms against hold, by the information of its packets.

knowledge.py says what one packet tells; packets add up. Parameters that are not wanted are left free, so a quantity is
not known (inf) before the packets can tell it from them. Drift lowers what a packet tells and moves the holds together
(progress.py).
"""

from dataclasses import replace

import numpy as np

from planner.arrays import FloatArray
from planner.design.allocation.knowledge import Knowledge
from planner.design.forecast.progress import Progress

SINGULAR = 1e-9  # smallest eigenvalue of a scaled information matrix that counts as knowing


def variance_of(information: FloatArray, slopes: FloatArray, progress: Progress, wanted: FloatArray) -> FloatArray:
    """Sum of the variances of the wanted combinations by each time, (n_time,); inf while they cannot be told.

    information (n_hold,): what a packet tells of the curve at each hold; slopes (n_hold, n_parameter): of the curve by
    its parameters; wanted (n_parameter, n_combination).
    """
    return _solve(information, slopes, progress, wanted, None)


def _solve(
    information: FloatArray, slopes: FloatArray, progress: Progress, wanted: FloatArray, moved: FloatArray | None
) -> FloatArray:
    """`variance_of`, with the variance that the covariance moved (n_time, n_hold, n_hold) of the curve adds."""
    counts = progress.counts.astype(np.float64)
    each = information[:, None, None] * slopes[:, :, None] * slopes[:, None, :]
    matrix = np.einsum("th,hpq->tpq", counts, each)
    scale = np.sqrt(np.maximum(np.diagonal(matrix, axis1=1, axis2=2), np.finfo(float).tiny))
    matrix /= scale[:, :, None] * scale[:, None, :]
    known = np.linalg.eigvalsh(matrix)[:, 0] > SINGULAR
    out = np.full(len(counts), np.inf)
    scaled = wanted[None] / scale[known][:, :, None]
    solved = np.linalg.solve(matrix[known], scaled)
    out[known] = (scaled * solved).sum(axis=(1, 2))
    if moved is not None:
        gain = np.einsum("th,hp,tpw->thw", counts[known] * information, slopes, solved / scale[known][:, :, None])
        out[known] += np.einsum("thw,thk,tkw->t", gain, moved[known], gain)
    return out


def time_scale_errors(rig: Knowledge, progress: Progress, *, contrast: bool = True) -> dict[str, FloatArray]:
    """Standard errors (n_time,) of coherence time and population lifetime, s; contrast: whether fringes tell it."""
    hold, wanted, out = progress.hold_s, np.array([[0.0], [1.0]]), {}
    if contrast:
        start = rig.contrast_at(hold)
        slopes = np.stack([start, start * hold / rig.coherence_s], axis=1)
        out["coherence time"] = rig.coherence_s * _contrast_error(rig, progress, slopes, wanted)
    atoms = rig.atoms_at(hold)
    slopes = np.stack([atoms, atoms * hold / rig.lifetime_s], axis=1)
    variance = variance_of(packet_information(rig, progress)[1], slopes, progress, wanted)
    out["population lifetime"] = rig.lifetime_s * np.sqrt(variance)
    return out


def modulation_error(rig: Knowledge, progress: Progress, period_s: float) -> FloatArray:
    """Standard error (n_time,) of the relative depth of a contrast modulation of known period and unknown phase: root
    of the mean variance of its cosine and sine parts, start and coherence time free."""
    hold = progress.hold_s
    contrast, turn = rig.contrast_at(hold), 2 * np.pi * hold / period_s
    slopes = contrast[:, None] * np.stack(
        [np.ones(len(hold)), hold / rig.coherence_s, np.cos(turn), np.sin(turn)], axis=1
    )
    return np.asarray(_contrast_error(rig, progress, slopes, np.eye(4)[:, 2:]) / np.sqrt(2.0))


def level_error(rig: Knowledge, progress: Progress, plateau: float) -> FloatArray:
    """Standard error (n_time,) of the contrast at which a decay levels off, if it does so at `plateau`."""
    falling = np.exp(-progress.hold_s / rig.coherence_s)
    height = rig.contrast - plateau
    slopes = np.stack([falling, height * falling * progress.hold_s / rig.coherence_s, np.ones(len(falling))], axis=1)
    return _contrast_error(rig, progress, slopes, np.eye(3)[:, 2:], plateau + height * falling)


def worst_contrast_error(rig: Knowledge, progress: Progress) -> FloatArray:
    """Relative standard error (n_time,) of the contrast at the hold where it is largest."""
    information, _ = packet_information(rig, progress)
    with np.errstate(divide="ignore"):
        each = 1 / (progress.counts * information)
    moved = _moved(rig, progress)
    if moved is not None:
        each = each + np.diagonal(moved, axis1=1, axis2=2)
    return np.asarray((np.sqrt(each) / rig.contrast_at(progress.hold_s)).max(axis=1))


def _contrast_error(
    rig: Knowledge, progress: Progress, slopes: FloatArray, wanted: FloatArray, contrast: FloatArray | None = None
) -> FloatArray:
    information, _ = packet_information(rig, progress, contrast)
    return np.asarray(np.sqrt(_solve(information, slopes, progress, wanted, _moved(rig, progress))))


def _moved(rig: Knowledge, progress: Progress) -> FloatArray | None:
    """Covariance of the holds' contrasts by drift: one unit of contrast drift moves a contrast by sqrt8 sigma_y."""
    if progress.common is None:
        return None
    unit = np.sqrt(8 * rig.variance_at(progress.hold_s))
    return np.asarray(progress.common * unit[:, None] * unit)


def packet_information(
    rig: Knowledge, progress: Progress, contrast: FloatArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Information of one packet about contrast and about atoms at each hold, for packets of the order's own size.

    Drift inside packets counts as that much more noise. A packet's information is F nu^2 / (1 + nu^2), nu^2 = C^2 F
    (knowledge.py); from it F, which goes as one over the noise.
    """
    true = rig.contrast_at(progress.hold_s) if contrast is None else contrast
    about_contrast, about_atoms = np.empty(len(progress.hold_s)), np.empty(len(progress.hold_s))
    for size in np.unique(progress.shots):
        mine = progress.shots == size
        one = replace(rig, phases=int(size), states=1)
        about_contrast[mine] = one.contrast_information(progress.hold_s[mine], true[mine])
        about_atoms[mine] = one.atom_information(progress.hold_s[mine])
    strong = about_contrast / 2 + np.sqrt(about_contrast**2 / 4 + about_contrast / true**2)
    less = strong / (1 + progress.inside)
    seen = true**2 * less
    return less * seen / (1 + seen), about_atoms
