"""One image of a FITS file: found, checked for its shape, and read when it is needed."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.utils.exceptions import AstropyUserWarning
from numpy.typing import NDArray

from kspipe.core.errors import Fault, MapError, ShapeError
from kspipe.maps.beams import BeamTable, beam_table

__all__ = ["StoredImage"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class StoredImage:
    """One two-dimensional image of a FITS file, or an HDU in memory.

    Attributes
    ----------
    file : Path
        For messages, and to read from.
    index : int
        HDU.
    header : astropy.io.fits.Header
    shape : (int, int)
        Rows and columns without degenerate axes.
    memory : HDU or None
        Read from here instead of the file.
    beams : BeamTable or None
        The file's table of beams.
    """

    file: Path
    index: int
    header: fits.Header
    shape: tuple[int, int]
    memory: fits.PrimaryHDU | None = None
    beams: BeamTable | None = None

    def __str__(self) -> str:
        return f"{self.file}" + (f"[{self.index}]" if self.index else "")

    @classmethod
    def find(
        cls, file: Path, hdu: int | None, memory: fits.PrimaryHDU | None = None
    ) -> StoredImage:
        """Find the one image in a file.

        Raises
        ------
        MapError
            If the file cannot be read, or holds no image or several.
        ShapeError
            If the image has more than two axes longer than one.
        """
        if memory is not None:
            return cls(file, 0, memory.header.copy(), _plane(memory.header, str(file)), memory)
        with _open(file) as hdus:
            images = [
                i for i, h in enumerate(hdus) if h.is_image and len(_long_axes(h.header)) >= 2
            ]
            listed = ", ".join(f"{i} {hdus[i].name or 'unnamed'}" for i in images)
            if hdu is not None and hdu not in images:
                raise MapError(
                    Fault(str(file), f"HDU {hdu} holds no image; images are in: {listed or 'none'}")
                )
            if hdu is None and len(images) != 1:
                what = "the file holds no image" if not images else f"several images: {listed}"
                raise MapError(Fault(str(file), what, "type hdu = N for this map"))
            index = images[0] if hdu is None else hdu
            header = hdus[index].header.copy()
            beams = beam_table(hdus)
        return cls(file, index, header, _plane(header, f"{file}[{index}]"), beams=beams)

    def read(self) -> Array:
        """Read the pixels, degenerate axes dropped, as a fresh (ny, nx) float64 array."""
        if self.memory is not None:
            return np.array(self.memory.data, dtype=float).reshape(self.shape)
        with _open(self.file) as hdus:
            try:
                return np.array(hdus[self.index].data, dtype=float).reshape(self.shape)
            except (OSError, TypeError, ValueError) as error:
                what = f"the pixels cannot be read; is the file cut off? ({error})"
                raise MapError(Fault(str(self), what)) from error


def _long_axes(header: fits.Header) -> list[int]:
    return [
        axis for axis in range(1, header.get("NAXIS", 0) + 1) if header.get(f"NAXIS{axis}", 0) > 1
    ]


def _plane(header: fits.Header, where: str) -> tuple[int, int]:
    axes = _long_axes(header)
    sizes = [header.get(f"NAXIS{axis}", 0) for axis in axes]
    if axes != [1, 2]:
        raise ShapeError(
            Fault(
                where,
                f"axes {axes} are longer than one (sizes {sizes}); expected an image on axes 1 "
                "and 2",
                "make an integrated map of the cube first" if len(axes) > 2 else "",
            )
        )
    return sizes[1], sizes[0]


@contextmanager
def _open(file: Path) -> Iterator[fits.HDUList]:
    """Open a FITS file; every way in which that fails becomes one message."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", AstropyUserWarning)
            hdus = fits.open(file)
            hdus.info(output=False)
    except FileNotFoundError as error:
        raise MapError(Fault(str(file), "the file does not exist")) from error
    except Exception as error:  # astropy and gzip raise many kinds for damaged files
        raise MapError(Fault(str(file), f"the file cannot be read as FITS ({error})")) from error
    with hdus:
        yield hdus
