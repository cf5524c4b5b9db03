"""A named shelf of records: one record, one key, never twice."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Generic, Protocol, TypeVar

from kspipe.core.errors import nearest

__all__ = ["Keyed", "Registry"]


class Keyed(Protocol):
    """Anything with a key."""

    @property
    def key(self) -> str:
        """The name under which the record is found."""


R = TypeVar("R", bound=Keyed)


class Registry(Generic[R]):
    """Records of one family by key.

    Parameters
    ----------
    family : str
        What the records are, for messages: ``"alpha_CO record"``.
    """

    def __init__(self, family: str) -> None:
        self.family = family
        self._records: dict[str, R] = {}

    def add(self, record: R) -> R:
        """Put a record on the shelf and return it.

        Raises
        ------
        ValueError
            If the key is taken: a key is never reused for a changed formula.
        """
        if record.key in self._records:
            raise ValueError(f"{self.family} {record.key!r} is registered twice")
        self._records[record.key] = record
        return record

    def get(self, key: str | R) -> R:
        """Find a record; a user's own, which lies on no shelf, is returned as it is.

        Raises
        ------
        KeyError
            With the nearest known key in its message.
        """
        if not isinstance(key, str):
            return key
        try:
            return self._records[key]
        except KeyError:
            raise KeyError(self.unknown(key)) from None

    def unknown(self, key: str) -> str:
        """Say that a key is not known, and which one is near."""
        return f'{self.family} "{key}" is not known; {nearest(key, self._records)}'

    def __contains__(self, key: object) -> bool:
        return key in self._records

    def __iter__(self) -> Iterator[R]:
        return iter(self._records.values())

    def keys(self) -> list[str]:
        """Return all keys, sorted."""
        return sorted(self._records)
