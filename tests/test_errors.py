"""The error tree is what its drawing says."""

import inspect

from planner import errors
from planner.cli.app import run


def error_classes() -> list[type[errors.NightfringeError]]:
    found = [value for value in vars(errors).values() if inspect.isclass(value) and issubclass(value, Exception)]
    return [value for value in found if value.__module__ == errors.__name__]


def test_every_error_has_the_root_a_docstring_and_a_place_in_the_drawing() -> None:
    """One root; every class documented and drawn."""
    for kind in error_classes():
        assert issubclass(kind, errors.NightfringeError)
        assert kind.__doc__
        assert kind.__name__ in (errors.__doc__ or "")


def test_each_branch_has_its_own_exit_code() -> None:
    """Input, link and logbook errors end the program with codes that a script can tell apart."""
    codes = {
        errors.InputError.exit_code,
        errors.LinkError.exit_code,
        errors.LogbookError.exit_code,
        errors.NightfringeError.exit_code,
    }
    assert len(codes) == 4
    assert 0 not in codes


def test_a_wrong_option_is_named_and_ends_with_two(capsys) -> None:  # type: ignore[no-untyped-def]
    """A mistyped option is the user's to fix: exit 2, named, no traceback."""
    assert run(["--hepl"]) == 2
    said = capsys.readouterr().err
    assert "--hepl" in said
    assert "Traceback" not in said
