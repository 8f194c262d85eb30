"""What a phase that walks while a packet runs does to its squared contrast.

The shots of a packet see the fringe at slightly different phases d_i about the packet's mean. To second order the
fitted amplitude loses the mean square of d (as by phase noise) and gains the square of what d does to the quadratures;
and the residuals, from which the noise is taken off again, see another share of it than white noise would show. All
three depend on the order in which the phases were played, so the bias is worked out for each packet from its own times.
Averaged over the fringe's phase, with P the rows of the fit that give the two quadratures, M what the fit leaves, K the
covariance of d, t = |P|^2 and n shots, the relative bias of C^2 is

    -1/2 sum_i K_ii (P_ci cos theta_i + P_si sin theta_i)
    +1/2 sum_ij cos(theta_i - theta_j) K_ij [ (P'P)_ij - t M_ij / (n - 3) ]

(derived here; checked by simulation). A packet with no shot to spare takes its noise from elsewhere: no last term.
"""

import numpy as np

from planner.arrays import FloatArray, IntArray


def packet_bias(theta: FloatArray, time_s: FloatArray, group: IntArray, count: int) -> FloatArray:
    """Relative bias of each packet's squared contrast for a walk of 1 rad^2/s, (count,).

    It is proportional to the walk's rate as long as rate times length stays well below 1 rad^2.

    Args:
        theta: readout phases in rad, (n_shot,). time_s: middle of each shot, (n_shot,). group: packet of each shot.

    Returns:
        Bias in s; NaN where the packet's phases do not fix a fringe.
    """
    out = np.full(count, np.nan)
    order = np.argsort(group, kind="stable")
    edges = np.searchsorted(group[order], np.arange(count + 1))
    sizes = np.diff(edges)
    for size in np.unique(sizes[sizes >= 3]).tolist():  # packets of equally many shots are worked together
        packets = np.flatnonzero(sizes == size)
        rows = order[edges[packets][:, None] + np.arange(size)]
        out[packets] = _biases(theta[rows], time_s[rows])
    return out


def _biases(theta: FloatArray, time_s: FloatArray) -> FloatArray:
    """Biases (n,) of packets given as rows (n, shots)."""
    shots = theta.shape[1]
    cosine, sine = np.cos(theta), np.sin(theta)
    design = np.stack([np.ones_like(theta), cosine, sine], axis=2)
    normal = np.einsum("nsa,nsb->nab", design, design)
    fixed = np.linalg.det(normal) > 1e-9 * shots**3
    normal[~fixed] = np.eye(3)
    fit = np.linalg.solve(normal, design.transpose(0, 2, 1))  # (n, 3, shots)
    quadratures = fit[:, 1:, :]
    since = time_s - time_s.min(axis=1, keepdims=True)
    walk = np.minimum(since[:, :, None], since[:, None, :])
    middle = np.eye(shots) - 1 / shots
    covariance = middle @ walk @ middle
    lost = np.einsum("nii,ni->n", covariance, quadratures[:, 0] * cosine + quadratures[:, 1] * sine)
    turned = np.cos(theta[:, :, None] - theta[:, None, :]) * covariance
    gained = np.einsum("nij,nai,naj->n", turned, quadratures, quadratures)
    if shots > 3:
        left = np.eye(shots) - np.einsum("nsa,nat->nst", design, fit)
        size = (quadratures**2).sum(axis=(1, 2))
        gained -= size * np.einsum("nij,nij->n", turned, left) / (shots - 3)
    return np.where(fixed, (gained - lost) / 2, np.nan)
