"""One record, one key, never twice; a wrong key is answered with a near one."""

from dataclasses import dataclass

import pytest

from kspipe.core.registry import Registry


@dataclass(frozen=True)
class Sheet:
    key: str
    value: int = 0


@pytest.fixture
def shelf() -> Registry[Sheet]:
    shelf = Registry[Sheet]("test record")
    for value, key in enumerate(("smith2012_fuv", "jones2007", "adams2020")):
        shelf.add(Sheet(key, value))
    return shelf


def test_a_record_is_found_by_its_key(shelf: Registry[Sheet]) -> None:
    assert shelf.get("jones2007") == Sheet("jones2007", 1)
    assert "jones2007" in shelf
    assert "jones2008" not in shelf
    assert shelf.keys() == ["adams2020", "jones2007", "smith2012_fuv"]
    assert [sheet.value for sheet in shelf] == [0, 1, 2]


def test_add_returns_the_record() -> None:
    sheet = Sheet("smith2012")
    assert Registry[Sheet]("test record").add(sheet) is sheet


def test_a_key_is_never_taken_twice(shelf: Registry[Sheet]) -> None:
    with pytest.raises(ValueError, match=r"test record 'jones2007' is registered twice"):
        shelf.add(Sheet("jones2007", 99))
    assert shelf.get("jones2007").value == 1


@pytest.mark.parametrize(
    ("typed", "near"),
    [("jnoes2007", "jones2007"), ("Smith2012_FUV", "smith2012_fuv"), ("adams2019", "adams2020")],
)
def test_a_wrong_key_is_answered_with_the_nearest(
    shelf: Registry[Sheet], typed: str, near: str
) -> None:
    with pytest.raises(KeyError) as caught:
        shelf.get(typed)
    message = caught.value.args[0]
    assert f'test record "{typed}" is not known; did you mean "{near}"?' in message
    assert "known: adams2020, jones2007, smith2012_fuv" in message


def test_a_key_like_nothing_is_answered_with_the_list(shelf: Registry[Sheet]) -> None:
    message = shelf.unknown("zzz")
    assert "did you mean" not in message
    assert "known: adams2020, jones2007, smith2012_fuv" in message
