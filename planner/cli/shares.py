"""Shares of a night as a person writes them: 0.6 or 60%."""

from collections.abc import Sequence

from planner.errors import InputError


def read_shares(written: Sequence[str]) -> list[float]:
    """The shares as fractions.

    Raises:
        InputError: one is no number.
    """
    found = []
    for text in written:
        number, percent = (text[:-1], 100.0) if text.rstrip().endswith("%") else (text, 1.0)
        try:
            found.append(float(number) / percent)
        except ValueError:
            raise InputError(f'a share is a number such as 0.6 or 60%; found "{text}"') from None
    return found
