"""Unit strings as archives write them, turned into astropy units.

The FITS standard allows few spellings and archives use many: upper case, dots, stars, several
slashes, exponents with and without a caret. The reader below takes a string apart into factors;
a slash divides by the next factor only (``Jy/beam km/s`` is Jy beam-1 km s-1), and what a word
means never depends on a guess: upper-case words are read only where they have one meaning.
"""

from __future__ import annotations

import re
from typing import Final

import astropy.units as u

__all__ = ["UnitReadingError", "read_unit"]

_WORDS: Final[dict[str, u.UnitBase]] = {
    "K": u.K, "mK": u.mK,
    "Jy": u.Jy, "mJy": u.mJy, "uJy": u.uJy, "nJy": u.nJy, "MJy": u.MJy, "kJy": u.kJy,
    "jy": u.Jy, "Jansky": u.Jy, "janskys": u.Jy,
    "erg": u.erg, "ergs": u.erg, "W": u.W, "J": u.J,
    "m": u.m, "km": u.km, "cm": u.cm, "mm": u.mm, "um": u.um, "micron": u.um, "nm": u.nm,
    "Angstrom": u.AA, "angstrom": u.AA, "A": u.AA, "AA": u.AA, "Ang": u.AA,
    "s": u.s, "sec": u.s, "second": u.s, "Hz": u.Hz, "GHz": u.GHz, "MHz": u.MHz,
    "beam": u.beam, "Beam": u.beam, "bm": u.beam, "beams": u.beam,
    "pixel": u.pix, "pix": u.pix, "pixels": u.pix, "Pixel": u.pix, "px": u.pix,
    "sr": u.sr, "ster": u.sr, "steradian": u.sr,
    "arcsec": u.arcsec, "asec": u.arcsec, "arcsecond": u.arcsec, "arcmin": u.arcmin,
    "deg": u.deg, "rad": u.rad,
    "R": u.R, "Rayleigh": u.R, "Rayleighs": u.R, "rayleigh": u.R, "dR": 0.1 * u.R,
    "pc": u.pc, "kpc": u.kpc,
    "solMass": u.Msun, "Msun": u.Msun, "M_sun": u.Msun, "Msol": u.Msun, "M_sol": u.Msun,
    "yr": u.yr, "Gyr": u.Gyr,
    "ph": u.ph, "photon": u.ph, "photons": u.ph,
    "count": u.count, "counts": u.count, "ct": u.count, "cts": u.count, "DN": u.DN, "adu": u.adu,
    "mag": u.mag,
}  # fmt: skip

# In capitals only these words have one meaning: MJY may be milli or mega, and is left out.
_CAPITALS: Final[dict[str, u.UnitBase]] = {
    "JY": u.Jy, "KM": u.km, "M": u.m, "CM": u.cm, "S": u.s, "SEC": u.s, "HZ": u.Hz,
    "BEAM": u.beam, "B": u.beam, "BM": u.beam, "PIXEL": u.pix, "PIX": u.pix, "SR": u.sr,
    "ARCSEC": u.arcsec, "ERG": u.erg, "ERGS": u.erg, "KELVIN": u.K, "RAYLEIGH": u.R,
    "ANGSTROM": u.AA,
}  # fmt: skip

_TOKEN: Final = re.compile(
    r"""\s*(?:
        (?P<power>10\s*(?:\*\*|\^)\s*\(?\s*(?P<exp10>[+-]?\d+)\s*\)?)
      | (?P<number>\d+(?:\.\d+)?(?:[eE][+-]?\d+)?)
      | (?P<word>[A-Za-z_]+)
        (?:\s*(?:\*\*|\^)\s*\(?\s*(?P<exp>[+-]?\d+)\s*\)? | (?P<exp_plain>[+-]?\d+))?
      | (?P<mark>[*./()])
    )""",
    re.VERBOSE,
)


class UnitReadingError(ValueError):
    """A unit string that cannot be read in exactly one way."""


def _word(word: str, text: str) -> u.UnitBase:
    if word in _WORDS:
        return _WORDS[word]
    if word == word.upper() and word in _CAPITALS:
        return _CAPITALS[word]
    if word in ("MJY", "MK"):
        # Mega-jansky is only ever used for continuum maps per steradian.
        if word == "MJY" and re.search(r"/\s*SR|SR\s*(\^|\*\*)?-1", text):
            return u.MJy
        raise UnitReadingError(f'"{word}" may be milli or mega')
    raise UnitReadingError(f'"{word}" is not a known unit')


def _factors(text: str) -> list[tuple[u.UnitBase, int] | str]:
    """Take a string apart into factors with exponents and the marks between them."""
    parts: list[tuple[u.UnitBase, int] | str] = []
    position = 0
    while position < len(text.rstrip()):
        match = _TOKEN.match(text, position)
        if match is None:
            raise UnitReadingError(f'"{text[position:].strip()}" cannot be read')
        position = match.end()
        if match["power"]:
            parts.append((u.dimensionless_unscaled * 10.0 ** int(match["exp10"]), 1))
        elif match["number"]:
            parts.append((u.dimensionless_unscaled * float(match["number"]), 1))
        elif match["word"]:
            exponent = int(match["exp"] or match["exp_plain"] or 1)
            parts.append((_word(match["word"], text), exponent))
        else:
            parts.append(match["mark"])
    return parts


def _product(parts: list[tuple[u.UnitBase, int] | str]) -> u.UnitBase:
    """Multiply the factors; consumes `parts` up to a closing bracket."""
    result = u.dimensionless_unscaled
    divide = False
    while parts:
        part = parts.pop(0)
        if part == ")":
            return result
        if part == "/":
            if divide:
                raise UnitReadingError("two slashes follow each other")
            divide = True
            continue
        if part in ("*", "."):
            continue
        factor = _product(parts) if part == "(" else part[0] ** part[1]  # type: ignore[operator]
        result = result / factor if divide else result * factor
        divide = False
    if divide:
        raise UnitReadingError("it ends with a slash")
    return result


def read_unit(text: str) -> u.UnitBase:
    """Read a unit string as an archive may have written it.

    Parameters
    ----------
    text : str
        A ``BUNIT`` card or a recipe's unit, such as ``JY/BEAM*M/S`` or ``0.1 Rayleigh``.

    Returns
    -------
    astropy.units.UnitBase
        The unit; a numeric factor in front is its scale.

    Raises
    ------
    UnitReadingError
        If the string is empty, holds an unknown word or a word with two meanings.

    Examples
    --------
    >>> read_unit("JY/BEAM*M/S").to_string()
    'm Jy / (s beam)'
    >>> read_unit("K.KM/S").to_string()
    'km K / s'
    """
    if not text.strip():
        raise UnitReadingError("it is empty")
    parts = _factors(text.strip())
    if parts.count("(") != parts.count(")"):
        raise UnitReadingError("a bracket is not closed")
    return u.Unit(_product(parts))
