"""How steady a night was: deviations against averaging time, shot noise, rhythms, and what went with what."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from planner.analysis import allan
from planner.analysis.correlation import CorrelationTable, correlate
from planner.analysis.data import NightData, choose
from planner.analysis.stability_freedom import (
    KINDS,
    LEAST_AVERAGES,
    band,
    degrees_of_freedom,
    noise_kind,
    total_degrees_of_freedom,
)
from planner.analysis.stability_series import Clock, NightSeries, Series
from planner.analysis.stability_spectrum import Spectrum, lomb_scargle
from planner.arrays import FloatArray, IntArray
from planner.errors import NotEnoughData

LEAST_VALUES = LEAST_AVERAGES  # packets below which neither kind of noise nor band means anything
LEAST_MIRRORED = 8  # averaging factor
CORRELATED = ("phase", "contrast", "offset", "atoms")
FALSE_ALARM = 0.01
DISCOVERY = 0.05  # false discovery rate at which a correlation is called one
FAR_OUT = 8.0  # robust standard deviations; Gaussian noise never gets there


@dataclass(frozen=True, kw_only=True)
class Curve:
    """One kind of deviation against averaging time, with its band. Arrays of shape (n_tau,); NaN where none."""

    value: FloatArray
    low: FloatArray
    high: FloatArray
    freedom: FloatArray
    terms: IntArray


@dataclass(frozen=True, kw_only=True)
class Stability:
    """Deviations of one series on the packets' grid. Arrays of shape (n_tau,)."""

    tau_s: FloatArray
    factor: IntArray  # packets in an average
    kind: tuple[int, ...]  # alpha of the noise that rules there, by lag-1 autocorrelation
    allan: Curve
    hadamard: Curve
    modified: Curve
    total: Curve
    limit: FloatArray  # Allan deviation from counting atoms alone; NaN for readings
    level: float
    slots: int
    empty: int

    def __len__(self) -> int:
        return len(self.factor)

    @property
    def multiple(self) -> FloatArray:
        """Allan deviation over its shot-noise limit, (n_tau,)."""
        return np.asarray(self.allan.value / self.limit)

    def kind_name(self, index: int) -> str:
        return KINDS[self.kind[index]]


@dataclass(frozen=True, kw_only=True)
class Rhythm:
    """One sinusoid of a series."""

    period_s: float
    amplitude: float  # in the unit of the series
    share: float  # of the scatter
    chance: float  # that white noise has one as strong at any period


@dataclass(frozen=True, kw_only=True)
class NightStability:
    """What a night says of one series. `notes` are plain words on what it means and what it does not."""

    series: Series
    clock: Clock
    attempts: int
    used: int
    stability: Stability
    spectrum: Spectrum
    alarm: float  # power that white noise exceeds anywhere in 1 night of 100
    correlations: CorrelationTable | None
    why_no_correlations: str
    notes: tuple[str, ...]

    @property
    def rhythms(self) -> tuple[Rhythm, ...]:
        """The strongest sinusoids, at most three: those that white noise seldom reaches, or the strongest alone."""
        found = []
        for at in self.spectrum.peaks():
            power = float(self.spectrum.power[at])
            found.append(
                Rhythm(
                    period_s=float(1 / self.spectrum.frequency_hz[at]),
                    amplitude=float(self.spectrum.amplitude[at]),
                    share=power,
                    chance=self.spectrum.false_alarm(power),
                )
            )
        return tuple(rhythm for rhythm in found if rhythm.chance < FALSE_ALARM) or tuple(found[:1])


