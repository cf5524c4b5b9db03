"""A recipe is checked whole, before any map is opened, and says all its faults at once."""

from __future__ import annotations

import copy
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from helpers import CHECKOUT, demo_recipe

from kspipe.core.errors import KspipeWarning, RecipeError
from kspipe.maps.stored import StoredImage
from kspipe.recipe import Recipe, load_recipe, parse_recipe
from kspipe.stages.plan import make_plan

HA = {"tracer": "Halpha", "file": "halpha.fits", "noise": "1.5e-17 erg/s/cm2/arcsec2"}
LAW, LAW_KEY = "relations__shielding_kpc", "relations.shielding_kpc"
W4 = {"tracer": "22um", "file": "mir24.fits", "noise": "0.08 MJy/sr"}


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("recipe")


@pytest.fixture(scope="module")
def good(folder) -> dict[str, Any]:
    return demo_recipe(folder)


@pytest.fixture(autouse=True)
def no_map_is_opened(request, monkeypatch) -> None:
    """Before a recipe is valid, opening a map is a defect."""
    if "opens_maps" in request.fixturenames:
        return

    def refuse(*_: Any, **__: Any) -> None:
        raise AssertionError("a map was opened")

    monkeypatch.setattr(fits, "open", refuse)
    monkeypatch.setattr(StoredImage, "find", refuse)


@pytest.fixture
def opens_maps() -> None:
    """Leave maps open to be read."""


def changed(good: dict[str, Any], **changes: Any) -> dict[str, Any]:
    """Copy with ``table__key=value``; ... takes a key out, and tables are made where absent."""
    raw = copy.deepcopy(good)
    for path, value in changes.items():
        *tables, key = path.split("__")
        table = raw
        for name in tables:
            table = table.setdefault(name, {})
        if value is ...:
            table.pop(key, None)
        else:
            table[key] = value
    return raw


def faults_of(raw: dict[str, Any], folder: Path) -> dict[str, str]:
    """Message by key; there must be at least one."""
    with pytest.raises(RecipeError) as caught:
        parse_recipe(raw, folder=folder)
    assert caught.value.exit_code == 2
    return {fault.where: str(fault) for fault in caught.value.faults}


# --- Good recipes ------------------------------------------------------------------------------


def test_the_short_recipe_is_read(good, folder) -> None:
    recipe = parse_recipe(good, folder=folder)
    # The numbers that recipes/orrinda_short.toml shows.
    assert recipe.galaxy.distance.value == 8.6
    assert recipe.galaxy.centre.degrees == pytest.approx((48.1, -27.31))
    assert recipe.galaxy.r25.value == pytest.approx(156.0)
    # 1 arcsec at 8.6 Mpc: 8.6e6 pi / 648000 = 41.694 pc.
    assert recipe.galaxy.pc_per_arcsec == pytest.approx(41.694, abs=5e-4)
    assert recipe.grid.fwhm_arcsec(1.0) == 15.0
    assert recipe.maps["hi"].file == (folder / "hi.fits").resolve()
    assert recipe.has_molecular
    assert recipe.relations["shielding_kpc"].parameters["clumping"] == 5.0
    assert recipe.map_of("CO(1-0)", "CO(2-1)") == "co"
    assert recipe.map_of("NUV") is None


@pytest.mark.parametrize(
    "file", sorted((CHECKOUT / "recipes").glob("*.toml")), ids=lambda f: f.stem
)
def test_shipped_recipes_are_valid(file) -> None:
    recipe = load_recipe(file)
    assert recipe.path == file
    assert all(table.file.is_absolute() for table in recipe.maps.values())


