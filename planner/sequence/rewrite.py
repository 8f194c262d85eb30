"""A sequence file written anew with other holds and packets, comments and all else as they were."""

from collections.abc import Mapping

import tomlkit

from planner.errors import InputError
from planner.quantities import format_quantity
from planner.sequence.model import Sequence


def with_holds(sequence: Sequence, packets: Mapping[float, int], note: str) -> str:
    """The sequence's text with these holds (s) and packets of each, whatever it said of holds and repeats before.

    Args:
        packets: of each hold, at least one. note: a few plain words, a comment beside the holds.

    Raises:
        InputError: the hold moves together with another setting, whose values would no longer fit.
    """
    hold = sequence.roles["hold"]
    for sweep in sequence.sweeps:
        if hold in sweep.values and len(sweep.values) > 1:
            others = ", ".join(name for name in sweep.values if name != hold)
            raise InputError(
                f'the hold moves together with {others} in "{sequence.title}": its values cannot be chosen alone. '
                "Write the holds into the file by hand"
            )
    document = tomlkit.parse(sequence.text)
    sweeps = document.setdefault("sweeps", tomlkit.table())
    chosen = tomlkit.inline_table()
    holds = sorted(packets)
    chosen["values"] = [format_quantity(value, "s") for value in holds]
    chosen["packets"] = [packets[value] for value in holds]
    chosen.comment(note)
    sweeps[hold] = chosen
    document["fringe"]["repeats"] = 1
    return tomlkit.dumps(document)
