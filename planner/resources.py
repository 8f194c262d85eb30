"""Files that ship with the program, found in a checkout and in an installed wheel, from any folder."""

from pathlib import Path

from planner.errors import NightfringeError

PACKAGE = Path(__file__).resolve().parent


def shipped_folder(name: str) -> Path:
    """The folder `name` beside the package (checkout) or in it (wheel).

    Raises:
        NightfringeError: it is in neither place: the installation is not whole.
    """
    for folder in (PACKAGE / name, PACKAGE.parent / name):
        if folder.is_dir():
            return folder
    raise NightfringeError(f"the folder {name} that ships with Nightfringe is missing from {PACKAGE}: install it again")


def migrations_folder() -> Path:
    """The database migrations."""
    return shipped_folder("db")


def sequences_folder() -> Path:
    """The example sequences, and the demo's rig and stand-in files."""
    return shipped_folder("sequences")
