"""12 + log10(O/H) from ratios of strong optical lines.

``n2`` is log10 [NII]6583/Halpha, ``o3n2`` is log10 ([OIII]5007/Hbeta) / ([NII]6583/Halpha),
``n2s2`` is log10 [NII]6583 / [SII]6717+31. The ratios of Pilyugin & Grebel 2016 are plain ones of
summed, dereddened doublets over Hbeta: ``r2_hb`` [OII]3727+29, ``r3_hb`` [OIII]4959+5007,
``n2_hb`` [NII]6548+84, ``s2_hb`` [SII]6717+31.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.record import Certainty, Range, Record
from kspipe.core.constants import OH_SOLAR
from kspipe.core.registry import Registry

__all__ = ["STRONG_LINES", "Line", "StrongLine"]

Array = NDArray[np.float64]
Inputs = Mapping[str, Array]


@dataclass(frozen=True, kw_only=True)
class StrongLine(Record):
    """A metallicity calibration.

    Attributes
    ----------
    needs : tuple of str
        Names in `kspipe.conversions.inputs.INPUTS`.
    function : callable
        12 + log10(O/H) of a mapping with all of `needs`; NaN where there is none.
    oh_scale : str
        The metallicity scale that it defines.
    """

    needs: tuple[str, ...]
    function: Callable[[Inputs], Array]
    oh_scale: str

    def __call__(self, inputs: Inputs) -> Array:
        """Evaluate on arrays that broadcast.

        Raises
        ------
        KeyError
            If a ratio is missing.
        """
        missing = [name for name in self.needs if name not in inputs]
        if missing:
            raise KeyError(f"record {self.key!r} needs {', '.join(missing)}")
        return self.function(inputs)

    def outside(self, inputs: Inputs) -> NDArray[np.bool_]:
        """Where ratios, or what follows from them, lie outside the range; or where OH has none."""
        oh = self(inputs)
        given = {**inputs, "oh": oh}
        if "n2s2" in inputs and "n2" in inputs:
            given["d16_y"] = _d16_y(inputs)
        finite = np.logical_and.reduce(
            np.broadcast_arrays(*(np.isfinite(inputs[name]) for name in self.needs))
        )
        return np.asarray(super().outside(given) | (np.isnan(oh) & finite))


@dataclass(frozen=True)
class Line:
    """A straight line in one ratio."""

    name: str
    zero: float
    slope: float

    def __call__(self, inputs: Inputs) -> Array:
        """Evaluate."""
        return np.asarray(self.zero + self.slope * inputs[self.name])


def _positive_log10(ratio: Array) -> Array:
    return np.log10(np.where(np.asarray(ratio) > 0, ratio, np.nan))


def _pettini2004_cubic(inputs: Inputs) -> Array:
    n2 = inputs["n2"]
    return np.asarray(9.37 + 2.03 * n2 + 1.26 * n2**2 + 0.32 * n2**3)


def _d16_y(inputs: Inputs) -> Array:
    return np.asarray(inputs["n2s2"] + 0.264 * inputs["n2"])


def _dopita2016(inputs: Inputs) -> Array:
    y = _d16_y(inputs)
    return np.asarray(8.77 + y + 0.45 * (y + 0.3) ** 5)


def _curti2017_o3n2(inputs: Inputs) -> Array:
    # 0.281 - 4.765 x - 2.268 x^2 = y; the root on the side of high metallicity.
    discriminant = 4.765**2 - 4.0 * 2.268 * (inputs["o3n2"] - 0.281)
    root = np.sqrt(np.where(discriminant >= 0, discriminant, np.nan))
    return np.asarray(OH_SOLAR + (root - 4.765) / (2.0 * 2.268))


_CURTI_N2 = (-0.489, 1.513, -2.554, -5.293, -2.867)
# The polynomial rises on this interval of OH - 8.69, which holds the whole valid range.
_CURTI_X = np.linspace(7.6 - OH_SOLAR, 8.85 - OH_SOLAR, 2000)


def _curti2017_n2(inputs: Inputs) -> Array:
    polynomial = np.polynomial.Polynomial(_CURTI_N2)
    slope = polynomial.deriv()
    n2 = np.asarray(inputs["n2"], dtype=float)
    table = polynomial(_CURTI_X)
    inside = (n2 >= table[0]) & (n2 <= table[-1])
    x = np.interp(np.where(inside, n2, table[0]), table, _CURTI_X)
    for _ in range(3):
        x = x - (polynomial(x) - n2) / slope(x)
    return np.asarray(np.where(inside, OH_SOLAR + x, np.nan))


def _branches(
    inputs: Inputs, third: str, upper: tuple[float, ...], lower: tuple[float, ...]
) -> Array:
    log_n2 = _positive_log10(inputs["n2_hb"])
    log_third = _positive_log10(inputs[third])
    excitation = _positive_log10(inputs["r3_hb"]) - log_third

    def branch(c: tuple[float, ...]) -> Array:
        cross = c[3] + c[4] * excitation + c[5] * log_n2
        return np.asarray(c[0] + c[1] * excitation + c[2] * log_n2 + cross * log_third)

    return np.where(log_n2 >= -0.6, branch(upper), branch(lower))


def _pilyugin2016_s(inputs: Inputs) -> Array:
    upper = (8.424, 0.030, 0.751, -0.349, 0.182, 0.508)
    lower = (8.072, 0.789, 0.726, 1.069, -0.170, 0.022)
    return _branches(inputs, "s2_hb", upper, lower)


def _pilyugin2016_r(inputs: Inputs) -> Array:
    upper = (8.589, 0.022, 0.399, -0.137, 0.164, 0.589)
    lower = (7.932, 0.944, 0.695, 0.970, -0.291, -0.019)
    return _branches(inputs, "r2_hb", upper, lower)


STRONG_LINES = Registry[StrongLine]("strong-line record")


def _add(
    key: str,
    label: str,
    where: str,
    formula: str,
    needs: tuple[str, ...],
    function: Callable[[Inputs], Array],
    *,
    scale: str,
    ranges: tuple[Range, ...] = (),
    certainty: Certainty = "verified",
    note: str = "",
) -> None:
    STRONG_LINES.add(
        StrongLine(
            key=key,
            label=label,
            cite=key.split("_", maxsplit=1)[0],
            where=where,
            formula=formula,
            certainty=certainty,
            ranges=ranges,
            note=note,
            needs=needs,
            function=function,
            oh_scale=scale,
        )
    )


def _n2(low: float, high: float) -> tuple[Range, ...]:
    return (Range("N2", low, high, "n2"),)


def _o3n2(low: float, high: float) -> tuple[Range, ...]:
    return (Range("O3N2", low, high, "o3n2"),)


_add(
    "pettini2004_n2",
    "N2, Pettini & Pagel 2004",
    "Eq. 1",
    "OH = 8.90 + 0.57 N2",
    ("n2",),
    Line("n2", 8.90, 0.57),
    scale="PP04 N2",
    ranges=_n2(-2.5, -0.3),
)
_add(
    "pettini2004_n2_cubic",
    "N2 cubic, Pettini & Pagel 2004",
    "Eq. 2",
    "OH = 9.37 + 2.03 N2 + 1.26 N2^2 + 0.32 N2^3",
    ("n2",),
    _pettini2004_cubic,
    scale="PP04 N2 cubic",
    ranges=_n2(-2.5, -0.3),
)
_add(
    "pettini2004_o3n2",
    "O3N2, Pettini & Pagel 2004",
    "Eq. 3",
    "OH = 8.73 - 0.32 O3N2",
    ("o3n2",),
    Line("o3n2", 8.73, -0.32),
    scale="PP04 O3N2",
    ranges=_o3n2(-1.0, 1.9),
)
_add(
    "marino2013_n2",
    "N2, Marino et al. 2013",
    "Eq. 4",
    "OH = 8.743 + 0.462 N2",
    ("n2",),
    Line("n2", 8.743, 0.462),
    scale="M13 N2",
    ranges=_n2(-1.6, -0.2),
)
_add(
    "marino2013_o3n2",
    "O3N2, Marino et al. 2013",
    "Eq. 2",
    "OH = 8.533 - 0.214 O3N2",
    ("o3n2",),
    Line("o3n2", 8.533, -0.214),
    scale="M13 O3N2",
    ranges=_o3n2(-1.1, 1.7),
)
_add(
    "dopita2016",
    "N2S2, Dopita et al. 2016",
    "the calibration (equation number not confirmed)",
    "OH = 8.77 + y + 0.45 (y + 0.3)^5, y = N2S2 + 0.264 N2",
    ("n2s2", "n2"),
    _dopita2016,
    scale="D16",
    ranges=(Range("y", -1.1, 0.5, "d16_y"),),
    note="The term of fifth power is sometimes dropped elsewhere.",
)
_add(
    "curti2017_o3n2",
    "O3N2, Curti et al. 2017",
    "the O3N2 polynomial, inverted",
    "O3N2 = 0.281 - 4.765 x - 2.268 x^2, x = OH - 8.69",
    ("o3n2",),
    _curti2017_o3n2,
    scale="C17 O3N2",
    ranges=(Range("OH", 7.6, 8.85, "oh"),),
    note="The side of high metallicity; the polynomial turns at OH = 7.64.",
)
_add(
    "curti2017_n2",
    "N2, Curti et al. 2017",
    "the N2 polynomial, inverted",
    "N2 = -0.489 + 1.513 x - 2.554 x^2 - 5.293 x^3 - 2.867 x^4, x = OH - 8.69",
    ("n2",),
    _curti2017_n2,
    scale="C17 N2",
    ranges=(Range("OH", 7.6, 8.85, "oh"),),
    note="NaN where N2 belongs to no OH in the range.",
)
_add(
    "pilyugin2016_s",
    "S, Pilyugin & Grebel 2016",
    "the S calibration (equation numbers not confirmed)",
    "log N2 >= -0.6: OH = 8.424 + 0.030 log(R3/S2) + 0.751 log N2 + (-0.349 + 0.182 log(R3/S2) + "
    "0.508 log N2) log S2; below: 8.072 + 0.789 log(R3/S2) + 0.726 log N2 + (1.069 - 0.170 "
    "log(R3/S2) + 0.022 log N2) log S2",
    ("s2_hb", "r3_hb", "n2_hb"),
    _pilyugin2016_s,
    scale="PG16 S",
    note="Doublets are summed, over Hbeta, and dereddened. Public copies differ in the signs of "
    "-0.170 and +0.022; these are the majority's.",
)
_add(
    "pilyugin2016_r",
    "R, Pilyugin & Grebel 2016",
    "the R calibration (equation numbers not confirmed)",
    "log N2 >= -0.6: OH = 8.589 + 0.022 log(R3/R2) + 0.399 log N2 + (-0.137 + 0.164 log(R3/R2) + "
    "0.589 log N2) log R2; below: 7.932 + 0.944 log(R3/R2) + 0.695 log N2 + (0.970 - 0.291 "
    "log(R3/R2) - 0.019 log N2) log R2",
    ("r2_hb", "r3_hb", "n2_hb"),
    _pilyugin2016_r,
    scale="PG16 R",
    note="Doublets are summed, over Hbeta, and dereddened.",
)