@pytest.mark.parametrize(
    ("typed", "pc_per_arcsec", "arcsec"),
    [
        ("15 arcsec", 1.0, 15.0),
        ("0.5 arcmin", 1.0, 30.0),
        ("1.11 deg", 1.0, 3996.0),
        ("600 pc", 40.0, 15.0),
        ("0.6 kpc", 40.0, 15.0),
        ("common", 40.0, None),
    ],
)
def test_beams_of_the_grid(good, folder, typed, pc_per_arcsec, arcsec) -> None:
    recipe = parse_recipe(changed(good, grid__beam=typed), folder=folder)
    assert recipe.grid.fwhm_arcsec(pc_per_arcsec) == (arcsec and pytest.approx(arcsec))


@pytest.mark.parametrize(
    ("typed", "beam"),
    [
        ("4.6 arcsec", (4.6, 4.6, 0.0)),
        ("1 arcmin", (60.0, 60.0, 0.0)),
        ("13.4 x 10.6 arcsec, pa 35 deg", (13.4, 10.6, 35.0)),
        ("13.4 x 10.6 arcsec, pa -145 deg", (13.4, 10.6, 35.0)),
        ("0.5 x 0.25 deg, pa 0 deg", (1800.0, 900.0, 0.0)),
    ],
)
def test_beams_of_a_map(good, folder, typed, beam) -> None:
    recipe = parse_recipe(changed(good, maps__fuv__beam=typed), folder=folder)
    assert recipe.maps["fuv"].request("fuv").beam == pytest.approx(beam)


def test_defaults_follow_the_tracer(good, folder) -> None:
    """Radio maps are sampled at points with noise like the beam, detector maps are not."""
    requests = {n: t.request(n) for n, t in parse_recipe(good, folder=folder).maps.items()}
    assert [requests[n].averages_pixels for n in ("hi", "co", "fuv", "ir")] == [
        False,
        False,
        True,
        True,
    ]
    correlated = [requests[n].noise.correlated for n in ("hi", "co", "fuv", "ir")]
    assert correlated == ["beam", "beam", "none", "none"]
    raw = changed(
        good,
        maps__hi__averages_pixels=True,
        maps__co__noise={"level": "measure", "correlated": "none"},
    )
    recipe = parse_recipe(raw, folder=folder)
    assert recipe.maps["hi"].request("hi").averages_pixels
    assert recipe.maps["co"].request("co").noise.correlated == "none"
    assert recipe.maps["co"].request("co").noise.kind == "measure"


def test_noise_of_every_form(good, folder) -> None:
    recipe = parse_recipe(changed(good, maps__ir__noise="0.12 kJy/sr"), folder=folder)
    noise = recipe.maps["ir"].request("ir").noise
    assert (noise.kind, noise.value, noise.unit) == ("value", 0.12, "kJy/sr")
    noise = recipe.maps["hi"].request("hi").noise
    assert (noise.kind, noise.stated) == ("file", "sigma")
    assert noise.file == (folder / "hi_noise.fits").resolve()
    form = {"file": "hi_noise.fits", "is": "inverse variance", "correlated": "none"}
    noise = parse_recipe(changed(good, maps__hi__noise=form), folder=folder).maps["hi"]
    assert noise.request("hi").noise.stated == "inverse variance"


def test_errors_that_pixels_share(good, folder) -> None:
    raw = changed(good, maps__ir__calibration_error="5 %", maps__ir__pedestal_error="5 kJy/sr")
    request = parse_recipe(raw, folder=folder).maps["ir"].request("ir")
    assert request.calibration_error == 0.05
    assert request.pedestal_error == (5.0, "kJy/sr")


def test_one_law_may_appear_twice(good, folder) -> None:
    raw = changed(good, relations__again={"law": "krumholz2009", "clumping": 1})
    relations = parse_recipe(raw, folder=folder).relations
    assert [relations[n].parameters["clumping"] for n in ("shielding_kpc", "again")] == [5.0, 1.0]
    # The default is known as one.
    assert relations["again"].defaults == ("anchor_oh",)
    assert relations["again"].parameters["anchor_oh"] == 8.69


def test_relations_may_be_left_out(good, folder) -> None:
    assert parse_recipe(changed(good, relations=...), folder=folder).relations == {}


