"""The exception tree, what its messages hold, and near matches."""

import pickle

import pytest

from kspipe.core import errors
from kspipe.core.errors import Fault, InputError, KspipeError, KspipeWarning, nearest


@pytest.mark.parametrize(
    ("word", "near"),
    [
        ("galactic_center", "galactic_centre"),
        ("HALPHA", "Halpha"),
        ("24 um", "24um"),
        ("co(2-1)", "CO(2-1)"),
    ],
)
def test_nearest_finds_the_word_that_was_meant(word: str, near: str) -> None:
    known = ("Halpha", "24um", "CO(2-1)", "CO(1-0)", "galactic_centre")
    assert nearest(word, known).startswith(f'did you mean "{near}"?')


def test_nearest_lists_what_is_known_in_order() -> None:
    assert nearest("qqqq", ["b", "a"]) == "known: a, b"
    assert nearest("aa", ["bb", "aab"]) == 'did you mean "aab"? (known: aab, bb)'
    # An iterator can be read only once.
    assert nearest("aa", iter(["bb", "aab"])) == 'did you mean "aab"? (known: aab, bb)'


def test_a_fault_says_where_what_and_what_to_do() -> None:
    assert str(Fault("maps.co", "no beam", "type beam = ...")) == (
        "[maps.co] no beam -> type beam = ..."
    )
    assert str(Fault("maps.co", "no beam")) == "[maps.co] no beam"


def test_an_error_holds_every_fault() -> None:
    faults = (Fault("a", "one"), Fault("b", "two", "three"))
    error = InputError(*faults)
    assert error.faults == faults
    assert str(error).splitlines() == ["[a] one", "[b] two -> three"]
    # An error must travel back from a worker process whole.
    back = pickle.loads(pickle.dumps(error))
    assert (back.faults, str(back)) == (faults, str(error))


@pytest.mark.parametrize(
    ("name", "parent", "exit_code"),
    [
        ("KspipeError", "Exception", 1),
        ("InputError", "KspipeError", 2),
        ("RecipeError", "InputError", 2),
        ("OutputError", "InputError", 2),
        ("MapError", "InputError", 2),
        ("UnitError", "MapError", 2),
        ("BeamError", "MapError", 2),
        ("GridError", "MapError", 2),
        ("ShapeError", "MapError", 2),
    ],
)
def test_the_tree_of_errors(name: str, parent: str, exit_code: int) -> None:
    error = getattr(errors, name)
    assert error.__bases__[0].__name__ == parent
    assert error.exit_code == exit_code
    assert name in errors.__all__


@pytest.mark.parametrize("error", [errors.UnitError, errors.BeamError, errors.RecipeError])
def test_at_builds_the_error_that_it_is_called_on(error: type[InputError]) -> None:
    built = error.at("maps.co", "no beam", "type one")
    assert type(built) is error
    assert built.faults == (Fault("maps.co", "no beam", "type one"),)


def test_a_warning_is_no_error() -> None:
    assert issubclass(KspipeWarning, UserWarning)
    assert not issubclass(KspipeWarning, KspipeError)
