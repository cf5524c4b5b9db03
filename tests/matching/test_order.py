"""What must not matter: the order of maps, threads, and whether maps come from memory.

Here to the last bit of the files.
"""

from __future__ import annotations

import copy
import os
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from demo import load_demo
from helpers import demo_recipe

from kspipe.recipe import parse_recipe
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import match_one, reduce_maps


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("maps with spaces")


@pytest.fixture(scope="module")
def raw(folder) -> dict:
    # Half the beams of the shipped recipe: coarse and quick.
    return demo_recipe(folder, grid={"beam": "30 arcsec"})


@pytest.fixture(scope="module")
def reference(raw, folder, tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("reference") / "out"
    reduce_maps(parse_recipe(raw, folder=folder), out)
    return out


def images(out: Path) -> dict[str, bytes]:
    """Every FITS file of a product folder."""
    files = sorted([*out.glob("matched/*.fits"), *out.glob("maps/*.fits")])
    return {file.relative_to(out).as_posix(): file.read_bytes() for file in files}


def test_products_are_there(reference) -> None:
    names = set(images(reference))
    assert {f"matched/{name}.fits" for name in ("hi", "co", "fuv", "ir")} < names
    assert {"maps/sigma_gas.fits", "maps/sigma_sfr.fits", "maps/f_mol.fits"} < names


def test_the_order_of_maps_changes_no_byte(raw, folder, reference, tmp_path) -> None:
    turned = copy.deepcopy(raw)
    turned["maps"] = dict(reversed(turned["maps"].items()))
    turned["star_formation"]["maps"].reverse()
    assert list(turned["maps"]) == ["ir", "fuv", "co", "hi"]
    reduce_maps(parse_recipe(turned, folder=folder), tmp_path / "out")
    mine, theirs = images(tmp_path / "out"), images(reference)
    assert mine.keys() == theirs.keys()
    matched = [name for name in mine if name.startswith("matched/")]
    assert [name for name in matched if mine[name] != theirs[name]] == []
    for name in mine:
        # The history of a product may list its maps in another order; its pixels may not change.
        for first, second in zip(
            fits.HDUList.fromstring(mine[name]), fits.HDUList.fromstring(theirs[name]), strict=True
        ):
            np.testing.assert_array_equal(first.data, second.data)


@pytest.mark.parametrize("cores", [1])
def test_the_number_of_threads_changes_no_byte(
    raw, folder, reference, tmp_path, cores, monkeypatch
) -> None:
    monkeypatch.setattr(os, "cpu_count", lambda: cores)
    reduce_maps(parse_recipe(raw, folder=folder), tmp_path / "out")
    mine, theirs = images(tmp_path / "out"), images(reference)
    assert [name for name in theirs if mine[name] != theirs[name]] == []


def test_a_map_alone_is_matched_as_in_company(raw, folder, reference) -> None:
    plan = make_plan(parse_recipe(raw, folder=folder))
    for name in reversed(plan.sources):
        stored = fits.getdata(reference / "matched" / f"{name}.fits")
        np.testing.assert_array_equal(match_one(plan, name).value.astype(np.float32), stored)


def test_maps_in_memory_equal_files(raw, folder, reference, tmp_path) -> None:
    stems = {
        "hi": ("hi", "hi_noise"),
        "co": ("co",),
        "fuv": ("fuv",),
        "ir": ("mir24", "mir24_noise"),
    }
    memory = {}
    for name, files in stems.items():
        hdus = [fits.open(folder / f"{stem}.fits")[0] for stem in files]
        memory[name] = (hdus[0], hdus[1] if len(hdus) > 1 else None)
    recipe = parse_recipe(raw, folder=folder)
    reduce_maps(recipe, tmp_path / "out", memory=memory)
    mine, theirs = images(tmp_path / "out"), images(reference)
    assert mine.keys() == theirs.keys()
    assert [name for name in theirs if mine[name] != theirs[name]] == []


def test_a_map_in_memory_takes_the_place_of_its_file(raw, folder, reference, tmp_path) -> None:
    """The file says one thing, the memory another: the memory counts."""
    hdu = fits.open(folder / "fuv.fits")[0]
    double = fits.PrimaryHDU(2 * hdu.data, hdu.header)
    reduce_maps(parse_recipe(raw, folder=folder), tmp_path / "out", memory={"fuv": (double, None)})
    mine = fits.getdata(tmp_path / "out" / "matched" / "fuv.fits")
    theirs = fits.getdata(reference / "matched" / "fuv.fits")
    np.testing.assert_allclose(mine, 2 * theirs, rtol=1e-6)
    assert images(tmp_path / "out")["matched/hi.fits"] == images(reference)["matched/hi.fits"]


def test_input_files_are_untouched(folder, raw, reference) -> None:
    for stem, hdu in load_demo().paint(noise_seed=1).items():
        np.testing.assert_array_equal(fits.getdata(folder / f"{stem}.fits"), hdu.data)
    assert sorted(file.suffix for file in folder.iterdir()) == [".fits"] * 7