# --- The two forms of gas ----------------------------------------------------------------------


def test_atomic_only_is_typed(good, folder) -> None:
    recipe = parse_recipe(changed(good, gas="atomic only", maps__co=...), folder=folder)
    assert recipe.gas == "atomic only"
    assert not recipe.has_molecular


@pytest.mark.parametrize(
    ("changes", "key", "why"),
    [
        ({"gas": ...}, "gas", "missing"),
        ({"gas": "atomic"}, "gas", "'atomic'"),
        ({"gas": 3}, "gas", "3"),
        ({"gas": ["atomic only"]}, "gas", "table"),
        ({"gas": "atomic only"}, "gas", "maps.co is CO(2-1)"),
        ({"maps__co": ...}, "gas.alpha_co", 'gas = "atomic only"'),
        ({"gas__alpha_co": ...}, "gas", "give either alpha_co"),
        ({"gas__alpha_co": "bolato2013_galactic"}, "gas.alpha_co", '"bolatto2013_galactic"'),
        ({"gas__alpha_co": -4.35}, "gas.alpha_co", "alpha_CO between 0 and 1000"),
        ({"gas__line_ratio": ...}, "gas.line_ratio", "CO(2-1) needs its ratio"),
        ({"gas__line_ratio": 0}, "gas.line_ratio", "ratio between 0 and 10"),
        ({"gas__line_ratio": -0.65}, "gas.line_ratio", "ratio between 0 and 10"),
        ({"maps__co__tracer": "CO(1-0)"}, "gas.line_ratio", "takes no line ratio"),
        ({"maps__hi": ...}, "maps", "no map of HI"),
    ],
)
def test_faults_of_the_gas(good, folder, changes, key, why) -> None:
    faults = faults_of(changed(good, **changes), folder)
    assert list(faults) == [key]
    assert why in faults[key]


def test_one_co_line_only(good, folder) -> None:
    second = dict(good["maps"]["co"], tracer="CO(1-0)")
    faults = faults_of(changed(good, maps__co10=second), folder)
    assert "the molecular gas takes one CO line" in faults["maps"]


# --- Unknown keys ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "key", "near"),
    [
        ({"galaxi": {}}, "galaxi", "galaxy"),
        ({"galaxy__distanc": "8 Mpc"}, "galaxy.distanc", "distance"),
        ({"grid__pixel_per_beam": 3}, "grid.pixel_per_beam", "pixels_per_beam"),
        ({"maps__hi__nois": "measure"}, "maps.hi.nois", "noise"),
        ({"maps__hi__calibration": "5 %"}, "maps.hi.calibration", "calibration_error"),
        ({"maps__hi__noise__hdus": 1}, "maps.hi.noise.hdus", "hdu"),
        ({"metallicity__gradent": "0 dex/kpc"}, "metallicity.gradent", "gradient"),
        ({"foreground__ebv_": 0}, "foreground.ebv_", "ebv"),
        ({"foreground__uv": "bianci2017"}, "foreground.uv", "bianchi2017"),
        ({"gas__line_ratios": 0.6}, "gas.line_ratios", "line_ratio"),
        ({"star_formation__calibrations": ""}, "star_formation.calibrations", "calibration"),
        (
            {"star_formation__calibration": "leroy2008_fuv_24"},
            "star_formation.calibration",
            "leroy2008_fuv_24um",
        ),
        ({"star_formation__maps": ["fvu", "ir"]}, "star_formation.maps", "fuv"),
        ({"comparison": {"low_sn": 3}}, "comparison.low_sn", "low_snr"),
        ({"maps__hi__tracer": "H1"}, "maps.hi.tracer", "HI"),
        ({"relations__shielding_kpc__clump": 5}, "relations.shielding_kpc.clump", "clumping"),
        (
            {"relations__shielding_kpc__law": "krumholz09"},
            "relations.shielding_kpc.law",
            "krumholz2009",
        ),
    ],
)
def test_an_unknown_word_is_answered_with_the_nearest(good, folder, changes, key, near) -> None:
    faults = faults_of(changed(good, **changes), folder)
    assert f'did you mean "{near}"?' in faults[key]
    assert f"[{key}]" in faults[key]


