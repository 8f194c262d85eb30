"""`nightfringe decay`: how contrast and atoms fall, in which shape, with which constant over nights."""

import math
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from rich.console import Console

    from planner.analysis.coherence_constant import CoherenceConstant
    from planner.analysis.modulation import Modulation
    from planner.analysis.night_decay import CurveDecay


@click.command()
@click.argument("nights", nargs=-1)
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--cut-flag", "cut_flags", multiple=True, help="leave out shots that the rig flagged so; may be repeated")
@click.option("--modulation", is_flag=True, help="look for a modulation of contrast with hold, at any period")
@click.option("--period", help='look for a modulation of this period, such as "7 s"')
@click.option("--picture", type=click.Path(), help="draw contrast with every shape: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    nights: tuple[str, ...],
    logbook: str | None,
    cut_flags: tuple[str, ...],
    modulation: bool,
    period: str | None,
    picture: str | None,
    as_json: bool,
) -> None:
    """Fit how contrast and atom number fall with hold: every shape, compared.

    NIGHTS are names or numbers; without one, the night booked last. Of several nights the coherence constant (coherence
    time x depth x separation) is fitted too.
    """
    import json

    from planner.analysis.data import NightData
    from planner.analysis.night_decay import constant_of, decays_of
    from planner.cli.night_sequences import sequences_of
    from planner.logbook import default_place, open_logbook
    from planner.plots import style
    from planner.quantities import parse_quantity

    if picture:
        style.check_place(picture)
    period_s = None if period is None else parse_quantity(period, "s")
    found: list[tuple[str, tuple[CurveDecay, ...]]] = []
    with open_logbook(logbook or default_place()) as book:
        for name in nights or (None,):
            row = book.night(name)
            data = NightData.from_columns(book.night_columns(row.id))
            search = modulation or period_s is not None
            curves = decays_of(data, sequences_of(book, row.id), cut_flags=cut_flags, search=search, period_s=period_s)
            found.append((row.name, curves))
    constant, why_not = constant_of([curve for _, curves in found for curve in curves])
    drawn = _draw(found, picture)
    if as_json:
        click.echo(json.dumps(document(found, constant, why_not, drawn)))
        return
    from rich.console import Console

    console = Console(highlight=False)
    for name, curves in found:
        for curve in curves:
            show(name, curve, console, several=len(curves) > 1)
    if len(nights) > 1:
        console.print()
        for words in constant_words(constant, why_not):
            console.print(f"- {words}", markup=False)
    for place in drawn:
        console.print(f"picture: {place}", markup=False, soft_wrap=True)


def _draw(found: "list[tuple[str, tuple[CurveDecay, ...]]]", picture: str | None) -> list[str]:
    from pathlib import Path

    from planner.plots import shapes, style

    drawn: list[str] = []
    if not picture:
        return drawn
    path = Path(picture)
    for name, curves in found:
        for curve in curves:
            if curve.contrast is not None and curve.fits:
                place = path if not drawn else path.with_stem(f"{path.stem}-{len(drawn) + 1}")
                whole = shapes.figure(curve.contrast, curve.fits, curve.modulation, f"Night {name}")
                drawn.append(str(style.save(whole, str(place))))
    return drawn


def show(name: str, curve: "CurveDecay", console: "Console", *, several: bool) -> None:
    """Print one curve: a table of shapes, the lifetime, a modulation, and what it means. Fits 80 columns."""
    from rich.table import Table
    from rich.text import Text

    head = f"Night {name}"
    if several:
        head += ": " + ", ".join(f"{key} {value:g}" for key, value in curve.settings.items())
    console.print(Text(head, style="bold"))
    if curve.fits:
        table = Table(box=None, pad_edge=False, header_style="bold")
        for heading in ("shape", "1/e (s)", "95 %", "p(fit)", "score", "predicts"):
            table.add_column(heading, justify="left" if heading == "shape" else "right", no_wrap=True)
        scores = {one.shape.name: one for one in curve.scores}
        for fit in curve.fits:
            high = f"{fit.high_s:.4g}" if math.isfinite(fit.high_s) else "up"
            score = scores.get(fit.shape.name)
            table.add_row(
                fit.shape.name,
                f"{fit.time_s:.4g}" if math.isfinite(fit.time_s) else "none seen",
                f"{fit.low_s:.4g}-{high}",
                f"{fit.goodness_p:.2g}" if math.isfinite(fit.goodness_p) else "",
                "" if score is None else f"{score.score:.1f}",
                "" if score is None else f"{score.predictive:.5g}",
            )
        console.print(table)
    if curve.lifetime is not None:
        life = curve.lifetime
        high = f"to {life.high_s:.4g} s" if math.isfinite(life.high_s) else "s and up"
        console.print(
            Text(f"atoms: lifetime {life.time_s:.4g} s ({life.low_s:.4g} {high}), p(fit) {life.goodness_p:.2g}")
        )
    for words in plain_words(curve):
        console.print(Text(f"- {words}"))


