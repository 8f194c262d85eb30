"""What a sequence says that this rig does not have: lines, units of levels, limits of settings."""

from planner.errors import Problem
from planner.quantities import PLAIN, describe, format_quantity, nearest, unit
from planner.sequence.expression import Expression
from planner.sequence.model import Rig, Sequence


class _Against:
    def __init__(self, sequence: Sequence, rig: Rig) -> None:
        self.sequence, self.rig = sequence, rig
        self.problems: list[Problem] = []

    def problem(self, where: str, message: str, hint: str = "") -> None:
        line, column = place_of(self.sequence, where)
        self.problems.append(
            Problem(file=self.sequence.file, line=line, column=column, where=where, message=message, hint=hint)
        )

    def line(self, name: str, where: str) -> bool:
        if name in self.rig.lines:
            return True
        close = nearest(name, self.rig.lines)
        hint = f'did you mean "{close}"?' if close else f"it has {', '.join(self.rig.lines)}"
        self.problem(where, f'the rig "{self.rig.name}" has no line "{name}"', hint)
        return False

    def level(self, name: str, expression: Expression, where: str) -> None:
        unit_text = self.rig.lines[name].unit
        wanted = unit(unit_text).dimension
        if expression.dimension != wanted:
            example = f'"{unit_text}"' if wanted != PLAIN else "no unit"
            self.problem(
                where, f'line "{name}" takes levels with {example}; this one is {describe(expression.dimension)}'
            )

    def limits(self) -> None:
        for name, setting in self.sequence.settings.items():
            if name not in self.rig.setting_limits:
                continue
            low, high = self.rig.setting_limits[name]
            unit_text = self.rig.limit_units.get(name, setting.unit)
            if unit(unit_text).dimension != unit(setting.unit).dimension:
                self.problem(
                    f"settings.{name}.unit",
                    f'the rig file\'s limits of "{name}" are in "{unit_text}"; the setting has "{setting.unit}"',
                )
                continue
            within = f"{format_quantity(low, setting.unit)} to {format_quantity(high, setting.unit)}"
            hint = f'the rig file allows "{name}" from {within}'
            if not low <= setting.rest <= high:
                self.problem(f"settings.{name}.rest", "the resting value is beyond the rig file's limits", hint)
            for sweep in self.sequence.sweeps:
                values = sweep.values.get(name, ())
                beyond = [value for value in values if not low * (1 - 1e-12) <= value <= high * (1 + 1e-12)]
                if beyond:
                    found = format_quantity(beyond[0], setting.unit)
                    self.problem(f"sweeps.{name}", f"the sweep takes {found}, beyond the rig file's limits", hint)
            for knob in self.sequence.knobs:
                if knob.setting == name and (knob.low < low or knob.high > high):
                    self.problem(f"knobs.{name}", "the tuner's range is beyond the rig file's limits", hint)
            for check in self.sequence.checks:
                if name in check.settings and not low <= check.settings[name] <= high:
                    self.problem(f"checks.{check.name}", f'"{name}" is beyond the rig file\'s limits', hint)


def place_of(sequence: Sequence, where: str) -> tuple[int, int]:
    """Line and column of a dotted path, or of the nearest table around it; (0, 0) if none is known."""
    while where:
        if where in sequence.places:
            return sequence.places[where]
        where = where[: max(where.rfind("."), where.rfind("["), 0)]
    return (0, 0)


def check_against_rig(sequence: Sequence, rig: Rig) -> list[Problem]:
    """Every line, level unit and setting limit that does not fit the rig."""
    found = _Against(sequence, rig)
    for s, stage in enumerate(sequence.stages, 1):
        for name, level in stage.levels.items():
            where = f"stages[{s}].levels.{name}"
            if found.line(name, where):
                found.level(name, level, where)
        for ramp in stage.ramps:
            where = f"stages[{s}].ramps.{ramp.line}"
            if found.line(ramp.line, where):
                found.level(ramp.line, ramp.start, f"{where}.from")
                found.level(ramp.line, ramp.end, f"{where}.to")
        for p, pulse in enumerate(stage.pulses, 1):
            where = f"stages[{s}].pulses[{p}]"
            if found.line(pulse.line, f"{where}.line"):
                found.level(pulse.line, pulse.level, f"{where}.level")
    found.limits()
    return found.problems
