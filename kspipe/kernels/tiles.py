"""A large array worked through in pieces that overlap by the reach of what is done to them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

__all__ = ["TILE", "Tile", "cut_tiles"]

# A tile of this side, with its margin, stays in the cache of a small machine.
TILE: Final = 1024


@dataclass(frozen=True)
class Tile:
    """One piece of an array.

    Attributes
    ----------
    core : (slice, slice)
        Rows and columns that this tile answers for, which may lie outside the array by up to the
        margin.
    section : (slice, slice)
        Rows and columns of the array that it needs, clipped to the array.
    before, after : (int, int)
        Zeros to be added in front of and behind the section, so that core plus margin is full.
    """

    core: tuple[slice, slice]
    section: tuple[slice, slice]
    before: tuple[int, int]
    after: tuple[int, int]

    @property
    def origin(self) -> tuple[int, int]:
        """Row and column of the padded section's first element in the whole array."""
        return self.section[0].start - self.before[0], self.section[1].start - self.before[1]

    def cut(self, array: NDArray[Any], fill: Any = 0.0) -> NDArray[Any]:
        """Cut out the section; beyond the array's edges it holds `fill`."""
        section = array[self.section]
        if not any(self.before + self.after):
            return np.asarray(section)
        whole = np.full(
            [b + n + a for b, n, a in zip(self.before, section.shape, self.after, strict=True)],
            fill,
            dtype=array.dtype,
        )
        (top, left), (rows, columns) = self.before, section.shape
        whole[top : top + rows, left : left + columns] = section
        return whole


def cut_tiles(
    shape: tuple[int, int], margin: int, wanted: tuple[slice, slice], size: int = TILE
) -> Iterator[Tile]:
    """Cut the wanted part of an array into tiles.

    Parameters
    ----------
    shape : (int, int)
        Of the whole array.
    margin : int
        Pixels needed around each core.
    wanted : (slice, slice)
        Rows and columns to be covered by cores.
    size : int
        Side of a core.

    Yields
    ------
    Tile
    """
    for rows in _cuts(wanted[0], size):
        for columns in _cuts(wanted[1], size):
            parts = [_part(core, n, margin) for core, n in zip((rows, columns), shape, strict=True)]
            yield Tile(
                core=(rows, columns),
                section=(parts[0][0], parts[1][0]),
                before=(parts[0][1], parts[1][1]),
                after=(parts[0][2], parts[1][2]),
            )


def _cuts(wanted: slice, size: int) -> list[slice]:
    """Split a range into equal parts of at most `size`."""
    length = wanted.stop - wanted.start
    n = max(1, -(-length // size))
    edges = [wanted.start + round(i * length / n) for i in range(n + 1)]
    return [slice(a, b) for a, b in pairwise(edges) if b > a]


def _part(core: slice, n: int, margin: int) -> tuple[slice, int, int]:
    first, last = core.start - margin, core.stop + margin
    start, stop = min(max(first, 0), n), min(max(last, 0), n)
    stop = max(stop, start)
    return slice(start, stop), start - first, last - stop
