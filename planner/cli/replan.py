"""`nightfringe replan`: order the rest of a night anew."""

import json

import click

SHOWN = (
    ("additive drift, mean", "additive_mean"),
    ("additive drift, worst", "additive_worst"),
    ("phase and contrast drift, mean", "coupled_mean"),
    ("phase and contrast drift, worst", "coupled_worst"),
    ("any period, mean", "any_period_mean"),
)


@click.command()
@click.argument("night", required=False)
@click.option("--logbook", help="the logbook: a file, or a postgresql:// address")
@click.option("--hours-left", type=click.FloatRange(0.01, 1000), help="without it, what is left of the night's window")
@click.option("--json", "as_json", is_flag=True, help="print one JSON object")
def command(night: str | None, logbook: str | None, hours_left: float | None, as_json: bool) -> None:
    """Order the rest of a night anew: after an outage, lost shots, or with fewer hours.

    NIGHT is the name or number of a night that has begun and is not running now; without it, the open one. What has run
    stays; the rest comes in whole packets, as many as fit, the same for every point of every request, in an order of
    its own. Only times and losses are looked at, never a result. Go on with: nightfringe run.
    """
    from planner.errors import LogbookConflict
    from planner.logbook import default_place, open_logbook
    from planner.night.replanning import replan_night
    from planner.night.running import now_us, owner_name

    with open_logbook(logbook or default_place()) as book:
        row = book.night(night) if night is not None else book.open_night()
        if row is None:
            raise LogbookConflict("no night is open; book one with: nightfringe run FILE")
        found = replan_night(book, row, now_us=now_us(), owner=owner_name(), hours_left=hours_left)
    plan = found.plan
    whole = dict(plan.whole)
    unchanged = None if plan.unchanged is None else dict(plan.unchanged)
    if as_json:
        document = {
            "night": row.name,
            "revision": found.revision,
            "from_position": found.from_position,
            "done": found.done,
            "lost": found.lost,
            "packets": {
                "standing": plan.standing,
                "to_come": plan.to_come,
                "again": plan.again,
                "dropped": plan.dropped,
            },
            "begins_s": found.began_s,
            "until_s": found.until_s,
            "figures": whole,
            "figures_going_on": unchanged,
        }
        click.echo(json.dumps(document))
        return
    from rich.console import Console
    from rich.table import Table

    console = Console(highlight=False)
    console.print(f"Night {row.name}: revision {found.revision}", style="bold", markup=False)
    hours = (found.until_s - found.began_s) / 3600
    console.print(
        f"{found.done:,} shots done, {found.lost:,} lost; {plan.standing} packets stand, {plan.to_come} come "
        f"({plan.again} of them again), {plan.dropped} do not fit into {hours:.2f} h",
        markup=False,
    )
    table = Table(box=None, pad_edge=False, header_style="bold")
    for heading in ("added variance of the whole night", "replanned", "going on"):
        table.add_column(heading, justify="left" if heading.startswith("added") else "right", no_wrap=True)
    for words, name in SHOWN:
        table.add_row(words, f"{whole[name]:.3g}", "" if unchanged is None else f"{unchanged[name]:.3g}")
    console.print(table)
    console.print("in units of a shot's noise; what has run counts at its true times. Go on with: nightfringe run")