def plain_words(curve: "CurveDecay") -> list[str]:
    """What the decay means and what it does not, a sentence or two each."""
    words = []
    if not curve.fits:
        words.append(f"No coherence time: {curve.why_no_coherence}.")
    else:
        best = curve.fits[0]
        words.append(
            f"The contrast is described best by {best.shape.words}. Score is the log likelihood less one for each "
            "parameter, predicts the log density of each hold told from the others; larger is better in both."
        )
        if len(curve.fits) > 1 and best.goodness_p < 0.01:
            words.append(
                f"Even so it does not describe the points (p = {best.goodness_p:.2g}): the points are the result."
            )
    if curve.lifetime is None:
        words.append(f"No lifetime: {curve.why_no_lifetime}.")
    if curve.modulation is not None:
        words += modulation_words(curve.modulation)
    elif curve.why_no_modulation:
        words.append(f"No modulation was looked for: {curve.why_no_modulation}.")
    return words


def modulation_words(found: "Modulation") -> list[str]:
    """What the search for a modulation says."""
    where = f"at {found.period_s:.4g} s" + (" (the best of all)" if len(found.periods_s) > 1 else "")
    if found.p < 0.01:
        text = (
            f"The contrast is modulated {where}: depth {found.depth:.3f} +- {found.depth_error:.3f}, p = {found.p:.2g}."
        )
    else:
        text = (
            f"No modulation stands out (p = {found.p:.2g}); {where} the depth is below {found.depth_limit:.3f} at "
            f"{found.level * 100:g} %."
        )
    aside = "p counts all periods looked at." if len(found.periods_s) > 1 else "p is for this period alone."
    return [f"{text} {aside} A dip at one hold alone is no modulation: look at the points."]


def constant_words(constant: "CoherenceConstant | None", why_not: str) -> list[str]:
    """What the coherence constant over nights says."""
    if constant is None:
        return [f"No coherence constant: {why_not}."]
    unit = 1e6  # s Er um
    words = [
        f"Coherence constant (coherence time x depth x separation): {constant.constant * unit:.4g} s Er um "
        f"({constant.low * unit:.4g} to {constant.high * unit:.4g} at 95 %), from {constant.nights} curves."
    ]
    if constant.alike_p < 0.05:
        words.append(
            f"Nights scatter by {constant.between * 100:.2g} % beyond their errors (p = {constant.alike_p:.2g}): "
            "something else changed too."
        )
    powers = [
        (name, value, error)
        for name, value, error in (
            ("depth", constant.depth_power, constant.depth_power_error),
            ("separation", constant.separation_power, constant.separation_power_error),
        )
        if value is not None and error is not None
    ]
    for name, value, error in powers:
        words.append(
            f"The coherence time goes as {name} to the power {value:.2f} +- {error:.2f} (-1 if one constant holds)."
        )
    return words


def document(
    found: "list[tuple[str, tuple[CurveDecay, ...]]]",
    constant: "CoherenceConstant | None",
    why_not: str,
    drawn: list[str],
) -> dict[str, Any]:
    """Everything for JSON: SI units, null where there is no number (an open end of an interval too)."""
    from dataclasses import asdict

    from planner.cli.results import decay_document, json_number

    def modulation(one: "Modulation | None") -> dict[str, Any] | None:
        if one is None:
            return None
        names = ("period_s", "depth", "depth_error", "depth_limit", "gain", "scatter", "p", "alarm_gain", "level")
        return {name: json_number(getattr(one, name)) for name in names} | {"periods": len(one.periods_s)}

    return {
        "nights": [
            {
                "night": name,
                "curves": [
                    {
                        "request": curve.request,
                        "settings": curve.settings,
                        "fits": [decay_document(fit) for fit in curve.fits],
                        "scores": [
                            {
                                "shape": one.shape.name,
                                "score": json_number(one.score),
                                "predictive": json_number(one.predictive),
                            }
                            for one in curve.scores
                        ],
                        "why_no_coherence": curve.why_no_coherence or None,
                        "lifetime": decay_document(curve.lifetime),
                        "why_no_lifetime": curve.why_no_lifetime or None,
                        "modulation": modulation(curve.modulation),
                        "why_no_modulation": curve.why_no_modulation or None,
                        "depth_er": curve.depth_er,
                        "separation_m": curve.separation_m,
                    }
                    for curve in curves
                ],
            }
            for name, curves in found
        ],
        "constant": None if constant is None else asdict(constant),
        "why_no_constant": why_not or None,
        "pictures": drawn,
    }
