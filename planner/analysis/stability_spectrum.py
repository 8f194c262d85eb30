"""Spectrum of a series at irregular times: least squares of one sinusoid and a mean at every frequency (Lomb-Scargle).

References:
    Lomb, Astrophys. Space Sci. 39, 447 (1976); Scargle, Astrophys. J. 263, 835 (1982); floating mean and weights:
    Zechmeister and Kuerster, Astron. Astrophys. 496, 577 (2009); false alarms: Baluev, Mon. Not. R. Astron. Soc. 385,
    1279 (2008); sums on a fine grid by FFT: Dutt and Rokhlin, SIAM J. Sci. Comput. 14, 1368 (1993) (all from memory;
    power and false-alarm levels are checked against astropy's).
"""

from dataclasses import dataclass

import numpy as np
from scipy import special
from scipy.optimize import brentq

from planner.arrays import FloatArray
from planner.errors import InputError, NotEnoughData

LEAST_VALUES = 8
OVERSAMPLING = 10  # grid points for each independent frequency: a peak between two of them loses less than 1 %
SPREAD = 12  # grid points that one time spreads over; with a grid twice too fine its error is below 1e-8
PADDING = 2


@dataclass(frozen=True, kw_only=True)
class Spectrum:
    """Share of the weighted variance that one sinusoid explains, 0 to 1, against frequency. Arrays (n_frequency,)."""

    frequency_hz: FloatArray
    power: FloatArray
    amplitude: FloatArray  # of that sinusoid, in the unit of the series
    values: int
    effective_span_s: float  # sqrt(4 pi var t), which the number of independent frequencies goes by

    @property
    def best(self) -> int:
        """Index of the highest power."""
        return int(np.argmax(self.power))

    def peaks(self, most: int = 3) -> list[int]:
        """Indices of the highest maxima, highest first; none within one independent frequency of a higher one."""
        inner = np.concatenate([[-1.0], self.power, [-1.0]])
        tops = np.flatnonzero((inner[1:-1] >= inner[:-2]) & (inner[1:-1] > inner[2:]))
        found: list[int] = []
        for top in tops[np.argsort(-self.power[tops], kind="stable")].tolist():
            if all(abs(top - other) >= OVERSAMPLING for other in found):
                found.append(top)
            if len(found) == most:
                break
        return found

    def false_alarm(self, power: float) -> float:
        """Chance that white noise alone has a power this high anywhere in the spectrum (Baluev's upper bound).

        The number of values must be above 3; noise that wanders is not white, and beats this level at the slow end.
        """
        single = (1 - power) ** (0.5 * (self.values - 3))
        # sqrt(2 / n) Gamma(n / 2) / Gamma((n - 1) / 2), with n = values - 1 for the floating mean
        n = self.values - 1
        gamma = np.sqrt(2 / n) * np.exp(special.gammaln(n / 2) - special.gammaln((n - 1) / 2))
        width = float(self.frequency_hz[-1]) * self.effective_span_s
        crossings = gamma * width * (1 - power) ** (0.5 * (self.values - 4)) * np.sqrt(0.5 * n * power)
        return float(-np.expm1(np.log1p(-single) - crossings)) if single < 1 else 1.0

    def level(self, chance: float) -> float:
        """Power that white noise exceeds anywhere with this chance.

        Raises:
            InputError: a chance outside 1e-12 to 0.5.
        """
        if not 1e-12 <= chance <= 0.5:
            raise InputError(f"a false-alarm chance lies between 1e-12 and 0.5; found {chance:g}")
        # below the power where the bound reaches 1/2 it turns round; the level asked for lies above
        least = 1.0 / self.values
        return float(brentq(lambda power: self.false_alarm(power) - chance, least, 1 - 1e-12, xtol=1e-12))


