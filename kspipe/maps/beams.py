"""The beam of a map: from its cards, its table of beams, its HISTORY, or the recipe."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Final

import astropy.units as u
import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from kspipe.core.constants import DEG_ARCSEC
from kspipe.core.errors import BeamError, Fault
from kspipe.core.units import UnitReadingError, read_unit
from kspipe.kernels.geometry import beam_axes, beam_covariance

__all__ = [
    "Beam",
    "BeamTable",
    "beam_difference",
    "beam_table",
    "find_beam",
    "header_beam",
    "history_beam",
    "table_beam",
]

Array = NDArray[np.float64]
# Values and unit by column, as a file's table BEAMS holds them.
BeamTable = Mapping[str, tuple[Array, str]]

# Beams whose widths differ by less along every direction are one beam, written with few digits.
SAME_BEAM: Final = 0.01

_NUMBER: Final = r"\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[EeDd][-+]?\d+)?)"
# How programs that restore an image leave the beam in its HISTORY, and what they count widths in.
# BMAJ= without CLEAN is not read: such lines are about other images, and in arcsec.
_WORDINGS: Final = (
    (rf"CLEAN\s+BMAJ\s*={_NUMBER}\s+BMIN\s*={_NUMBER}\s+BPA\s*={_NUMBER}", DEG_ARCSEC),
    (rf"restoration:{_NUMBER} by{_NUMBER} \(arcsec\)\s+at pa{_NUMBER} \(deg\)", 1.0),
    (rf"Beam\s*={_NUMBER} x{_NUMBER} arcsec, pa\s*={_NUMBER} deg", 1.0),
)


@dataclass(frozen=True)
class Beam:
    """A Gaussian beam and where it was read.

    Attributes
    ----------
    major_arcsec, minor_arcsec, pa_deg : float
        Full widths at half maximum and position angle, north through east.
    origin : str
        ``header BMAJ, BMIN, BPA``, ``header HISTORY``, ``table BEAMS`` or ``recipe``.
    note : str
        What else the file says of its beam, where that was not used.
    """

    major_arcsec: float
    minor_arcsec: float
    pa_deg: float
    origin: str
    note: str = ""

    @classmethod
    def from_covariance(cls, covariance_arcsec2: Array, origin: str) -> Beam:
        """Write a covariance on (east, north) as a beam."""
        return cls(*beam_axes(covariance_arcsec2), origin=origin)

    @property
    def covariance_arcsec2(self) -> Array:
        """Covariance on (east, north)."""
        return beam_covariance(self.major_arcsec, self.minor_arcsec, self.pa_deg)

    def __str__(self) -> str:
        if math.isclose(self.major_arcsec, self.minor_arcsec, rel_tol=1e-9):
            return f"{self.major_arcsec:.4g} arcsec"
        return f"{self.major_arcsec:.4g} x {self.minor_arcsec:.4g} arcsec, pa {self.pa_deg:.4g} deg"

    @property
    def story(self) -> str:
        """The beam, its origin and the note, for the history."""
        return f"beam {self} from {self.origin}" + (f"; {self.note}" if self.note else "")


def beam_difference(first: Beam, second: Beam) -> float:
    """Largest relative difference of two beams' widths along any direction.

    The squared ratios of the widths are the eigenvalues of C2^-1 C1; the angle of a nearly round
    beam, which means little, counts for little.
    """
    ratios = np.linalg.eigvals(
        np.linalg.solve(second.covariance_arcsec2, first.covariance_arcsec2)
    ).real
    return float(np.max(np.abs(np.sqrt(ratios) - 1.0)))


def find_beam(
    header: fits.Header,
    table: BeamTable | None,
    *,
    typed: tuple[float, float, float] | None,
    name: str,
    where: str,
) -> Beam | None:
    """Find the beam of a map: the recipe's, else the one on which all that the file says agrees.

    Parameters
    ----------
    header : astropy.io.fits.Header
    table : BeamTable or None
        As `beam_table` finds it.
    typed : (float, float, float) or None
        FWHM major and minor [arcsec] and position angle [deg] from the recipe.
    name : str
        The recipe's name of the map.
    where : str
        Map and file, for messages.

    Returns
    -------
    Beam or None
        None where neither recipe nor file says anything.

    Raises
    ------
    BeamError
        If the file contradicts itself by more than 1 %, or what it says cannot be read; never
        where the recipe decides.
    """
    if typed is not None:
        return _typed_beam(Beam(*typed, origin="recipe"), header, table, where)
    found = _stored_beams(header, table, where)
    for first, second in combinations(found, 2):
        if beam_difference(first, second) > SAME_BEAM:
            raise BeamError(
                Fault(
                    where,
                    f"the beam is {first} by {first.origin}, but {second} by {second.origin}",
                    f'type maps.{name}.beam = "{first}" or "{second}"',
                )
            )
    return found[0] if found else None


def _typed_beam(beam: Beam, header: fits.Header, table: BeamTable | None, where: str) -> Beam:
    """Take the recipe's beam, and note what the file says otherwise."""
    try:
        stored = _stored_beams(header, table, where)
    except BeamError as error:
        return replace(beam, note=f"not used: {error.faults[0].what}")
    others = [
        f"{other} by {other.origin}" for other in stored if beam_difference(other, beam) > SAME_BEAM
    ]
    return replace(beam, note=f"not used: {', '.join(others)}" if others else "")


def _stored_beams(header: fits.Header, table: BeamTable | None, where: str) -> tuple[Beam, ...]:
    """All that a file says of its beam, what is most often right first."""
    found = (
        header_beam(header, where),
        table_beam(table, where) if table is not None else None,
        history_beam(header),
    )
    return tuple(beam for beam in found if beam is not None)


