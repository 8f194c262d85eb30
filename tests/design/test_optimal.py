"""Optimal designs against their closed forms; every value's source stands beside it."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import lambertw

from planner.design.maximin import maximin
from planner.design.optimal import d_optimal, information, l_optimal

GRID = np.linspace(0.0, 6.0, 1201)
WANTED = np.array([[0.0], [1.0]])


def exponential(t: np.ndarray, tau: float = 1.0) -> np.ndarray:
    """Factors of A exp(-t/tau) about (A, tau) at A = 1, sigma = 1."""
    return np.stack([np.exp(-t / tau), t / tau**2 * np.exp(-t / tau)], axis=1)[:, None, :]


def test_d_optimum_of_an_exponential() -> None:
    """Two points, 0 and tau, half each; det M = exp(-2)/4."""
    # source: Dette, Melas, Wong, Locally D-optimal Designs for Exponential Regression (abstract read; computed)
    found = d_optimal(exponential(GRID))
    assert found.efficiency >= 0.9998
    assert found.value == pytest.approx(np.log(np.exp(-2) / 4), abs=3e-4)  # the solver stops at 1e-4 of each parameter
    near_zero = found.weights[GRID < 0.1].sum()
    near_tau = found.weights[np.abs(GRID - 1) < 0.15].sum()
    assert near_zero == pytest.approx(0.5, abs=0.01)
    assert near_tau == pytest.approx(0.5, abs=0.01)


def test_d_optimum_efficiency_for_the_time_constant() -> None:
    """n var(tau) is 2 (1 + e^2) at the D-optimum, 76.863 % efficient against the c-optimum."""
    # source: computed from the closed form (Elfving 1952; theorem from memory)
    weights = np.zeros(len(GRID))
    weights[0] = weights[np.searchsorted(GRID, 1.0)] = 0.5
    variance = np.linalg.inv(information(exponential(GRID), weights))[1, 1]
    assert variance == pytest.approx(2 * (1 + np.e**2), rel=1e-9)
    best = l_optimal(exponential(GRID), WANTED)
    assert best.value / variance == pytest.approx(0.76863, abs=2e-4)


def test_c_optimum_of_an_exponential() -> None:
    """Support 0 and u tau, u = 1 + W(1/e), weight 1/u at the second; n var(tau) = 1/W(1/e)^2."""
    # source: Elfving, Ann. Math. Stat. 23, 255 (1952) (theorem from memory; numbers computed: 1.2784645, 12.8961535)
    w = float(lambertw(np.exp(-1)).real)
    found = l_optimal(exponential(GRID), WANTED)
    assert found.bound <= 1 / w**2 * (1 + 1e-5)  # grid of 0.005 in t: second order in the distance to the optimum
    assert found.value == pytest.approx(1 / w**2, rel=2e-4)
    assert found.weights[np.abs(GRID - 1 - w) < 0.2].sum() == pytest.approx(1 / (1 + w), abs=0.01)


def test_cutting_planes_agree_with_the_multiplicative_solver() -> None:
    """Two algorithms that share nothing reach the same c-optimum, and the bound of each holds for the other."""
    factors = exponential(GRID[::4])

    def oracle(share: np.ndarray) -> np.ndarray:
        h = np.linalg.pinv(information(factors, share) + 1e-12 * np.eye(2))[:, 1]
        return ((factors[:, 0] @ (h / h[1])) ** 2)[None]

    share, reached, bound = maximin(oracle, len(factors))
    other = l_optimal(factors, WANTED)
    assert share.sum() == pytest.approx(1.0)
    assert reached <= bound
    assert 1 / reached == pytest.approx(other.value, rel=3e-4)  # both stop at 1e-4
    assert 1 / bound <= other.value * (1 + 1e-9)
    assert other.bound <= 1 / reached * (1 + 1e-9)


def test_equally_spaced_phases_are_d_optimal_for_a_fringe() -> None:
    """Offset, cosine and sine: any N >= 3 equally spaced phases have det M = 1/4, and no design has more."""
    # source: computed (closed form)
    for n in (3, 4, 5, 8):
        theta = 2 * np.pi * np.arange(n) / n
        factors = np.stack([np.ones(n), np.cos(theta), np.sin(theta)], axis=1)[:, None, :]
        assert np.linalg.det(information(factors, np.full(n, 1 / n))) == pytest.approx(0.25, rel=1e-12)
    fine = 2 * np.pi * np.arange(48) / 48
    found = d_optimal(np.stack([np.ones(48), np.cos(fine), np.sin(fine)], axis=1)[:, None, :])
    assert found.bound == pytest.approx(np.log(0.25), abs=1e-3)


@pytest.mark.parametrize(("span", "middle"), [(1, 0.418023), (2, 0.686965), (3, 0.842813), (5, 0.966082)])
def test_d_optimum_with_an_offset(span: float, middle: float) -> None:
    """B + A exp(-t): three points, a third each, the middle one at 1 - U/(e^U - 1)."""
    # source: computed from the closed form
    assert 1 - span / np.expm1(span) == pytest.approx(middle, abs=1e-6)
    t = np.linspace(0, span, 801)
    factors = np.stack([np.ones_like(t), np.exp(-t), t * np.exp(-t)], axis=1)[:, None, :]
    found = d_optimal(factors)
    inside = (t > 0.1 * span) & (t < 0.9 * span)
    assert found.weights[inside].sum() == pytest.approx(1 / 3, abs=0.01)
    assert found.weights[inside] @ t[inside] / found.weights[inside].sum() == pytest.approx(middle, abs=0.01)


@settings(max_examples=25, deadline=None)
@given(st.integers(2, 4), st.integers(0, 10_000))
def test_no_random_share_beats_the_proved_bounds(parameters: int, seed: int) -> None:
    """The certificate is a bound: random problems, random competitors."""
    rng = np.random.default_rng(seed)
    factors = rng.normal(size=(12, 2, parameters))
    wanted = rng.normal(size=(parameters, 1))
    found_c, found_d = l_optimal(factors, wanted), d_optimal(factors)
    assert found_c.efficiency > 0.999
    assert found_d.efficiency > 0.999
    for _ in range(20):
        share = rng.dirichlet(np.full(12, 0.4))
        matrix = information(factors, share)
        sign, value = np.linalg.slogdet(matrix)
        assert sign <= 0 or value <= found_d.bound + 1e-9
        if sign > 0:
            assert float((wanted.T @ np.linalg.pinv(matrix) @ wanted)[0, 0]) >= found_c.bound * (1 - 1e-6)


def test_a_design_for_several_rigs_bounds_their_sum() -> None:
    """The value is the sum over rigs of each one's variance at a common share; random shares never beat the bound."""
    rigs = np.stack([exponential(GRID[::10], tau) for tau in (0.7, 1.0, 1.6)])
    found = l_optimal(rigs, WANTED)

    def total(share: np.ndarray) -> float:
        return sum(float(np.linalg.pinv(information(one, share))[1, 1]) for one in rigs)

    assert found.value == pytest.approx(total(found.weights), rel=1e-6)
    assert found.efficiency > 0.999
    rng = np.random.default_rng(8)
    for _ in range(200):
        share = np.zeros(len(found.weights))
        share[rng.choice(len(share), size=5, replace=False)] = rng.dirichlet(np.ones(5))
        assert total(share) >= found.bound * (1 - 1e-6)
