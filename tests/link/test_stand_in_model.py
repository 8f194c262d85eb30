"""The stand-in without noise follows its stated model at every hold, and its knobs have their best inside the range.

What the model should give is computed here anew, from the profile's numbers as written, not with the program's physics.
"""

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.arrays import FloatArray
from planner.link.stand_in.model import StandInModel, Truth
from tests.link.stand_in_profiles import model, play, share

# h: exact, SI brochure 9th edition; u in kg: CODATA 2022, from memory. Rb-87 in u: AME2020, Wang et al., Chin. Phys. C
# 45, 030003 (2021), from memory
PLANCK, HBAR = 6.62607015e-34, 6.62607015e-34 / (2 * np.pi)
MASS = 86.909180529 * 1.66053906892e-27
LATTICE = 866e-9  # of the profile
GRAVITY = 9.80665  # standard gravity, exact by definition (CGPM 1901)
HOLDS = np.concatenate([[0.0], np.geomspace(0.05, 150, 60)])
NONE: dict[str, FloatArray] = {}


def truth(rig: StandInModel, **columns: float | FloatArray) -> Truth:
    n = max(np.size(value) for value in columns.values())
    return rig.expected({name: np.broadcast_to(np.asarray(v, float), n) for name, v in columns.items()}, NONE)


def atom_by_atom(hold_s: float, depth: float, separation_um: float, cooling_s: float) -> float:
    """Mean contrast of 100,000 atoms, each with the coherence time of its class; 0.62 at no hold."""
    temperature = 1 + 2 * np.exp(-cooling_s / 0.150)
    resting = 1 + 2 * np.exp(-0.400 / 0.150)
    colder = round(100_000 * min(1.0, 0.8 * resting / temperature))
    constant = np.where(np.arange(100_000) < colder, 1000.0, 120.0)
    coherence_s = constant / (depth * separation_um * temperature / resting)
    return float(0.62 * np.mean(np.exp(-hold_s / coherence_s)))


@pytest.mark.parametrize(
    ("depth", "separation_um", "cooling_s"), [(9.0, 4.0, 0.4), (25.0, 4.0, 0.4), (9.0, 15.0, 0.25), (5.0, 2.0, 1.5)]
)
def test_contrast_is_the_mean_over_the_atoms(depth: float, separation_um: float, cooling_s: float) -> None:
    """At every hold; the head count rounds the share to 1e-5, so contrasts agree to that."""
    found = truth(model(), hold=HOLDS, depth=depth, separation=separation_um * 1e-6, cooling=cooling_s).contrast
    direct = [atom_by_atom(float(hold), depth, separation_um, cooling_s) for hold in HOLDS]
    np.testing.assert_allclose(found, direct, atol=1e-5)


def test_contrast_without_hold() -> None:
    """It is short_hold at the best detuning, whatever the depth, and a Gaussian in detuning around that."""
    rig = model()
    assert truth(rig, hold=0.0, depth=np.array([2.0, 9.0, 50.0])).contrast == pytest.approx(0.62, rel=1e-15)
    detuning = 6e3 + np.array([-80e3, -40e3, 0.0, 40e3, 80e3])
    # a Gaussian one and two widths off: exp(-1/2) and exp(-2)
    shape = np.array([0.1353352832366127, 0.6065306597126334, 1.0, 0.6065306597126334, 0.1353352832366127])
    assert truth(rig, hold=0.0, detuning=detuning).contrast == pytest.approx(0.62 * shape, rel=1e-12)


@pytest.mark.parametrize("depth", [6.0, 9.0, 30.0])
def test_the_coherence_time_is_the_atoms(depth: float) -> None:
    """Where contrast has fallen to 1/e: the model's curve and the mean over the atoms cross it at the same hold."""
    rig = model()

    def crossing(contrast_at: Callable[[float], float]) -> float:
        low, high = 0.0, 1000.0
        for _ in range(60):
            middle = (low + high) / 2
            low, high = (middle, high) if contrast_at(middle) > 0.62 / np.e else (low, middle)
        return low

    of_model = crossing(lambda hold: float(truth(rig, hold=hold, depth=depth).contrast[0]))
    of_atoms = crossing(lambda hold: atom_by_atom(hold, depth, 4.0, 0.4))
    # a share off by 5e-6 moves the 1/e time by less than 1e-4 of it
    assert of_model == pytest.approx(of_atoms, rel=1e-4)
    # both classes matter: the answer lies below the colder ones' own coherence time, above the warmer ones'
    assert 120 / (depth * 4) < of_model < 1000 / (depth * 4)


