"""Named regions of the sky from text files: DS9 regions, and the IVOA's STC-S.

Circles, ellipses, boxes, annuli and polygons in ICRS or FK5 (J2000, taken for ICRS: they differ
by less than 0.03 arcsec). Several shapes are joined; in DS9 a leading minus cuts one out.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, InputError
from kspipe.kernels.geometry import position_offsets

__all__ = ["Shape", "parse_regions", "pixels_inside"]

Array = NDArray[np.float64]

_FRAMES: Final = ("icrs", "fk5", "j2000")
_OTHER_FRAMES: Final = ("image", "physical", "fk4", "b1950", "galactic", "ecliptic", "linear")
_UNIT_ARCSEC: Final = {'"': 1.0, "'": 60.0, "d": 3600.0, "": 3600.0, "r": 206264.80624709636}
_DS9: Final = re.compile(
    r"^\s*([+-]?)\s*(circle|ellipse|box|annulus|polygon)\s*\(?\s*([^)#]*?)\s*\)?\s*(?:#.*)?$",
    re.IGNORECASE,
)
_STC: Final = re.compile(r"^\s*(circle|polygon|box)\s+(icrs|fk5|j2000)\s+(.*)$", re.IGNORECASE)
# Numbers after the centre, by shape.
_SIZES: Final = {"circle": 1, "ellipse": 2, "box": 2, "annulus": 2}


@dataclass(frozen=True)
class Shape:
    """One shape on the sky.

    Attributes
    ----------
    kind : {"circle", "ellipse", "box", "annulus", "polygon"}
    centres_deg : (n, 2) float64 array
        Centre, or the corners of a polygon: ICRS longitude and latitude.
    sizes_arcsec : tuple of float
        Radius; semi-axes; full sides; inner and outer radius.
    pa_deg : float
        Position angle of the first axis, north through east.
    is_cut_out : bool
    """

    kind: str
    centres_deg: Array
    sizes_arcsec: tuple[float, ...] = ()
    pa_deg: float = 0.0
    is_cut_out: bool = False


def parse_regions(text: str, where: str) -> tuple[Shape, ...]:
    """Read all shapes of a file.

    Parameters
    ----------
    text : str
    where : str
        Its name, for messages.

    Raises
    ------
    InputError
        If a line is not understood, the frame is not on the sky, or there is no shape.
    """
    shapes: list[Shape] = []
    frame: str | None = None
    for number, raw in enumerate(text.splitlines(), 1):
        for part in raw.split(";"):
            line = part.strip()
            lower = line.lower()
            if not line or line.startswith("#") or lower.startswith("global"):
                continue
            place = f"{where}, line {number}"
            if lower in _FRAMES:
                frame = lower
            elif lower in _OTHER_FRAMES:
                raise _fault(place, f'coordinates are "{line}"', "save the regions in ICRS or FK5")
            elif stc := _STC.match(line):
                shapes.append(_stc(stc, place))
            elif ds9 := _DS9.match(line):
                if frame is None:
                    raise _fault(place, "a shape before any frame", "write icrs on a line above")
                shapes.append(_ds9(ds9, place))
            else:
                raise _fault(
                    place,
                    f"{line[:60]!r} is not understood",
                    "shapes: circle, ellipse, box, annulus, polygon",
                )
    if not shapes:
        raise _fault(where, "holds no region", "write a frame and a shape: icrs; circle(...)")
    return tuple(shapes)


def _fault(where: str, what: str, fix: str) -> InputError:
    return InputError(Fault(where, what, fix))


def _stc(match: re.Match[str], place: str) -> Shape:
    """Degrees throughout; a box has full sides along the axes."""
    kind = match[1].lower()
    try:
        values = [float(v) for v in match[3].split()]
    except ValueError:
        raise _fault(place, f"{match[3]!r} are not numbers", "STC-S has degrees") from None
    if kind == "polygon":
        return _polygon(values, place)
    _count(kind, values, 2 + _SIZES[kind], place)
    sizes = tuple(3600.0 * v for v in values[2:])
    # First axis of a box: along longitude, which is east.
    return Shape(kind, np.array([values[:2]]), sizes, 90.0)


def _ds9(match: re.Match[str], place: str) -> Shape:
    """Sizes carry a unit, degrees without one; angles count from west through north."""
    kind, words = match[2].lower(), re.split(r"[\s,]+", match[3].strip())
    is_cut_out = match[1] == "-"
    if kind == "polygon":
        values = [_coordinate(w, place, is_longitude=i % 2 == 0) for i, w in enumerate(words)]
        shape = _polygon(values, place)
        return Shape(kind, shape.centres_deg, is_cut_out=is_cut_out)
    n_sizes = _SIZES[kind]
    has_angle = kind in ("ellipse", "box")
    if has_angle and len(words) == 2 + n_sizes:
        words.append("0")
    _count(kind, words, 2 + n_sizes + has_angle, place)
    centre = [_coordinate(w, place, is_longitude=i == 0) for i, w in enumerate(words[:2])]
    sizes = tuple(_size(w, place) for w in words[2 : 2 + n_sizes])
    angle = float(words[-1].rstrip("d")) if has_angle else 0.0
    return Shape(kind, np.array([centre]), sizes, angle - 90.0, is_cut_out)


def _polygon(values: Sequence[float], place: str) -> Shape:
    if len(values) < 6 or len(values) % 2:
        raise _fault(place, f"a polygon with {len(values)} numbers", "three corners or more")
    return Shape("polygon", np.array(values).reshape(-1, 2))


def _count(kind: str, values: Sequence[object], wanted: int, place: str) -> None:
    if len(values) != wanted:
        raise _fault(place, f"{kind} with {len(values)} numbers", f"expected {wanted}")


def _size(word: str, place: str) -> float:
    unit = word[-1:] if word[-1:] in _UNIT_ARCSEC else ""
    try:
        value = float(word.removesuffix(unit)) * _UNIT_ARCSEC[unit]
    except ValueError:
        raise _fault(place, f"{word!r} is not a size", """expected 10", 0.5' or 0.01d""") from None
    if value < 0:
        raise _fault(place, f"{word!r} is negative", "expected a size")
    return value