def deviations(
    values: FloatArray, step_s: float, *, shot_sd: FloatArray | None = None, level: float = 0.95
) -> Stability:
    """All deviations of a series on a regular grid, at octaves up to a third of it.

    The kind of noise may only get redder towards longer times, as it does for any sum of power laws; that keeps the
    scatter of its estimate out of the bands. Where gaps leave fewer terms, the degrees of freedom shrink alike.

    Args:
        values: one per slot, (n_slot,), NaN where empty. step_s: length of a slot. shot_sd: standard deviation of each
        value from counting atoms alone, (n_slot,). level: coverage of the bands.

    Returns:
        Stability.

    Raises:
        NotEnoughData: fewer than 30 values, or all alike. InputError: an infinite value.
    """
    held = int(np.isfinite(values).sum())
    if held < LEAST_VALUES:
        raise NotEnoughData(f"{held} packets have a value: a stability needs {LEAST_VALUES} at least")
    if not np.isinf(values).any() and np.nanmax(values) - np.nanmin(values) <= 1e-12 * np.nanmax(np.abs(values)):
        raise NotEnoughData("every packet has the same value: a constant series has no stability to measure")
    factors = allan.octaves(len(values))
    plain = allan.allan(values, factors)
    keep = plain.terms > 0
    factors = factors[keep]
    kinds = {order: _kinds(values, factors, order) for order in (2, 3)}
    size = len(values)

    def curve(found: allan.Deviations, freedom: list[float]) -> Curve:
        share = found.terms / np.maximum(found.possible, 1)
        # a variance has one degree of freedom at least: it is a square
        own = np.where(found.terms > 0, np.maximum(np.array(freedom) * share, 1.0), np.nan)
        low, high = band(found.value, own, level)
        return Curve(value=found.value, low=low, high=high, freedom=own, terms=found.terms)

    def free(order: int, modified: bool = False) -> list[float]:
        pairs = zip(kinds[order], factors.tolist(), strict=True)
        return [degrees_of_freedom(kind, order, m, size, modified=modified) for kind, m in pairs]

    # the published form for the total variance holds for long averages; short ones hardly touch the mirrored ends
    totals = [
        total_degrees_of_freedom(kind, m, size) if m >= LEAST_MIRRORED else plain_freedom
        for kind, m, plain_freedom in zip(kinds[2], factors.tolist(), free(2), strict=True)
    ]
    limit = np.full(len(factors), np.nan)
    if shot_sd is not None and np.isfinite(shot_sd[np.isfinite(values)]).all():
        limit = np.sqrt(np.mean(shot_sd[np.isfinite(values)] ** 2) / factors)
    return Stability(
        tau_s=np.asarray(factors * step_s, float),
        factor=factors,
        kind=tuple(kinds[2]),
        allan=curve(allan.allan(values, factors), free(2)),
        hadamard=curve(allan.hadamard(values, factors), free(3)),
        modified=curve(allan.modified_allan(values, factors), free(2, modified=True)),
        total=curve(allan.total(values, factors), totals),
        limit=limit,
        level=level,
        slots=size,
        empty=size - held,
    )


def _kinds(values: FloatArray, factors: IntArray, order: int) -> list[int]:
    found: list[int] = []
    for m in factors.tolist():
        kind = noise_kind(values, m, most_differences=order)
        last = found[-1] if found else 0
        found.append(last if kind is None else kind if not found else min(kind, last))
    return found


def stability_of(
    data: NightData, name: str = "phase", *, cut_flags: Sequence[str] = (), level: float = 0.95
) -> NightStability:
    """How steady one series of a night was.

    Args:
        data: the night. name: phase, contrast, offset, atoms, noise or a reading. cut_flags: flags of the rig that
        exclude a shot, declared beforehand. level: coverage of the bands.

    Returns:
        NightStability.

    Raises:
        InputError: no such series. NotEnoughData: no shot counts, too few packets, a constant series, or a phase that
        cannot be followed.
    """
    chosen = choose(data, cut_flags=cut_flags)
    if not len(chosen.data):
        raise NotEnoughData(f"none of {len(data)} attempts carries a result that counts: there is no series")
    night = NightSeries(chosen.data)
    series = night.get(name)
    held = np.isfinite(series.values)
    clock = night.clock_of(held)
    try:
        found = deviations(
            clock.on_grid(series.values), clock.step_s, shot_sd=clock.on_grid(series.shot_sd), level=level
        )
        spectrum = lomb_scargle(clock.time_s, series.values, sd=_weights(series))
    except NotEnoughData as error:
        raise NotEnoughData(f"{series.name}: {error}") from error
    table, why_not = None, ""
    try:
        table = _correlations(night)
    except NotEnoughData as error:
        why_not = str(error)
    result = NightStability(
        series=series,
        clock=clock,
        attempts=chosen.total,
        used=len(chosen.data),
        stability=found,
        spectrum=spectrum,
        alarm=spectrum.level(FALSE_ALARM),
        correlations=table,
        why_no_correlations=why_not,
        notes=(),
    )
    return NightStability(**{**vars(result), "notes": tuple(plain_words(result))})


