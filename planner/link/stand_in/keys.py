"""The one table of keys of the stand-in's profile: what may be written where, in which unit, from where to where.

The reader refuses every key that is not here, and a test compares this table with the manual's page. A name in angle
brackets (`settings.<name>`) stands for the user's own names.
"""

from dataclasses import dataclass

from planner.sequence.keys import Key, must


@dataclass(frozen=True)
class Number:
    """A number of the model: its unit ("" for a plain number), lowest and highest value in SI, and what it says."""

    unit: str
    low: float
    high: float
    says: str


# What a setting can play. Depth and separation end above zero: coherence time falls as one over each of them.
QUANTITIES: dict[str, Number] = {
    "hold": Number("s", 0.0, 1e5, "hold time"),
    "readout": Number("rad", -1e6, 1e6, "readout phase"),
    "depth": Number("Er", 0.01, 1000.0, "lattice depth during the hold"),
    "separation": Number("m", 1e-9, 1.0, "separation of the two places"),
    "cooling": Number("s", 0.0, 1e4, "cooling time"),
    "detuning": Number("Hz", -1e9, 1e9, "detuning of the beam-splitter pulses"),
}
# Beyond the ends of these nothing can be computed, so that a setting which plays one needs a range.
BOUNDED = ("hold", "depth", "separation", "cooling")

NUMBERS: dict[str, dict[str, Number]] = {
    "signal": {
        "acceleration": Number("m/s^2", -1.0, 1.0, "acceleration while that product is +1; its negative while it is -1")
    },
    "cloud": {
        "atoms": Number("", 0.0, 1e9, "atoms loaded, without cooling"),
        "atoms_lost_cooling": Number("s", 1e-3, 1e6, "cooling this much longer costs a factor e of the atoms"),
        "cold_share": Number("", 0.0, 1.0, "share of colder atoms at the resting cooling time"),
        "temperature_falls": Number("s", 1e-3, 1e3, "cooling time in which the excess temperature falls by e"),
        "warmest": Number("", 1.0, 1e3, "temperature without cooling, over the coldest there is"),
    },
    "contrast": {
        "short_hold": Number("", 0.0, 1.0, "contrast at no hold with the best detuning"),
        "cold_constant": Number("s Er m", 1e-9, 1.0, "coherence time x depth x separation of the colder atoms"),
        "warm_constant": Number("s Er m", 1e-9, 1.0, "the same of the warmer atoms"),
        "best_detuning": Number("Hz", -1e9, 1e9, "detuning of the highest contrast"),
        "detuning_width": Number("Hz", 1.0, 1e9, "detuning off the best that lowers the contrast by exp(-1/2)"),
    },
    "loss": {
        "vacuum": Number("s", 0.1, 1e6, "lifetime against the rest gas"),
        "per_depth": Number("1/s", 0.0, 10.0, "heating: rate of loss for each recoil energy of depth"),
        "spill": Number("1/s", 0.0, 100.0, "rate at which warmer atoms spill out of a lattice of no depth"),
        "spill_depth": Number("Er", 1e-3, 1e3, "that rate falls by e with this much depth"),
    },
    "noise": {
        "phase": Number("rad", 0.0, 10.0, "laser phase, shot to shot"),
        "acceleration": Number("m/s^2", 0.0, 1.0, "shaking, shot to shot: its phase grows with hold and separation"),
        "atoms": Number("", 0.0, 1.0, "atom number, relative, shot to shot"),
        "detection": Number("", 0.0, 1e6, "atoms, each output"),
        "background": Number("", 0.0, 1e9, "atoms counted in an empty chamber; its noise is its square root"),
        "saturates": Number("", 1.0, 1e12, "atoms in one output above which it counts no more"),
    },
    "memory": {
        "strength": Number("", -1.0, 1.0, "relative change of the atom number per unit of load of earlier shots"),
        "fades": Number("s", 1e-3, 1e5, "time in which a load falls by e (60 s)"),
    },
    "drift": {
        "phase": Number("rad", 0.0, 100.0, "of the phase"),
        "acceleration": Number("m/s^2", 0.0, 1.0, "of the acceleration"),
        "offset": Number("", 0.0, 0.5, "of the fringe's offset"),
        "contrast": Number("", 0.0, 1.0, "of the contrast, relative"),
        "atoms": Number("", 0.0, 1.0, "of the atom number, relative"),
    },
    "faults": {
        "unlocks_per_hour": Number("", 0.0, 3600.0, "how often a laser falls out of lock, at random"),
        "unlock_lasts": Number("s", 0.0, 1e5, "how long it stays so; shots that start within have no fringe"),
        "outliers": Number("", 0.0, 1.0, "share of shots with a nonsense count"),
    },
    "site": {
        "latitude": Number("rad", -2.0, 2.0, "north positive; kept with the profile, the model does not use it"),
        "longitude": Number("rad", -7.0, 7.0, "east positive; likewise"),
        "height": Number("m", -500.0, 9000.0, "above the sea; likewise"),
    },
}
MUST = ("cloud", "contrast", "loss", "noise")  # sections that a profile cannot do without
SECTIONS = {
    "signal": "an acceleration that follows switches",
    "cloud": "the atoms that are loaded",
    "contrast": "how the contrast falls",
    "loss": "how the atoms get fewer in the hold",
    "noise": "what changes from shot to shot",
    "memory": "what earlier shots do to later ones",
    "drift": "RMS of random walks over ten hours",
    "faults": "what goes wrong now and then",
    "site": "where the rig stands",
}

