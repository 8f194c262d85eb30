"""What a night's fringes say beyond their contrast: phase noise, the path of the phase, the detector, and whether there
is a fringe at all."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from scipy import special

from planner.analysis.data import NightData, choose, distinct_holds, fractions, shot_variance
from planner.analysis.detection import EfficiencyRatio, efficiency_ratio
from planner.analysis.following import Followed, Packets, follow_fitted
from planner.analysis.fringe import Fringes, fit_fringes
from planner.analysis.holds import HoldContrast, combine, hold_back
from planner.analysis.packet_drift import packet_bias
from planner.analysis.phase_noise import PhaseNoise, phase_noise
from planner.analysis.results import curve_labels, fringe_groups
from planner.arrays import FloatArray, IntArray
from planner.errors import NotEnoughData

CLEAR = 3.0  # amplitude over its error, of a packet whose phase is worth following
SCAN = 0.01  # p value over all holds above which a night counts as one without a fringe
ON_AXIS = 1e-6  # rad; two readout phases half a turn apart


@dataclass(frozen=True, kw_only=True)
class FringeReport:
    """One curve's fringes. What could not be told is None, and `why_not` says why, by name."""

    request: int
    settings: dict[str, float]
    contrast: HoldContrast
    scan_p: float  # probability of so much fringe over all holds, if there is none at any
    offset: FloatArray  # (n_hold,) mean of the packets' offsets, aligned with `contrast`
    offset_error: FloatArray
    noise: tuple[PhaseNoise, ...]
    drift_bias: FloatArray  # (n_hold,) relative, what the walk inside packets does to the squared contrast; NaN unknown
    set_aside: int  # packets that scatter beyond anything usual: not in `noise`, and of little weight in the path
    packets: Packets | None
    followed: Followed | None
    packet_hold_s: FloatArray  # (n_followed,)
    detector: EfficiencyRatio | None
    why_not: dict[str, str]


def scan_test(p: FloatArray) -> float:
    """p value of "no hold has a fringe", from the holds' own.

    References:
        Fisher, Statistical Methods for Research Workers (1932), section 21.1: -2 sum ln p is chi-squared with two
        degrees of freedom each (from memory; checked here against scipy.stats.combine_pvalues).
    """
    p = np.maximum(np.asarray(p, float), 1e-300)
    return float(special.chdtrc(2 * len(p), -2 * np.log(p).sum()))


def report_fringes(
    data: NightData,
    *,
    cut_flags: Sequence[str] = (),
    detection_noise_atoms: float = 0.0,
    scales: Callable[[NightData], FloatArray] | None = None,
    known: Callable[[NightData], FloatArray] | None = None,
) -> tuple[FringeReport, ...]:
    """The fringes of each curve of a night.

    Args:
        data: the night. cut_flags: flags that exclude a shot, declared beforehand. detection_noise_atoms: of each
        output. scales: gives the scale factor of each shot, rad per m/s^2; without it holds share one phase walk.
        known: gives the known acceleration at each shot, m/s^2, such as the tide.

    Raises:
        NotEnoughData: no shot is left, or no packet of any curve has three readout phases.
    """
    chosen = choose(data, cut_flags=cut_flags)
    if not len(chosen.data):
        reasons = "; ".join(f"{reason}: {count}" for reason, count in chosen.left_out.items())
        raise NotEnoughData(f"none of {len(data)} attempts carries a result that counts ({reasons or 'none was made'})")
    reports, why = [], ""
    for request in np.unique(chosen.data.request).tolist():
        mine = chosen.data.rows(chosen.data.request == request)
        label, settings = curve_labels(mine, distinct_holds(mine.hold_s)[1])
        for number, values in enumerate(settings):
            try:
                reports.append(_one(mine.rows(label == number), request, values, detection_noise_atoms, scales, known))
            except NotEnoughData as error:
                why = str(error)
    if not reports:
        raise NotEnoughData(why)
    return tuple(reports)


