"""`nightfringe fringes`: is there a fringe, how did its phase walk, what scatters, what does the detector do."""

import math
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.console import Console

    from planner.analysis.night_fringes import FringeReport


@click.command()
@click.argument("night", required=False)
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--cut-flag", "cut_flags", multiple=True, help="leave out shots that the rig flagged so; may be repeated")
@click.option(
    "--detection-noise",
    type=click.FloatRange(0, 1e9),
    default=0.0,
    help="atoms of noise that the detector adds to each output, so that it is not taken for phase noise",
)
@click.option("--tide", is_flag=True, help="take the tide at the rig's site off before the phase is followed")
@click.option("--picture", type=click.Path(), help="draw the path of the phase: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    night: str | None,
    logbook: str | None,
    cut_flags: tuple[str, ...],
    detection_noise: float,
    tide: bool,
    picture: str | None,
    as_json: bool,
) -> None:
    """Look at a night's fringes: which stand out, their phase, their noise, the detector.

    NIGHT is the name or number of a night; without it, the one booked last. Errors are 95 % intervals.
    """
    import json

    from planner.analysis.data import NightData
    from planner.analysis.night_fringes import report_fringes
    from planner.analysis.scale import shot_scales
    from planner.cli.night_sequences import sequences_of
    from planner.errors import NotEnoughData
    from planner.logbook import default_place, open_logbook
    from planner.plots import style

    if picture:
        style.check_place(picture)
    with open_logbook(logbook or default_place()) as book:
        row = book.night(night)
        data = NightData.from_columns(book.night_columns(row.id))
        sequences = sequences_of(book, row.id)
        rig_text = next((request.rig_text for request in book.requests(row.id)), "")

    def scales(mine: Any) -> Any:
        return shot_scales(mine, sequences[int(mine.request[0])])

    try:
        for number in set(data.request.tolist()):
            scales(data.rows(data.request == number))
        given = scales
    except (NotEnoughData, KeyError):
        given = None  # holds then share one walk of the phase, and that is said
    reports = report_fringes(
        data,
        cut_flags=cut_flags,
        detection_noise_atoms=detection_noise,
        scales=given,
        known=_tide_of(rig_text, row.begins_us) if tide else None,
    )
    drawn = _draw(reports, row.name, picture)
    if as_json:
        curves = [document(report) for report in reports]
        click.echo(json.dumps({"night": row.name, "scaled": given is not None, "curves": curves, "pictures": drawn}))
        return
    from rich.console import Console

    console = Console(highlight=False)
    console.print(f"Night {row.name}", style="bold", markup=False)
    for report in reports:
        show(report, console, several=len(reports) > 1, scaled=given is not None)
    for place in drawn:
        console.print(f"picture: {place}", markup=False, soft_wrap=True)


def _tide_of(rig_text: str, begins_us: int | None) -> Any:
    """A function that gives the tide at the shots of a night, m/s^2."""
    from planner.errors import InputError
    from planner.sequence.rigfile import parse_rig
    from planner.sequence.site_tide import tide_along

    if not rig_text or begins_us is None:
        raise InputError("--tide needs a night with a rig file and a beginning; this one has no such thing on record")
    rig = parse_rig(rig_text, "the night's rig file")
    return lambda data: tide_along(rig, begins_us * 1e-6 + data.mid_s)


def _draw(reports: "tuple[FringeReport, ...]", name: str, picture: str | None) -> list[str]:
    from pathlib import Path

    from planner.plots import phase_path, style

    drawn: list[str] = []
    for number, report in enumerate(reports if picture else ()):
        if report.followed is not None and picture:
            path = Path(picture)
            place = path if not drawn else path.with_stem(f"{path.stem}-{number + 1}")
            drawn.append(str(style.save(phase_path.figure(report, f"Night {name}"), str(place))))
    return drawn


def show(report: "FringeReport", console: "Console", *, several: bool, scaled: bool) -> None:
    """Print one curve's fringes: a table of holds, then what each part means. Fits 80 columns."""
    from rich.table import Table
    from rich.text import Text

    if several:
        console.print(Text("\n" + ", ".join(f"{name} {value:g}" for name, value in report.settings.items())))
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("hold (s)", "fringes", "contrast", "p(none)", "offset", "phase noise (rad)", "corrected"):
        table.add_column(heading, justify="right", no_wrap=True)
    noise = {one.hold_s: one for one in report.noise}
    holds = report.contrast
    inside = [bias if math.isfinite(bias) else 0.0 for bias in report.drift_bias.tolist()]
    for k, hold in enumerate(holds.hold_s):
        one = noise.get(float(hold))
        cells = ["", ""]
        if one is not None and one.told_apart:
            cells = [
                f"{one.sigma_rad:.3f} ({one.low_rad:.3f}-{one.high_rad:.3f})",
                f"{holds.value[k] * one.contrast_factor / (1 + inside[k]) ** 0.5:.3f}",
            ]
        elif one is not None:
            cells = [f"below {one.high_rad:.3f}", ""]
        table.add_row(
            f"{hold:.4g}",
            f"{holds.fringes[k]}",
            f"{holds.value[k]:.3f}",
            "<1e-6" if holds.p_zero[k] < 1e-6 else f"{holds.p_zero[k]:.2g}",
            f"{report.offset[k]:.4f}",
            *cells,
        )
    console.print(table)
    console.print()
    for words in plain_words(report, scaled=scaled):
        console.print(Text(f"- {words}"))


