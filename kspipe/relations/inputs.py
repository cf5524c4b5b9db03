"""What a relation may ask for, each with its unit, typical values and what to type to have it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

__all__ = ["LAW_INPUTS", "LawInput"]


@dataclass(frozen=True)
class LawInput:
    """One quantity that a relation takes.

    Attributes
    ----------
    name : str
        Under which it stands in the mapping given to `Law.predict`.
    symbol, unit : str
        For help.
    meaning : str
    typical : float
        In the disc of a nearby spiral.
    low, high : float
        Between which relations are exercised by the contract tests.
    do : str
        What a user types in a recipe to have it; empty where every recipe has it.
    """

    name: str
    symbol: str
    unit: str
    meaning: str
    typical: float
    low: float
    high: float
    do: str = ""

    @property
    def sentence(self) -> str:
        """Meaning with unit."""
        return f"{self.meaning} [{self.unit}]" if self.unit else self.meaning


LAW_INPUTS: Final = {
    entry.name: entry
    for entry in (
        LawInput(
            "sigma_gas", "Sigma_gas", "Msun/pc2", "all gas with helium, face-on", 20.0, 0.5, 2000.0
        ),
        LawInput(
            "sigma_mol",
            "Sigma_mol",
            "Msun/pc2",
            "molecular gas with helium, face-on",
            10.0,
            0.5,
            2000.0,
            do="add a CO map and a table [gas] with alpha_co",
        ),
        LawInput("oh", "OH", "", "metallicity, 12 + log10(O/H)", 8.6, 7.5, 9.3),
        LawInput(
            "sigma_star",
            "Sigma_star",
            "Msun/pc2",
            "stellar surface density, face-on",
            100.0,
            1.0,
            3000.0,
            do='type a table [stars] with record and map, and add that map ("3.6um" or "W1")',
        ),
        LawInput(
            "rho_sd",
            "rho_sd",
            "Msun/pc3",
            "density of stars and dark matter in the midplane",
            0.05,
            1e-3,
            2.0,
            do='type a table [midplane] with density = "0.05 Msun/pc3", or with scale_height, '
            "definition and dark_matter beside a table [stars]",
        ),
        LawInput(
            "g0",
            "G0'",
            "",
            "far-ultraviolet radiation field over that of the solar neighbourhood",
            1.0,
            0.05,
            100.0,
            do='type a table [radiation_field] with field = 1.0 and unit = "solar neighbourhood" '
            '("Draine", "Habing"), or with origin = "star formation"',
        ),
        LawInput(
            "omega",
            "Omega",
            "km/s/kpc",
            "angular velocity of rotation",
            30.0,
            3.0,
            300.0,
            do="type a table [rotation] with radius_kpc = [...] and velocity_km_s = [...]",
        ),
        LawInput(
            "beta",
            "beta",
            "",
            "logarithmic slope of the rotation curve",
            0.0,
            -0.4,
            1.0,
            do="type a table [rotation] with radius_kpc = [...] and velocity_km_s = [...]",
        ),
    )
}