@settings(max_examples=50, deadline=None)
@given(st.floats(2.0, 50.0), st.floats(0.6, 30.0), st.floats(0.1, 60.0))
def test_hold_depth_and_separation_count_as_a_product(depth: float, separation_um: float, hold: float) -> None:
    """Coherence time ~ 1 / (depth x separation) (common practice, no source): only the product of the three counts."""
    rig = model()
    one = truth(rig, hold=hold, depth=depth, separation=separation_um * 1e-6).contrast
    other = truth(rig, hold=hold * depth * separation_um / 36, depth=9.0, separation=4e-6).contrast
    np.testing.assert_allclose(one, other, rtol=1e-12)


def test_atoms_are_lost_to_the_rest_gas_and_to_heating() -> None:
    """Deep enough that none tunnel: 20000 exp(-0.4 s / 2 s) after cooling, then exp(-T (1/45 s + 0.001/s x depth))."""
    loaded = 20000 * np.exp(-0.2)
    vacuum = truth(model(), hold=HOLDS, depth=30.0).atoms
    np.testing.assert_allclose(vacuum, loaded * np.exp(-HOLDS / 45), rtol=1e-9)
    heated = truth(model({"loss.per_depth": "0.001 1/s"}), hold=HOLDS, depth=30.0).atoms
    np.testing.assert_allclose(heated / vacuum, np.exp(-0.03 * HOLDS), rtol=1e-9)


def test_warmer_atoms_spill() -> None:
    """A fifth of the atoms is warm at rest; they leave at 0.4 / s exp(-depth / 2.5 Er) more."""
    rig, quiet = model({"loss.spill": "0.4 1/s"}), model()
    ratio = truth(rig, hold=HOLDS, depth=10.0).atoms / truth(quiet, hold=HOLDS, depth=10.0).atoms
    np.testing.assert_allclose(ratio, 0.8 + 0.2 * np.exp(-HOLDS * 0.4 * np.exp(-4)), rtol=1e-12)


@pytest.mark.parametrize("depth", [1.5, 2.5, 4.0])
def test_tunnelling(depth: float) -> None:
    """Atoms leave at nu_B exp(-a_c / g) for each Bloch period, with the gap at the zone edge from plane waves.

    Landau-Zener for atoms in a lattice: Peik et al., PRA 55, 2989 (1997), from memory; nu_B = m g lambda / (2 h).
    """
    order = 2 * np.arange(-12, 13) + 1.0  # plane waves at the zone edge, in units of the lattice wave number
    hamilton = np.diag(order**2 + depth / 2) - depth / 4 * (np.eye(25, k=1) + np.eye(25, k=-1))
    lowest = np.linalg.eigvalsh(hamilton)
    recoil = PLANCK**2 / (2 * MASS * LATTICE**2)
    gap = (lowest[1] - lowest[0]) * recoil
    chance = np.exp(-np.pi * gap**2 / (2 * HBAR) / (2 * (2 * np.pi / LATTICE) * HBAR * GRAVITY))
    bloch = MASS * GRAVITY * LATTICE / (2 * PLANCK)
    rate = -bloch * np.log1p(-chance)
    hold = np.linspace(0, 3 / rate, 20)
    found = truth(model(), hold=hold, depth=depth).atoms
    np.testing.assert_allclose(found, 20000 * np.exp(-0.2) * np.exp(-hold * (rate + 1 / 45)), rtol=1e-4)


