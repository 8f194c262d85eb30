"""`nightfringe tide`: how the Moon and the Sun move g at the site, and with it the fringe."""

from datetime import UTC, datetime
from typing import TYPE_CHECKING

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.arrays import FloatArray
    from planner.sequence.model import Rig, Sequence

MOST_ROWS = 2000
MOST_HOLDS = 4  # columns of the table
# periods of the largest lines in h; source: utide 0.4.0, ut_constants.npz (read)
HALF_DAILY = {"M2": 12.4206012, "S2": 12.0, "N2": 12.6583482}
DAILY = {"K1": 23.9344696, "O1": 25.8193417, "P1": 24.0658902}


@click.command()
@click.argument("rig_file", type=click.Path(), metavar="RIG")
@click.option("--from", "begins", help='local time that it begins, such as "2026-12-01 20:00"; without it, now')
@click.option("--for", "lasts", default="12 h", show_default=True, help="how long")
@click.option("--every", default="30 min", show_default=True, help="distance of the rows")
@click.option("--sequence", "sequence_file", type=click.Path(), help="say how far the fringes of its holds move")
@click.option("--picture", type=click.Path(), help="draw it: .png, .pdf or .svg")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(
    rig_file: str,
    begins: str | None,
    lasts: str,
    every: str,
    sequence_file: str | None,
    picture: str | None,
    as_json: bool,
) -> None:
    """Work out the solid-earth tide at the site of a rig file.

    The change of g along the lattice axis, positive where g grows, and the phase that it makes at a sequence's holds.
    """
    import json

    import numpy as np

    from planner.plots import style
    from planner.quantities import parse_quantity
    from planner.sequence.reader import read_sequence
    from planner.sequence.rigfile import read_rig
    from planner.sequence.site_tide import tide_along

    if picture:
        style.check_place(picture)
    rig = read_rig(rig_file)
    span, step = parse_quantity(lasts, "s"), parse_quantity(every, "s")
    if not (step > 0 and span >= step):
        raise InputError(f'--for "{lasts}" and --every "{every}": the distance must be positive and fit into the time')
    if span / step > MOST_ROWS:
        raise InputError(f"{span / step:,.0f} rows are asked for, {MOST_ROWS:,} at most: raise --every")
    first = _begin(begins, rig)
    time_s = np.asarray(first.timestamp() + step * np.arange(int(span / step) + 1), dtype=np.float64)
    sequence = None if sequence_file is None else read_sequence(sequence_file)
    change = tide_along(rig, time_s)
    scales = [] if sequence is None else _scales(sequence)
    drawn = []
    if picture:
        from planner.plots import tide as plot

        hours = (time_s - time_s[0]) / 3600
        whole = plot.figure(hours, change, scales, f"Tide at {rig.name}", f"hours since {first:%Y-%m-%d %H:%M %Z}")
        drawn.append(str(style.save(whole, picture)))
    if as_json:
        click.echo(
            json.dumps(
                {
                    "rig": rig.name,
                    "time": [datetime.fromtimestamp(t, UTC).isoformat() for t in time_s.tolist()],
                    "change_m_per_s2": change.tolist(),
                    "holds": [{"hold_s": hold, "phase_per_acceleration": scale} for hold, scale in scales],
                    "left_by_prediction": _left(rig, float(time_s[0])),
                    "pictures": drawn,
                }
            )
        )
        return
    _show(rig, first, time_s, change, scales)
    for place in drawn:
        click.echo(f"picture: {place}")


def _begin(text: str | None, rig: "Rig") -> datetime:
    from zoneinfo import ZoneInfo

    zone = ZoneInfo(rig.time_zone)
    if text is None:
        return datetime.now(zone).replace(minute=0, second=0, microsecond=0)
    try:
        given = datetime.fromisoformat(text)
    except ValueError as error:
        raise InputError(f'--from is a time such as "2026-12-01 20:00"; found "{text}"') from error
    return given if given.tzinfo is not None else given.replace(tzinfo=zone)


