"""A night summed up: right numbers, separate time scales, nothing left unsaid."""

import io
import json

import numpy as np
import pytest
from rich.console import Console

from planner.analysis.data import NightData
from planner.analysis.results import NightResults, fringe_groups, summarise
from planner.cli.results import document, draw, show
from planner.errors import InputError, NotEnoughData
from tests.analysis.nights import HOLDS, night


def results(seed: int = 1, **how: float) -> NightResults:
    return summarise(NightData.from_columns(night(seed, **how)))  # type: ignore[arg-type]


def test_a_night_gives_its_two_time_scales() -> None:
    """Coherence time and lifetime come out apart, each within its interval, with contrast at each hold."""
    (curve,) = results().curves
    assert curve.coherence is not None
    assert curve.lifetime is not None
    assert curve.contrast is not None
    assert curve.coherence.low_s < 20 < curve.coherence.high_s
    assert curve.lifetime.low_s < 30 < curve.lifetime.high_s
    truth = 0.5 * np.exp(-HOLDS / 20)
    inside = (curve.contrast.low <= truth) & (truth <= curve.contrast.high)
    assert inside.sum() >= 10  # of 12; three misses at 95 % happen in 2 % of nights, and the seed is fixed
    assert curve.packets == 108


def test_coherence_does_not_follow_atom_loss() -> None:
    """Losing atoms three times faster leaves the coherence time where it was, and the other way round."""
    (fast,) = results(lifetime_s=10.0).curves
    (short,) = results(coherence_s=5.0).curves
    assert fast.coherence is not None
    assert short.lifetime is not None
    assert fast.coherence.low_s < 20 < fast.coherence.high_s
    assert short.lifetime.low_s < 30 < short.lifetime.high_s


def test_noise_is_a_multiple_of_shot_noise() -> None:
    """Binomial counting alone gives one times shot noise; detector noise of known size gives its own factor."""
    # each interval is 95 %: with fixed seeds both hold
    (quiet,) = results(detector=0.0, load_scatter=0.0).curves
    assert quiet.noise is not None
    assert quiet.noise.low < 1 < quiet.noise.high
    assert quiet.noise.multiple == pytest.approx(1, abs=0.2)  # 108 degrees of freedom: 7 %; three of those
    (loud,) = results(detector=200.0, lifetime_s=1e9, load_scatter=0.0, drift=0.0, coherence_s=0.001).curves
    assert loud.noise is not None
    # without a fringe: sqrt(1 + s^2 (1/2) N^-2 / (1/4 N^-1)) = sqrt(1 + 2 s^2 / N) for s = 200, N = 12,000
    assert loud.noise.multiple == pytest.approx(np.sqrt(1 + 2 * 200**2 / 12000), rel=0.2)


def test_wandering_phase_does_not_lower_contrast() -> None:
    """Packets whose phase wanders by radians keep their contrast, where averaged quadratures lose it."""
    (curve,) = results().curves
    assert curve.contrast is not None
    assert curve.contrast.value[0] == pytest.approx(0.5, abs=0.02)
    assert curve.pooled_contrast[0] < 0.4


def test_packets_are_split_by_switch_where_that_leaves_a_fringe() -> None:
    """Eight shots over two switch states are two fringes; four over two are one."""
    columns = night(1, packets=2, phases=8)
    columns["switch_collar"] = np.tile(np.repeat([1, -1], 4), 24).astype(np.int8)
    assert fringe_groups(NightData.from_columns(columns))[1] == 48
    columns["switch_collar"] = np.tile([1, -1], 96).astype(np.int8)
    columns["packet"] = np.repeat(np.arange(48), 4)
    group, count = fringe_groups(NightData.from_columns(columns))
    assert count == 48
    assert (np.bincount(group) == 4).all()


