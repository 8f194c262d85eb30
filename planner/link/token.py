"""The bearer token of a rig, kept in a file: command lines are visible to every user of a computer."""

from pathlib import Path

from planner.errors import InputError


def read_token(path: Path) -> str:
    """The token in the first line of a file; raises InputError where there is none."""
    try:
        first = path.read_text(encoding="ascii").split("\n")[0].strip()
    except OSError as error:
        raise InputError(f"the token file {path} cannot be read: {error.strerror}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"the token file {path} holds more than plain letters at byte {error.start}") from error
    if not first:
        raise InputError(f"the token file {path} has an empty first line; the token belongs there")
    return first
