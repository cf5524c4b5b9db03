"""What records may ask for besides an intensity, each with its unit and a typical value."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

__all__ = ["INPUTS", "Input"]


@dataclass(frozen=True)
class Input:
    """One quantity that a record takes.

    Attributes
    ----------
    name : str
        Under which it stands in the mapping that a record is given.
    symbol : str
        As it stands in formulae.
    meaning : str
        For messages and help, with the unit.
    typical : float
        In the disc of a nearby spiral; the worked numbers of help use it.
    low, high : float
        Between which records are exercised by the contract tests.
    do : str
        What a user types to have it; empty where every recipe has it.
    """

    name: str
    symbol: str
    meaning: str
    typical: float
    low: float
    high: float
    do: str = ""


INPUTS: Final = {
    entry.name: entry
    for entry in (
        Input("oh", "OH", "metallicity, 12 + log10(O/H)", 8.5, 8.0, 8.8),
        Input(
            "alpha_co",
            "alpha_CO",
            "alpha_CO [Msun/pc2 per K km/s of CO(1-0)]",
            4.35,
            0.5,
            50.0,
            do="type alpha_co = 4.35 in [gas]",
        ),
        Input("z_prime", "Z'", "metallicity, 10^(OH - 8.69)", 0.65, 0.2, 1.3),
        Input("n2", "N2", "log10 [NII]6583 / Halpha", -0.6, -1.4, -0.35),
        Input("o3n2", "O3N2", "log10 ([OIII]5007 / Hbeta) / ([NII]6583 / Halpha)", 0.4, -0.3, 1.6),
        Input("n2s2", "N2S2", "log10 [NII]6583 / [SII]6717+31", -0.1, -0.6, 0.4),
        Input("d16_y", "y", "N2S2 + 0.264 N2", -0.26, -0.9, 0.3),
        Input("r2_hb", "R2", "[OII]3727+29 / Hbeta", 2.0, 0.5, 5.0),
        Input("r3_hb", "R3", "[OIII]4959+5007 / Hbeta", 1.5, 0.2, 6.0),
        Input("n2_hb", "N2", "[NII]6548+84 / Hbeta", 1.0, 0.05, 2.0),
        Input("s2_hb", "S2", "[SII]6717+31 / Hbeta", 0.9, 0.2, 2.0),
        Input(
            "sigma_star",
            "Sigma_star",
            "stellar surface density, face-on, at the beam of the gas [Msun/pc2]",
            200.0,
            1.0,
            5000.0,
            do='type a table [stars] with record and map, and add that map ("3.6um" or "W1")',
        ),
        Input(
            "sigma_total",
            "Sigma_total",
            "surface density of stars and all gas, face-on, at the beam of the gas [Msun/pc2]",
            250.0,
            1.0,
            6000.0,
        ),
        Input(
            "sigma_sfr",
            "Sigma_SFR",
            "star-formation rate surface density, face-on [Msun/yr/kpc2]",
            0.01,
            1e-4,
            1.0,
        ),
        Input(
            "ms_offset_dex",
            "log Delta(MS)",
            "specific star-formation rate of the galaxy over that of the main sequence [dex]",
            0.2,
            -0.5,
            1.0,
            do='type ms_offset = "0.2 dex" in [gas]',
        ),
        Input(
            "g0_over_n",
            "G0'/n",
            "radiation field (Habing) over density of hydrogen nuclei [cm3]",
            0.01,
            1e-3,
            1.0,
            do="type g0_over_n = 0.01 in [gas]",
        ),
    )
}
