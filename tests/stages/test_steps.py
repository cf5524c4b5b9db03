"""The table of steps on the painted sky: numbers by another way, statements from the recipe."""

from __future__ import annotations

import json
import math
import subprocess
import sys
import warnings
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS
from demo import load_demo
from helpers import ARCSEC2_SR, demo_recipe

from kspipe.core.errors import KspipeWarning, MapError, OutputError
from kspipe.core.report import noted_lines
from kspipe.maps.product import read_matched
from kspipe.recipe import load_recipe
from kspipe.recipe.load import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps
from kspipe.stages.steps import read_findings, step_cells, step_table

# How far the second ultraviolet map is painted off, east and north.
OFF = (2.4, -1.3)


@pytest.fixture(scope="module")
def raw(tmp_path_factory):
    """The short recipe with a second ultraviolet map, painted with its own noise and moved."""
    folder = tmp_path_factory.mktemp("maps")
    recipe = demo_recipe(folder)
    hdu = load_demo().paint(2)["fuv"]
    cos_dec = math.cos(math.radians(hdu.header["CRVAL2"]))
    hdu.header["CRVAL1"] += OFF[0] / 3600 / cos_dec
    hdu.header["CRVAL2"] += OFF[1] / 3600
    hdu.writeto(folder / "nuv.fits")
    # Its noise is stated a tenth too high, so that FUV is the better of the two.
    changes = {"tracer": "NUV", "file": "nuv.fits", "noise": "0.0055 MJy/sr"}
    recipe["maps"]["nuv"] = recipe["maps"]["fuv"] | changes
    return folder, recipe


def reduced(raw, out: Path, **changes) -> Path:
    """Reduce with keys of maps changed: ``hi={"short_spacings": "no"}``."""
    folder, recipe = raw
    maps = {name: table | changes.get(name, {}) for name, table in recipe["maps"].items()}
    reduce_maps(parse_recipe(recipe | {"maps": maps}, folder=folder), out)
    return out


@pytest.fixture(scope="module")
def plain(raw, tmp_path_factory) -> Path:
    # Not a word of warning: kspipe's own are errors here.
    return reduced(raw, tmp_path_factory.mktemp("plain") / "out")


def rows_of(folder: Path, name: str) -> dict:
    return {row.step: row for row in step_table(folder) if row.map == name}


def test_every_map_has_its_steps_in_order(plain) -> None:
    steps = [row.step for row in step_table(plain) if row.map == "hi"]
    expected = ["read", "unit", "beam", "noise", "match", "negative"]
    assert steps == [*expected, "short spacings", "sky level", "registration"]
    assert "short spacings" not in rows_of(plain, "ir")
    assert {row.map for row in step_table(plain)} == {"hi", "co", "fuv", "ir", "nuv"}


def test_it_says_what_was_read_and_from_where(plain) -> None:
    hi, fuv, co = (rows_of(plain, name) for name in ("hi", "fuv", "co"))
    assert (hi["read"].what.split(" of ")[0], hi["read"].origin) == ("150 x 150 pixels", "hi.fits")
    assert (hi["unit"].what, hi["unit"].origin) == ("'JY/BEAM*M/S' to K km/s", "header BUNIT")
    assert hi["beam"].what == "13.4 x 10.6 arcsec, pa 35 deg"
    assert (fuv["unit"].origin, fuv["beam"].origin) == ("recipe", "recipe")
    assert (hi["noise"].origin, co["noise"].origin) == ("hi_noise.fits", "measured")
    assert fuv["noise"].origin == "recipe noise"
    assert hi["short spacings"].what == "short spacings not stated"


def test_flux_and_noise_as_read_are_those_of_the_file(raw, plain) -> None:
    """Summed by hand over the pixels whose centres the grid's header takes in."""
    folder, _ = raw
    row = rows_of(plain, "fuv")["read"]
    with fits.open(folder / "fuv.fits") as hdus:
        value, header = hdus[0].data.astype(float), hdus[0].header
    y, x = np.indices(value.shape)
    matched = fits.getheader(plain / "matched" / "fuv.fits")
    gx, gy = WCS(matched).world_to_pixel(WCS(header).pixel_to_world(x, y))
    inside = (gx > -0.5) & (gx < matched["NAXIS1"] - 0.5)
    inside &= (gy > -0.5) & (gy < matched["NAXIS2"] - 0.5)
    pixel_sr = abs(header["CDELT1"] * header["CDELT2"]) * 3600**2 * ARCSEC2_SR
    assert row.pixels == pytest.approx(int(inside.sum()), abs=3)
    assert row.flux == pytest.approx(value[inside].sum() * pixel_sr, rel=1e-4)
    assert row.noise == pytest.approx(0.005)


