"""The sequences behind a night in the logbook, parsed, as far as there are any."""

from collections.abc import Mapping
from contextlib import suppress
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from planner.logbook import Logbook
    from planner.sequence.model import Sequence


def sequences_of(book: "Logbook", night_id: int) -> "Mapping[int, Sequence]":
    """The sequence of each request by its number; a night that was only recorded may have none to speak of."""
    from planner.errors import ProblemsFound
    from planner.sequence.reader import parse_sequence

    found = {}
    for request in book.requests(night_id):
        with suppress(ProblemsFound):
            found[request.number] = parse_sequence(request.sequence_text, request.title)
    return found
