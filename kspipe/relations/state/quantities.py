"""What is told of the gas in each pixel: names, units, meanings, and what each rests on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from kspipe.relations.state.turbulence_models import TURBULENCE

__all__ = ["QUANTITIES", "Quantity"]

# What `Quantity.rests_on` may name.
_HEAT: Final = ("density", "field", "cosmic_rays")


@dataclass(frozen=True)
class Quantity:
    """One map.

    Attributes
    ----------
    unit : str
        In FITS spelling.
    meaning : str
    records : tuple of str
        Keys in STATE or TURBULENCE.
    rests_on : tuple of str
        Choices without which there is no value; empty where maps alone give it.
    """

    unit: str
    meaning: str
    records: tuple[str, ...]
    rests_on: tuple[str, ...]

    @property
    def follows_density(self) -> bool:
        """Whether it changes with the chosen density."""
        return "density" in self.rests_on


_T: Final = "krumholz2011_temperature"
_STATES: Final = {
    "unshielded": "unshielded gas",
    "shielded": "shielded gas of the same density",
    "equal_pressure": "shielded gas of its temperature at the pressure of unshielded gas",
}

QUANTITIES: Final[dict[str, Quantity]] = {
    "density": Quantity("cm-3", "H nuclei per cm3 of cold gas, as chosen", (), ("density",)),
    "depth_complex": Quantity(
        "",
        "optical depth of dust, centre to surface of the complex",
        ("krumholz2009_depth",),
        ("clumping",),
    ),
    "depth_transition": Quantity(
        "",
        "optical depth of dust from the surface to the HI-H2 transition",
        ("bialy2016_transition",),
        ("density", "field"),
    ),
    "column_transition": Quantity(
        "cm-2",
        "column of H nuclei from the surface to the HI-H2 transition",
        ("bialy2016_transition",),
        ("density", "field"),
    ),
    "depth_takeover": Quantity(
        "",
        "optical depth of dust at which cosmic rays take over from FUV heating",
        ("krumholz2011_takeover",),
        ("field", "cosmic_rays"),
    ),
    "temperature_unshielded": Quantity("K", "temperature of unshielded gas", (_T,), _HEAT),
    "temperature_shielded": Quantity(
        "K", "temperature of shielded gas", (_T,), (*_HEAT, "clumping")
    ),
    "temperature_fuv": Quantity(
        "K", "unshielded gas heated by FUV light alone (closed form)", (_T,), ("density", "field")
    ),
    "temperature_cosmic_rays": Quantity(
        "K",
        "shielded gas heated by cosmic rays alone (closed form)",
        (_T,),
        ("density", "cosmic_rays"),
    ),
    "temperature_isobaric": Quantity(
        "K",
        "shielded gas at the pressure of unshielded gas, its density solved for",
        ("krumholz2011_isobaric",),
        (*_HEAT, "clumping"),
    ),
    **{
        f"{name}_{state}": Quantity(unit, f"{what} of {gas}", (_T,), _HEAT)
        for name, unit, what in (
            ("jeans_mass", "solMass", "Jeans mass"),
            ("jeans_length", "pc", "Jeans length"),
            ("bonnor_ebert_mass", "solMass", "critical Bonnor-Ebert mass"),
            ("bonnor_ebert_radius", "pc", "critical Bonnor-Ebert radius"),
        )
        for state, gas in _STATES.items()
    },
    "free_fall_time": Quantity(
        "Myr", "free-fall time at the chosen density", ("free_fall_time",), ("density",)
    ),
    "linewidth": Quantity(
        "km s-1", "one-dimensional velocity dispersion of the cloud", (), ("linewidth",)
    ),
    "mach": Quantity(
        "",
        "one-dimensional Mach number in shielded gas",
        (_T,),
        (*_HEAT, "clumping", "linewidth"),
    ),
    "virial_parameter": Quantity(
        "",
        "virial parameter of the cloud",
        ("virial_parameter",),
        ("clumping", "linewidth", "cloud_radius"),
    ),
    "sonic_length": Quantity(
        "pc",
        "size on which motions are as fast as sound in shielded gas",
        ("sonic_length", _T),
        (*_HEAT, "clumping", "linewidth", "cloud_radius"),
    ),
    **{
        f"eps_ff_{model.key}": Quantity(
            "",
            f"efficiency per free-fall time, {model.label}",
            (model.key,),
            (*_HEAT, "clumping", "linewidth", "cloud_radius"),
        )
        for model in TURBULENCE
    },
}