def _coordinate(word: str, place: str, *, is_longitude: bool) -> float:
    """Degrees, or sexagesimal with colons, of which longitudes are hours."""
    try:
        if ":" not in word:
            return float(word.rstrip("d"))
        parts = [float(p) for p in word.split(":")]
        value = sum(abs(p) / 60.0**i for i, p in enumerate(parts))
    except ValueError:
        raise _fault(place, f"{word!r} is not a coordinate", "degrees or 12:34:56.7") from None
    value = -value if word.startswith("-") else value
    return 15.0 * value if is_longitude else value


def pixels_inside(shapes: Sequence[Shape], ra_deg: Array, dec_deg: Array) -> NDArray[np.bool_]:
    """Mark positions that lie in any of the shapes and in none that is cut out."""
    inside = np.zeros(ra_deg.shape, dtype=bool)
    if all(shape.is_cut_out for shape in shapes):
        inside[:] = True
    for shape in (s for s in shapes if not s.is_cut_out):
        inside |= _within(shape, ra_deg, dec_deg)
    for shape in (s for s in shapes if s.is_cut_out):
        inside &= ~_within(shape, ra_deg, dec_deg)
    return inside


def _within(shape: Shape, ra_deg: Array, dec_deg: Array) -> NDArray[np.bool_]:
    ra0, dec0 = shape.centres_deg[0]
    east, north = position_offsets(ra_deg, dec_deg, ra0, dec0)
    if shape.kind == "polygon":
        corners = position_offsets(shape.centres_deg[:, 0], shape.centres_deg[:, 1], ra0, dec0)
        return _in_polygon(east, north, *corners)
    radius = np.hypot(east, north)
    if shape.kind == "circle":
        return np.asarray(radius <= shape.sizes_arcsec[0])
    if shape.kind == "annulus":
        return np.asarray((radius >= shape.sizes_arcsec[0]) & (radius <= shape.sizes_arcsec[1]))
    pa = math.radians(shape.pa_deg)
    along = east * math.sin(pa) + north * math.cos(pa)
    across = -east * math.cos(pa) + north * math.sin(pa)
    first, second = shape.sizes_arcsec
    if shape.kind == "ellipse":
        return np.asarray((along / first) ** 2 + (across / second) ** 2 <= 1.0)
    return np.asarray((np.abs(along) <= first / 2) & (np.abs(across) <= second / 2))


def _in_polygon(x: Array, y: Array, corner_x: Array, corner_y: Array) -> NDArray[np.bool_]:
    """Even-odd rule: how many sides a ray to the right crosses."""
    inside = np.zeros(x.shape, dtype=bool)
    for i in range(corner_x.size):
        x1, y1, x2, y2 = corner_x[i - 1], corner_y[i - 1], corner_x[i], corner_y[i]
        if y1 == y2:
            continue
        straddles = (y1 > y) != (y2 > y)
        inside ^= straddles & (x < x1 + (y - y1) * (x2 - x1) / (y2 - y1))
    return inside