def header_beam(header: fits.Header, where: str) -> Beam | None:
    """Read BMAJ, BMIN, BPA (degrees); None where there is no BMAJ.

    Raises
    ------
    BeamError
        If BMAJ or BMIN is not a positive number, or the angle of a long beam is missing.
    """
    if "BMAJ" not in header:
        return None
    cards = {key: header.get(key) for key in ("BMAJ", "BMIN", "BPA")}
    major = cards["BMAJ"]
    minor = cards["BMIN"] if cards["BMIN"] is not None else major
    angle = cards["BPA"] if cards["BPA"] is not None else 0.0
    try:
        major, minor, angle = float(major), float(minor), float(angle)
    except (TypeError, ValueError):
        major = math.nan
    if not (major > 0 and minor > 0 and math.isfinite(major * minor)):
        raise BeamError(
            Fault(
                where,
                f"BMAJ, BMIN, BPA are {cards['BMAJ']!r}, {cards['BMIN']!r}, {cards['BPA']!r}; "
                "expected positive numbers in degrees",
                'type beam = "... arcsec" for this map',
            )
        )
    if cards["BPA"] is None and abs(major / minor - 1.0) > SAME_BEAM:
        raise BeamError(
            Fault(
                where,
                f"BMAJ and BMIN are {major * DEG_ARCSEC:.4g} and {minor * DEG_ARCSEC:.4g} arcsec, "
                "and there is no BPA: no telling which way the beam is long",
                f'type beam = "{major * DEG_ARCSEC:.4g} x {minor * DEG_ARCSEC:.4g} arcsec, '
                'pa ... deg" for this map',
            )
        )
    read = ", ".join(key for key, card in cards.items() if card is not None)
    if cards["BMIN"] is None:
        read += " (no BMIN: taken as round)"
    return _ordered(major * DEG_ARCSEC, minor * DEG_ARCSEC, angle, f"header {read}")


def history_beam(header: fits.Header) -> Beam | None:
    """Read the last restoring beam that HISTORY tells of; None where there is none."""
    last = None
    for line in header.get("HISTORY", []):
        for wording, unit_arcsec in _WORDINGS:
            match = re.search(wording, str(line))
            if match is None:
                continue
            major, minor, angle = (float(n.upper().replace("D", "E")) for n in match.groups())
            # Zeros stand for an image that was never restored.
            if major > 0 and minor > 0:
                last = _ordered(major * unit_arcsec, minor * unit_arcsec, angle, "header HISTORY")
    return last


def beam_table(hdus: fits.HDUList) -> BeamTable | None:
    """Find and read the table BEAMS of an open file; None where there is none."""
    for hdu in hdus:
        if isinstance(hdu, fits.BinTableHDU) and hdu.name == "BEAMS":
            return {
                column.name.upper(): (np.array(hdu.data[column.name]).ravel(), column.unit or "")
                for column in hdu.columns
            }
    return None


def table_beam(table: BeamTable, where: str) -> Beam:
    """Read a table with the columns BMAJ, BMIN and BPA, one row for each channel.

    Raises
    ------
    BeamError
        If a column or its unit is missing, or the rows differ by more than 1 % from their mean.
    """
    major, minor, angle = (
        _column(table, key, unit, where)
        for key, unit in (("BMAJ", u.arcsec), ("BMIN", u.arcsec), ("BPA", u.deg))
    )
    # Channels that hold nothing have no beam.
    seen = (major > 0) & (minor > 0) & np.isfinite(major + minor + angle)
    rows = [
        _ordered(*row, "table BEAMS")
        for row in zip(major[seen], minor[seen], angle[seen], strict=True)
    ]
    if not rows:
        raise BeamError(
            Fault(where, "the table BEAMS holds no beam", 'type beam = "... arcsec" for this map')
        )
    origin = "table BEAMS" + (f", mean of {len(rows)} rows" if len(rows) > 1 else "")
    mean = Beam.from_covariance(np.mean([row.covariance_arcsec2 for row in rows], axis=0), origin)
    if max(beam_difference(row, mean) for row in rows) > SAME_BEAM:
        by_width = sorted(rows, key=lambda row: row.major_arcsec * row.minor_arcsec)
        raise BeamError(
            Fault(
                where,
                f"the table BEAMS holds {len(rows)} beams from {by_width[0]} to {by_width[-1]}: "
                "the channels of the map have different beams",
                'bring the channels to one beam first, or type beam = "... arcsec" for this map',
            )
        )
    return mean


def _column(table: BeamTable, key: str, unit: u.UnitBase, where: str) -> Array:
    """Read one column in the unit wanted; position angles without a unit are degrees."""
    fix = 'type beam = "... arcsec" for this map'
    if key not in table:
        raise BeamError(Fault(where, f"the table BEAMS has no column {key}", fix))
    values, stored = table[key]
    stored = stored or ("deg" if key == "BPA" else "")
    try:
        factor = read_unit(stored).to(unit)
    except (UnitReadingError, u.UnitConversionError) as error:
        raise BeamError(
            Fault(
                where,
                f"the unit of {key} in the table BEAMS is {stored!r}, not an angle ({error})",
                fix,
            )
        ) from error
    return np.asarray(values, dtype=np.float64) * float(factor)


def _ordered(major_arcsec: float, minor_arcsec: float, angle_deg: float, origin: str) -> Beam:
    """Make the beam; a minor axis that is the longer one lies a quarter turn away."""
    if minor_arcsec > major_arcsec:
        major_arcsec, minor_arcsec, angle_deg = minor_arcsec, major_arcsec, angle_deg + 90.0
    return Beam(float(major_arcsec), float(minor_arcsec), float(angle_deg % 180.0), origin)
