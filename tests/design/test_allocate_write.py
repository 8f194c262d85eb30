"""The holds and packets of an allocation written into a sequence file, and packets that differ from hold to hold."""

import shutil
from pathlib import Path

import numpy as np
import pytest

from planner.cli.app import run
from planner.design.ordering import make_order
from planner.design.packets import find_packets
from planner.errors import InputError
from planner.resources import sequences_folder
from planner.sequence.compiler import compile_sequence
from planner.sequence.reader import parse_sequence, read_sequence
from planner.sequence.rewrite import with_holds
from planner.sequence.rigfile import rig_of


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    for name in ("hold-scan.toml", "signal.toml", "gallery-rig.toml"):
        shutil.copy(sequences_folder() / name, tmp_path / name)
    return tmp_path


@pytest.mark.parametrize("name", ["hold-scan", "signal"])
def test_what_is_written_takes_the_hours_that_were_shared_out(folder: Path, name: str) -> None:
    """The written file checks without a problem and spends the night: to within a packet of the hours, not above."""
    new = folder / "new.toml"
    assert run(["allocate", str(folder / f"{name}.toml"), "--hours", "6", "--write", str(new)]) == 0
    assert run(["check", str(new)]) == 0
    sequence = read_sequence(new)
    table = compile_sequence(sequence, rig_of(sequence)).table
    packets = find_packets(table, sequence)
    longest = float((packets.cycle_s * packets.size).max()) * (int(packets.slow.max()) + 1)
    assert 6 * 3600 - 2 * longest < table.duration_s.sum() <= 6 * 3600
    old, text = read_sequence(folder / f"{name}.toml"), new.read_text(encoding="utf-8")
    assert text.count("#") >= old.text.count("#"), "comments stay"
    assert sequence.title == old.title
    assert sequence.goal == old.goal


def test_nothing_is_written_over(folder: Path) -> None:
    before = (folder / "signal.toml").read_text(encoding="utf-8")
    place = str(folder / "signal.toml")
    assert run(["allocate", place, "--write", place]) == 2
    assert (folder / "signal.toml").read_text(encoding="utf-8") == before


def test_packets_differ_from_value_to_value(folder: Path) -> None:
    """Each value has its number times repeats, in every state of the slow switches; all run once, spread as always."""
    old = read_sequence(folder / "hold-scan.toml")
    new = parse_sequence(with_holds(old, {1.0: 90, 20.0: 20}, "by hand"), str(folder / "hold-scan.toml"))
    assert new.sweeps[0].values["hold"] == (1.0, 20.0)
    assert new.sweeps[0].packets == (90, 20)
    table = compile_sequence(new, rig_of(new)).table
    states = 2 ** sum(switch.slow for switch in new.switches.values())
    found = find_packets(table, new)
    held = table.hold_s[found.first]
    assert {hold: int((held == hold).sum()) for hold in (1.0, 20.0)} == {1.0: 90 * states, 20.0: 20 * states}
    # repeats count from nought in every cell
    for cell in np.unique(table.cell):
        mine = np.unique(table.repeat[table.cell == cell])
        assert np.array_equal(mine, np.arange(len(mine)))
    order = make_order(table, new, seed=1, effort="quick")
    assert np.array_equal(np.sort(order.shot[order.kind == 0]), np.arange(len(table)))


def test_a_hold_that_moves_with_another_setting_is_left_to_its_author(folder: Path) -> None:
    text = (folder / "hold-scan.toml").read_text(encoding="utf-8")
    line = next(line for line in text.splitlines() if line.startswith("hold = ["))
    count = line.count(",") + 1
    depths = ", ".join(str(5 + number) for number in range(count))
    text = text.replace(line, f'{line}\nlattice_depth = {{ values = [{depths}], with = "hold" }}')
    sequence = parse_sequence(text, str(folder / "moved.toml"))
    with pytest.raises(InputError, match="moves together with lattice_depth"):
        with_holds(sequence, {1.0: 1}, "")


def test_the_budget_takes_the_offset_that_is_stated(folder: Path) -> None:
    """A setting that stands closer to where its effect vanishes needs less of the night: shares go as offset."""
    import json

    from click.testing import CliRunner

    from planner.cli.app import app

    text = (sequences_folder() / "systematics.toml").read_text(encoding="utf-8")
    shares = {}
    for offset in ("0.2 +- 0.05 Er", "0.4 +- 0.05 Er"):
        changed = []
        inside = False
        for line in text.splitlines():
            inside = line.startswith("[sweeps]") or (inside and not line.startswith("["))
            if inside and line.startswith("lattice_depth"):
                values = line.split("=", 1)[1].split("#")[0].strip()
                line = f'lattice_depth = {{ values = {values}, offset = "{offset}" }}'
            changed.append(line)
        (folder / "systematics.toml").write_text("\n".join(changed) + "\n", encoding="utf-8")
        result = CliRunner().invoke(app, ["allocate", str(folder / "systematics.toml"), "--json"])
        assert result.exit_code == 0, result.output
        found = json.loads(result.output)["shares"]
        shares[offset] = {share["kind"]: share["wanted_share"] for share in found}
    one, other = shares.values()
    # t of a check goes as |offset| sqrt(v), that of the signal as sqrt(v): the ratio doubles with the offset
    ratio = (other["lattice_depth"] / other["signal"]) / (one["lattice_depth"] / one["signal"])
    assert ratio == pytest.approx(2.0, rel=1e-9)
