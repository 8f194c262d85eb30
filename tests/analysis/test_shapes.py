"""Shapes of decay: the same meaning of the time scale in each, and the right one found."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.analysis.contrast_decay import fit_contrast_decay
from planner.analysis.shape_choice import compare_shapes, fit_best
from planner.analysis.shapes import SHAPES, log_curve
from planner.cli.results import command
from planner.errors import NotEnoughData
from tests.analysis.test_decay import HOLDS, hold_contrasts

FALLS = {
    "exponential": lambda t: np.exp(-t / 20),
    "levels-off": lambda t: 0.2 + 0.8 * np.exp(-t / 6),
    "power-law": lambda t: (1 + t / 3) ** -0.8,
    "two-classes": lambda t: 0.5 * np.exp(-t / 1.5) + 0.5 * np.exp(-t / 40),
}


@given(st.sampled_from(sorted(SHAPES)), st.floats(-12, 12), st.floats(-12, 12))
def test_every_shape_is_one_over_e_at_its_time_scale(name: str, first: float, second: float) -> None:
    """f(0) = 1, f(1) = 1/e and f never rises, whatever the extra parameters."""
    shape = SHAPES[name]
    extra = np.array([first, second])[: len(shape.start)]
    x = np.concatenate([[0.0, 1.0], np.linspace(0, 5, 40)])
    found = shape.log_fall(x, extra)
    # a root found to 1e-12 and a dozen roundings
    np.testing.assert_allclose(found[:2], [0, -1], rtol=0, atol=1e-8)
    assert (np.diff(found[2:]) <= 1e-12).all()


@pytest.mark.parametrize("name", FALLS)
def test_each_shape_finds_its_own_time(name: str) -> None:
    """Fitted to clean contrast of its own kind, each shape gives the hold at which 1/e is left, within its interval."""
    fall = FALLS[name]
    fine = np.geomspace(0.1, 100, 200_000)
    truth = fine[np.argmin(np.abs(np.log(fall(fine)) + 1))]
    fit = fit_contrast_decay(hold_contrasts(0.5 * fall(HOLDS), sigma=1e-3), shape=SHAPES[name])
    assert fit.low_s < truth < fit.high_s
    assert fit.time_s == pytest.approx(truth, rel=0.05)
    low, high = fit.band(HOLDS)
    assert (low <= high).all()
    assert fit.goodness_p > 1e-3


@pytest.mark.parametrize("name", FALLS)
def test_the_true_shape_scores_best(name: str) -> None:
    """On clean data the true shape, or one that contains it, has the best score, and one exponential fails visibly."""
    scores = compare_shapes(hold_contrasts(0.5 * FALLS[name](HOLDS), sigma=2e-3, packets=12))
    by_name = {entry.shape.name: entry for entry in scores}
    containing = {"levels-off": {"levels-off", "two-classes"}}.get(name, {name})
    if name == "exponential":
        assert by_name[name].score > scores[0].score - 2  # more parameters may win by chance, never by much
    else:
        assert scores[0].shape.name in containing
        assert by_name["exponential"].predictive < by_name[name].predictive


@pytest.mark.parametrize("name", FALLS)
def test_the_best_shape_holds_the_true_time(name: str) -> None:
    """The shape of the best score gives the true 1/e hold, and one exponential where nothing else is needed."""
    fall = FALLS[name]
    fine = np.geomspace(0.1, 100, 200_000)
    truth = fine[np.argmin(np.abs(np.log(fall(fine)) + 1))]
    fit = fit_best(hold_contrasts(0.5 * fall(HOLDS), sigma=2e-3, packets=12))
    assert abs(fit.time_s - truth) < 0.75 * (fit.high_s - fit.low_s)  # three standard errors
    assert (fit.shape.name == "exponential") == (name == "exponential")


def test_three_holds_are_one_exponential() -> None:
    """Where no hold is left to contradict another shape, one exponential is fitted."""
    assert fit_best(hold_contrasts(np.array([0.5, 0.4, 0.3]))).shape.name == "exponential"


def test_too_few_holds_for_a_shape() -> None:
    """Three holds cannot fix two exponentials, and that is said."""
    with pytest.raises(NotEnoughData, match="3 holds cannot fix two exponentials: it has 4 parameters"):
        fit_contrast_decay(hold_contrasts(np.array([0.5, 0.4, 0.3])), shape=SHAPES["two-classes"])


def test_the_command_offers_every_shape() -> None:
    """The choices of --shape are the shapes that there are, and the best of them."""
    (option,) = [parameter for parameter in command.params if parameter.name == "shape"]
    assert set(option.type.choices) == {"best", *SHAPES}  # type: ignore[attr-defined]


def test_a_growing_value_is_an_exponential() -> None:
    """A negative rate is the same exponential in each shape, so that a search can pass through no decay."""
    for shape in SHAPES.values():
        parameters = np.array([0.0, -0.1, *shape.start])
        np.testing.assert_allclose(log_curve(shape, parameters, np.array([10.0])), [1.0], rtol=1e-12, atol=0)