def test_other_swept_settings_make_curves_of_their_own() -> None:
    """Two depths give two curves; a setting that follows the hold does not."""
    first, second = night(1, coherence_s=20.0), night(2, coherence_s=6.0)
    both = {name: np.concatenate([first[name], second[name]]) for name in first}
    size = len(first["key"])
    both["packet"] = np.concatenate([first["packet"], second["packet"] + 1000])
    both["key"] = np.array([f"k{i}" for i in range(2 * size)])
    both["setting_depth"] = np.repeat([9.0, 14.0], size)
    both["setting_ramp"] = both["hold_s"] * 0.1
    shallow, deep = summarise(NightData.from_columns(both)).curves
    assert shallow.settings == {"depth": 9.0}
    assert deep.settings == {"depth": 14.0}
    assert shallow.coherence is not None
    assert deep.coherence is not None
    assert shallow.coherence.time_s > 2 * deep.coherence.time_s


def test_requests_are_kept_apart() -> None:
    """Two requests of a night are two curves, whatever settings the other lacks."""
    first, second = night(1, packets=3), night(2, packets=3)
    both = {name: np.concatenate([first[name], second[name]]) for name in first}
    size = len(first["key"])
    both["request"] = np.repeat([0, 1], size)
    both["packet"] = np.concatenate([first["packet"], second["packet"] + 1000])
    both["setting_depth"] = np.concatenate([np.full(size, np.nan), np.full(size, 9.0)])
    assert [curve.request for curve in summarise(NightData.from_columns(both)).curves] == [0, 1]


def test_nothing_that_counts_is_said_with_the_reasons() -> None:
    """A night whose shots all failed names how many and why, and gives no number."""
    columns = night(1, packets=1)
    columns["state"][:] = "failed"
    with pytest.raises(NotEnoughData, match=r"none of 48 attempts carries a result that counts .*failed: 48"):
        summarise(NightData.from_columns(columns))


def test_three_phases_say_that_the_noise_was_assumed() -> None:
    """With three shots a packet there is no residual: the noise is taken as projection noise, and that is said."""
    found = results(phases=3)
    assert found.curves[0].noise is None
    assert any("taken to be projection noise" in note for note in found.notes)


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        ({"contrast": 0.0}, "no hold shows a fringe"),
        ({"holds": np.array([4.0])}, "measured at 1 hold"),
        ({"phases": 2}, "no packet has three different readout phases"),
    ],
)
def test_what_cannot_be_said_has_its_reason(spoil: dict[str, float], words: str) -> None:
    """No contrast, one hold, two phases: no coherence time, and why."""
    (curve,) = results(**spoil).curves
    assert curve.coherence is None
    assert words in curve.why_no_coherence


def test_json_has_no_infinity_and_the_page_fits() -> None:
    """The JSON form is strict, an open end is null, and the printed form keeps to 80 columns."""
    open_ended = results(coherence_s=1e9, packets=4, detector=100.0)
    whole = json.loads(json.dumps(document(open_ended), allow_nan=False))
    assert whole["curves"][0]["coherence"]["high_s"] is None
    assert whole["curves"][0]["holds"][0]["contrast"] == pytest.approx(0.5, abs=0.05)
    for found in (open_ended, results(), results(contrast=0.0), results(phases=2)):
        console = Console(width=80, record=True, file=io.StringIO())
        show(found, "first-light", console)
        printed = console.export_text()
        assert max(len(line) for line in printed.splitlines()) <= 80
        assert "first-light" in printed


def test_pictures_are_files(tmp_path: object) -> None:
    """Both pictures are written, and a wrong ending or folder is refused before anything is drawn."""
    found = results(packets=3)
    places = draw(found, "first-light", f"{tmp_path}/decay.png", f"{tmp_path}/fringes.svg")
    assert [place.rsplit("/", 1)[1] for place in places] == ["decay.png", "fringes.svg"]
    with open(places[0], "rb") as file:
        assert file.read(8) == b"\x89PNG\r\n\x1a\n"  # source: PNG specification, 5.2
    with pytest.raises(InputError, match="a picture ends in"):
        draw(found, "first-light", f"{tmp_path}/decay.bmp", None)
    with pytest.raises(InputError, match="no folder"):
        draw(found, "first-light", f"{tmp_path}/none/decay.png", None)
