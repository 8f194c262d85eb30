"""Random walks as functions of time: any time can be asked for, in any order, and always answers alike."""

import numpy as np

from planner.arrays import FloatArray

REACHES_S = 36_000.0  # the RMS change over this time is 1
SPAN_S = 16 * 86_400.0  # the walks repeat after this
TERMS = 2048  # the fastest has a period of SPAN_S / TERMS, eleven minutes


class Walks:
    """Independent walks with unit RMS change over ten hours, from a seed.

    Fourier series with random phases and amplitudes falling as one over frequency, which is the spectrum of a Wiener
    process; f(t) - f(0), so that a rig's drift starts at nothing.
    """

    def __init__(self, seed: int, count: int) -> None:
        rng = np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(2000,)))
        order = np.arange(1, TERMS + 1)
        self._omega = 2 * np.pi * order / SPAN_S
        # E[(f(t + T) - f(t))^2] = sum_k 2 (1 - cos(omega_k T)) / k^2, with unit normal draws over k
        change = np.sqrt(np.sum(2 * (1 - np.cos(self._omega * REACHES_S)) / order**2))
        draws = rng.standard_normal((count, 2, TERMS)) / (order * change)
        self._cosine, self._sine = draws[:, 0].T, draws[:, 1].T

    def at(self, time_s: FloatArray) -> FloatArray:
        """Values (n, count) at times (n,), in s from the origin of the drifts."""
        out = np.empty((len(time_s), self._cosine.shape[1]))
        for first in range(0, len(time_s), 512):
            angle = np.outer(time_s[first : first + 512], self._omega)
            # einsum, not a matrix product: its sums do not depend on how many times are asked for together
            out[first : first + 512] = np.einsum("tk,kc->tc", np.cos(angle), self._cosine)
            out[first : first + 512] += np.einsum("tk,kc->tc", np.sin(angle), self._sine)
        return np.asarray(out - self._cosine.sum(axis=0))