# --- All faults at once ------------------------------------------------------------------------


def test_all_faults_at_once_with_full_keys(good, folder) -> None:
    raw = changed(
        good,
        seed="one",
        galaxy__distance="8.3 arcmin",
        galaxy__inclination="95 deg",
        grid__beam="15",
        maps__hi__file="nowhere.fits",
        maps__co__noise="0.2",
        maps__ir__tracer="24 um",
        metallicity__oh=12.0,
        foreground__ebv=...,
        gas__alpha_co="mine",
        star_formation__calibration="yours",
        relations__shielding_kpc__clumping=0.5,
        comparison={"low_snr": -1},
        colour="red",
    )
    faults = faults_of(raw, folder)
    assert set(faults) == {
        "seed",
        "galaxy.distance",
        "galaxy.inclination",
        "grid.beam",
        "maps.hi.file",
        "maps.co.noise",
        "maps.ir.tracer",
        "metallicity.oh",
        "foreground.ebv",
        "gas.alpha_co",
        "star_formation.calibration",
        "relations.shielding_kpc.clumping",
        "comparison.low_snr",
        "colour",
    }


def test_an_empty_recipe_names_every_table(folder) -> None:
    faults = faults_of({}, folder)
    needed = {
        "seed",
        "galaxy",
        "grid",
        "maps",
        "metallicity",
        "foreground",
        "gas",
        "star_formation",
    }
    assert set(faults) == needed


def test_missing_files_are_in_the_same_message(good, folder) -> None:
    raw = changed(
        good,
        maps__hi__file="a.fits",
        maps__ir__noise={"file": "b.fits", "is": "sigma"},
        metallicity={"map": "c.fits"},
        galaxy__distance="8.3",
    )
    faults = faults_of(raw, folder)
    assert set(faults) == {
        "maps.hi.file",
        "maps.ir.noise.file",
        "metallicity.map",
        "galaxy.distance",
    }
    for key, name in (
        ("maps.hi.file", "a.fits"),
        ("maps.ir.noise.file", "b.fits"),
        ("metallicity.map", "c.fits"),
    ):
        # With the place where it was looked for.
        assert str(folder.resolve() / name) in faults[key]


def test_files_in_memory_may_be_missing(good, folder) -> None:
    raw = changed(good, maps__hi__file="a.fits", maps__hi__noise__file="b.fits")
    assert set(faults_of(raw, folder)) == {"maps.hi.file", "maps.hi.noise.file"}
    recipe = parse_recipe(raw, folder=folder, in_memory=frozenset({"hi"}))
    assert recipe.maps["hi"].tracer == "HI"


# --- One table after the other -----------------------------------------------------------------


