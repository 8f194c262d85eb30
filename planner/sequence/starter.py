"""The text of a starter sequence and rig file: commented, complete, and free of problems as written."""

import json
from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Answers:
    """What `init` asks. Holds are quantities as text, such as "0.5 s"; `phases` is how many readout phases."""

    title: str = "hold scan"
    rig_name: str = "our rig"
    atom: str = "Rb-87"
    shortest: str = "0.5 s"
    longest: str = "20 s"
    holds: int = 8
    phases: int = 4
    hours: str = "8 h"
    link: str = "http://127.0.0.1:8765"


def starter_sequence(answers: Answers, rig_file: str) -> str:
    """A sequence file that scans the hold time."""
    phases = ", ".join(f"{360 * number / answers.phases:g}" for number in range(answers.phases))
    return SEQUENCE.format(
        title=_quoted(answers.title),
        atom=_quoted(answers.atom),
        rig=_quoted(rig_file),
        shortest=_quoted(answers.shortest),
        longest=_quoted(answers.longest),
        holds=answers.holds,
        phases=phases,
        hours=_quoted(answers.hours),
    )


def starter_rig(answers: Answers) -> str:
    """A rig file with placeholder limits, which the text asks to be replaced."""
    return RIG.format(name=_quoted(answers.rig_name), link=_quoted(answers.link), longest=_quoted(answers.longest))


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)  # for printable text a JSON string is a TOML string


SEQUENCE = """\
# A sequence: one measurement. The manual's page "sequence language" lists every key.
# Check it:  nightfringe check THIS-FILE          See a shot:  nightfringe timeline THIS-FILE

nightfringe = 1                 # version of the language
title = {title}
atom  = {atom}
rig   = {rig}         # absolute limits live there; nothing here can override them

[roles]                         # which setting plays which part; never guessed from names
hold       = "hold"
readout    = "readout"
depth      = "lattice_depth"
separation = "separation"

[settings]                      # unit, value at rest, lowest and highest value
hold          = {{ unit = "s", rest = {shortest}, range = [{shortest}, {longest}] }}
readout       = {{ unit = "deg", rest = 0, wraps = true }}
lattice_depth = {{ unit = "Er", rest = 9, range = [4, 40] }}
separation    = {{ unit = "um", rest = 4, range = [1, 40] }}
split_time    = {{ unit = "us", rest = 340, range = [50, 5000] }}

[switches.kick]                 # a two-state reversal; the first state counts as +1
states = ["up", "down"]
# settle = "25 s"               # wait after a flip
# dwell  = "8 min"              # shortest time between flips, for a slow switch

# The shot, stage by stage. A line that a stage does not name is at rest.
[[stages]]
name   = "load"
lasts  = "2 s"
levels = {{ cooling = 1 }}

[[stages]]
name   = "split"
lasts  = "2*split_time + 5 ms"  # arithmetic on settings: + - * / ( ) min max abs sqrt
pulses = [
    {{ line = "splitter", at = "1 ms", lasts = "40 us", level = 0.8 }},
    {{ line = "splitter", at = "1 ms + split_time", lasts = "40 us", level = 0.8 }},
]

[[stages]]
name  = "catch"
lasts = "10 ms"
ramps = {{ lattice = {{ from = "0 Er", to = "lattice_depth" }} }}

[[stages]]
name   = "hold"
lasts  = "hold"
levels = {{ lattice = "lattice_depth" }}

[[stages]]
name  = "release"
lasts = "10 ms"
ramps = {{ lattice = {{ from = "lattice_depth", to = "0 Er" }} }}

[[stages]]
name   = "recombine"
lasts  = "2*split_time + 5 ms"
levels = {{ splitter_phase = "readout" }}
pulses = [
    {{ line = "splitter", at = "1 ms", lasts = "40 us", level = 0.8 }},
    {{ line = "splitter", at = "1 ms + split_time", lasts = "40 us", level = 0.8 }},
]

[[stages]]
name   = "detect"
lasts  = "200 ms"
pulses = [{{ line = "probe", at = "5 ms", lasts = "2 ms", level = 1 }}]

[sweeps]                        # crossed with each other; "with" makes two move together
hold = {{ from = {shortest}, to = {longest}, count = {holds}, spacing = "log" }}

[fringe]                        # one packet = all phases, in all states of the fast switches
phases  = [{phases}]
repeats = 10                    # packets for each value of the sweeps

[goal]
kind  = "coherence"             # or signal, curve, plateau, revival, ladder, budget, tune
hours = {hours}

[drift.additive]                # what your lab does overnight, in units of single-shot noise
wander  = 5.0
periods = [{{ period = "20 min", amplitude = 1.0 }}]   # air handling, perhaps

[drift.phase]
wander  = 5.0

[expected]                      # what you believe, and how sure you are
contrast = "0.6 +- 0.1"
atoms    = "10000 +- 2000"
"""

RIG = """\
# A rig file: what the apparatus can do, and what no sequence may ask of it.
# The limits below are placeholders. Replace each by what your hardware and your local rules allow.
# They are no interlock: what can hurt someone needs limits in hardware.

nightfringe_rig = 1
name      = {name}
link      = {link}
tick      = "10 ns"             # time step of the rig's clock
dead_time = "200 ms"            # between the end of one shot and the start of the next
# approval = "reference of the approval for unattended nights"

[lines.cooling]
unit  = ""                      # "" is a plain number, here the share of full power
rest  = 0
range = [0, 1]

[lines.splitter]
unit  = ""
rest  = 0
range = [0, 1]
shortest = "2 us"               # shortest time away from rest

[lines.splitter_phase]
unit  = "deg"
rest  = 0
range = [-360, 720]

[lines.lattice]
unit  = "Er"
rest  = 0
range = [0, 45]
max_rate = "5 Er/ms"            # fastest change; such a line needs ramps
# duty = {{ share = "90 %", over = "60 s" }}   # largest share of any such window away from rest
# load_per_hour = "100000 Er s"                # largest integral of |level - rest| in an hour

[lines.probe]
unit  = ""
rest  = 0
range = [0, 1]

[limits]                        # of settings, whatever a sequence says
hold = ["0 s", {longest}]

[lattice]
wavelength       = "866 nm"
axis_to_vertical = "0 deg"

# [site]                        # for the tide and for local times
# latitude  = "50.9 deg"
# longitude = "11.4 deg"
# height    = "300 m"
# time_zone = "Europe/Berlin"
"""