def plain_words(report: "FringeReport", *, scaled: bool) -> list[str]:
    """What the fringes mean and what they do not, a sentence or two each."""
    from planner.analysis.night_fringes import SCAN

    words = []
    p = "p below 1e-6" if report.scan_p < 1e-6 else f"p = {report.scan_p:.2g}"
    if report.scan_p > SCAN:
        words.append(f"No fringe stands out over all holds together ({p}): read no phase from this night.")
    else:
        words.append(f"There is a fringe: over all holds together, {p} for none.")
    path = report.followed
    if path is None:
        words.append(f"The phase was not followed: {report.why_not['path']}.")
    else:
        doubtful = int((path.chance < 0.99).sum())
        words.append(
            f"The phase was followed through {len(path.phase_rad)} packets and {path.wraps} whole turn(s); "
            + (f"{doubtful} packet(s) may lie on another turn." if doubtful else "no packet is in doubt.")
        )
        walk = [f"{math.sqrt(path.walk.phase * 3600):.2g} rad in an hour"]
        if scaled and path.walk.acceleration > 0:
            walk.append(f"{math.sqrt(path.walk.acceleration * 3600):.2g} m/s^2 of acceleration in an hour")
        words.append(f"It walked by {' and '.join(walk)} (square root of time), as the night itself says.")
        if not scaled:
            words.append("The sequence does not say its separation, so all holds share one walk of the phase.")
    known = [bias for bias in report.drift_bias.tolist() if math.isfinite(bias)]
    if known:
        most = max(known, key=abs)
        words.append(
            f"That walk inside packets changes squared contrasts by {most * 100:+.2g} % at most (worked out from each "
            "packet's own order; the corrected contrast has it taken off)."
        )
    if any(one.told_apart for one in report.noise):
        words.append(
            "Phase noise is what makes shots scatter on the fringe's slopes and not at its top; it lowers contrast as "
            "exp(-s^2/2), and the corrected contrast has that taken back. It is not decoherence."
        )
    elif report.noise:
        words.append(
            "These packets have too few phases to tell phase noise from other noise: what stands is what all excess "
            "scatter would be if it were phase noise, at most. Packets with eight phases, or switch states in one "
            "packet, would tell."
        )
    else:
        words.append(f"Phase noise: {report.why_not['phase noise']}.")
    if report.set_aside:
        words.append(f"{report.set_aside} packet(s) scatter beyond anything usual and were not used for that.")
    if report.detector is None:
        words.append(f"The detector's efficiency ratio was not found: {report.why_not['detector']}.")
    else:
        ratio = report.detector
        words.append(
            f"Output a is detected {ratio.value:.3f} times as well as b ({ratio.low:.3f} to {ratio.high:.3f}). "
            "Cross-talk of the outputs lowers contrast and shows in no fringe: it takes shots with all atoms in one."
        )
    return words


def document(report: "FringeReport") -> dict[str, Any]:
    """One curve's fringes for JSON: SI units, null where there is no number."""
    from planner.cli.results import json_number

    holds = report.contrast
    noise = {one.hold_s: one for one in report.noise}
    rows = []
    for k, hold in enumerate(holds.hold_s):
        one = noise.get(float(hold))
        rows.append(
            {
                "hold_s": float(hold),
                "fringes": int(holds.fringes[k]),
                "contrast": json_number(holds.value[k]),
                "p_zero": json_number(holds.p_zero[k]),
                "offset": json_number(report.offset[k]),
                "offset_error": json_number(report.offset_error[k]),
                "drift_bias_of_squared": json_number(report.drift_bias[k]),
                "phase_noise_rad": None if one is None or not one.told_apart else one.sigma_rad,
                "phase_noise_low_rad": None if one is None else one.low_rad,
                "phase_noise_high_rad": None if one is None else one.high_rad,
                "technical_noise": None if one is None or not one.told_apart else one.technical,
            }
        )
    path, packets, ratio = report.followed, report.packets, report.detector
    return {
        "request": report.request,
        "settings": report.settings,
        "holds": rows,
        "scan_p": report.scan_p,
        "set_aside": report.set_aside,
        "path": None
        if path is None or packets is None
        else {
            "time_s": packets.time_s.tolist(),
            "hold_s": report.packet_hold_s.tolist(),
            "phase_rad": path.phase_rad.tolist(),
            "sigma_rad": packets.sigma_rad.tolist(),
            "chance": path.chance.tolist(),
            "wraps": path.wraps,
            "walk_rad2_per_s": path.walk.phase,
            "walk_acceleration2_per_s": path.walk.acceleration,
        },
        "detector": None
        if ratio is None
        else {"efficiency_ratio": ratio.value, "low": ratio.low, "high": ratio.high, "shots": ratio.shots},
        "why_not": report.why_not,
    }
