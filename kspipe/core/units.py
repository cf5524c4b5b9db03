"""Unit strings as archives write them, turned into astropy units.

The FITS standard allows few spellings and archives use many: upper case, dots, stars, several
slashes, exponents with and without a caret. The reader below takes a string apart into factors;
a slash divides by the next factor only (``Jy/beam km/s`` is Jy beam-1 km s-1), and what a word
means never depends on a guess: where case would tell two meanings apart and was lost, the string
is refused. Magnitudes of the AB system become astropy's logarithmic unit.
"""

from __future__ import annotations

import difflib
import re
from collections import deque
from typing import Final, TypeAlias

import astropy.units as u

__all__ = ["StoredUnit", "UnitReadingError", "read_unit"]

StoredUnit: TypeAlias = u.UnitBase | u.MagUnit

# --- Words -------------------------------------------------------------------------------------

# These have one meaning however they are capitalised.
_ANY_CASE: Final[dict[str, u.UnitBase]] = {
    name: unit
    for unit, names in (
        (u.beam, "beam beams bm"),
        (u.pix, "pixel pixels pix px spaxel spaxels"),
        (u.sr, "sr ster steradian steradians"),
        (u.arcsec, "arcsec arcsecs arcsecond arcseconds asec"),
        (u.arcmin, "arcmin"),
        (u.deg, "deg degree degrees"),
        (u.rad, "rad radian"),
        (u.erg, "erg ergs"),
        (u.s, "sec secs second seconds"),
        (u.Hz, "hz hertz"),
        (u.GHz, "ghz"),
        (u.km, "km"),
        (u.cm, "cm"),
        (u.um, "um micron microns"),
        (u.nm, "nm"),
        (u.AA, "aa ang angstrom angstroms"),
        (u.K, "kelvin"),
        (u.R, "rayleigh rayleighs"),
        (u.Unit("dR"), "decirayleigh decirayleighs"),
        (u.count, "count counts cnt cnts ct cts"),
        (u.count / u.s, "cps"),
        (u.DN, "dn"),
        (u.adu, "adu"),
        (u.electron, "electron electrons"),
        (u.ph, "ph photon photons"),
        (u.mag, "mag mags"),
        (u.mag * u.AB, "abmag mag_ab"),
        (u.dimensionless_unscaled, "atom atoms"),
        (u.Msun, "msun m_sun msol m_sol solmass"),
        (u.pc, "pc"),
        (u.kpc, "kpc"),
        (u.yr, "yr"),
        (u.Gyr, "gyr"),
    )
    for name in names.split()
}

# Of these the case is part of the meaning.
_EXACT: Final[dict[str, u.UnitBase]] = {
    "K": u.K, "mK": u.mK, "Kkm": u.K * u.km,
    "m": u.m, "mm": u.mm, "s": u.s, "MHz": u.MHz,
    "W": u.W, "mW": u.mW, "uW": u.uW, "nW": u.nW, "J": u.J,
    "A": u.AA,
    "R": u.R, "mR": u.Unit("mR"), "kR": u.Unit("kR"), "dR": u.Unit("dR"),
    "AB": u.AB,
    "H": u.dimensionless_unscaled,
}  # fmt: skip

# And these stand alone only in strings that have lost their lower case.
_CAPITALS: Final[dict[str, u.UnitBase]] = {"M": u.m, "S": u.s, "B": u.beam}

_JANSKY: Final = re.compile(
    r"(?P<prefix>nano|micro|milli|kilo|mega|[numkM]?)(?:jy|janskys?)", re.IGNORECASE
)
_JANSKY_UNITS: Final = {
    "": u.Jy, "n": u.nJy, "nano": u.nJy, "u": u.uJy, "micro": u.uJy, "m": u.mJy, "milli": u.mJy,
    "k": u.kJy, "kilo": u.kJy, "M": u.MJy, "mega": u.MJy,
}  # fmt: skip

_TWO_MEANINGS: Final = frozenset({"MK", "MM", "MW", "MR"})
# Megajansky is only ever used for continuum maps per steradian, and millijansky never.
_PER_STERADIAN: Final = re.compile(r"/\s*(?:SR|STER)|SR\s*(?:\^|\*\*)?\s*\(?-1")

