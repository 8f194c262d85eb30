"""Every error that Nightfringe raises on purpose, named for what the person in front of it must do.

NightfringeError
+-- InputError                 what was given is wrong: change it            (exit 2)
|   +-- ProblemsFound          a file with problems, all of them listed
|   +-- QuantityError          a number or unit that cannot be read
|   +-- PlanImpossible         no plan fits; the message names the nearest one that does
|   +-- LimitExceeded          beyond the rig file's limits; names shot and limit
|   +-- NotEnoughData          the data cannot answer; the message says what is missing
+-- LinkError                  between here and the rig                       (exit 3)
|   +-- RigUnreachable         nothing was sent: nobody listens there
|   +-- RigUnknown             sent, and no clear answer: ask before anything else
|   +-- RigNotNow              full or not ready; `retry_after_s`
|   +-- RigRefused             understood and refused; `status`, `why`
|   +-- RigFenced              a newer dispatcher drives this rig: stop
|   +-- RigMalformed           an answer that breaks the link's rules; kept aside, never guessed
+-- LogbookError               the database                                   (exit 4)
    +-- LogbookMissing         no logbook at that place
    +-- LogbookTooNew          written by a newer Nightfringe; both schema numbers
    +-- LogbookUnavailable     locked, read-only, full or gone: pause, and try again
    +-- LogbookConflict        the rows are not as this action needs them
    +-- LogbookDamaged         a stored hash does not match its bytes
"""

from collections.abc import Sequence as _Sequence
from dataclasses import dataclass


class NightfringeError(Exception):
    """Root of all errors raised on purpose. `exit_code` is what the command line ends with."""

    exit_code = 1


class InputError(NightfringeError):
    """What the user gave is wrong; nothing was changed. The message says place, found, expected, what to do."""

    exit_code = 2


@dataclass(frozen=True, kw_only=True)
class Problem:
    """One thing wrong in one file.

    `line` and `column` count from 1 (column in characters); 0 means that the file as a whole is meant. `where` is
    the dotted path in the file (`stages[2].lasts`). `message` says what was found and what was expected; `hint` what
    to do, or is empty.
    """

    file: str
    line: int
    column: int
    where: str
    message: str
    hint: str = ""


class ProblemsFound(InputError):
    """A sequence or rig file with problems; `problems` holds every one, in the order of the file."""

    def __init__(self, problems: _Sequence[Problem]) -> None:
        self.problems = tuple(problems)
        first = self.problems[0]
        rest = f" (and {len(self.problems) - 1} more)" if len(self.problems) > 1 else ""
        super().__init__(f"{first.file}:{first.line}:{first.column}: {first.where}: {first.message}{rest}")


class QuantityError(InputError):
    """A number or unit that cannot be read or has the wrong dimension."""


class PlanImpossible(InputError):
    """No plan can do what was asked; the message names the nearest one that works."""


class LimitExceeded(InputError):
    """A plan beyond the rig file's limits; the message names the shot and the limit."""


class NotEnoughData(InputError):
    """The data cannot answer the question; the message says what is missing and never gives a number instead."""


class LinkError(NightfringeError):
    """Something between this program and the rig."""

    exit_code = 3


class RigUnreachable(LinkError):
    """Nothing was sent: no one listens at the rig's address."""


class RigUnknown(LinkError):
    """A request was sent and no clear answer came: what happened at the rig is unknown until it is asked."""


class RigNotNow(LinkError):
    """The rig is full (`full`) or not ready and accepted nothing; try again after `retry_after_s`."""

    def __init__(self, message: str, *, retry_after_s: float, full: bool = False) -> None:
        super().__init__(message)
        self.retry_after_s = retry_after_s
        self.full = full


class RigRefused(LinkError):
    """The rig understood and refused; `status` is the HTTP status, `why` the rig's own words."""

    def __init__(self, message: str, *, status: int, why: str) -> None:
        super().__init__(message)
        self.status = status
        self.why = why


class RigFenced(LinkError):
    """The rig has seen a newer dispatcher; this one must stop."""


class RigMalformed(LinkError):
    """An answer that breaks the link's rules; `answer` keeps what came, shortened."""

    def __init__(self, message: str, *, answer: str) -> None:
        super().__init__(message)
        self.answer = answer


class LogbookError(NightfringeError):
    """Something about the database."""

    exit_code = 4


class LogbookMissing(LogbookError):
    """No logbook at that place."""


class LogbookTooNew(LogbookError):
    """The logbook was written by a newer Nightfringe; the message gives both schema numbers."""


class LogbookUnavailable(LogbookError):
    """Locked, read-only, full or gone: what is under way pauses and tries again."""


class LogbookConflict(LogbookError):
    """The rows are not in the state that this action needs; nothing was written."""


class LogbookDamaged(LogbookError):
    """A stored hash does not match its bytes; the message names the row."""
