"""Drift that nobody declared and no order was made for: measured records laid over the night.

A measured hourly temperature, ten days of it, and a record of the Earth's rotation, ten stretches. Each is scaled to an
RMS of one single-shot noise over the night, and what it adds to the effects stands beside the same shots shuffled and
swept.
"""

import csv
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from planner.design.effects import Effect, coupled_pair, effects_of
from planner.design.ordering import make_order
from planner.design.packets import find_packets
from planner.design.running_order import Kind
from tests.design.nights import night_a

DATA = Path(__file__).resolve().parents[1] / "outside" / "data"
NIGHTS = 10


@cache
def orders() -> dict[str, tuple[np.ndarray, np.ndarray, list[Effect]]]:
    """Times, readout phases and effects of reference night A as ordered, shuffled and swept, settle waits left out."""
    table, sequence = night_a()
    order = make_order(table, sequence, seed=3, effort="quick")
    measured = order.kind == int(Kind.MEASURE)
    middle = order.start_s + order.settle_s + order.duration_s / 2
    kinds = {"ordered": (order.shot[measured], middle[measured])}
    for name, rows in (
        ("shuffled", np.random.default_rng(3).permutation(len(table))),
        ("swept", np.lexsort((np.arange(len(table)), table.repeat))),
    ):
        duration = table.duration_s[rows]
        kinds[name] = (rows, np.cumsum(duration) - duration / 2)
    packets = find_packets(table, sequence)
    point = np.repeat(packets.point, packets.size)
    return {
        name: (
            mid,
            table.phase_rad[rows],
            list(effects_of(point[rows], table.phase_rad[rows], {k: s[rows] for k, s in table.switches.items()})),
        )
        for name, (rows, mid) in kinds.items()
    }


def temperature(day: int, at_s: np.ndarray) -> np.ndarray:
    """Hourly temperature from 20 h of a day on, straight lines between the hours."""
    # source: see the head of the file
    text = (DATA / "temperature_hourly_july.csv").read_text(encoding="utf-8").splitlines()
    values = [float(row["celsius"]) for row in csv.DictReader(line for line in text if not line.startswith("#"))]
    return np.interp(20.0 + 24 * day + at_s / 3600, np.arange(len(values)) + 1.0, values)


def rotation(stretch: int, at_s: np.ndarray) -> np.ndarray:
    """Length of day, a day of the record taken for two minutes of the night: an oscillator with tides in it."""
    # source: EOP C04 of the IERS as carried by astropy-iers-data, read without a network
    iers = pytest.importorskip("astropy.utils.iers")
    values = iers.IERS_B.open()["LOD"].to_value("s")
    return np.interp(400.0 * stretch + at_s / 120, np.arange(len(values)), values)


def added(name: str, record: np.ndarray) -> tuple[float, float]:
    """Mean added variance over the effects, additive and as a phase at the worst of 12 fringe phases."""
    _, theta, effects = orders()[name]
    drift = record - record.mean()
    drift /= np.sqrt(np.mean(drift**2))
    additive = np.mean([(effect.weights @ drift[effect.rows]) ** 2 for effect in effects])
    coupled = []
    for effect in effects:
        if effect.parity:
            u, v = coupled_pair(effect.weights, theta[effect.rows])
            in_phase, across = float(u @ drift[effect.rows]), float(v @ drift[effect.rows])
            coupled.append(in_phase**2 + across**2)  # at the worst fringe phase
    return float(additive), float(np.mean(coupled))


@pytest.mark.parametrize("record", [temperature, rotation])
def test_ten_nights_of_measured_drift(record) -> None:  # type: ignore[no-untyped-def]
    """On ten nights never seen, an order lets through a fiftieth at most of what a shuffle does, and no more
    than a sweep, which is at its best against drift as slow as this."""
    found = {
        name: np.array([added(name, record(night, orders()[name][0])) for night in range(NIGHTS)]) for name in orders()
    }
    means = {name: values.mean(axis=0) for name, values in found.items()}
    assert (means["ordered"] < means["shuffled"] / 50).all()
    assert (means["ordered"] < 1.1 * means["swept"]).all()
    # every single night, not only on average
    assert (found["ordered"] < found["shuffled"].mean(axis=0) / 10).all()
    # in units of single-shot noise: an RMS of one adds less than 2 % of the noise's variance
    assert (means["ordered"] < 0.02).all()