def _weights(series: Series) -> FloatArray | None:
    """Standard deviation of each packet for the spectrum: counting noise with the rest of the scatter added.

    Counting noise alone would give a packet of many atoms a weight that its other noise does not deserve.
    """
    held = np.isfinite(series.values)
    if not np.isfinite(series.shot_sd[held]).all():
        return None
    # half the mean square of neighbours' differences: the fast scatter, drift left out
    fast = 0.5 * float(np.mean(np.diff(series.values[held]) ** 2))
    rest = max(fast - float(np.mean(series.shot_sd[held] ** 2)), 0.0)
    return np.asarray(np.sqrt(series.shot_sd**2 + rest))


def _correlations(night: NightSeries) -> CorrelationTable:
    series, reasons = {}, {}
    for name in CORRELATED:
        try:
            series[name] = night.get(name).values
        except NotEnoughData as error:
            reasons[name] = str(error)
    readings = {name: night.reading_residual(name) for name in night.reading_names}
    table = correlate(series, readings)
    return CorrelationTable(rows=table.rows, missing={**reasons, **table.missing})


def far_out(values: FloatArray) -> int:
    """How many values lie beyond eight robust standard deviations of their neighbours' median path."""
    held = values[np.isfinite(values)]
    deviation = np.abs(held - np.median(held))
    # 1.4826 makes the median absolute deviation the standard deviation of Gaussian scatter
    return int((deviation > FAR_OUT * 1.4826 * max(float(np.median(deviation)), 1e-300)).sum())


def plain_words(night: NightStability) -> list[str]:
    """What the figures mean and what they do not, a sentence or two each."""
    found, name, unit = night.stability, night.series.name, night.series.unit
    best = int(np.argmin(found.allan.high))  # where most is sure, not where one lucky difference is smallest
    least = f"{found.allan.value[best]:.3g} {unit}".strip()
    sure = f"at most {found.allan.high[best]:.3g} at {100 * (1 + found.level) / 2:g} %"
    limit = f", {found.multiple[best]:.2g} x its shot-noise limit" if np.isfinite(found.limit[best]) else ""
    words = []
    if best == len(found) - 1:
        words.append(
            f"Averaging {name} helps up to {found.tau_s[best]:,.0f} s at least, the longest time this night can judge: "
            f"neighbouring averages agree there to {least} ({sure}{limit})."
        )
    elif best == 0:
        words.append(
            f"Averaging {name} brings nothing that this night can be sure of: neighbouring packets agree to {least} "
            f"({sure}{limit}), longer averages no better."
        )
    else:
        words.append(
            f"Averaging {name} helps for sure up to {found.tau_s[best]:,.0f} s, where neighbouring averages agree to "
            f"{least} ({sure}{limit}); this night cannot show that longer averages agree better."
        )
    words.append(
        "This is how far the average of one stretch differs from the next, not an error of the night's result: what "
        "the running order cancels, such as slow drift against a fast switch, is still in it."
    )
    if night.series.notes:
        words.append(f"Series: {'; '.join(night.series.notes)}.")
    clock = night.clock
    if clock.longest_s > 1.5 * clock.shortest_s:
        words.append(
            f"Packets follow each other after {clock.shortest_s:,.0f} to {clock.longest_s:,.0f} s (nine in ten of "
            f"them); an averaging time is a number of packets times the mean, {clock.step_s:,.0f} s."
        )
    if clock.passed_over:
        words.append(
            f"{clock.passed_over} of {len(clock.time_s)} packets have no value, too many for places left empty: the "
            "others are taken as following each other."
        )
    if found.empty:
        words.append(
            f"{found.empty} of {found.slots} places on the grid of packets are empty (pauses, packets without a "
            "value); an average counts if nine in ten of its places are filled, and bands widen by what is lost."
        )
    outside = far_out(night.series.values)
    if outside:
        words.append(f"{outside} packet(s) lie far out ({FAR_OUT:.0f} robust deviations) and count like all others.")
    if night.rhythms[0].chance < FALSE_ALARM and min(found.kind) < 0:
        words.append(
            "The false-alarm chance takes white noise. This series wanders, and wandering alone gives high power at "
            "long periods: only a sharp line at a short period is a rhythm."
        )
    if night.correlations is not None:
        words.append(
            "A correlation is no cause. Chances hold for series that wander on their own; q is the share of false ones "
            "to expect among rows with that q or a smaller one."
        )
    return words
