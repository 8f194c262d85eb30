"""The `nightfringe` command: a group that imports a subcommand only when it is used.

`--help` must come within a quarter of a second, so nothing here imports numpy, SQLAlchemy or httpx, and the one-line
summaries stand in the table below (a test compares them with the commands).
"""

from collections.abc import Sequence
from importlib import import_module

import click

from planner import __version__
from planner.errors import NightfringeError, ProblemsFound

# command name -> (module, one-line summary); the module's `command` is the click command
COMMANDS: dict[str, tuple[str, str]] = {
    "init": ("planner.cli.init", "Write a commented starter sequence and rig file"),
    "check": ("planner.cli.check", "Find every problem of a sequence or rig file"),
    "compile": ("planner.cli.compile", "Compile a sequence to its shots and timelines"),
    "allocate": ("planner.cli.allocate", "Share out rig time for a goal: holds and packets, proved"),
    "forecast": ("planner.cli.forecast", "Forecast the errors of a night against time, with a band"),
    "order": ("planner.cli.order", "Put the shots of a sequence in a running order"),
    "tide": ("planner.cli.tide", "Work out the solid-earth tide at the site of a rig file"),
    "timeline": ("planner.cli.timeline", "Draw the timeline of one shot"),
    "rehearse": ("planner.cli.rehearse", "Rehearse a whole night on the stand-in rig"),
    "run": ("planner.cli.run", "Book a night and run it, or go on where one stopped"),
    "replan": (
        "planner.cli.replan",
        "Order the rest of a night anew: after an outage, lost shots, or with fewer hours",
    ),
    "rig": ("planner.cli.rig", "Start the stand-in rig, or show what a rig says of itself"),
    "nights": ("planner.cli.nights", "List the nights in the logbook"),
    "results": ("planner.cli.results", "Say what a night measured: contrast, coherence time, lifetime"),
    "fringes": (
        "planner.cli.fringes",
        "Look at a night's fringes: which stand out, their phase, their noise, the detector",
    ),
    "decay": ("planner.cli.decay", "Fit how contrast and atom number fall with hold: every shape, compared"),
    "stability": (
        "planner.cli.stability",
        "Say how steady a night was: noise against averaging time, rhythms, correlations",
    ),
    "export": ("planner.cli.export", "Write a night as a table for other programs"),
    "record": ("planner.cli.record", "Record results of a rig with no link, from a CSV or typed in"),
}


class LateGroup(click.Group):
    """A click group whose commands are named in COMMANDS and imported on use."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        entry = COMMANDS.get(cmd_name)
        if entry is None:
            return None
        command: click.Command = import_module(entry[0]).command
        return command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, summary) for name, (_, summary) in COMMANDS.items()])


@click.group(cls=LateGroup, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="nightfringe")
def app() -> None:
    """Plan, order, run and judge nights of shots on a held-atom interferometer."""


def run(args: Sequence[str]) -> int:
    """Run the command line with `args`; returns the exit code.

    0 done; 1 failed; 2 the input is wrong; 3 the rig or the link to it; 4 the logbook; 130 interrupted.
    """
    try:
        result = app.main(args=list(args), prog_name="nightfringe", standalone_mode=False)
    except click.exceptions.Exit as stop:
        return stop.exit_code
    except click.exceptions.Abort:
        click.echo("interrupted", err=True)
        return 130
    except click.ClickException as wrong:
        wrong.show()
        return wrong.exit_code
    except ProblemsFound as found:
        from planner.cli.problems import echo_problems

        echo_problems(found.problems)
        return found.exit_code
    except NightfringeError as error:
        click.echo(f"nightfringe: {error}", err=True)
        return error.exit_code
    return result if isinstance(result, int) else 0