@pytest.mark.parametrize(
    ("changes", "key", "why"),
    [
        # Numbers that must be typed because no default is harmless.
        ({"foreground": ...}, "foreground", "missing"),
        ({"foreground__ebv": ...}, "foreground.ebv", "missing"),
        ({"foreground__ebv": -0.1}, "foreground.ebv", "E(B-V)"),
        ({"foreground__ebv": 5}, "foreground.ebv", "E(B-V)"),
        ({"maps__ha": HA}, "maps.ha.nii_ratio", "nii_ratio = 0"),
        ({"maps__fuv__nii_ratio": 0.3}, "maps.fuv.nii_ratio", "belongs to a map of Halpha"),
        ({"maps__fuv__as_24um": 1.0}, "maps.fuv.as_24um", "belongs to a map of 22um"),
        ({"maps__hi__noise": ...}, "maps.hi.noise", "missing"),
        ({"maps__hi__noise": "12"}, "maps.hi.noise", "with its unit"),
        ({"maps__hi__noise": "-1 K km/s"}, "maps.hi.noise", "not a noise"),
        ({"maps__hi__noise": "inf K km/s"}, "maps.hi.noise", "not a noise"),
        ({"maps__hi__noise": 12}, "maps.hi.noise", "not a noise"),
        ({"maps__hi__noise": {"file": "hi_noise.fits"}}, "maps.hi.noise.is", "missing"),
        ({"maps__hi__noise__is": "rms"}, "maps.hi.noise.is", "'sigma', 'variance'"),
        ({"maps__hi__pedestal_error": "measure"}, "maps.hi.pedestal_error", "not a"),
        ({"maps__hi__calibration_error": 0.05}, "maps.hi.calibration_error", '"5 %"'),
        ({"maps__hi__calibration_error": "1e999 %"}, "maps.hi.calibration_error", "percentage"),
        ({"maps__hi__zeros": "nothing"}, "maps.hi.zeros", "'flux' or 'blank'"),
        ({"maps__hi__beam": "13"}, "maps.hi.beam", "13.4 x 10.6 arcsec, pa 35 deg"),
        ({"maps__hi__beam": 13.0}, "maps.hi.beam", "not a beam"),
        ({"maps__hi__beam": "10 x 12 arcsec, pa 0 deg"}, "maps.hi.beam", "not a beam"),
        ({"maps__hi__beam": "12 x 10 arcsec"}, "maps.hi.beam", "not a beam"),
        ({"maps__hi__beam": "-5 arcsec"}, "maps.hi.beam", "not a beam"),
        ({"maps__hi__hdu": "first"}, "maps.hi.hdu", "'first'"),
        ({"maps__hi": "hi.fits"}, "maps.hi", "not a table"),
        # The galaxy.
        ({"galaxy__distance": "0 Mpc"}, "galaxy.distance", "positive distance"),
        ({"galaxy__inclination": "41"}, "galaxy.inclination", "no unit"),
        ({"galaxy__inclination": "90 deg"}, "galaxy.inclination", "0 to 90 deg"),
        ({"galaxy__inclination": "-1 deg"}, "galaxy.inclination", "0 to 90 deg"),
        ({"galaxy__centre": "13 33 38 -21 46 12"}, "galaxy.centre", "not a position"),
        ({"galaxy__r25": "2 kpc"}, "galaxy.r25", "kind arcsec"),
        ({"galaxy__velocity": 640}, "galaxy.velocity", "no unit"),
        ({"galaxy__velocity_convention": "optica"}, "galaxy.velocity_convention", "'optical'"),
        ({"galaxy__name": ""}, "galaxy.name", "character"),
        # The grid.
        ({"grid__beam": 15}, "grid.beam", '"common"'),
        ({"grid__beam": "-15 arcsec"}, "grid.beam", "not a beam"),
        ({"grid__beam": "15 Mpc/s"}, "grid.beam", "not a beam"),
        ({"grid__pixels_per_beam": 1}, "grid.pixels_per_beam", "2"),
        ({"grid__minimum_coverage": 0}, "grid.minimum_coverage", "0"),
        ({"grid__minimum_coverage": 1.1}, "grid.minimum_coverage", "1"),
        ({"grid__size": "0 arcmin"}, "grid.size", "positive angle"),
        # Metallicity.
        ({"metallicity__oh": 0.02}, "metallicity.oh", "between 6.5 and 9.5"),
        ({"metallicity__oh": "8.69 dex"}, "metallicity.oh", "has the unit"),
        ({"metallicity__gradient": -0.045}, "metallicity.gradient", "-0.045"),
        ({"metallicity__gradient": "-0.045 dex"}, "metallicity.gradient", "dex/kpc"),
        ({"metallicity__gradient": "-0.045 dex/Mpc"}, "metallicity.gradient", "dex/kpc"),
        ({"metallicity__oh": ...}, "metallicity", "either oh"),
        ({"metallicity__map": "hi.fits"}, "metallicity", "either oh"),
        (
            {"metallicity__gradient": "-0.3 dex/r25", "galaxy__r25": ...},
            "metallicity.gradient",
            "r25",
        ),
        ({"metallicity__scale": "PP04"}, "metallicity.scale", 'did you mean "PP04 N2"'),
        # What an alpha_CO record needs, and what it does not.
        ({"gas__alpha_co": "accurso2017"}, "gas.alpha_co", 'ms_offset = "0.2 dex"'),
        ({"gas__alpha_co": "accurso2017"}, "gas.alpha_co", "do without: amorin2016"),
        ({"gas__alpha_co": "wolfire2010"}, "gas.alpha_co", "g0_over_n = 0.01"),
        ({"gas__alpha_co": "bolatto2013_eq31"}, "gas.alpha_co", "stellar surface density"),
        ({"gas__alpha_co": "schinnerer2024"}, "gas.alpha_co", "do without: amorin2016"),
        ({"gas__ms_offset": "0.2 dex"}, "gas.ms_offset", "belongs to accurso2017"),
        ({"gas__g0_over_n": 0.01}, "gas.g0_over_n", "belongs to wolfire2010"),
        ({"gas__alpha_co": "wolfire2010", "gas__g0_over_n": 0}, "gas.g0_over_n", "positive"),
        ({"gas__alpha_co": "accurso2017", "gas__ms_offset": 0.2}, "gas.ms_offset", "no unit"),
        # Stars, and the opacity of HI.
        ({"gas__alpha_co": "schinnerer2024"}, "gas.alpha_co", "table [stars]"),
        ({"stars": {"map": "ir"}}, "stars.record", "missing"),
        ({"stars": {"record": "leroy2019_36um", "map": "irr"}}, "stars.map", 'mean "ir"'),
        ({"stars": {"record": "leroy2019_36um", "map": "ir"}}, "stars.map", "is 24um"),
        (
            {"stars": {"record": "leroy2019", "map": "ir"}},
            "stars.record",
            'mean "leroy2019_',
        ),
        ({"gas__hi_opacity": 0.9}, "gas.hi_opacity", "from 1 (optically thin) to 3"),
        ({"gas__hi_opacity": "1.1 K"}, "gas.hi_opacity", "has the unit"),
        # Line ratios by key.
        ({"gas__line_ratio": "leroy2022"}, "gas.line_ratio", 'mean "leroy2022_r'),
        ({"gas__line_ratio": "leroy2022_r31"}, "gas.line_ratio", "records for it: denbrok2021"),
        ({"gas__line_ratio": "leroy2022_r32"}, "gas.line_ratio", "CO(3-2) over CO(2-1)"),
        ({"gas__line_ratio": 0}, "gas.line_ratio", "between 0 and 10"),
        ({"gas__line_ratio": "0.65 K"}, "gas.line_ratio", "has the unit"),
        ({"gas__line_ratio": ...}, "gas.line_ratio", "schinnerer2024_r21"),
        (
            {"maps__co__tracer": "CO(1-0)", "gas__line_ratio": "leroy2022_r21"},
            "gas.line_ratio",
            "remove the key",
        ),
        # Star formation.
        ({"star_formation__maps": ["fuv"]}, "star_formation.maps", "takes FUV and 24um"),
        ({"star_formation__maps": ["fuv", "fuv"]}, "star_formation.maps", "takes FUV and 24um"),
        ({"star_formation__maps": ["fuv", "hi"]}, "star_formation.maps", "takes FUV and 24um"),
        ({"star_formation__maps": []}, "star_formation.maps", "none"),
        ({"star_formation__maps": "fuv"}, "star_formation.maps", "fuv"),
        # Conventions of star formation and foreground.
        ({"star_formation__imf": "Scalo"}, "star_formation.imf", "'Kroupa'"),
        ({"star_formation__imf": "Salpeter"}, "star_formation.imf", "Kroupa IMF, not Salpeter"),
        ({"foreground__uv": "odonnell1994"}, "foreground.uv", "records for it: bianchi2017"),
        ({"foreground__ebv_scale": "sfd"}, "foreground.ebv_scale", "'SFD' or 'SF11'"),
        # Relations.
        ({f"{LAW}__law": ...}, f"{LAW_KEY}.law", "missing"),
        ({f"{LAW}__clumping": ...}, f"{LAW_KEY}.clumping", "missing"),
        ({f"{LAW}__clumping": 0.9}, f"{LAW_KEY}.clumping", "1 and 100"),
        ({f"{LAW}__clumping": 101}, f"{LAW_KEY}.clumping", "1 and 100"),
        ({f"{LAW}__clumping": "5"}, f"{LAW_KEY}.clumping", "'5'"),
        ({f"{LAW}__clumping": True}, f"{LAW_KEY}.clumping", "True"),
        ({f"{LAW}__clumping": float("nan")}, f"{LAW_KEY}.clumping", "nan"),
        ({f"{LAW}__anchor_oh": 7.0}, f"{LAW_KEY}.anchor_oh", "8 and 9.5"),
        ({"relations": {"a-b": {"law": "krumholz2009"}}}, "relations.a-b", "letters"),
        ({"relations": []}, "relations", "not a table"),
        ({"seed": -1}, "seed", "-1"),
        ({"seed": 1.5}, "seed", "1.5"),
        ({"seed": True}, "seed", "True"),
        ({"seed": ...}, "seed", "missing"),
        ({"comparison": {"low_snr": float("nan")}}, "comparison.low_snr", "nan"),
    ],
)
def test_single_faults(good, folder, changes, key, why) -> None:
    faults = faults_of(changed(good, **changes), folder)
    assert list(faults) == [key]
    assert why in faults[key]


