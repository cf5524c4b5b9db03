"""Bands whose point-spread function is known not to be the Gaussian that it is read as."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from kspipe.core.citations import cite
from kspipe.core.registry import Registry
from kspipe.kernels.geometry import beam_axes

__all__ = ["NARROW", "PSF_RECORDS", "PsfRecord", "psf_record"]

# Below this many widths of its core a point source still shows what lies beyond the core.
NARROW: Final = 2.0


@dataclass(frozen=True, kw_only=True)
class PsfRecord:
    """What a band's PSF holds beyond the Gaussian through its core.

    Attributes
    ----------
    key : str
        The tracer.
    core_arcsec : (float, float)
        Range of the core's FWHM; a map with another beam is not, or no longer, of this PSF.
    flux_outside : (float, float)
        Range of the share of a point source's flux beyond the Gaussian core.
    statement : str
        In words.
    cite : str
        Key of `kspipe.core.citations`.
    certainty : {"verified", "from memory"}
        Whether the numbers were compared with a text of the source.
    """

    key: str
    core_arcsec: tuple[float, float]
    flux_outside: tuple[float, float]
    statement: str
    cite: str
    certainty: Literal["verified", "from memory"]

    @property
    def matching_error(self) -> float:
        """Fractional 1-sigma error of intensities once such a map is matched as if Gaussian.

        Half of the flux outside: smooth emission loses nothing, a point source all of it.
        """
        return 0.25 * sum(self.flux_outside)

    def __str__(self) -> str:
        return (
            f"PSF of {self.key} read as a Gaussian: {self.statement} ({cite(self.cite)}, "
            f"{self.certainty}); matching error {self.matching_error:.2g} of the intensity"
        )


PSF_RECORDS = Registry[PsfRecord]("PSF record")

PSF_RECORDS.add(
    PsfRecord(
        key="24um",
        core_arcsec=(5.5, 7.5),
        flux_outside=(0.10, 0.20),
        statement="a core of 6.4 arcsec with diffraction rings, 10 to 20 % of the flux outside it",
        cite="engelbracht2007",
        certainty="from memory",
    )
)
PSF_RECORDS.add(
    PsfRecord(
        key="22um",
        core_arcsec=(11.0, 13.0),
        flux_outside=(0.15, 0.25),
        statement="an asymmetric core of 11.9 arcsec with diffraction rings, 15 to 25 % of the "
        "flux outside it",
        cite="wright2010",
        certainty="from memory",
    )
)
PSF_RECORDS.add(
    PsfRecord(
        key="FUV",
        core_arcsec=(4.0, 5.5),
        flux_outside=(0.08, 0.12),
        statement="a core of 4.2 to 4.6 arcsec with wide wings, about 10 % of the flux in them",
        cite="morrissey2007",
        certainty="from memory",
    )
)
PSF_RECORDS.add(
    PsfRecord(
        key="NUV",
        core_arcsec=(4.5, 6.0),
        flux_outside=(0.10, 0.15),
        statement="a core of 5.0 to 5.4 arcsec with wide wings, 10 to 15 % of the flux in them",
        cite="morrissey2007",
        certainty="from memory",
    )
)


def psf_record(tracer: str, beam_arcsec2: NDArray[np.float64]) -> PsfRecord | None:
    """Find the record of a map that still has the PSF of its band.

    Parameters
    ----------
    tracer : str
    beam_arcsec2 : (2, 2) float64 array
        Covariance of the Gaussian that its beam is read as.

    Returns
    -------
    PsfRecord or None
    """
    if tracer not in PSF_RECORDS:
        return None
    record = PSF_RECORDS.get(tracer)
    low, high = record.core_arcsec
    return record if low <= beam_axes(beam_arcsec2)[0] <= high else None