def test_after_matching_the_numbers_are_those_of_the_matched_map(plain) -> None:
    for name in ("hi", "co", "ir"):
        row, sky = rows_of(plain, name)["match"], read_matched(plain / "matched" / f"{name}.fits")
        pixel_sr = abs(np.linalg.det(sky.wcs.pixel_scale_matrix)) * math.radians(1) ** 2
        assert row.flux == pytest.approx(np.nansum(sky.value) * pixel_sr, rel=1e-4)
        assert row.noise == pytest.approx(np.nanmedian(sky.error), rel=1e-6)
        assert row.pixels == np.isfinite(sky.value).sum()
        # Smoothing keeps the flux and averages the noise down.
        assert row.flux == pytest.approx(rows_of(plain, name)["read"].flux, rel=0.01)
        assert row.noise < rows_of(plain, name)["read"].noise


def test_a_painted_offset_is_found_and_proposed_away(plain) -> None:
    found = read_findings(plain)["nuv"]["registration"]
    assert (found["reference"], found["kind"]) == ("fuv", "astrometric")
    for axis, painted in zip(("east", "north"), OFF, strict=True):
        off = found[f"{axis}_arcsec"] - painted
        assert abs(off) < 4 * found[f"{axis}_error_arcsec"]
        assert found[f"{axis}_error_arcsec"] < 0.2
    row = rows_of(plain, "nuv")["registration"]
    assert row.what.startswith("astrometric offset from fuv: 2.")
    assert 'shift = "-2.' in row.what
    # Nothing was moved: the flux is as read, and nothing says it was.
    assert found["applied_shift_arcsec"] == [0.0, 0.0]
    assert read_findings(plain)["fuv"]["registration"]["kind"] == "offset of emission"


def test_a_typed_shift_removes_it_and_is_told(raw, plain, tmp_path) -> None:
    typed = f"{-OFF[0]} {-OFF[1]} arcsec"
    out = reduced(raw, tmp_path / "out", nuv={"shift": typed})
    found = read_findings(out)["nuv"]["registration"]
    assert abs(found["east_arcsec"]) < 4 * found["east_error_arcsec"]
    assert abs(found["north_arcsec"]) < 4 * found["north_error_arcsec"]
    assert found["proposal"] == ""
    assert found["applied_shift_arcsec"] == [-OFF[0], -OFF[1]]
    before, after = rows_of(plain, "nuv"), rows_of(out, "nuv")
    assert (after["shift"].what, after["shift"].origin) == (
        "moved by -2.4 arcsec east, +1.3 arcsec north",
        "recipe shift",
    )
    # Moved, another part of the map is on the grid, which itself is laid where all maps are.
    assert after["read"].flux == pytest.approx(before["read"].flux, rel=1e-3)
    assert after["shift"].flux != after["read"].flux
    assert after["shift"].flux == pytest.approx(after["match"].flux, rel=1e-3)
    history = " ".join(fits.getheader(out / "matched" / "nuv.fits")["HISTORY"])
    assert "moved by -2.4 arcsec east" in " ".join(history.split())
    # A shift in the wrong direction doubles the offset; what is proposed then counts from zero.
    wrong = reduced(raw, tmp_path / "wrong", nuv={"shift": "2.4 -1.3 arcsec"})
    east, north = read_findings(wrong)["nuv"]["registration"]["proposal"].split('"')[1].split()[:2]
    assert (float(east), float(north)) == pytest.approx((-OFF[0], -OFF[1]), abs=0.15)
    # The resolved recipe shifts again.
    assert load_recipe(out / "recipe.toml").maps["nuv"].shift == (-OFF[0], -OFF[1])


def with_hole(raw, folder: Path) -> Path:
    """The CO map with absorption in front of a source: a hole of one beam at -20 sigma."""
    with fits.open(raw[0] / "co.fits") as hdus:
        y, x = np.indices(hdus[0].data.shape)
        sigma_pix = 11.5 / 3.5 / math.sqrt(8 * math.log(2))
        hole = np.exp(-((x - 60) ** 2 + (y - 90) ** 2) / 2 / sigma_pix**2)
        hdus[0].data -= (12.0 * hole).astype(hdus[0].data.dtype)
        hdus.writeto(folder / "hole.fits")
        return folder / "hole.fits"