@pytest.mark.parametrize("maps", [{}, [], "hi.fits", 1, ...])
def test_a_recipe_without_maps(good, folder, maps) -> None:
    with pytest.raises(RecipeError, match=r"\[maps\] no map is listed"):
        parse_recipe(changed(good, maps=maps), folder=folder)


def test_a_bound_of_a_relation_is_allowed(good, folder) -> None:
    for clumping in (1, 100):
        parse_recipe(changed(good, **{f"{LAW}__clumping": clumping}), folder=folder)


def test_one_map_per_tracer(good, folder) -> None:
    faults = faults_of(changed(good, maps__hi2=good["maps"]["hi"]), folder)
    assert set(faults) == {"maps.hi.tracer", "maps.hi2.tracer"}
    assert "HI is the tracer of 2 maps" in faults["maps.hi2.tracer"]


def test_22_um_stands_in_for_24_um_when_told_how(good, folder) -> None:
    raw = changed(good, maps__ir=W4)
    faults = faults_of(raw, folder)
    assert list(faults) == ["maps.ir.as_24um"]
    assert "calibrated on 24 um" in faults["maps.ir.as_24um"]
    recipe = parse_recipe(changed(raw, maps__ir__as_24um=1.1), folder=folder)
    assert recipe.maps["ir"].as_24um.value == 1.1