def _scales(sequence: "Sequence") -> list[tuple[float, float]]:
    """Some of the sequence's holds, short to long, and the phase per acceleration of each, rad per m/s^2."""
    import numpy as np

    from planner.physics.atoms import atom
    from planner.physics.interferometer import scale_factor
    from planner.sequence.compiler import compile_sequence
    from planner.sequence.rigfile import rig_of

    name = sequence.roles.get("separation")
    if name is None:
        raise InputError(
            "the sequence does not say which setting is the separation (roles.separation): a tide moves its fringe by "
            "m dz T / hbar, and that needs dz"
        )
    table = compile_sequence(sequence, rig_of(sequence)).table
    split = sequence.roles.get("split")
    kappa = scale_factor(
        atom(sequence.atom).mass_kg,
        table.settings[name],
        table.hold_s,
        0.0 if split is None else table.settings[split],
    )
    holds, rows = np.unique(table.hold_s, return_index=True)
    some = np.unique(np.linspace(0, len(holds) - 1, min(MOST_HOLDS, len(holds))).round().astype(int))
    return [(float(holds[k]), float(kappa[rows[k]])) for k in some]


def _left(rig: "Rig", first_s: float) -> dict[str, float]:
    """RMS of the half-daily and the daily tide over the 15 days from a time, m/s^2: what a share of to declare."""
    import numpy as np

    from planner.sequence.site_tide import tide_along

    hours = np.arange(0.0, 15 * 24, 0.5)
    tide = tide_along(rig, first_s + 3600 * hours)
    periods = [*HALF_DAILY.values(), *DAILY.values()]
    # 15 days do not part lines this close: what counts is what each band has together
    waves = np.concatenate([[f(2 * np.pi * hours / p) for f in (np.cos, np.sin)] for p in periods]).T
    design = np.hstack([np.ones((len(hours), 1)), waves])
    fitted = np.linalg.lstsq(design, tide, rcond=1e-6)[0]
    half = design[:, 1 : 1 + 2 * len(HALF_DAILY)] @ fitted[1 : 1 + 2 * len(HALF_DAILY)]
    daily = design[:, 1 + 2 * len(HALF_DAILY) :] @ fitted[1 + 2 * len(HALF_DAILY) :]
    return {"half_daily": float(np.sqrt(np.mean(half**2))), "daily": float(np.sqrt(np.mean(daily**2)))}


def _show(
    rig: "Rig", first: datetime, time_s: "FloatArray", change: "FloatArray", scales: list[tuple[float, float]]
) -> None:
    import numpy as np
    from rich.console import Console
    from rich.table import Table

    table = Table(box=None, pad_edge=False, header_style="bold")
    heads = [f"time ({first:%Z})", "g (nm/s^2)", *(f"{hold:.4g} s (rad)" for hold, _ in scales)]
    for head in heads:
        table.add_column(head, justify="right", no_wrap=True)
    for at, value in zip(time_s.tolist(), change.tolist(), strict=True):
        local = datetime.fromtimestamp(at, first.tzinfo)
        table.add_row(
            f"{local:%m-%d %H:%M}",
            f"{value * 1e9:+.0f}",
            *(f"{scale * (value - change[0]):+.3f}" for _, scale in scales),
        )
    console = Console(highlight=False)
    console.print(f"Tide at {rig.name}: {rig.latitude_deg:.3f} N {rig.longitude_deg:.3f} E", style="bold", markup=False)
    console.print(table)
    console.print()
    fastest = float(np.abs(np.gradient(change, time_s)).max()) if len(change) > 1 else 0.0
    left = _left(rig, float(time_s[0]))
    lines = [
        f"It goes through {float(np.ptp(change)) * 1e9:.0f} nm/s^2, at most {fastest * 3600e9:.0f} nm/s^2 in an hour.",
        "The solid Earth alone: Longman's formulas times 1.16, right to some 50 nm/s^2. Near a coast the ocean's "
        "load adds a few per cent.",
    ]
    if scales:
        lines.insert(
            1, "Phases count from the first row; a fringe is followed or set right by so much (fringes, order)."
        )
    lines.append(
        "If the prediction is taken off, what it leaves is drift to declare; for a twentieth of this fortnight's tide:"
    )
    for line in lines:
        console.print(f"- {line}", markup=False)
    click.echo(
        "    [drift.acceleration]\n"
        f'    periods = [{{ period = "12.42 h", amplitude = "{left["half_daily"] / 20 * 1e9:.2g} nm/s^2" }}, '
        f'{{ period = "23.93 h", amplitude = "{left["daily"] / 20 * 1e9:.2g} nm/s^2" }}]'
    )
