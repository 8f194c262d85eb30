"""The one table of keys of the sequence language and of the rig file: what may be written where.

The reader refuses every key that is not here, and a test compares this table with the manual's reference page.
A name in angle brackets (`settings.<name>`) stands for the user's own names.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Key:
    """One key: whether it must be there, and what it says (one line, as in the manual)."""

    says: str
    required: bool = False


def must(says: str) -> Key:
    return Key(says, required=True)


SEQUENCE: dict[str, dict[str, Key]] = {
    "": {
        "nightfringe": must("version of this language: 1"),
        "title": must("what the measurement is, in one line"),
        "about": Key("remarks, kept with the night"),
        "atom": must("isotope, such as Rb-87"),
        "rig": must("the rig file, relative to this file"),
        "tick_tolerance": Key("largest interferometer phase that rounding to whole ticks may cost"),
        "roles": must("which setting plays which part"),
        "settings": must("what can vary from shot to shot"),
        "switches": Key("two-state reversals"),
        "stages": must("the shot, stage by stage"),
        "sweeps": Key("the values that settings take"),
        "fringe": must("readout phases and repeats"),
        "goal": must("what the night is for"),
        "drift": Key("the drift that the lab expects, by kind"),
        "memory": Key("how much earlier shots matter"),
        "expected": Key("what the lab believes of its rig"),
        "checks": Key("shots taken again and again to see that all is well"),
        "cuts": Key("rules, declared before data, that exclude shots"),
        "watch": Key("conditions looked at while the night runs"),
        "knobs": Key("settings that the tuner may move"),
    },
    "roles": {
        "hold": must("the setting that is the hold time"),
        "readout": must("the setting that is the readout phase"),
        "depth": Key("the setting that is the lattice depth in the hold"),
        "separation": Key("the setting that is the separation of the two places"),
        "split": Key("the setting that is the time over which the places move apart"),
    },
    "settings.<name>": {
        "unit": must('unit of its plain numbers and at the rig; "" for a plain number'),
        "rest": must("value when nothing says otherwise"),
        "range": Key("lowest and highest value; required unless it wraps"),
        "wraps": Key("true for a phase: equal modulo one turn"),
        "settle": Key("wait after a change of this setting"),
        "about": Key("remarks"),
    },
    "switches.<name>": {
        "states": must("names of the two states; the first counts as +1"),
        "settle": Key("wait after a flip"),
        "dwell": Key("shortest time between flips; without it the switch may flip every shot"),
        "about": Key("remarks"),
    },
    "stages[]": {
        "name": must("name of the stage"),
        "lasts": must("length: a time, a setting, or arithmetic"),
        "levels": Key("level of each line in this stage; lines not named rest"),
        "ramps": Key("lines that change straight from one level to another over the stage"),
        "pulses": Key("spans inside the stage in which a line has another level"),
        "about": Key("remarks"),
    },
    "stages[].ramps.<line>": {
        "from": must("level at the start of the stage"),
        "to": must("level at the end of the stage"),
    },
    "stages[].pulses[]": {
        "line": must("the line"),
        "at": must("start, from the start of the stage"),
        "lasts": must("length"),
        "level": must("level during the pulse"),
    },
    "sweeps.<setting>": {
        "values": Key("the values, listed"),
        "from": Key("first value"),
        "to": Key("last value"),
        "around": Key("centre of the sweep"),
        "span": Key("full width about the centre"),
        "count": Key("how many values"),
        "step": Key("distance between values, in place of count"),
        "spacing": Key('"linear" (default) or "log"'),
        "with": Key("moves together with that other sweep instead of being crossed with it"),
        "offset": Key('budget: how far the setting stands from where its effect vanishes: "2 +- 0.5 urad"'),
        "packets": Key("packets of each value, listed, each fringe.repeats times: more where it counts"),
    },
    "fringe": {
        "phases": must("readout phases of one packet, in the readout's unit"),
        "repeats": must("packets for each point of the sweeps and state of the slow switches"),
    },
    "goal": {
        "kind": must("signal, coherence, curve, plateau, revival, ladder, budget or tune"),
        "wanted": Key("the switches whose product carries the signal"),
        "target": Key("the error to reach: a number, a percentage or a quantity"),
        "hours": Key("length of the night: hours, or a time with unit"),
        "details": Key("numbers that one kind of goal needs"),
    },
    "goal.details": {
        "period": Key("revival: period of the contrast modulation, a time"),
        "depth": Key("revival: relative depth of the modulation"),
        "plateau": Key("plateau: contrast at which the decay may level off"),
        "risk": Key("ladder: largest chance of the wrong fringe"),
        "significance": Key("plateau, revival: chance of a false alarm"),
        "scale_factor_error": Key("budget, ladder: relative error of the scale factor"),
        "signal": Key("signal: largest signal thought possible, in m/s^2"),
        "share": Key("budget: share of rig time for the signal"),
    },
    "drift.<kind>": {
        "wander": Key("RMS of the random walk"),
        "wander_over": Key("the time over which the walk reaches it (10 h)"),
        "periods": Key("known rhythms"),
    },
    "drift.<kind>.periods[]": {
        "period": must("the period"),
        "amplitude": must("amplitude, in the unit of its kind"),
    },
    "memory": {
        "strength": Key("relative change of atom number per unit of duty of earlier shots"),
        "fades": Key("time over which it fades"),
        "warm_up": Key("shots run and not counted at the start and after every gap"),
    },
    "expected": {
        "contrast": Key("contrast at short hold"),
        "coherence_constant": Key("coherence time times depth times separation"),
        "coherence": Key("coherence time"),
        "atoms": Key("atoms at short hold"),
        "lifetime": Key("population lifetime"),
        "excess_noise": Key("variance of the phase over its shot-noise value"),
    },
    "checks.<name>": {
        "every": must("time between check shots"),
        "settings": Key("settings that differ from rest"),
        "shots": Key("how many in a row (1)"),
    },
    "cuts.<name>": {
        "reading": must("a logged reading, or atoms, background, saturated"),
        "low": Key("smallest value kept"),
        "high": Key("largest value kept"),
        "relative": Key("true: in units of what is expected at that hold"),
    },
    "watch.<name>": {
        "reading": must("a logged reading, or atoms, background, saturated"),
        "low": Key("smallest value that is well"),
        "high": Key("largest value that is well"),
        "for_shots": Key("how many shots in a row before something is done (3)"),
        "action": must("pause, check, skip, end or tell"),
    },
    "knobs.<setting>": {
        "range": must("lowest and highest value the tuner may try"),
        "spacing": Key('"linear" (default) or "log"'),
        "whole": Key("true: whole numbers only, in the setting's unit"),
    },
}

RIG: dict[str, dict[str, Key]] = {
    "": {
        "nightfringe_rig": must("version of the rig file: 1"),
        "name": must("name of the rig"),
        "about": Key("remarks"),
        "link": must("address of the rig link"),
        "tick": must("the rig's time step"),
        "dead_time": must("what the rig needs between two shots"),
        "approval": Key("reference of the approval for unattended nights"),
        "lines": must("the output lines"),
        "limits": Key("lowest and highest value of settings, whatever a sequence says"),
        "lattice": Key("the lattice"),
        "site": Key("where the rig stands"),
    },
    "lines.<name>": {
        "unit": must('unit of its level at the rig; "" for a plain number'),
        "rest": must("level when no stage says otherwise"),
        "range": must("lowest and highest level"),
        "max_rate": Key("fastest change, per time; such a line may not step"),
        "shortest": Key("shortest time away from rest"),
        "duty": Key("largest share of any window of time spent away from rest"),
        "load_per_hour": Key("largest integral of |level - rest| over any hour"),
        "about": Key("remarks"),
    },
    "lines.<name>.duty": {
        "share": must("the share"),
        "over": must("length of the window"),
    },
    "lattice": {
        "wavelength": must("wavelength of the lattice light"),
        "axis_to_vertical": Key("angle between the lattice axis and the vertical"),
    },
    "site": {
        "latitude": must("north positive"),
        "longitude": must("east positive"),
        "height": Key("above the sea"),
        "time_zone": Key("name in the time zone database, such as Europe/Berlin"),
    },
}