def test_zero_may_be_typed(good, folder) -> None:
    raw = changed(
        good, maps__ha={**HA, "nii_ratio": 0}, foreground__ebv=0, galaxy__inclination="0 deg"
    )
    recipe = parse_recipe(raw, folder=folder)
    assert recipe.maps["ha"].nii_ratio.value == 0.0
    assert recipe.galaxy.cos_i == 1.0


# --- Inclination -------------------------------------------------------------------------------


def test_edge_on_galaxies_get_no_relations(good, folder) -> None:
    raw = changed(good, galaxy__inclination="76 deg")
    faults = faults_of(raw, folder)
    assert list(faults) == ["galaxy.inclination"]
    assert "above 75 deg" in faults["galaxy.inclination"]
    recipe = parse_recipe(changed(raw, relations=...), folder=folder)
    assert recipe.galaxy.inclination.value == 76.0
    assert parse_recipe(changed(raw, galaxy__inclination="75 deg"), folder=folder).relations


@pytest.mark.parametrize(("inclination", "percent"), [(65.1, 3.8), (70.0, 4.8), (74.9, 6.5)])
def test_inclined_galaxies_are_warned_of(good, folder, opens_maps, inclination, percent) -> None:
    # d ln cos i / di = tan i: tan(70 deg) x pi/180 = 4.8 % per degree.
    assert 100 * np.tan(np.radians(inclination)) * np.pi / 180 == pytest.approx(percent, abs=0.05)
    raw = changed(good, galaxy__inclination=f"{inclination} deg")
    recipe = parse_recipe(raw, folder=folder)
    with pytest.warns(KspipeWarning, match=rf"{percent} % per degree"):
        make_plan(recipe)


