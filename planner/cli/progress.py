"""The live display of a running night, on standard error: a bar on a terminal, plain lines elsewhere."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import timedelta
from typing import TYPE_CHECKING, Protocol

if TYPE_CHECKING:
    from planner.logbook import NightRow
    from planner.night.held import Progress as HowFar

LINES = 20  # plain lines a night where there is no terminal


class Display(Protocol):
    """Where a night says how it goes."""

    def say(self, words: str) -> None:
        """What is going on."""

    def progress(self, now: "HowFar") -> None:
        """How far it is."""


@contextmanager
def night_display(row: "NightRow") -> Iterator[Display]:
    """A display for one night."""
    from rich.console import Console

    console = Console(stderr=True, highlight=False)
    if not console.is_terminal:
        yield _Lines()
        return
    from rich.progress import BarColumn, Progress, TextColumn

    columns = (
        TextColumn("{task.description}"),
        BarColumn(bar_width=None),
        TextColumn("{task.completed:,.0f}/{task.total:,.0f} shots"),
        TextColumn("{task.fields[left]} left"),
        TextColumn("a/(a+b) {task.fields[fraction]}"),
        TextColumn("{task.fields[words]}", style="dim"),
    )
    with Progress(*columns, console=console, refresh_per_second=5) as bar:
        task = bar.add_task(
            row.name, total=row.positions, completed=row.next_position, left="-", fraction="-", words="starting"
        )

        class Bar:
            def say(self, words: str) -> None:
                bar.update(task, words=words[:80])

            def progress(self, now: "HowFar") -> None:
                fraction = "-" if now.fraction is None else f"{now.fraction:.3f}"
                words = "running" if now.ended == "done" else f"last shot {now.ended}"
                bar.update(
                    task, completed=now.sent, total=now.total, left=hours(now.left_s), fraction=fraction, words=words
                )

        yield Bar()


@contextmanager
def steps_display() -> Iterator[Callable[[str, float], None]]:
    """A bar on standard error for work that goes in steps, on a terminal; elsewhere nothing."""
    from rich.console import Console

    console = Console(stderr=True, highlight=False)
    if not console.is_terminal:
        yield lambda step, fraction: None
        return
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("putting the shots in order", total=1.0)
        yield lambda step, fraction: bar.update(task, description=step, completed=fraction)


class _Lines:
    """A line at every twentieth of the night, and whenever the rig has to be waited for."""

    def __init__(self) -> None:
        self._next = 0

    def say(self, words: str) -> None:
        import click

        if words.startswith("waiting"):
            click.echo(words, err=True)

    def progress(self, now: "HowFar") -> None:
        import click

        if now.sent >= self._next or now.sent == now.total:
            click.echo(f"{now.sent:,} of {now.total:,} shots, {hours(now.left_s)} left", err=True)
            self._next = now.sent + max(1, now.total // LINES)


def hours(seconds: float) -> str:
    """A length of time as h:mm:ss."""
    return str(timedelta(seconds=round(seconds)))
