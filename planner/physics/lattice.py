"""One atom in a standing wave V(x) = V_0 sin^2(k x), s = V_0 / E_r: bands, gap, tunnelling, the frequency of a site.

In plane waves exp(i (q + 2 n) k x) the Hamiltonian in recoil units is (q + 2 n)^2 + s/2 on the diagonal and -s/4 beside
it (q the quasimomentum in units of k, -1 <= q <= 1). Equivalent to the Mathieu equation with E = a + s/2 at parameter
s/4 (Abramowitz & Stegun, chapter 20; cited from memory, compared with scipy in tests).
"""

import numpy as np

from planner.arrays import FloatArray

PLANE_WAVES = 25  # -12 .. 12: exact to rounding for depths up to a few hundred recoils


def band_energies(depth: float, quasimomentum: FloatArray, bands: int = 3) -> FloatArray:
    """Lowest band energies in E_r, measured from the lattice's minimum: (n_quasimomentum, bands).

    depth: s in E_r, >= 0. quasimomentum: q in units of k, (n_quasimomentum,), the zone is -1 to 1.
    """
    n = np.arange(PLANE_WAVES) - PLANE_WAVES // 2
    q = np.atleast_1d(np.asarray(quasimomentum, dtype=np.float64))
    matrix = np.zeros((len(q), PLANE_WAVES, PLANE_WAVES))
    matrix[:, np.arange(PLANE_WAVES), np.arange(PLANE_WAVES)] = (q[:, None] + 2 * n) ** 2 + depth / 2
    beside = np.arange(PLANE_WAVES - 1)
    matrix[:, beside, beside + 1] = matrix[:, beside + 1, beside] = -depth / 4
    return np.asarray(np.linalg.eigvalsh(matrix)[:, :bands])


def band_width(depth: float) -> float:
    """Width of the lowest band in E_r: E_0(q = 1) - E_0(q = 0)."""
    edge = band_energies(depth, np.array([0.0, 1.0]), 1)
    return float(edge[1, 0] - edge[0, 0])


def band_gap(depth: float) -> float:
    """Gap between the two lowest bands at the zone edge, in E_r; s/2 for a shallow lattice."""
    edge = band_energies(depth, np.array([1.0]), 2)
    return float(edge[0, 1] - edge[0, 0])


def tunnelling(depth: float, points: int = 128) -> float:
    """Nearest-neighbour tunnelling J in E_r: minus the first Fourier coefficient of the lowest band.

    J = -(1/2) int_{-1}^{1} E_0(q) cos(pi q) dq; the band is smooth and periodic, so the midpoint rule converges faster
    than any power. For deep lattices J -> (4/sqrt(pi)) s^(3/4) exp(-2 sqrt(s)), slowly (Bloch, Dalibard & Zwerger, Rev.
    Mod. Phys. 80, 885 (2008), from memory).
    """
    q = (np.arange(points) + 0.5) / points * 2 - 1
    energy = band_energies(depth, q, 1)[:, 0]
    return float(-np.mean(energy * np.cos(np.pi * q)))


def tunnelling_deep(depth: float) -> float:
    """The deep-lattice limit of `tunnelling`, E_r: (4/sqrt(pi)) s^(3/4) exp(-2 sqrt(s)); 9 % high at s = 30."""
    return float(4 / np.sqrt(np.pi) * depth**0.75 * np.exp(-2 * np.sqrt(depth)))


def site_frequency(depth: float, recoil_hz: float) -> float:
    """Frequency of small oscillations in one site, Hz: 2 f_r sqrt(s) (harmonic approximation of the minimum)."""
    return float(2 * recoil_hz * np.sqrt(depth))
