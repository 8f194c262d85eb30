"""Rig file to `Rig`: the absolute limits, which no sequence can override."""

import re
from pathlib import Path as FilePath
from urllib.parse import urlsplit

from planner.errors import Problem, ProblemsFound, QuantityError
from planner.quantities import format_quantity, split_quantity, unit
from planner.sequence.keys import RIG
from planner.sequence.model import Line, Rig, Sequence
from planner.sequence.nodes import Fields, Node, parse_document, read_text, show
from planner.sequence.reader import read_version

VERSION = 1
MOST_LINES = 200
INFINITE = float("inf")
HOUR_S = 3600.0
SHORTEST_TICK_S = 1e-12  # a picosecond; then a night still counts in 64-bit ticks


def read_rig(path: str | FilePath) -> Rig:
    """Read and check a rig file.

    Raises:
        ProblemsFound: with every problem of the file.
    """
    return parse_rig(read_text(str(path), "rig file"), str(path))


def rig_path(sequence_file: str, rig: str) -> FilePath:
    """Where the rig file of a sequence lies: relative names count from the sequence file's folder."""
    return FilePath(sequence_file).parent / rig


def rig_of(sequence: Sequence) -> Rig:
    """Read the rig file that a sequence names.

    Raises:
        ProblemsFound: there is no such file (at the place in the sequence that names it), or the rig file's problems.
    """
    path = rig_path(sequence.file, sequence.rig)
    if not path.is_file():
        line, column = sequence.places.get("rig", (0, 0))
        raise ProblemsFound(
            [
                Problem(
                    file=sequence.file,
                    line=line,
                    column=column,
                    where="rig",
                    message=f"there is no rig file {path}",
                    hint="the name counts from the folder of this file",
                )
            ]
        )
    return read_rig(path)


def parse_rig(text: str, file: str) -> Rig:
    """Check the text of a rig file; `file` is the name that problems carry.

    Raises:
        ProblemsFound: with every problem of the text.
    """
    document = parse_document(text, file, RIG)
    fields = document.root().fields("")
    read_version(fields, "nightfringe_rig", VERSION, "a rig file")
    tick_node, dead_node, limits_node = fields.get("tick"), fields.get("dead_time"), fields.get("limits")
    lattice_node, site_node = fields.get("lattice"), fields.get("site")
    wavelength, axis = _lattice(lattice_node.fields("lattice")) if lattice_node else (None, 0.0)
    latitude, longitude, height, zone = _site(site_node.fields("site")) if site_node else (None, None, 0.0, "UTC")
    limits = _limits(limits_node) if limits_node else {}
    rig = Rig(
        name=_text(fields.get("name")),
        text=text,
        file=file,
        link=_link(fields.get("link")),
        tick_s=(tick_node.quantity("s", low=SHORTEST_TICK_S, high=1.0) if tick_node else None) or 1.0,
        dead_time_s=(dead_node.quantity("s", low=0.0, high=HOUR_S) if dead_node else None) or 0.0,
        lines=_lines(fields.get("lines")),
        setting_limits={name: (low, high) for name, (low, high, _) in limits.items()},
        limit_units={name: unit_text for name, (_, _, unit_text) in limits.items()},
        latitude_deg=latitude,
        longitude_deg=longitude,
        height_m=height,
        time_zone=zone,
        approval=_text(fields.get("approval")) or None,
        wavelength_m=wavelength,
        axis_to_vertical_deg=axis,
    )
    document.finish()
    return rig


def _text(node: Node | None) -> str:
    value = node.text() if node else None
    if node is not None and value is not None and not value.strip():
        node.problem("expected text that is not empty")
    return value or ""


def _link(node: Node | None) -> str:
    value = _text(node)
    if node is None or not value:
        return ""
    try:
        parts = urlsplit(value)
        good = parts.scheme in ("http", "https") and bool(parts.hostname) and (parts.port or 1) > 0
    except ValueError:  # a port that is no number, or brackets that do not close
        good = False
    if not good:
        node.problem(f'expected an address such as "http://127.0.0.1:8765"; found {show(value)}')
        return ""
    if parts.username or parts.password:
        node.problem("an address holds no password", "give the rig's token on the command line or in the environment")
    return value.rstrip("/")


def _lines(node: Node | None) -> dict[str, Line]:
    found: dict[str, Line] = {}
    named = node.named("lines") if node else {}
    if node is not None and len(named) > MOST_LINES:
        node.problem(f"at most {MOST_LINES} lines; found {len(named)}")
        return found
    for name, child in named.items():
        line = _line(name, child)
        if line is not None:
            found[name] = line
    return found