RHYTHM: dict[str, Number] = {
    "period": Number("s", 1.0, 1e7, "period"),
    "phase": Number("rad", 0.0, 100.0, "amplitude in phase"),
    "offset": Number("", 0.0, 0.5, "amplitude in the fringe's offset"),
}
WAVE: dict[str, Number] = {
    "period": Number("s", 60.0, 1e9, "period"),
    "amplitude": Number("m/s^2", 0.0, 1e-3, "amplitude of the acceleration"),
    "phase": Number("rad", -1e3, 1e3, "phase where the rig's drifts begin (0)"),
}
MOST_WAVES = 64
READING: dict[str, tuple[float, str]] = {  # key -> lowest value in the reading's own unit, what it says
    "mean": (float("-inf"), "mean"),
    "walk": (0.0, "RMS of its random walk over ten hours"),
    "noise": (0.0, "RMS noise of one reading"),
}


def _schema() -> dict[str, dict[str, Key]]:
    schema: dict[str, dict[str, Key]] = {
        "": {
            "nightfringe_stand_in": must("version of the profile: 1"),
            "name": must("name of the simulated rig"),
            "about": Key("remarks"),
            "atom": must("isotope, such as Rb-87"),
            "wavelength": must("wavelength of the lattice light"),
            "settings": must("what the rig accepts"),
            "rest": Key("quantities that a shot has no setting for"),
            "switches": Key("two-state reversals: name = [first state, second state]"),
            "readings": Key("what is logged with each shot"),
            "tide": Key("a slow acceleration, as a sum of waves"),
            **{name: Key(says, required=name in MUST) for name, says in SECTIONS.items()},
        },
        "settings.<name>": {
            "unit": must("unit at the rig"),
            "range": Key("lowest and highest value; needed if it plays hold, depth, separation or cooling"),
            "plays": Key("the quantity that it moves; without it the setting changes nothing"),
        },
        "rest": {name: Key(number.says) for name, number in QUANTITIES.items()},
        "readings.<name>": {
            "unit": must("unit of the numbers below"),
            **{name: Key(says, required=name == "mean") for name, (_, says) in READING.items()},
        },
    }
    for section, keys in NUMBERS.items():
        schema[section] = {key: Key(number.says, required=section in MUST) for key, number in keys.items()}
        schema[section]["about"] = Key("remarks")
    schema["signal"] = {"follows": must("switches whose product it follows"), **schema["signal"]}
    schema["drift"]["air_handling"] = Key("a rhythm of the room, a sine from where the drifts begin")
    schema["drift.air_handling"] = {name: Key(one.says, required=name == "period") for name, one in RHYTHM.items()}
    schema["tide.<name>"] = {name: Key(one.says, required=name != "phase") for name, one in WAVE.items()}
    return schema


SCHEMA = _schema()