def _one(
    data: NightData,
    request: int,
    settings: dict[str, float],
    detection: float,
    scales: Callable[[NightData], FloatArray] | None,
    known: Callable[[NightData], FloatArray] | None,
) -> FringeReport:
    holds, which = distinct_holds(data.hold_s)
    group, count = fringe_groups(data)
    y = fractions(data)
    hold_of = np.zeros(count, dtype=np.int64)
    hold_of[group] = which
    flat = fit_fringes(data.phase_rad, y, shot_variance(data, detection_noise_atoms=detection), group, count)
    contrast = combine(flat, hold_of, holds)
    place = np.cos(flat.phase_rad[group] + data.phase_rad)
    expected = np.where(flat.solved[group], flat.offset[group] + flat.contrast_plain[group] / 2 * place, 0.5)
    variance = shot_variance(data, expected=expected, detection_noise_atoms=detection)
    why: dict[str, str] = {}
    by_hold = np.full(len(holds), np.nan)
    by_hold[np.searchsorted(holds, contrast.hold_s)] = contrast.value
    # states of a switch together: more shots in a fringe, so that slope and top can be told
    whole, packets = _packet_groups(data)
    hold_of_packet = np.zeros(packets, dtype=np.int64)
    hold_of_packet[whole] = which
    joined = fit_fringes(data.phase_rad, y, variance, whole, packets)
    spoilt, weighted = hold_back(joined, hold_of_packet[joined.solved], len(holds))
    sound = replace(joined, solved=joined.solved & ~spoilt)
    noise = phase_noise(data.phase_rad, y, variance, whole, sound, hold_of_packet, holds, by_hold)
    if not noise:
        why["phase noise"] = "too few residuals, or no fringe stands out: what scatters cannot be told"
    scan_p = scan_test(contrast.p_zero)
    given, followed, packet_hold = None, None, np.zeros(0)
    try:
        if scan_p > SCAN:
            raise NotEnoughData("over all holds together no fringe stands out of the noise")
        scale = np.ones(len(data)) if scales is None else scales(data)
        tide = np.zeros(len(data)) if known is None else known(data)
        given = _phases(data, y, variance, whole, weighted, hold_of_packet, by_hold, contrast, scale, tide)
        followed = follow_fitted(given)
        packet_hold = holds[given.hold]
    except NotEnoughData as error:
        why["path"] = str(error)
    drift_bias = np.full(len(contrast), np.nan)
    if followed is not None and given is not None:
        each = packet_bias(data.phase_rad, data.mid_s, group, count)
        for k, hold in enumerate(np.searchsorted(holds, contrast.hold_s)):
            rate = followed.walk.phase + followed.walk.acceleration * float(np.mean(scale[which == hold] ** 2))
            mine = each[flat.solved & (hold_of == hold)]
            drift_bias[k] = rate * mine.mean()
    detector = None
    try:
        if scan_p > SCAN:
            raise NotEnoughData("there is no fringe that the counts could follow")
        usable = flat.solved & (flat.contrast_plain / 2 > CLEAR * np.sqrt(flat.quadrature_variance))
        shown = np.where(usable[group], place, np.nan)
        detector = efficiency_ratio(data.atoms_a, data.atoms_b, shown, group)
    except NotEnoughData as error:
        why["detector"] = str(error)
    offset, offset_error = _offsets(flat, hold_of, holds, contrast.hold_s)
    return FringeReport(
        request=request,
        settings=settings,
        contrast=contrast,
        scan_p=scan_p,
        offset=offset,
        offset_error=offset_error,
        noise=noise,
        drift_bias=drift_bias,
        set_aside=int(spoilt.sum()),
        packets=given,
        followed=followed,
        packet_hold_s=packet_hold,
        detector=detector,
        why_not=why,
    )


def _packet_groups(data: NightData) -> tuple[IntArray, int]:
    """Which packet each shot belongs to, (n_shot,), all switch states together, and how many there are."""
    loose = data.packet < 0
    keys = np.stack([np.where(loose, -1, data.packet), np.where(loose, data.cell, 0), np.where(loose, data.repeat, 0)])
    _, packet = np.unique(keys, axis=1, return_inverse=True)
    return packet.ravel().astype(np.int64), int(packet.max()) + 1