def test_phase_is_readout_and_scale_times_signal() -> None:
    """(m / hbar) separation x hold x acceleration, with the sign of the product of both switches."""
    rig = model({"signal.acceleration": "40 nm/s^2"})
    collar, kick = np.array([1.0, 1.0, -1.0, -1.0]), np.array([1.0, -1.0, 1.0, -1.0])
    columns = {"hold": np.full(4, 20.0), "separation": np.full(4, 8e-6), "readout": np.full(4, 0.7)}
    found = rig.expected(columns, {"collar": collar, "kick": kick}).phase_rad
    expected = 0.7 + MASS / HBAR * 8e-6 * 20.0 * 40e-9 * np.array([1, -1, -1, 1])
    np.testing.assert_allclose(found, expected, rtol=1e-8)


def test_a_shot_without_settings_rests() -> None:
    """What a shot has no setting for is as the profile's rest says: the same counts as with those values."""
    rig = model()
    alone = rig.shot({}, {}, 0.0, 1, [])
    resting = {"hold": 2.0, "readout": 0.0, "depth": 9.0, "separation": 4e-6, "cooling": 0.4, "detuning": 6e3}
    assert alone == rig.shot(resting, {"collar": "near", "kick": "up"}, 0.0, 1, [])


def best(values: FloatArray) -> int:
    """Where the values are highest; they must rise up to there and fall behind, and it must lie inside."""
    top = int(np.argmax(values))
    assert 0 < top < len(values) - 1
    assert np.all(np.diff(values[: top + 1]) > 0)
    assert np.all(np.diff(values[top:]) < 0)
    return top


@pytest.mark.parametrize(
    ("knob", "grid"),
    [
        ("cooling", np.linspace(0.05, 3.0, 60)),
        ("detuning", np.linspace(-150e3, 150e3, 61)),
        ("depth", np.linspace(2.0, 40.0, 77)),
        ("separation", np.geomspace(0.5e-6, 60e-6, 60)),
        ("hold", np.geomspace(0.1, 150.0, 60)),
    ],
)
def test_every_knob_has_its_best_inside(knob: str, grid: FloatArray) -> None:
    """What a night gains is C sqrt(N) x separation x hold: from the best of each knob it gets worse both ways."""
    rig = model({"loss.spill": "0.4 1/s", "loss.per_depth": "0.0006 1/s"})
    at: dict[str, float | FloatArray] = {"hold": 10.0, "separation": 4e-6, knob: grid}
    found = truth(rig, **at)
    gain = found.contrast * np.sqrt(found.atoms) * np.asarray(at["separation"]) * np.asarray(at["hold"])
    best(gain)


def test_the_best_separation_and_hold_of_one_class() -> None:
    """By hand: x exp(-x / x0) is highest at x0: separation 1000 / (T depth), hold 1 / (1/coherence + 1/(2 x 45))."""
    rig = model({"cloud.cold_share": 1.0})
    separation = np.geomspace(1, 60, 4001) * 1e-6
    found = truth(rig, hold=10.0, separation=separation)
    top = separation[best(found.contrast * np.sqrt(found.atoms) * separation)]
    assert top == pytest.approx(1000e-6 / (10 * 9), rel=2e-3)
    hold = np.geomspace(1, 150, 4001)
    found = truth(rig, hold=hold, depth=20.0)
    top = hold[best(found.contrast * np.sqrt(found.atoms) * hold)]
    assert top == pytest.approx(1 / (20 * 4 / 1000 + 1 / 90), rel=2e-3)


def test_the_counts_are_the_fringe() -> None:
    """With 1e9 atoms, whose shot noise is 1.6e-5, the counts are offset + C/2 cos(phase) of the stated model."""
    rig = model({"cloud.atoms": 1e9})
    readout = np.linspace(0, 2 * np.pi, 25)
    hold = np.linspace(0, 30, 25)
    counts = play(rig, np.arange(25.0), hold=hold, readout=readout)
    stated = [
        0.5 + atom_by_atom(float(t), 9, 4, 0.4) / 2 * np.cos(phase) for t, phase in zip(hold, readout, strict=True)
    ]
    np.testing.assert_allclose(share(counts), stated, atol=6 * 0.5 / np.sqrt(1e9 * np.exp(-0.2 - 30 / 45)) + 5e-6)
    np.testing.assert_allclose(counts.atoms_a + counts.atoms_b, 1e9 * np.exp(-0.2 - hold / 45), rtol=1e-8)
