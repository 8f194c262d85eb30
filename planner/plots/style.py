"""One look for all pictures: colours that the colour-blind can tell apart, units on every axis."""

from pathlib import Path
from typing import TYPE_CHECKING, Any

from planner.errors import InputError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

# Okabe and Ito, "Color Universal Design" (2008) (from memory): told apart by all common kinds of colour vision
BLUE, ORANGE, GREEN, VERMILION, PURPLE, GREY = "#0072B2", "#E69F00", "#009E73", "#D55E00", "#CC79A7", "#666666"
COLOURS = (BLUE, VERMILION, GREEN, PURPLE, ORANGE, GREY)
MARKERS = ("o", "s", "^", "D", "v", "P")

SETTINGS: dict[Any, Any] = {
    "font.size": 9.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlelocation": "left",
    "axes.titlesize": 10.5,
    "axes.grid": True,
    "grid.color": "#dddddd",
    "grid.linewidth": 0.6,
    "axes.axisbelow": True,
    "legend.frameon": False,
    "errorbar.capsize": 2.0,
    "svg.fonttype": "none",
}
ENDINGS = (".png", ".pdf", ".svg")


def check_place(place: str) -> Path:
    """The path of a picture, its ending known (InputError if not), its folder there."""
    path = Path(place)
    if path.suffix.lower() not in ENDINGS:
        raise InputError(f'a picture ends in {", ".join(ENDINGS)}; found "{place}"')
    if not path.absolute().parent.is_dir():
        raise InputError(f'there is no folder "{path.absolute().parent}" for the picture "{path.name}"')
    return path


def save(figure: "Figure", place: str) -> Path:
    """Write a figure; returns its path (InputError if it cannot be written)."""
    path = check_place(place)
    try:
        figure.savefig(path, dpi=160, metadata={"Date": None} if path.suffix.lower() == ".svg" else None)
    except OSError as error:
        raise InputError(f'the picture "{place}" cannot be written: {error.strerror}') from error
    return path
