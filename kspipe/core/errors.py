"""Everything that kspipe raises or warns about.

::

    KspipeError                 the work could not be done (exit code 1)
    └── InputError              what was given cannot be used (exit code 2)
        ├── RecipeError         one or more faults in a recipe, all of them at once
        ├── MapError            a map cannot be used
        │   ├── UnitError       its unit is absent, unknown or ambiguous
        │   ├── BeamError       its beam is absent, absurd or too wide
        │   ├── GridError       its sky coordinates are absent, absurd or elsewhere
        │   └── ShapeError      its arrays do not fit each other
        └── OutputError         the output folder cannot be used

    KspipeWarning               the work goes on, the reader should know
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass

__all__ = [
    "BeamError",
    "Fault",
    "GridError",
    "InputError",
    "KspipeError",
    "KspipeWarning",
    "MapError",
    "OutputError",
    "RecipeError",
    "ShapeError",
    "UnitError",
    "nearest",
]


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with the input.

    Attributes
    ----------
    where : str
        File, map or full recipe key.
    what : str
        What is wrong, with the value seen and what was expected.
    do : str
        What to type or change; empty where `what` already says it.
    """

    where: str
    what: str
    do: str = ""

    def __str__(self) -> str:
        return f"[{self.where}] {self.what}" + (f" -> {self.do}" if self.do else "")


class KspipeError(Exception):
    """The work could not be done."""

    exit_code = 1


class InputError(KspipeError):
    """What was given cannot be used; carries one or more `Fault`."""

    exit_code = 2

    def __init__(self, *faults: Fault) -> None:
        super().__init__(*faults)
        self.faults = faults

    def __str__(self) -> str:
        return "\n".join(str(fault) for fault in self.faults)

    @classmethod
    def at(cls, where: object, what: str, do: str = "") -> InputError:
        """Build the error from one fault."""
        return cls(Fault(str(where), what, do))


class RecipeError(InputError):
    """A recipe cannot be used; `faults` holds every fault found."""


class MapError(InputError):
    """A map cannot be used."""


class UnitError(MapError):
    """A map's unit is absent, unknown or ambiguous."""


class BeamError(MapError):
    """A map's beam is absent, absurd or wider than the target."""


class GridError(MapError):
    """A map's sky coordinates are absent, absurd or elsewhere."""


class ShapeError(MapError):
    """Arrays that belong together do not fit each other."""


class OutputError(InputError):
    """The output folder cannot be used."""


class KspipeWarning(UserWarning):
    """The work goes on, but the reader should know."""


def nearest(word: str, known: Iterable[str]) -> str:
    """Say which known words come nearest to a wrong one.

    Parameters
    ----------
    word : str
        What was typed.
    known : iterable of str
        What would have been right.

    Returns
    -------
    str
        ``did you mean "x"? Known: a, b, c``.
    """
    known = sorted(known)
    typed = word.lower()
    close = difflib.get_close_matches(typed, [k.lower() for k in known], n=3, cutoff=0.5)
    # Of equally near words, the one with the same beginning: H1 is HI, not W1.
    close.sort(
        key=lambda k: (difflib.SequenceMatcher(None, k, typed).ratio(), k[:1] == typed[:1]),
        reverse=True,
    )
    listed = "known: " + ", ".join(known)
    if not close:
        return listed
    match = next(k for k in known if k.lower() == close[0])
    return f'did you mean "{match}"? ({listed})'