def test_moderate_inclinations_pass_in_silence(good, folder, opens_maps) -> None:
    # kspipe's warnings are errors in these tests.
    recipe = parse_recipe(changed(good, galaxy__inclination="64.9 deg"), folder=folder)
    assert isinstance(make_plan(recipe).recipe, Recipe)


# --- Files -------------------------------------------------------------------------------------


def test_recipe_files_that_cannot_be_read(tmp_path) -> None:
    with pytest.raises(RecipeError, match=r"none\.toml.*does not exist"):
        load_recipe(tmp_path / "none.toml")
    with pytest.raises(RecipeError, match="cannot be read"):
        load_recipe(tmp_path)
    (tmp_path / "bad.toml").write_text("[galaxy\n", encoding="utf-8")
    with pytest.raises(RecipeError, match=r"bad\.toml.*not valid TOML"):
        load_recipe(tmp_path / "bad.toml")
    (tmp_path / "latin.toml").write_bytes(b"name = '\xe9'\n")
    with pytest.raises(RecipeError, match=r"latin\.toml.*cannot be read"):
        load_recipe(tmp_path / "latin.toml")


def test_paths_count_from_the_folder_of_the_recipe(tmp_path, monkeypatch) -> None:
    (tmp_path / "deep er").mkdir()
    (tmp_path / "deep er" / "recipes").mkdir()
    text = (CHECKOUT / "recipes" / "orrinda_short.toml").read_text(encoding="utf-8")
    for name in tomllib.loads(text)["maps"].values():
        (tmp_path / "deep er" / "demo_maps").mkdir(exist_ok=True)
        (tmp_path / "deep er" / "recipes" / name["file"]).touch()
    for name in ("hi", "mir24"):
        (tmp_path / "deep er" / "demo_maps" / f"{name}_noise.fits").touch()
    (tmp_path / "deep er" / "recipes" / "r.toml").write_text(text, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    recipe = load_recipe(Path("deep er/recipes/r.toml"))
    assert recipe.maps["hi"].file == tmp_path / "deep er" / "demo_maps" / "hi.fits"


@pytest.mark.parametrize(
    "file", ["~no_such_user_at_all/map.fits", "x" * 300, "map\0.fits", "", ".", "hi.fits/map.fits"]
)
def test_any_path_gives_a_message(good, folder, file) -> None:
    faults = faults_of(changed(good, maps__hi__file=file), folder)
    assert list(faults) == ["maps.hi.file"]


def test_a_key_typed_twice_is_told(tmp_path) -> None:
    text = (CHECKOUT / "recipes" / "orrinda_short.toml").read_text(encoding="utf-8")
    file = tmp_path / "twice.toml"
    file.write_text(text.replace("ebv = 0.0", "ebv = 0.0\nebv = 0.1"), encoding="utf-8")
    with pytest.raises(RecipeError, match=r"twice\.toml.*line \d+.*second time: keep one"):
        load_recipe(file)