_NO_UNIT: Final = {
    "per": '"per" is a word; write "/"',
    "log": "a logarithm is no unit; the map must hold the quantity itself",
    "dex": "a logarithm is no unit; the map must hold the quantity itself",
    "vega": "only magnitudes of the AB system are read",
    "vegamag": "only magnitudes of the AB system are read",
    "nanomaggy": '"nanomaggy" is 3.631 uJy in the AB system and another flux in the Vega system',
    "nanomaggies": '"nanomaggies" are 3.631 uJy in the AB system and others in the Vega system',
    "molecules": "a number of molecules is no number of atoms",
}

# --- Marks -------------------------------------------------------------------------------------

_TYPOGRAPHY: Final = str.maketrans(
    {"µ": "u", "μ": "u", "Å": "A", "\u212b": "A", "ö": "o", "{": "(", "}": ")"}
    | dict.fromkeys("·⋅×", "*")
    | dict.fromkeys("−–", "-")
    | dict.fromkeys("\u00a0\u2009\t~", " ")
)
_SUPERSCRIPTS: Final = "⁺⁻⁰¹²³⁴⁵⁶⁷⁸⁹"
_FROM_SUPERSCRIPT: Final = str.maketrans(_SUPERSCRIPTS, "+-0123456789")

# Antenna temperatures are not yet on the scale of the main beam.
_ANTENNA: Final = re.compile(r"\bT_?A\s*\*", re.IGNORECASE)
_MAIN_BEAM: Final = re.compile(r"\(\s*T_?MB\s*\)", re.IGNORECASE)

_INTEGER: Final = r"(?:\(\s*[+-]?\d+\s*\)|[+-]?\d++)"
# Words and exponents are taken whole or not at all: "cm2.5" is not "cm2" and ".5".
_TOKEN: Final = re.compile(
    rf"""\s*(?:
        10(?:\s*(?:\*\*|\^)\s*(?P<caret>{_INTEGER}) | (?P<signed>[+-]\d++))
      | (?P<number>(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d+)?+)(?![\d.])
      | (?P<mark>[*./()]|x(?=\s*10))
      | (?P<word>(?i:deci-)?[A-Za-z_]++)(?P<exponent>\s*(?:\*\*|\^)\s*{_INTEGER}|[+-]?\d++)?+
        (?!\.?\d|\s*\^|\s*\*\*)
    )""",
    re.VERBOSE,
)


class UnitReadingError(ValueError):
    """A unit string that cannot be read in exactly one way."""


def read_unit(text: str) -> StoredUnit:
    """Read a unit string as an archive may have written it.

    Parameters
    ----------
    text : str
        A ``BUNIT`` card or a recipe's unit, such as ``JY/BEAM*M/S`` or ``0.1 Rayleigh``.

    Returns
    -------
    astropy.units.UnitBase or astropy.units.MagUnit
        The unit; a numeric factor in front is its scale.

    Raises
    ------
    UnitReadingError
        If the string is empty, holds an unknown word or a word with two meanings.

    Examples
    --------
    >>> read_unit("JY/BEAM*M/S").to_string()
    'Jy m / (beam s)'
    >>> read_unit("K.KM/S").to_string()
    'K km / s'
    >>> read_unit("AB mag arcsec^-2").to_string()
    'mag(AB / arcsec2)'
    """
    clean = _clean(text)
    if not clean:
        raise UnitReadingError("it is empty")
    parts = deque(_factors(clean))
    unit = u.Unit(_product(parts))
    if parts:
        raise UnitReadingError("a bracket is closed that was not opened")
    return _magnitude(unit) if u.AB in unit.bases else unit


def _clean(text: str) -> str:
    """Take off quotes and brackets around the whole, and write typography in plain letters."""
    clean = text.strip().strip("'\"`").strip()
    if clean.startswith("[") and clean.endswith("]"):
        clean = clean[1:-1].strip()
    clean = re.sub(
        f"[{_SUPERSCRIPTS}]+", lambda found: "^" + found[0].translate(_FROM_SUPERSCRIPT), clean
    )
    clean = clean.translate(_TYPOGRAPHY)
    if _ANTENNA.search(clean):
        raise UnitReadingError(
            "an antenna temperature must first be divided by the efficiency of the main beam"
        )
    return _MAIN_BEAM.sub("", clean)