def test_negative_regions_are_told_and_masked_only_on_request(raw, plain, tmp_path) -> None:
    hole = {"file": str(with_hole(raw, tmp_path))}
    told = reduced(raw, tmp_path / "told", co=hole)
    found = read_findings(told)["co"]["negative"]
    assert (found["count"], found["masked"]) == (1, False)
    assert found["worst_snr"] < -10
    position = WCS(fits.getheader(hole["file"])).pixel_to_world(60, 90)
    assert found["worst_ra_deg"] == pytest.approx(position.ra.deg, abs=5 / 3600)
    assert found["worst_dec_deg"] == pytest.approx(position.dec.deg, abs=5 / 3600)
    assert rows_of(told, "co")["negative"].pixels == rows_of(told, "co")["match"].pixels
    history = " ".join(fits.getheader(told / "matched" / "co.fits")["HISTORY"])
    assert "1 region below -4 sigma" in " ".join(history.split())
    masked = reduced(raw, tmp_path / "masked", co=hole | {"mask_negative": True})
    rows, again = rows_of(masked, "co"), read_findings(masked)["co"]["negative"]
    assert again["masked"] is True
    assert rows["match"].pixels - rows["negative"].pixels == found["n_pixels"]
    assert rows["negative"].flux - rows["match"].flux == pytest.approx(-found["flux"], rel=1e-6)
    sky = read_matched(masked / "matched" / "co.fits")
    assert np.isnan(sky.value).sum() == sky.value.size - rows["negative"].pixels
    # Nothing is masked where nothing is negative.
    assert rows_of(plain, "hi")["negative"].what == "no region below -4 sigma"


def test_missing_short_spacings_warn_and_stand_in_the_summary(raw, tmp_path) -> None:
    stated = {"short_spacings": "no", "largest_scale": "4.1 arcmin", "total_flux": "300 Jy km/s"}
    with pytest.warns(KspipeWarning, match=r"maps\.hi: short spacings missing.*246 arcsec"):
        out = reduced(raw, tmp_path / "out", hi=stated)
    with warnings.catch_warnings():
        # Told once, by the reduction.
        warnings.simplefilter("error")
        compare_relations(out)
    summary = json.loads((out / "summary.json").read_text())["maps"]["hi"]["short_spacings"]
    # The flux of the painted map in its own unit: Jy/beam m/s over the beam's area.
    with fits.open(raw[0] / "hi.fits") as hdus:
        header = hdus[0].header
        beam = math.pi / (4 * math.log(2)) * header["BMAJ"] * header["BMIN"]
        pixel = abs(header["CDELT1"] * header["CDELT2"])
        jy_kms = np.nansum(hdus[0].data, dtype=float) * pixel / beam / 1000
    # The grid leaves out the map's border, which holds noise.
    assert summary["flux_jy_kms"] == pytest.approx(jy_kms, abs=4 * summary["flux_error_jy_kms"])
    assert summary["map_over_total"] == pytest.approx(summary["flux_jy_kms"] / 300)
    expected = max(300 / summary["flux_jy_kms"] - 1, 0)
    assert summary["systematic"]["largest_fraction"] == pytest.approx(expected)
    assert summary["systematic"]["least_fraction"] == 0


def test_a_total_in_a_wrong_unit_stops_before_any_work(raw, tmp_path) -> None:
    with pytest.raises(MapError, match=r"maps\.hi\.total_flux"):
        reduced(raw, tmp_path / "out", hi={"total_flux": "300 Jy"})
    assert not (tmp_path / "out").exists()


def test_everything_is_in_the_summary(plain) -> None:
    compare_relations(plain)
    summary = json.loads((plain / "summary.json").read_text())["maps"]
    assert summary["nuv"]["registration"]["kind"] == "astrometric"
    assert summary["ir"]["negative"]["count"] == 0
    assert summary["hi"]["short_spacings"]["stated"] is None
    assert "short_spacings" not in summary["ir"]
    (line,) = noted_lines({"maps": summary})
    assert line.startswith("maps.nuv: astrometric offset from fuv")


def test_the_file_is_a_table_with_descriptions(plain) -> None:
    table = Table.read(plain / "steps.ecsv")
    assert table.colnames == ["map", "step", "what", "origin", "flux", "noise", "pixels", "unit"]
    assert table["flux"].description
    assert np.all(np.isfinite(table["flux"]))
    assert np.all(table["noise"] > 0)
    assert len(table) == len(step_cells(step_table(plain)))


def test_a_folder_without_it_says_what_to_do(tmp_path) -> None:
    with pytest.raises(OutputError, match="kspipe reduce"):
        step_table(tmp_path)


@pytest.mark.slow
def test_the_command_prints_it(plain, tmp_path) -> None:
    command = [sys.executable, "-m", "kspipe", "reduce", str(plain / "recipe.toml")]
    command += ["--out", str(tmp_path / "out"), "--quiet"]
    told = subprocess.run([*command, "--steps"], capture_output=True, text=True, check=False)
    assert told.returncode == 0, told.stderr
    for words in ("header BUNIT", "'JY/BEAM*M/S' to K km/s", "astrometric offset from fuv"):
        assert words in told.stdout
    quiet = subprocess.run(command, capture_output=True, text=True, check=False)
    assert "header BUNIT" not in quiet.stdout