def lomb_scargle(
    time_s: FloatArray, values: FloatArray, *, sd: FloatArray | None = None, highest_hz: float | None = None
) -> Spectrum:
    """Floating-mean spectrum of a weighted series; O(n log n).

    Args:
        time_s: any times, (n,). values: (n,); NaN values do not count. sd: standard deviation of each value, (n,), for
        its weight; all alike if not given. highest_hz: end of the frequencies, half a value per median spacing if not
        given. The lowest is one period over the whole time.

    Returns:
        Spectrum.

    Raises:
        NotEnoughData: fewer than eight values, all alike, or all at one time. InputError: an infinite value or a
        standard deviation that is not positive.
    """
    good = np.isfinite(time_s) & ~np.isnan(values)
    if np.isinf(values).any():
        raise InputError("a value is infinite; leave such values out")
    t, y = time_s[good] - time_s[good].min() if good.any() else time_s[good], values[good]
    if len(t) < LEAST_VALUES:
        raise NotEnoughData(f"{len(t)} values: a spectrum needs {LEAST_VALUES} at least")
    error = np.ones(len(t)) if sd is None else sd[good]
    if not (np.isfinite(error).all() and (error > 0).all()):
        raise InputError("a standard deviation is not a positive number: such a value cannot be weighted")
    weight = error**-2
    span = float(np.ptp(t))
    if span <= 0 or np.ptp(y) <= 1e-12 * np.abs(y).max():
        raise NotEnoughData("the series is constant: it has no spectrum" if span > 0 else "all values have one time")
    if highest_hz is None:
        highest_hz = 0.5 / float(np.median(np.diff(np.sort(t))))
    step = 1 / (OVERSAMPLING * span)
    count = int(highest_hz / step)
    if count < OVERSAMPLING:
        raise InputError(f"the highest frequency, {highest_hz:.3g} Hz, is below one period in the whole time")
    weight = weight / weight.sum()
    y = y - weight @ y
    once = _sums(t, np.stack([weight * y, weight]), step, count)[:, OVERSAMPLING:]
    twice = _sums(t, weight[None, :], 2 * step, count)[0, OVERSAMPLING:]
    yc, ys, c, s = once[0].real, once[0].imag, once[1].real, once[1].imag
    cc = 0.5 * (1 + twice.real) - c**2
    ss = 0.5 * (1 - twice.real) - s**2
    cs = 0.5 * twice.imag - c * s
    determinant = np.maximum(cc * ss - cs**2, 1e-15)
    variance = float(weight @ y**2)
    power = (ss * yc**2 + cc * ys**2 - 2 * cs * yc * ys) / determinant / variance
    a, b = (yc * ss - ys * cs) / determinant, (ys * cc - yc * cs) / determinant
    share = np.clip(power, 0, 1)
    return Spectrum(
        frequency_hz=np.asarray(step * np.arange(OVERSAMPLING, count + 1), float),
        power=share,
        amplitude=np.hypot(a, b),
        values=len(t),
        effective_span_s=float(np.sqrt(4 * np.pi * (weight @ t**2 - (weight @ t) ** 2))),
    )


def _sums(t: FloatArray, weights: FloatArray, step: float, count: int) -> np.ndarray:
    """sum_j weights_j exp(2 pi i k step t_j) for k = 0 .. count, (n_row, count + 1) complex; t within 0 .. 1/step.

    Each time is spread over SPREAD points of a fine grid by a Kaiser-Bessel window, the grid goes through one FFT, and
    the window's own transform is divided out.
    """
    size = PADDING * int(2 ** np.ceil(np.log2(2 * (count + 1) + SPREAD)))
    place = (t * step % 1.0) * size
    first = np.ceil(place - SPREAD / 2).astype(np.int64)
    near = first[:, None] + np.arange(SPREAD)
    distance = (near - place[:, None]) / (SPREAD / 2)
    shape = np.pi * SPREAD * (1 - 0.5 / PADDING)
    window = np.i0(shape * np.sqrt(np.maximum(1 - distance**2, 0))) * (np.abs(distance) <= 1)
    k = np.arange(count + 1)
    inside = np.sqrt(np.maximum(shape**2 - (np.pi * SPREAD * k / size) ** 2, 1e-12))
    transform = SPREAD * np.sinh(inside) / inside
    flat = (near % size).ravel()
    sums = np.empty((len(weights), count + 1), dtype=np.complex128)
    for row, own in enumerate(weights):
        grid = np.bincount(flat, weights=(own[:, None] * window).ravel(), minlength=size)
        sums[row] = np.conj(np.fft.rfft(grid)[: count + 1]) / transform
    return sums