def _line(name: str, node: Node) -> Line | None:
    fields = node.fields("lines.<name>")
    unit_node, rest_node, range_node = fields.get("unit"), fields.get("rest"), fields.get("range")
    rate_node, shortest_node, load_node = fields.get("max_rate"), fields.get("shortest"), fields.get("load_per_hour")
    duty_node = fields.get("duty")
    unit_text = unit_node.unit_text() if unit_node else None
    if unit_text is None:
        return None
    rest = rest_node.quantity(unit_text, bare=True) if rest_node else None
    bounds = range_node.pair(unit_text, bare=True) if range_node else None
    # the unit of the rate and the load must exist as text, so that problems can name it: "Er/s", "Er s"
    per_second, times_second = (f"{unit_text}/s", f"{unit_text} s") if unit_text else ("1/s", "s")
    if "/" in unit_text:
        times_second = _times_second(unit_text)
    rate = rate_node.quantity(per_second, above=0.0) if rate_node else INFINITE
    load = load_node.quantity(times_second, above=0.0) if load_node else INFINITE
    shortest = shortest_node.quantity("s", low=0.0) if shortest_node else 0.0
    share, over = _duty(duty_node.fields("lines.<name>.duty")) if duty_node else (1.0, 0.0)
    if rest_node and rest is not None and bounds is not None and not bounds[0] <= rest <= bounds[1]:
        rest_node.problem(f"the resting level {format_quantity(rest, unit_text)} lies outside the range")
    if rest is None or bounds is None:
        return None
    return Line(
        name=name,
        unit=unit_text,
        rest=rest,
        low=bounds[0],
        high=bounds[1],
        max_rate=rate or INFINITE,
        shortest_s=shortest or 0.0,
        duty_limit=share,
        duty_window_s=over,
        load_per_hour=load or INFINITE,
    )


def _times_second(unit_text: str) -> str:
    """ "V/m" times a second: the second goes before the slash."""
    above, below = unit_text.split("/", 1)
    return f"{above.strip()} s/{below}" if re.fullmatch(r"\s*1\s*", above) is None else f"s/{below}"


def _duty(fields: Fields) -> tuple[float, float]:
    share_node, over_node = fields.get("share"), fields.get("over")
    share = share_node.quantity("1", above=0.0, high=1.0) if share_node else None
    over = over_node.quantity("s", above=0.0, high=24 * HOUR_S) if over_node else None
    return share or 1.0, over or 0.0


def _limits(node: Node) -> dict[str, tuple[float, float, str]]:
    """Limits of settings and the unit they are in: any, since the rig file does not know the settings' own."""
    found = {}
    for name, child in node.named("limits").items():
        unit_text = _unit_of_pair(child)
        bounds = child.pair(unit_text, bare=True)
        if bounds is not None:
            found[name] = (*bounds, unit_text)
    return found


def _unit_of_pair(node: Node) -> str:
    """The unit that the first quantity of a pair carries; "" where it is a plain number or cannot be read."""
    first = node.value[0] if isinstance(node.value, list) and node.value else None
    if not isinstance(first, str):
        return ""
    try:
        unit_text = split_quantity(first)[1]
        unit(unit_text)
    except QuantityError:
        return ""
    return unit_text


def _lattice(fields: Fields) -> tuple[float | None, float]:
    wavelength_node, axis_node = fields.get("wavelength"), fields.get("axis_to_vertical")
    wavelength = wavelength_node.quantity("m", above=0.0, high=1e-3) if wavelength_node else None
    axis = axis_node.quantity("deg", low=0.0, high=unit("turn").factor / 2) if axis_node else 0.0
    return wavelength, (axis or 0.0) / unit("deg").factor


def _site(fields: Fields) -> tuple[float | None, float | None, float, str]:
    degree = unit("deg").factor
    latitude_node, longitude_node = fields.get("latitude"), fields.get("longitude")
    height_node, zone_node = fields.get("height"), fields.get("time_zone")
    latitude = latitude_node.quantity("deg", low=-90 * degree, high=90 * degree) if latitude_node else None
    longitude = longitude_node.quantity("deg", low=-180 * degree, high=360 * degree) if longitude_node else None
    height = height_node.quantity("m", low=-12_000.0, high=12_000.0) if height_node else 0.0
    zone = _zone(zone_node) if zone_node else "UTC"
    return (
        None if latitude is None else latitude / degree,
        None if longitude is None else longitude / degree,
        height or 0.0,
        zone,
    )


def _zone(node: Node) -> str:
    from zoneinfo import ZoneInfo

    value = node.text()
    if not value:
        return "UTC"
    try:
        ZoneInfo(value)
    except (ValueError, OSError, KeyError):  # not there, not a name, or a folder of the database
        node.problem(f"there is no time zone {show(value)}", 'names look like "Europe/Berlin" or "UTC"')
        return "UTC"
    return value


def is_rig_text(text: str) -> bool:
    """Whether a file presents itself as a rig file: its version stamp stands at the start of a line."""
    return re.search(r"^\s*nightfringe_rig\s*=", text, flags=re.MULTILINE) is not None