def _factors(text: str) -> list[u.UnitBase | str]:
    """Take a string apart into factors with their exponents and the marks between them."""
    parts: list[u.UnitBase | str] = []
    position, only_numbers = 0, True
    while position < len(text):
        match = _TOKEN.match(text, position)
        if match is None:
            raise UnitReadingError(f'"{text[position:].strip()}" cannot be read')
        position = match.end()
        if match["mark"]:
            parts.append(match["mark"].replace("x", "*"))
        elif match["word"]:
            parts.append(_word(match["word"], match["exponent"] or "", text))
            only_numbers = False
        elif only_numbers:
            parts.append(u.Unit(_number(match)))
        else:
            raise UnitReadingError(
                f'"{match[0].strip()}" stands behind a unit: neither a factor nor an exponent'
            )
    return parts


def _number(match: re.Match[str]) -> float:
    """Value of a number or of a power of ten."""
    power = match["caret"] or match["signed"]
    if power:
        return 10.0 ** _integer(power)
    number = match["number"].lower().replace("d", "e")
    mantissa, exponential, exponent = number.partition("e")
    if exponential and float(mantissa) == 10:
        raise UnitReadingError(
            f'"{match["number"]}" is 1e{int(exponent) + 1} as a number and may be meant as '
            f"1e{int(exponent)}"
        )
    if float(number) == 0:
        raise UnitReadingError("its factor is zero")
    return float(number)


def _integer(text: str) -> int:
    return int(text.strip("*^() "))


def _word(word: str, exponent: str, text: str) -> u.UnitBase:
    """Unit of a word, raised to its exponent."""
    if word.lower() in _NO_UNIT:
        raise UnitReadingError(_NO_UNIT[word.lower()])
    unit = _meaning(word, text)
    if exponent and unit == u.dimensionless_unscaled:
        raise UnitReadingError(f'"{word}{exponent}" may be molecules, and atoms have no exponent')
    return unit ** _integer(exponent) if exponent else unit


def _meaning(word: str, text: str) -> u.UnitBase:
    lower = word.lower().replace("-", "")
    for known, name in ((_EXACT, word), (_ANY_CASE, lower), (_CAPITALS, word)):
        if name in known:
            return known[name]
    jansky = _JANSKY.fullmatch(word)
    if word in _TWO_MEANINGS or (jansky and _has_lost_its_case(jansky, text)):
        raise UnitReadingError(f'"{word}" may be milli or mega')
    if jansky:
        prefix = jansky["prefix"]
        return _JANSKY_UNITS[prefix if prefix == "M" else prefix.lower()]
    near = difflib.get_close_matches(lower, _ANY_CASE, n=1, cutoff=0.7)
    meant = f'; did you mean "{near[0]}"?' if near else ""
    raise UnitReadingError(f'"{word}" is not a known unit{meant}')


def _has_lost_its_case(jansky: re.Match[str], text: str) -> bool:
    """Whether the M in ``MJY`` or ``mjy`` can be milli or mega."""
    word = jansky[0]
    return jansky["prefix"] in ("m", "M") and (
        word.islower() or (word.isupper() and not _PER_STERADIAN.search(text))
    )


def _product(parts: deque[u.UnitBase | str], *, in_bracket: bool = False) -> u.UnitBase:
    """Multiply the factors; takes them off `parts` up to the bracket that closes, or to the end."""
    result, mark = u.dimensionless_unscaled, ""
    while parts and parts[0] != ")":
        part = parts.popleft()
        if isinstance(part, str) and part != "(":
            if mark:
                raise UnitReadingError(
                    "two slashes follow each other"
                    if part == mark == "/"
                    else f'"{mark}" and "{part}" follow each other'
                )
            mark = part
            continue
        factor = _product(parts, in_bracket=True) if part == "(" else part
        result = result / factor if mark == "/" else result * factor
        mark = ""
    if mark:
        raise UnitReadingError("it ends with a slash" if mark == "/" else f'it ends with "{mark}"')
    if in_bracket:
        if not parts:
            raise UnitReadingError("a bracket is not closed")
        parts.popleft()
    return result


def _magnitude(unit: u.UnitBase) -> u.MagUnit:
    """Turn ``AB mag / arcsec2`` into the logarithmic unit of AB / arcsec2."""
    powers = dict(zip(unit.bases, unit.powers, strict=True))
    if powers.get(u.mag) != 1 or powers[u.AB] != 1 or unit.scale != 1:
        raise UnitReadingError('AB magnitudes are written "mag(AB)/arcsec2", without a factor')
    return u.MagUnit(unit / u.mag)