def _offsets(fringes: Fringes, which: IntArray, holds: FloatArray, wanted: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mean offset of each wanted hold and its standard error from the scatter of packets, (n_hold,) each."""
    value, error = np.full(len(wanted), np.nan), np.full(len(wanted), np.nan)
    for k, hold in enumerate(np.searchsorted(holds, wanted)):
        mine = fringes.offset[fringes.solved & (which == hold)]
        value[k] = mine.mean()
        if len(mine) > 1:
            error[k] = mine.std(ddof=1) / np.sqrt(len(mine))
    return value, error


def _phases(
    data: NightData,
    y: FloatArray,
    variance: FloatArray,
    group: IntArray,
    fringes: Fringes,
    hold_of: IntArray,
    by_hold: FloatArray,
    contrast: HoldContrast,
    scale: FloatArray,
    tide: FloatArray,
) -> Packets:
    """What each packet allows for its phase, in time order; packets without a clear fringe are left out."""
    count = len(fringes)
    shots = np.bincount(group, minlength=count)
    noise = np.ones(int(hold_of.max()) + 1)
    for hold, ratio in zip(contrast.hold_s, contrast.noise, strict=True):
        noise[hold_of[group[np.argmin(np.abs(data.hold_s - hold))]]] = max(float(ratio), 1.0)
    candidates, sigma = np.full((count, 2), np.nan), np.full(count, np.nan)
    error = np.sqrt(noise[hold_of] * fringes.quadrature_variance)
    clear = fringes.solved & (fringes.contrast_plain / 2 > CLEAR * error)
    candidates[clear, 0] = fringes.phase_rad[clear]
    sigma[clear] = error[clear] / (fringes.contrast_plain[clear] / 2)
    order = np.argsort(group, kind="stable")
    edges = np.searchsorted(group[order], np.arange(count + 1))
    for f in np.flatnonzero(~fringes.solved & (shots > 1)):
        rows = order[edges[f] : edges[f + 1]]
        found = _mid_fringe(data.phase_rad[rows], y[rows], variance[rows], by_hold[hold_of[f]])
        if found is not None:
            candidates[f], sigma[f] = found[0], found[1] * np.sqrt(noise[hold_of[f]])
    use = np.isfinite(candidates).any(axis=1) & np.isfinite(sigma)
    if not use.any():
        raise NotEnoughData("no packet has a fringe that stands out: there is no phase to follow")

    def mean(values: FloatArray) -> FloatArray:
        return np.bincount(group, weights=values, minlength=count) / shots

    time, per_packet, known = mean(data.mid_s), mean(scale), mean(tide)
    kept = np.flatnonzero(use)[np.argsort(time[use], kind="stable")]
    return Packets(
        time_s=time[kept],
        hold=hold_of[kept],
        candidates=candidates[kept],
        sigma_rad=sigma[kept],
        scale=per_packet[kept],
        known=known[kept],
    )


def _mid_fringe(
    theta: FloatArray, y: FloatArray, variance: FloatArray, contrast: float
) -> tuple[FloatArray, float] | None:
    """Both phases that a packet of two opposite readout phases allows, (2,), and their error; None if it has others.

    y(theta_0) - y(theta_0 + pi) = C cos(phi + theta_0), with the hold's contrast C.
    """
    first = theta[0]
    here, there = np.cos(theta - first) > 1 - ON_AXIS, np.cos(theta - first) < -1 + ON_AXIS
    if not (here.any() and there.any() and (here | there).all()) or not contrast > 0:
        return None
    height = float(y[here].mean() - y[there].mean()) / contrast
    error = np.sqrt(variance[here].mean() / here.sum() + variance[there].mean() / there.sum()) / contrast
    turn = float(np.arccos(np.clip(height, -1, 1)))
    # at the top the two phases meet, and the error is that of the meeting
    return np.array([turn, -turn]) - first, float(error / max(np.sin(turn), np.sqrt(max(error, 1e-12))))
