"""Star-formation rate from an unobscured tracer and its dust-reprocessed part."""

from __future__ import annotations

from types import MappingProxyType
from typing import Final

from kspipe.conversions.record import Certainty
from kspipe.conversions.star_formation import (
    STAR_FORMATION,
    StarFormation,
    from_luminosities,
    hybrid,
)
from kspipe.conversions.star_formation_single import (
    CALZETTI,
    KENNICUTT2012_FUV,
    KENNICUTT2012_HALPHA,
    KENNICUTT2012_NUV,
    KENNICUTT_EVANS,
)

_WHOLE = (
    "Fitted to whole galaxies. Old stars heat part of the 24 um: too high where star formation "
    "is faint."
)

STAR_FORMATION.add(
    StarFormation(
        key="leroy2008_fuv_24um",
        label="FUV + 24 um",
        cite="leroy2008",
        where="Appendix D",
        formula="Sigma_SFR = (8.1e-2 I_FUV + 3.2e-3 I_24) cos i  [Msun/yr/kpc2; MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        family="Salim et al. 2007",
        note="FUV corrected for the foreground. Old stars heat part of the 24 um: too high where "
        "star formation is faint. Both coefficients were recomputed from 0.68e-28 and from "
        "1.3 x 5.3e-42 x 0.031.",
        coefficients=MappingProxyType({"FUV": 8.1e-2, "24um": 3.2e-3}),
    )
)
STAR_FORMATION.add(
    StarFormation(
        key="leroy2012_halpha_24um",
        label="Halpha + 24 um",
        cite="leroy2012",
        where="the surface-brightness form of Calzetti et al. 2007",
        formula="Sigma_SFR = (634 I_Halpha + 0.0025 I_24) cos i  "
        "[Msun/yr/kpc2; erg/s/cm2/sr, MJy/sr]",
        certainty="from memory",
        imf="Kroupa",
        family=CALZETTI,
        note="Halpha free of [NII] and corrected for the foreground. Calibrated on star-forming "
        "knots: on kpc scales the 24 um part over-corrects faint regions.",
        coefficients=MappingProxyType({"Halpha": 634.0, "24um": 0.0025}),
    )
)
STAR_FORMATION.add(
    from_luminosities(
        "calzetti2007_halpha_24um",
        {"Halpha": 5.3e-42, "24um": 5.3e-42 * 0.031},
        "SFR = 5.3e-42 [L(Halpha) + 0.031 L(24um)]  [Msun/yr; erg/s]",
        cite="calzetti2007",
        where="the combined calibration (equation number not confirmed)",
        certainty="from memory",
        family=CALZETTI,
        note="Star-forming knots. 0.031 was compared with a published table, 5.3e-42 is from "
        "memory.",
    )
)
STAR_FORMATION.add(
    hybrid(
        "hao2011_fuv_24um",
        KENNICUTT2012_FUV,
        "24um",
        3.89,
        "log10 SFR = log10 [L(FUV) + 3.89 L(24um)] - 43.35  [Msun/yr; erg/s]",
        family=KENNICUTT_EVANS,
        certainty="verified",
        cite="hao2011",
        where="as in Kennicutt & Evans 2012, Table 2",
        scatter_dex=0.13,
        note=f"{_WHOLE} Zhu et al. 2008 find 6.31 for 3.89.",
    )
)
STAR_FORMATION.add(
    hybrid(
        "hao2011_nuv_24um",
        KENNICUTT2012_NUV,
        "24um",
        2.26,
        "log10 SFR = log10 [L(NUV) + 2.26 L(24um)] - 43.17  [Msun/yr; erg/s]",
        family=KENNICUTT_EVANS,
        certainty="from memory",
        cite="hao2011",
        where="as in Kennicutt & Evans 2012, Table 2",
        note=_WHOLE,
    )
)
STAR_FORMATION.add(
    hybrid(
        "kennicutt2009_halpha_24um",
        KENNICUTT2012_HALPHA,
        "24um",
        0.020,
        "log10 SFR = log10 [L(Halpha) + 0.020 L(24um)] - 41.27  [Msun/yr; erg/s]",
        family=KENNICUTT_EVANS,
        certainty="verified",
        cite="kennicutt2009",
        where="as in Kennicutt & Evans 2012, Table 2",
        scatter_dex=0.12,
        note=_WHOLE,
    )
)

# With the total infrared and the radio continuum; L(1.4GHz) per Hz.
_MORE: Final[tuple[tuple[str, StarFormation, str, float, Certainty, float | None], ...]] = (
    ("hao2011_fuv_tir", KENNICUTT2012_FUV, "TIR", 0.46, "from memory", 0.09),
    ("hao2011_nuv_tir", KENNICUTT2012_NUV, "TIR", 0.27, "from memory", None),
    ("kennicutt2009_halpha_tir", KENNICUTT2012_HALPHA, "TIR", 0.0024, "from memory", None),
    ("hao2011_fuv_1p4ghz", KENNICUTT2012_FUV, "1.4GHz", 7.2e14, "verified", 0.14),
    ("hao2011_nuv_1p4ghz", KENNICUTT2012_NUV, "1.4GHz", 4.2e14, "from memory", None),
    ("kennicutt2009_halpha_1p4ghz", KENNICUTT2012_HALPHA, "1.4GHz", 0.39e13, "from memory", None),
)
for _key, _base, _dust, _weight, _certainty, _scatter in _MORE:
    (_band,) = _base.luminosity
    _log_c = {"FUV": 43.35, "NUV": 43.17, "Halpha": 41.27}[_band]
    _attenuation = (
        f" The same as A_{_band} = 2.5 log10[1 + {_weight:g} L(TIR) / L({_band})]."
        if _dust == "TIR"
        else ""
    )
    STAR_FORMATION.add(
        hybrid(
            _key,
            _base,
            _dust,
            _weight,
            f"log10 SFR = log10 [L({_band}) + {_weight:g} L({_dust})] - {_log_c}  [Msun/yr; erg/s"
            f"{'; L(1.4GHz) in erg/s/Hz' if _dust == '1.4GHz' else ''}]",
            family=KENNICUTT_EVANS,
            certainty=_certainty,
            cite=_key.split("_", maxsplit=1)[0],
            where="as in Kennicutt & Evans 2012, Table 2",
            scatter_dex=_scatter,
            note=f"Fitted to whole galaxies.{_attenuation}",
        )
    )
